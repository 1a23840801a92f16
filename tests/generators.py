"""Problems with exact answers. Each function returns what a solver takes and the answer that it must give.

Where a value comes from outside the project, its source stands beside it; "from memory" means that the page was not at hand
and that a test derives the value again.
"""

from dataclasses import dataclass
from pathlib import Path

import numpy as np

DATA = Path(__file__).resolve().parents[1] / "data"


@dataclass(frozen=True)
class GaussianRow:
    """One-dimensional bridge between N(., a) and N(., b) at noise ε = 2DT over T = 1, cost ½|x - y|²."""

    a: float
    b: float
    epsilon: float
    cross: float
    middle: float
    cost: float
    information: float


# Formulas: Mallasto, Gerolin, Minh 2022; Janati, Muzellec, Peyré, Cuturi 2020 (from memory; test_gaussian.py derives them
# again as a root, by quadrature and by solving the discretised problem). Columns: a, b, ε, Cov(X0, X1), variance at ½,
# OT_ε at equal means, KL(π | μ⊗ν).
GAUSSIAN_ROWS = [
    GaussianRow(1, 1, 1.5, 0.5, 1.125, 0.715761554339, 0.1438410362),
    GaussianRow(1, 4, 3, 1.0, 2.5, 1.931523108678, 0.1438410362),
    GaussianRow(4, 9, 5, 4.0, 6.5, 3.969466662255, 0.2938933325),
    GaussianRow(1, 1, 1, (np.sqrt(5) - 1) / 2, 1.05901699, 0.622571923780, 0.2406059125),
    GaussianRow(1, 1, 0.01, 0.9950124999, 1.00000625, 0.028038350904, 2.3050850826),
]

# The same sources, two dimensions, ε = 0.7: A, B, Cov(X0, X1), covariance at ½, OT_ε at equal means.
GAUSSIAN_PLANE = {
    "a": np.array([[2.0, 0.5], [0.5, 1.0]]),
    "b": np.array([[1.0, -0.3], [-0.3, 3.0]]),
    "epsilon": 0.7,
    "cross": np.array([[1.0478440455, 0.2887803832], [0.0641734185, 1.3687111379]]),
    "middle": np.array([[1.4489220228, 0.1382384504], [0.1382384504, 1.859355569]]),
    "cost": 1.781176895389,
}


def hermite_atoms(variance: float, order: int, mean: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    """Atoms (order,) and weights of Gauss-Hermite quadrature for N(mean, variance): exact to degree 2 order - 1."""
    nodes, weights = np.polynomial.hermite_e.hermegauss(order)
    return mean + np.sqrt(variance) * nodes, weights / weights.sum()


def grid_atoms(variance: float, count: int, mean: float = 0.0, width: float = 9.0) -> tuple[np.ndarray, np.ndarray]:
    """Atoms and weights of the trapezoidal rule for N(mean, variance), which converges faster than any power."""
    nodes = np.linspace(-width, width, count)
    weights = np.exp(-0.5 * nodes**2)
    return mean + np.sqrt(variance) * nodes, weights / weights.sum()


def nathanson(k: float) -> tuple[np.ndarray, np.ndarray]:
    """[[K,1,1],[1,1,1],[1,1,1]] scaled to doubly stochastic. Source: Nathanson 2019 (from memory), K = 3.

    Derived again: with symmetric scalings x, y, y and s = xy, the rows say K x² = 1 - 2s and y² = (1 - s)/2, and their
    product is K s², so (1 - 2s)(1 - s) = 2 K s².
    """
    matrix = np.ones((3, 3))
    matrix[0, 0] = k
    s = (-3.0 + np.sqrt(1.0 + 8.0 * k)) / (4.0 * (k - 1.0))
    corner, edge, rest = 1.0 - 2.0 * s, s, 0.5 * (1.0 - s)
    return matrix, np.array([[corner, edge, edge], [edge, rest, rest], [edge, rest, rest]])


def two_by_two(matrix: np.ndarray) -> np.ndarray:
    """The doubly stochastic scaling of a positive 2 × 2 matrix: √(ad) / (√(ad) + √(bc)) on the diagonal.

    Source: Nathanson 2019 (from memory). Derived again: scalings keep the cross ratio ad/(bc), which is p²/(1 - p)².
    """
    (a, b), (c, d) = matrix
    p = np.sqrt(a * d) / (np.sqrt(a * d) + np.sqrt(b * c))
    return np.array([[p, 1 - p], [1 - p, p]])


# Ardilly, Tillé 2006, as in the R package TeachingSampling (from memory; recomputed with numpy): table, row sums,
# column sums, first row of the answer.
RAKING = {
    "table": np.array([[80.0, 170.0, 150.0], [90.0, 80.0, 210.0], [10.0, 80.0, 130.0]]),
    "rows": np.array([430.0, 360.0, 210.0]),
    "columns": np.array([150.0, 300.0, 550.0]),
    "first_row": np.array([73.0082113378, 167.6406191102, 189.3511695519]),
}

# A chain of two states over two steps from (½, ½) to (.2, .8); values computed with numpy, outside this package:
# coupling, law after one step, relative entropy against the chain started from (½, ½).
CHAIN = {
    "step": np.array([[0.9, 0.1], [0.2, 0.8]]),
    "start": np.array([0.5, 0.5]),
    "end": np.array([0.2, 0.8]),
    "coupling": np.array([[0.173462314, 0.326537686], [0.026537686, 0.473462314]]),
    "middle": np.array([0.3705520978, 0.6294479022]),
    "entropy": 0.4097944343,
}


def occupational_table(epsilon: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """log of the start table, row sums, column sums, and R 4.2.2's `loglin` fit of them (AS 51). See data/README.md."""
    counts = np.loadtxt(DATA / "ipf_occupational_counts.csv", delimiter=",")
    plan = np.loadtxt(DATA / f"ipf_plan_eps{epsilon}.csv", delimiter=",")
    i = np.arange(8)
    return (
        -((i[:, None] - i) ** 2) / epsilon,
        counts.sum(axis=1) / counts.sum(),
        counts.sum(axis=0) / counts.sum(),
        plan,
    )


@dataclass(frozen=True)
class Clouds:
    """Two clouds with weights that sum to 1, and a noise variance ε = 2DT."""

    x: np.ndarray
    y: np.ndarray
    a: np.ndarray
    b: np.ndarray
    epsilon: float

    def series(self, duration: float = 1.0):
        """The clouds as a series from 0 to `duration`."""
        import ensembles

        return ensembles.SnapshotSeries.from_arrays([0.0, duration], [self.x, self.y], [self.a, self.b])

    @property
    def cost(self) -> np.ndarray:
        """½|x_i - y_j|², (n, m)."""
        return 0.5 * ((self.x[:, None] - self.y[None]) ** 2).sum(axis=-1)


def random_clouds(seed: int, n: int, m: int, dimension: int, noise: float, *, weighted: bool = True) -> Clouds:
    """Two overlapping clouds; ε is `noise` times their mean squared distance."""
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(n, dimension))
    y = 0.7 * rng.normal(size=(m, dimension)) + rng.normal(size=dimension)
    a = rng.dirichlet(np.full(n, 3.0)) if weighted else np.full(n, 1.0 / n)
    b = rng.dirichlet(np.full(m, 3.0)) if weighted else np.full(m, 1.0 / m)
    squared = ((x[:, None] - y[None]) ** 2).sum(axis=-1).mean()
    return Clouds(x, y, a, b, noise * squared)


def pinned_covariance(laws, start: float, end: float) -> tuple[np.ndarray, np.ndarray]:
    """Mean (T,) and covariance (T, T) of a one-dimensional pinned path that `laws` draw one time after another."""
    count = len(laws)
    mean, current = np.empty(count), start
    # X_k = α_k X_(k-1) + const + s_k ξ_k: rows of `factor` express X_k in the independent ξ.
    factor = np.zeros((count, count))
    for k, law in enumerate(laws):
        current = law.mean(np.array([[current]]), np.array([[end]]))[0, 0]
        mean[k] = current
        if k:
            factor[k] = law.start_matrix[0, 0] * factor[k - 1]
        factor[k, k] = np.sqrt(law.covariance[0, 0])
    return mean, factor @ factor.T
