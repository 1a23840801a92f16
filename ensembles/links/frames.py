"""What frames of the same particles must satisfy, and what a missed or new particle weighs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import gamma

from .. import checks
from ..kernels.images import OPEN, PERIODIC
from ..priors.base import LinearGaussianPrior
from .law import wrapped_tree

if TYPE_CHECKING:
    from ..priors.box import Box
    from ..snapshots.series import SnapshotSeries

__all__ = ["LonerWeights", "loner_weights", "regularity", "require_same_particles"]


@dataclass(frozen=True, eq=False)
class LonerWeights:
    """Log-weights of missed (n,) and new (m,) particles when a linked pair weighs p(y | x), and the constant taken out."""

    log_alone: tuple[np.ndarray, np.ndarray]
    log_constant: float


def require_same_particles(series: SnapshotSeries, prior: LinearGaussianPrior, detection: float | None) -> None:
    """Refuse frames that cannot hold the same particles.

    Raises
    ------
    InputError
        Unequal counts without a detection probability, unequal weights, two particles at one place, positions outside the
        prior's box.
    """
    if detection is not None:
        value = checks.positive_number(detection, "detection", "give a probability above 0 and up to 1")
        if value > 1.0:
            raise checks.InputError(
                f"detection must be a probability; it is {value:g}; give a number above 0 and up to 1"
            )
    counts = [len(cloud) for cloud in series.clouds]
    if detection is None and len(set(counts)) > 1:
        k = next(i for i, count in enumerate(counts) if count != counts[0])
        raise checks.InputError(
            f"the same particles must be in every frame; there are {counts[0]} at t = {series.times[0]:g} and {counts[k]} "
            f"at t = {series.times[k]:g}; give a detection probability below 1, or treat the frames as snapshots of a "
            "population"
        )
    for time, cloud, weights in zip(series.times, series.clouds, series.weights):
        place = f" in snapshot t = {time:g}"
        if np.ptp(weights) > 1e-12 * weights.max():
            i = int(np.argmax(np.abs(weights - weights[0])))
            raise checks.InputError(
                f"the same particles must all count alike; weights 0 and {i} are in the ratio "
                f"{weights[i] / max(weights[0], 1e-300):g}{place}; leave the weights out, or bridge the frames as a population"
            )
        _require_distinct(cloud, place)
        if prior.box is not None:
            prior.box.require_inside(cloud, place)


def _require_distinct(cloud: np.ndarray, place: str) -> None:
    order = np.lexsort(cloud.T[::-1])
    same = np.flatnonzero((cloud[order[1:]] == cloud[order[:-1]]).all(axis=1))
    if same.size:
        first, second = sorted((int(order[same[0]]), int(order[same[0] + 1])))
        raise checks.InputError(
            f"two particles are at one position; particles {first} and {second} are both at "
            f"{cloud[first].tolist()}{place} ({same.size} such pair(s)); remove the duplicate, or measure more digits"
        )


def loner_weights(
    series: SnapshotSeries, k: int, prior: LinearGaussianPrior, detection: float | None, birth_density: float | None
) -> LonerWeights:
    """Weights of gap k; every row is linked or missed, so the detection probability of links comes out as a constant."""
    n, m = len(series.clouds[k]), len(series.clouds[k + 1])
    if detection is None or detection == 1.0:
        new = -np.inf if birth_density is None else np.log(_density(birth_density))
        if detection is None and birth_density is not None:
            raise checks.InputError(
                f"a birth density needs a detection probability; birth_density = {birth_density:g} and detection is None; "
                "give detection too, 1 if no particle is ever missed"
            )
        return LonerWeights((np.full(n, -np.inf), np.full(m, new)), 0.0)
    density = (1.0 - detection) * n / _volume(series, k, prior) if birth_density is None else _density(birth_density)
    missed = np.log1p(-detection) - np.log(detection)
    return LonerWeights((np.full(n, missed), np.full(m, np.log(density))), n * float(np.log(detection)))


def _density(value: float) -> float:
    return checks.positive_number(value, "birth_density", "give new particles per length^d, or leave it out")


def _volume(series: SnapshotSeries, k: int, prior: LinearGaussianPrior) -> float:
    spans = _between_walls(np.ptp(np.concatenate([series.clouds[k], series.clouds[k + 1]]), axis=0), prior.box)
    if not (spans > 0.0).all():
        raise checks.InputError(
            f"the volume of the frames is 0; axis {int(np.argmin(spans))} has no extent; give a birth_density"
        )
    return float(np.prod(spans))


def _between_walls(spans: np.ndarray, box: Box | None) -> np.ndarray:
    """Extents (d,) of particles, those of the box on axes that have walls."""
    if box is None:
        return spans
    return np.where([kind != OPEN for kind in box.boundary], box.lengths, spans)


def regularity(cloud: np.ndarray, box: Box | None) -> tuple[float, float]:
    """Mean distance to the nearest neighbour over that of independent positions, and the spacing (volume / n)^(1/d).

    Of a homogeneous Poisson process the mean distance is Γ(1 + 1/d) (volume / (n V_d))^(1/d), V_d the volume of the unit
    ball (Clark and Evans 1954 in the plane; from memory). Near 1 where particles do not feel one another, larger where they
    keep apart, smaller in clouds that are denser in the middle. Axes along which nothing lies apart do not count.
    """
    n = len(cloud)
    lengths = _between_walls(np.ptp(cloud, axis=0) * (n + 1) / (n - 1), box)
    extended = lengths > 0.0
    d = int(np.count_nonzero(extended))
    periods = np.zeros(extended.size)
    if box is not None:
        periods = np.where([kind == PERIODIC for kind in box.boundary], box.lengths, 0.0)
    tree = wrapped_tree(cloud, periods)
    nearest = float(tree.query(tree.data, k=2)[0][:, 1].mean())
    spacing = float(np.prod(lengths[extended]) / n) ** (1.0 / d)
    ball = np.pi ** (d / 2) / gamma(d / 2 + 1.0)
    return nearest / (gamma(1.0 + 1.0 / d) * spacing * ball ** (-1.0 / d)), spacing
