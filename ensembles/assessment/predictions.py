"""What each way of predicting says about a snapshot that was left out: the bridge and the baselines.

A prediction looks at the neighbouring snapshots only: with hard marginals and a Markov prior the bridge between two
snapshots does not depend on those beyond them.

To add a prediction, you must
1. write one function of `Neighbours`, the number of draws and a random generator that returns a `Prediction`,
2. list it in `PREDICTIONS`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..bridges.bridge import Bridge
from ..bridges.fit import fit_bridge
from ..priors.base import LinearGaussianPrior
from ..priors.pinned import PinnedLaw, pin
from .transport import EXACT_LIMIT, optimal_plan

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["GAUSSIAN_ONLY", "PREDICTIONS", "Neighbours", "Prediction", "neighbours_of", "population_bridge"]

_PAIRS = 40_000  # pairs of ends that stand for the independent coupling in its density
_TILE = 2_000_000


@dataclass(frozen=True, eq=False)
class Neighbours:
    """The snapshots beside the one left out, the bridge between them, and when the left-out one was taken."""

    bridge: Bridge
    time: float

    @property
    def clouds(self) -> tuple[np.ndarray, np.ndarray]:
        """The earlier and the later cloud."""
        return self.bridge.series.clouds[0], self.bridge.series.clouds[1]

    @property
    def weights(self) -> tuple[np.ndarray, np.ndarray]:
        """Their weights."""
        return self.bridge.series.weights[0], self.bridge.series.weights[1]

    @property
    def pinned(self) -> PinnedLaw:
        """The prior at the time, given both ends."""
        gap = self.bridge.gaps[0]
        return pin(gap.before(self.time), gap.after(self.time))


@dataclass(frozen=True, eq=False)
class Prediction:
    """A predicted cloud (m, d), its weights (m,), and log ρ (n,) at points (n, d) where the prediction has a density."""

    cloud: np.ndarray
    weights: np.ndarray
    log_density: Callable[[np.ndarray], np.ndarray] | None = None


def neighbours_of(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    k: int,
    *,
    tolerance: float = 1e-6,
    start: Bridge | None = None,
) -> Neighbours:
    """Leave out snapshot k, 0 < k < K - 1, and bridge its neighbours."""
    bridge = fit_bridge(series.subset([k - 1, k + 1]), prior, tolerance=tolerance, start=start)
    return Neighbours(population_bridge(bridge, float(series.times[k])), float(series.times[k]))


def population_bridge(bridge: Bridge, t: float) -> Bridge:
    """A bridge over one gap whose density and draws at t are those of the population at t, where particles grow.

    With growth the bridge itself holds the histories that reach the later snapshot, each weighted by all of the growth of its
    first particle. A snapshot at t has seen the growth up to t only: start i counts exp(-r_i (T - t)) times, with its implied
    rate r_i = log(a'_i / a_i) / (T - t₀), and the law from there on is the bridge's.
    """
    if bridge.gap_weights is None:
        return bridge
    (after, later), before = bridge.gap_weights[0], bridge.series.weights[0]
    first, last = bridge.series.times
    there = (before > 0) & (after > 0)
    grown = np.divide(after, before, out=np.ones_like(after), where=there)
    weights = np.where(there, after * grown ** -((last - t) / (last - first)), 0.0)
    return replace(bridge, gap_weights=((weights / weights.sum(), later),))


def _equal(count: int) -> np.ndarray:
    return np.full(count, 1.0 / count)


def _bridge(near: Neighbours, draws: int, rng: np.random.Generator) -> Prediction:
    cloud = near.bridge.sample(near.time, draws, rng)
    return Prediction(cloud, _equal(draws), lambda points: near.bridge.log_density(near.time, points))


def _earlier(near: Neighbours, draws: int, rng: np.random.Generator) -> Prediction:
    return Prediction(near.clouds[0], near.weights[0])


def _later(near: Neighbours, draws: int, rng: np.random.Generator) -> Prediction:
    return Prediction(near.clouds[1], near.weights[1])


def _straight(near: Neighbours, draws: int, rng: np.random.Generator) -> Prediction:
    """The zero-noise coupling, least mean squared displacement, and straight lines between its pairs."""
    rows = [np.arange(len(cloud)) for cloud in near.clouds]
    weights = list(near.weights)
    for side in (0, 1):
        if rows[side].size > EXACT_LIMIT:
            rows[side] = rng.choice(rows[side].size, EXACT_LIMIT, replace=False, p=weights[side])
            weights[side] = _equal(EXACT_LIMIT)
    start, end = near.clouds[0][rows[0]], near.clouds[1][rows[1]]
    _, plan, _ = optimal_plan(start, end, *weights)
    i, j = np.nonzero(plan > 1e-12 * plan.max())
    first, last = near.bridge.series.times
    share = (near.time - first) / (last - first)
    return Prediction((1.0 - share) * start[i] + share * end[j], plan[i, j] / plan[i, j].sum())


def _independent(near: Neighbours, draws: int, rng: np.random.Generator) -> Prediction:
    """Ends drawn independently of each other, and the prior pinned between them."""
    law = near.pinned

    def pairs(count: int, stream: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
        i, j = (stream.choice(len(cloud), count, p=w) for cloud, w in zip(near.clouds, near.weights))
        return near.clouds[0][i], near.clouds[1][j]

    cloud = law.sample(*pairs(draws, rng), rng)
    stream = rng.spawn(1)[0]

    def log_density(points: np.ndarray) -> np.ndarray:
        means, weights = _all_pairs(near, law)
        if means is None or weights is None:
            ends = pairs(_PAIRS, stream)
            means, weights = law.mean(*ends), _equal(_PAIRS)
        return _log_mixture(points, means, weights, law.covariance)

    return Prediction(cloud, _equal(draws), log_density)


def _all_pairs(near: Neighbours, law: PinnedLaw) -> tuple[np.ndarray | None, np.ndarray | None]:
    n, m = (len(cloud) for cloud in near.clouds)
    if n * m > _PAIRS:
        return None, None
    start, end = np.repeat(near.clouds[0], m, axis=0), np.tile(near.clouds[1], (n, 1))
    return law.mean(start, end), np.outer(*near.weights).ravel()


def _prior(near: Neighbours, draws: int, rng: np.random.Generator) -> Prediction:
    """The earlier snapshot carried on by the prior alone; the later one is not used."""
    gap = near.bridge.gaps[0]
    step = gap.before(near.time)
    starts = near.clouds[0][rng.choice(len(near.clouds[0]), draws, p=near.weights[0])]
    means = step.mean(near.clouds[0])
    return Prediction(
        step.sample(starts, rng),
        _equal(draws),
        lambda points: _log_mixture(points, means, near.weights[0], step.covariance),
    )


def _log_mixture(points: np.ndarray, means: np.ndarray, weights: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """log Σ_j w_j N(x; mean_j, C) at points (n, d), in tiles."""
    from scipy.linalg import solve_triangular
    from scipy.spatial.distance import cdist

    root = np.linalg.cholesky(covariance)
    x, centres = (solve_triangular(root, array.T, lower=True).T for array in (points, means))
    normaliser = -np.log(np.diag(root)).sum() - 0.5 * points.shape[1] * np.log(2.0 * np.pi)
    with np.errstate(divide="ignore"):
        log_weights = np.log(weights)
    out = np.empty(len(points))
    tile = max(1, _TILE // len(means))
    for i in range(0, len(points), tile):
        terms = log_weights - 0.5 * cdist(x[i : i + tile], centres, "sqeuclidean")
        top = terms.max(axis=1, keepdims=True)
        out[i : i + tile] = normaliser + top[:, 0] + np.log(np.exp(terms - top).sum(axis=1))
    return out


PREDICTIONS: dict[str, Callable[[Neighbours, int, np.random.Generator], Prediction]] = {
    "bridge": _bridge,
    "earlier": _earlier,
    "later": _later,
    "straight": _straight,
    "independent": _independent,
    "prior": _prior,
}
"""Every prediction by its name."""

GAUSSIAN_ONLY = ("independent", "prior")
"""Predictions that carry particles by the Gaussian transition, which is not that of a prior in a box."""
