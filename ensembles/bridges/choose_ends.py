"""Which ends to use: what was asked for, or by dimension, numbers of particles and noise, with the reason in words.

With atoms the law of the end given a start is a weighted set of particles; exp(entropy) of a row of the coupling says how
many take part. Its conditional moments are about 1 / that number wrong, so a hundred are wanted. Below that a smooth end
shares what the particles say, as far as there are enough of them for its 2 d + 1 parameters a component.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from ..endpoints.likelihood import WhitenedClouds
from ..priors.base import LinearGaussianPrior
from .mixture_starts import coupled_starts
from .smooth import KernelEnds, MixtureEnds

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["chosen_ends", "effective_ends"]

KINDS = ("atoms", "kernel", "mixture", "auto")
_WANTED = 100.0  # effective ends a start
_PARTICLES = 10.0  # particles a parameter of one component; below that, held-out cells were met better by atoms


def chosen_ends(
    series: SnapshotSeries, prior: LinearGaussianPrior, ends: str | MixtureEnds | KernelEnds, components: int | None
) -> tuple[str | MixtureEnds | KernelEnds, tuple[str, ...]]:
    """ "atoms" or the options of smooth ends, and the reason of an automatic choice."""
    if components is not None:
        components = checks.whole_number(components, "components")
    if isinstance(ends, (MixtureEnds, KernelEnds)):
        return ends, ()
    if not isinstance(ends, str) or ends not in KINDS:
        raise checks.unknown_name("ends", str(ends), KINDS)
    if ends == "atoms" and components is not None:
        raise checks.InputError(
            f"atoms have no components; components = {components} with ends='atoms'; leave it out or use ends='mixture'"
        )
    if ends == "auto":
        return _automatic(series, prior)
    if ends == "atoms":
        return ends, ()
    return (KernelEnds() if ends == "kernel" else MixtureEnds()), ()


def effective_ends(series: SnapshotSeries, prior: LinearGaussianPrior, k: int) -> float:
    """About how many particles take part in the law of the end given a start of gap k, with atoms.

    The geometric mean over starts of exp(entropy) in a coupling of at most 600 particles each, times the cloud's size over
    that of the subsample.
    """
    transition = prior.transition(float(series.times[k + 1] - series.times[k]), series.dimension)
    clouds = WhitenedClouds(
        transition.whiten_sources(series.clouds[k]),
        series.weights[k],
        transition.whiten_targets(series.clouds[k + 1]),
        series.weights[k + 1],
    )
    _, columns, plan = coupled_starts(clouds, 0)
    rows = plan / plan.sum(axis=1, keepdims=True)
    entropy = -(rows * np.log(np.maximum(rows, 1e-300))).sum(axis=1)
    return float(np.exp(plan.sum(axis=1) @ entropy) * len(clouds.v) / columns.size)


def _automatic(
    series: SnapshotSeries, prior: LinearGaussianPrior
) -> tuple[str | MixtureEnds | KernelEnds, tuple[str, ...]]:
    numbers = [effective_ends(series, prior, k) for k in range(len(series.times) - 1)]
    k = int(np.argmin(numbers))
    d, fewest = series.dimension, int(min(series.counts))
    spread = all((np.ptp(cloud, axis=0) > 0).all() for cloud in series.clouds)
    where = (
        f"{len(series.clouds[k + 1])} particles at t = {series.times[k + 1]:g} in {d} dimension(s) leave about "
        f"{numbers[k]:.3g} of them to a start at this noise, where {_WANTED:g} are wanted for its law"
    )
    if numbers[k] >= _WANTED:
        return "atoms", (f"ends: atoms, since {where}",)
    if not spread or fewest < _PARTICLES * (2 * d + 1):
        return "atoms", (
            f"ends: atoms, although {where}: {fewest} particles in the smallest snapshot do not carry the {2 * d + 1} "
            "parameters of a smooth component",
        )
    return MixtureEnds(), (f"ends: mixture, since {where}",)
