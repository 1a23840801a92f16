"""The Schrödinger problem whose marginals are only roughly known: a relative-entropy penalty in place of each.

With R_ij = a_i b_j k_ij and KL(x|y) = Σ x log(x/y) - x + y, minimise

    KL(π|R) + λ1 KL(π 1|a) + λ2 KL(πᵀ1|b).

Fenchel's dual is D(f, g) = -Σ R (e^(f+g) - 1) - λ1 Σ a (e^(-f/λ1) - 1) - λ2 Σ b (e^(-g/λ2) - 1) with π = R e^(f+g). Where
it is stationary, π 1 = a e^(-f/λ1) and πᵀ1 = b e^(-g/λ2), which gives the scaled updates

    f = -λ1/(λ1 + 1) log Σ_j b_j e^(g_j) k_ij,   g = -λ2/(λ2 + 1) log Σ_i a_i e^(f_i) k_ij,

Sinkhorn's at λ = ∞ (Chizat, Peyré, Schmitzer, Vialard 2018; from memory, derived anew here). Primal minus dual value of any
pair is λ1 KL(π 1|a e^(-f/λ1)) + λ2 KL(πᵀ1|b e^(-g/λ2)): by how much the pair misses the optimum, at most.

Growth comes out too small. KL(π|R) holds KL(π 1|a) once itself, so even at λ1 = 0 a departure is paid for, and explained by
movement where that is cheaper. For Gaussian clouds a = N(0, σ²) and kernel variance q, with κ = σ²/(σ² + q) and b what the tilt
a exp(γ x) makes, linear potentials solve the problem with λ2 = ∞ exactly, and the implied growth has the slope

    γ κ / (1 + λ1 (1 - κ)),

that is γ for clouds wide against the kernel only; modes of any shape, with their own κ, fare alike to first order. The penalty
counts for every particle, as for rates that are independent between them; a rate that is one unknown function of state is
estimated in lineage/growth_estimate.py.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .. import checks
from ..kernels.base import Kernel
from ..logspace import log_sum_exp
from .iteration import Strategy, ladder
from .solution import Outcome
from .solve import SWEEP_LIMIT, solve

__all__ = ["UnbalancedSolution", "solve_unbalanced"]

_MEMORY = 6  # earlier iterates that an extrapolation looks at
_LEVEL_PASSES, _LEVEL_ERROR = 40, 1e-2
_LARGEST_SHIFT = 1e6  # strength from which the common shift of the potentials is lost in rounding and does not matter
_PATIENCE = 1_000


@dataclass(frozen=True, eq=False)
class UnbalancedSolution:
    """Log-potentials of the penalised problem, π_ij = a_i b_j exp(f_i + g_j) k_ij, and how far they can be trusted.

    Attributes
    ----------
    log_f, log_g : (n,), (m,).
    source_marginal, target_marginal : a e^(-f/λ1) and b e^(-g/λ2), the masses that the particles keep.
    residual : L1 distance of the sums of π from these, over the mass.
    duality_gap : primal minus dual value, an upper bound on what is lost; NaN if one side is infinitely strong, where
        the primal value is finite only at the optimum itself.
    iterations : pairs of passes over the kernel.
    outcome : converged, iteration-limit or stalled.
    tolerance : the residual asked for.
    """

    log_f: np.ndarray
    log_g: np.ndarray
    source_marginal: np.ndarray
    target_marginal: np.ndarray
    residual: float
    duality_gap: float
    iterations: int
    outcome: Outcome
    tolerance: float

    @property
    def mass(self) -> float:
        """Σ π."""
        return float(self.source_marginal.sum())


def solve_unbalanced(
    kernel: Kernel,
    weights: tuple[np.ndarray, np.ndarray],
    strengths: tuple[float, float],
    *,
    tolerance: float = 1e-9,
    start: np.ndarray | None = None,
    sweep_limit: int = SWEEP_LIMIT,
) -> UnbalancedSolution:
    """Minimise KL(π|a⊗b k) + λ1 KL(π 1|a) + λ2 KL(πᵀ1|b).

    Parameters
    ----------
    kernel : Kernel of shape (n, m); costs are in units of the noise (ε = 1).
    weights : a (n,) and b (m,), non-negative, as they are: masses count here.
    strengths : λ1, λ2 > 0; infinity is a hard marginal, and two of them are `solve`.
    tolerance : largest residual.
    start : log_g to start from.
    sweep_limit : pairs of passes over the kernel.

    Examples
    --------
    >>> import numpy as np
    >>> from ensembles.kernels.dense import DenseKernel
    >>> atoms = (np.array([1.0]), np.array([2.0]))
    >>> found = solve_unbalanced(DenseKernel(np.array([[-2.0]])), atoms, (2.0, 2.0))
    >>> round(found.mass, 10)  # (a b)^((λ+ε)/(2λ+ε)) e^(-c/(2λ+ε)) for c = λ = 1, ε = ½
    1.0160151986
    """
    tolerance = checks.positive_number(tolerance, "tolerance", "give the L1 residual allowed, such as 1e-9")
    a = checks.weights(weights[0], kernel.shape[0], "source weights")
    b = checks.weights(weights[1], kernel.shape[1], "target weights")
    for side, value in zip(("earlier", "later"), strengths):
        if not value > 0:
            raise checks.InputError(
                f"strengths must be positive; that of the {side} marginal is {value!r}; use infinity for a hard one"
            )
    if np.isinf(strengths[0]) and np.isinf(strengths[1]):
        return _balanced(kernel, (a, b), tolerance, start, sweep_limit)
    kernel = kernel.exact
    scales = [1.0] if start is not None else ladder(kernel.mean_cost(), Strategy())
    log_g = np.zeros(b.size) if start is None else np.array(start, dtype=float)
    used, last = 0, scales[0]
    for scale in scales:
        problem = _Problem(
            kernel if scale == 1.0 else kernel.at_scale(scale), a, b, (strengths[0] / scale, strengths[1] / scale)
        )
        final = scale == 1.0
        limit = sweep_limit - used if final else _LEVEL_PASSES
        goal = tolerance if final else max(_LEVEL_ERROR, tolerance)
        log_g, passes, outcome = _iterate(problem, log_g * (last / scale), goal, limit)
        used, last = used + passes, scale
    point = problem.at(log_g)
    pieces = [
        problem.strengths[side] * _divergence(sums, wanted)
        for side, (sums, wanted) in enumerate(((point.rows, point.kept[0]), (point.columns, point.kept[1])))
        if np.isfinite(problem.strengths[side])
    ]
    gap = float(sum(pieces)) if len(pieces) == 2 else float("nan")
    return UnbalancedSolution(point.log_f, log_g, *point.kept, point.residual, gap, used, outcome, tolerance)


@dataclass(frozen=True, eq=False)
class _Point:
    """What a target potential gives: f, the next g, both sums of π and the marginals they should be."""

    log_f: np.ndarray
    next_g: np.ndarray
    rows: np.ndarray
    columns: np.ndarray
    kept: tuple[np.ndarray, np.ndarray]

    @property
    def residual(self) -> float:
        """L1 distance of the sums of π from the marginals that belong to the potentials, over the mass."""
        with np.errstate(invalid="ignore"):
            missed = np.abs(self.rows - self.kept[0]).sum() + np.abs(self.columns - self.kept[1]).sum()
            return float(missed / self.rows.sum())


@dataclass(frozen=True, eq=False)
class _Problem:
    kernel: Kernel
    a: np.ndarray
    b: np.ndarray
    strengths: tuple[float, float]

    def at(self, log_g: np.ndarray) -> _Point:
        first, second = self.strengths
        with np.errstate(divide="ignore", over="ignore"):
            log_a, log_b = np.log(self.a), np.log(self.b)
            row_logs = self.kernel.log_sum_targets(log_b + log_g)
            log_f = -_factor(first) * row_logs
            column_logs = self.kernel.log_sum_sources(log_a + log_f)
            next_g = -_factor(second) * column_logs
            # One constant moved from f to g leaves π alone; the best one makes both kept masses agree.
            ease = 1.0 / first + 1.0 / second
            if ease * _LARGEST_SHIFT > 1.0:
                masses = log_sum_exp(log_a - log_f / first), log_sum_exp(log_b - next_g / second)
                next_g = next_g - float(masses[0] - masses[1]) / ease
            kept = self.a * np.exp(-log_f / first), self.b * np.exp(-log_g / second)
            return _Point(log_f, next_g, self.a * np.exp(log_f + row_logs), self.b * np.exp(log_g + column_logs), kept)


def _factor(strength: float) -> float:
    return 1.0 if np.isinf(strength) else strength / (strength + 1.0)


def _divergence(x: np.ndarray, y: np.ndarray) -> float:
    """Σ x log(x/y) - x + y, by log1p where the two are near."""
    there = (x > 0) & (y > 0)
    ratio = y[there] / x[there] - 1.0
    return float(np.sum(x[there] * (ratio - np.log1p(ratio))) + y[~there].sum())


def _iterate(problem: _Problem, log_g: np.ndarray, goal: float, limit: int) -> tuple[np.ndarray, int, Outcome]:
    """Extrapolated updates of g (Anderson 1965; from memory) until the residual meets the goal; a bad one is undone."""
    share = np.sqrt(problem.b / problem.b.sum())
    points: list[np.ndarray] = []
    steps: list[np.ndarray] = []
    best, best_at, safe = np.inf, 0, log_g
    for count in range(1, max(limit, 1) + 1):
        point = problem.at(log_g)
        residual = point.residual
        if residual <= goal:
            return log_g, count, Outcome.CONVERGED
        if not residual < 4.0 * best and points:
            points, steps, log_g = [], [], safe
            continue
        if residual < 0.99 * best:
            best_at = count
        best = min(best, residual)
        if count - best_at > _PATIENCE:
            return log_g, count, Outcome.STALLED
        safe = point.next_g
        points.append(point.next_g)
        steps.append(point.next_g - log_g)
        points, steps = points[-_MEMORY:], steps[-_MEMORY:]
        log_g = point.next_g
        if len(steps) > 1:
            changes = np.diff(np.array(steps), axis=0)
            mix, *_ = np.linalg.lstsq((changes * share).T, steps[-1] * share, rcond=1e-10)
            log_g = point.next_g - mix @ np.diff(np.array(points), axis=0)
    return log_g, count, Outcome.ITERATION_LIMIT


def _balanced(
    kernel: Kernel, weights: tuple[np.ndarray, np.ndarray], tolerance: float, start: np.ndarray | None, limit: int
) -> UnbalancedSolution:
    """Two hard marginals: the solver of the balanced problem, scaled to the mass."""
    a, b = weights
    mass = a.sum()
    if abs(mass - b.sum()) > 1e-9 * mass:
        raise checks.InputError(
            f"two hard marginals need one mass; they hold {mass:g} and {b.sum():g}; scale one of them, or give it a finite "
            "strength"
        )
    pair = None if start is None else (np.zeros(a.size), np.asarray(start, dtype=float))
    found = solve(kernel, weights, tolerance=tolerance, start=pair, sweep_limit=limit)
    certificate = found.certificate
    return UnbalancedSolution(
        found.log_f - np.log(mass),
        found.log_g,
        a,
        b,
        certificate.row_error + certificate.column_error,
        float("nan"),
        found.iterations,
        found.outcome,
        tolerance,
    )
