"""Where a mixture fit begins: clusters of the end cloud, each bridged from its share of the start cloud.

Between a Gaussian share N(m, A) of the start and a Gaussian cluster N(n, B) of the end, both whitened, the bridge is in
closed form: C = B^½ r(B^½ A B^½) B^½ and r_k = n - C m (see closed_form.py). A cluster's share of the start is the whole
cloud, or what a coupling of a subsample sends to it. With one component this is already the exact fit.
"""

from __future__ import annotations

import numpy as np

from ..endpoints.likelihood import Likelihood, Tilted, WhitenedClouds
from ..kernels.dense import DenseKernel
from ..schrodinger.gaussian_start import gaussian_curvature
from ..schrodinger.iteration import Strategy
from ..schrodinger.solve import solve

__all__ = ["cluster_labels", "coupled_starts", "gaussian_component", "start_from_clusters"]

_CLUSTERED = 10_000  # points that a clustering looks at
_COUPLED = 600  # points of either cloud that a coupling is solved for
_BALANCING = 20  # multiplicative updates of the component weights before the ascent


def gaussian_component(
    start: tuple[np.ndarray, np.ndarray], end: tuple[np.ndarray, np.ndarray], diagonal: bool
) -> tuple[np.ndarray, np.ndarray]:
    """r (d,) and C (d,) or (d, d) of the bridge from N(*start) to N(*end), whitened; diagonal parts only where asked."""
    (m, a), (n, b) = start, end
    if diagonal:
        c = 2.0 * b / (1.0 + np.sqrt(1.0 + 4.0 * a * b))
        return n - c * m, c
    c = gaussian_curvature(a, b)
    return n - c @ m, c


def cluster_labels(points: np.ndarray, weights: np.ndarray, count: int, seed: int) -> np.ndarray:
    """A cluster number for each point, by k-means."""
    if count == 1:
        return np.zeros(len(points), dtype=np.int64)
    from sklearn.cluster import KMeans

    if len(points) <= _CLUSTERED:
        fitted = KMeans(count, n_init=1, random_state=seed).fit(points, sample_weight=weights)
        return fitted.labels_.astype(np.int64)
    chosen = np.random.default_rng(seed).choice(len(points), _CLUSTERED, replace=False)
    fitted = KMeans(count, n_init=1, random_state=seed).fit(points[chosen], sample_weight=weights[chosen])
    return fitted.predict(points).astype(np.int64)


def coupled_starts(clouds: WhitenedClouds, seed: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Rows of u, rows of v and the coupling between these subsamples."""
    rng = np.random.default_rng(seed)
    rows = rng.choice(len(clouds.u), min(_COUPLED, len(clouds.u)), replace=False)
    columns = rng.choice(len(clouds.v), min(_COUPLED, len(clouds.v)), replace=False)
    part = clouds.subset(rows, columns)
    kernel = DenseKernel.between(part.u, part.v)
    solution = solve(kernel, (part.a, part.b), tolerance=1e-2, sweep_limit=500, strategy=Strategy())
    with np.errstate(divide="ignore"):
        logs = kernel.log_kernel + (np.log(part.a) + solution.log_f)[:, None] + np.log(part.b) + solution.log_g
    plan = np.exp(logs) if np.isfinite(solution.log_f).all() else np.outer(part.a, part.b)
    return rows, columns, plan


def start_from_clusters(
    likelihood: Likelihood,
    labels: np.ndarray,
    coupled: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None,
) -> np.ndarray:
    """Parameters to begin with, from cluster numbers of the end cloud; `coupled` gives each its share of the start."""
    clouds, kind = likelihood.clouds, likelihood.kind
    diagonal, count = kind.diagonal, kind.count
    whole = _moments(clouds.u, clouds.a, diagonal)
    groups = [labels == k for k in range(count)]
    masses = np.array([clouds.b[group].sum() for group in groups])
    ends = [_moments(clouds.v[g], clouds.b[g], diagonal) if g.any() else None for g in groups]
    pooled = sum(mass * end[1] for mass, end in zip(masses, ends) if end is not None)
    r, c, log_alpha = [], [], []
    for k, end in enumerate(ends):
        if end is None:  # an empty cluster begins at the whole cloud
            end = _moments(clouds.v, clouds.b, diagonal)
        share, size = whole, max(1, int(groups[k].sum()))
        if coupled is not None:
            rows, columns, plan = coupled
            sent = plan[:, labels[columns] == k].sum(axis=1)
            if np.count_nonzero(sent > 1e-3 * sent.max(initial=0.0)) > 5:
                mean, spread = _moments(clouds.u[rows], sent / sent.sum(), diagonal)
                share = mean, (20.0 * spread + whole[1]) / 21.0
        spread = end[1] if count == 1 else (size * end[1] + 2.0 * pooled) / (size + 2.0)
        spread = spread + (likelihood.floor if diagonal else np.diag(likelihood.floor)) * (count > 1)
        component = gaussian_component(share, (end[0], spread), diagonal)
        r.append(component[0])
        c.append(component[1])
        m = share[0]
        pull = component[1] * m if diagonal else component[1] @ m
        log_alpha.append(np.log(max(masses[k], 1e-12)) - m @ component[0] - 0.5 * m @ pull)
    theta = likelihood.pack(Tilted(np.array(log_alpha), np.array(r), np.array(c)))
    for _ in range(_BALANCING if count > 1 else 0):
        wanted, given = likelihood.masses(theta)
        theta[:count] += np.clip(np.log(np.maximum(wanted, 1e-12)) - np.log(np.maximum(given, 1e-12)), -5.0, 5.0)
    return theta


def _moments(points: np.ndarray, weights: np.ndarray, diagonal: bool) -> tuple[np.ndarray, np.ndarray]:
    share = weights / weights.sum()
    mean = share @ points
    centred = points - mean
    return mean, share @ (centred * centred) if diagonal else (centred.T * share) @ centred
