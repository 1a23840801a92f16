"""Do neighbours move together? Measured on unlabelled frames, from pairs that may have been exchanged.

Particles of a liquid, or under a stage that drifts, do not move independently: near ones share part of their displacement.
Let r be displacements beyond the prior's mean, in units of the prior's noise, and c the correlation of r_i and r_j of two
neighbours. Then s = (r_i + r_j)/√2 and t = (r_i - r_j)/√2 are independent with variances κ (1 + c) and κ (1 - c) on every
axis. Exchanging the two later particles leaves s alone and turns t into t'. All other links held, the exchange has the odds

    exp(-(|t'|² - |t|²) / (2 κ (1 - c))),

so that links between such particles are those of independent ones with (1 - c) times the variance: whoever takes the prior's
whole variance is too unsure of them. V_s = mean |s|²/d, and V_t from expectation maximisation over the exchanges,

    V_t = mean [w |t|² + (1 - w) |t'|²]/d,   w = 1 / (1 + exp(-(|t'|² - |t|²) / (2 V_t))),

give c = (V_s - V_t) / (V_s + V_t); κ, which the most probable assignment makes too small, is not needed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from ..kernels.images import PERIODIC
from ..priors.base import LinearGaussianPrior
from .law import LinkLaw, link_law
from .particle_links import ParticleLinks

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["NeighbourCorrelation", "neighbour_correlation"]

_GROUPS = 20  # left out in turn for the standard error
_FEWEST = 40  # pairs
_NEAREST = 100  # pairs that are looked at even where they lie farther apart than asked for
_ROUNDS = 500


@dataclass(frozen=True)
class NeighbourCorrelation:
    """How much neighbours move together; made by `neighbour_correlation`.

    Attributes
    ----------
    value, standard_error : of the correlation c of two neighbours' displacements, between -1 and 1.
    pairs : neighbours looked at.
    """

    value: float
    standard_error: float
    pairs: int


def neighbour_correlation(
    links: ParticleLinks | Sequence[ParticleLinks],
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    *,
    reach: float = 2.0,
    neighbours: int = 6,
    localisation: float = 0.0,
) -> NeighbourCorrelation:
    """Correlation of the displacements of neighbouring particles, without labels.

    Equations as in the module's docstring, over every particle and its nearest `neighbours` in the earlier frame up to `reach`
    away, with the later pair that the most probable assignment gives them, in either order. Such pairs may be exchanged; those
    farther apart move less together, and do not matter. The standard error is a jackknife over 20 groups of particles. Give
    `LinkOptions(correlation=c)` to link the particles again; c must be well above its error to be worth it.

    Parameters
    ----------
    links : of one gap, or a list of them to be pooled, from `link_particles`; gaps of one length, as c changes with it.
    series, prior, localisation : as for `link_particles`; reflecting walls are not seen.
    reach : largest distance of a pair, in lengths of the prior's noise; where fewer than 100 pairs are as near, the nearest 100.
    neighbours : nearest particles of each one, at least 1.

    Raises
    ------
    InputError
        With fewer than 40 pairs.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> rng = np.random.default_rng(0)
    >>> start = 6.0 * rng.random((300, 2)) * np.sqrt(300)
    >>> shared = rng.normal(size=2)  # a stage that drifted by about one noise length
    >>> end = rng.permutation(start + np.sqrt(0.5) * rng.normal(size=(300, 2)) + shared)
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, end])
    >>> prior = ensembles.Brownian(diffusion=0.5)
    >>> found = ensembles.neighbour_correlation(ensembles.link_particles(series, prior)[0], series, prior)
    >>> found.value > 5 * found.standard_error
    True
    """
    neighbours = checks.whole_number(neighbours, "neighbours")
    reach = checks.positive_number(reach, "reach", "give a distance in lengths of the noise, such as 2")
    parts = [
        _gap_numbers(gap, series, prior, (reach, neighbours), localisation)
        for gap in ([links] if isinstance(links, ParticleLinks) else links)
    ]
    together, apart, exchanged, group = (
        (np.concatenate(column) for column in zip(*parts)) if parts else [np.empty(0)] * 4
    )
    if together.size < _FEWEST:
        raise checks.InputError(
            f"too few neighbours; {together.size} pair(s) of linked particles where {_FEWEST} are needed; use larger frames, or "
            "more of them"
        )
    dimension = series.dimension
    value = _correlation((together, apart, exchanged), dimension)
    left_out = [
        _correlation((together[keep], apart[keep], exchanged[keep]), dimension)
        for keep in (group != k for k in range(_GROUPS))
    ]
    error = float(np.sqrt((_GROUPS - 1) * np.var(left_out)))
    return NeighbourCorrelation(value, error, int(together.size))


def _gap_numbers(
    links: ParticleLinks,
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    near: tuple[float, int],
    localisation: float,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """|s|²/d, |t|²/d, |t'|²/d of the pairs of one gap, and the group of each."""
    clouds = (series.clouds[links.source], series.clouds[links.target])
    law = link_law(prior, float(series.times[links.target] - series.times[links.source]), clouds, localisation)
    later = links.assignment
    first, second = _pairs(law, later, *near)
    r_first, r_second = (_displacements(law, rows, later[rows]) for rows in (first, second))
    swapped = _displacements(law, first, later[second]), _displacements(law, second, later[first])
    sides = (r_first + r_second, r_first - r_second, swapped[0] - swapped[1])
    together, apart, exchanged = ((side**2).sum(axis=1) / (2.0 * series.dimension) for side in sides)
    # Neighbours in space share pairs: groups are slabs along the widest axis.
    axis = law.sources[:, int(np.argmax(np.ptp(law.sources, axis=0)))]
    place = np.argsort(np.argsort(axis[first], kind="stable"), kind="stable")
    return together, apart, exchanged, place * _GROUPS // max(first.size, 1)


def _pairs(law: LinkLaw, assignment: np.ndarray, reach: float, neighbours: int) -> tuple[np.ndarray, np.ndarray]:
    """Rows of pairs of linked earlier particles, the nearest first, and no farther apart than asked for if there are enough."""
    tree = law.trees()[0]
    distances, near = tree.query(tree.data, k=min(neighbours + 1, tree.n))
    first, second = np.repeat(np.arange(tree.n), near.reshape(tree.n, -1).shape[1]), near.ravel()
    pairs = np.column_stack([np.minimum(first, second), np.maximum(first, second)])
    pairs, where = np.unique(pairs, axis=0, return_index=True)
    distances = distances.ravel()[where]
    usable = (pairs[:, 0] < pairs[:, 1]) & (assignment[pairs] >= 0).all(axis=1)
    pairs, distances = pairs[usable], distances[usable]
    order = np.argsort(distances, kind="stable")
    kept = order[: max(int(np.count_nonzero(distances <= reach)), _NEAREST)]
    return pairs[kept, 0], pairs[kept, 1]


def _displacements(law: LinkLaw, rows: np.ndarray, columns: np.ndarray) -> np.ndarray:
    """Whitened displacements (p, d), to the nearest image on periodic axes."""
    r = law.targets[columns] - law.sources[rows]
    for axis, wall in enumerate(law.walls or ()):
        if wall.boundary == PERIODIC:
            r[:, axis] -= wall.length * np.round(r[:, axis] / wall.length)
    return r


def _correlation(numbers: tuple[np.ndarray, np.ndarray, np.ndarray], dimension: int) -> float:
    """c from |s|²/d, |t|²/d and |t'|²/d of pairs."""
    together, apart, exchanged = numbers
    shared, relative = float(together.mean()), float(np.minimum(apart, exchanged).mean())
    for _ in range(_ROUNDS):
        odds = np.clip(0.5 * dimension * (exchanged - apart) / max(relative, 1e-300), -700.0, 700.0)
        weight = 1.0 / (1.0 + np.exp(-odds))
        before, relative = relative, float((weight * apart + (1.0 - weight) * exchanged).mean())
        if abs(relative - before) <= 1e-10 * relative:
            break
    return (shared - relative) / (shared + relative)
