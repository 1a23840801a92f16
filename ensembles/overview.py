"""What a series holds and whether a prior's noise is of the right order, before anything is fitted."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from scipy.spatial import cKDTree

from .priors.base import LinearGaussianPrior
from .report.wording import axis_name, gap_title, parameter_unit, time_axis_name, time_text
from .snapshots.series import SnapshotSeries
from .snapshots.summary import describe_snapshots, displacement

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["crowding", "gap_table", "position_table", "snapshot_table", "verdicts"]

_CLEAR, _CROWDED = 0.2, 1.0
"""Noise length over the distance to the nearest neighbour: links are clear below the one, and tell little above the other."""

_FAR = 10.0
"""Ratio of squared displacement to squared spread from which the noise is of another order."""


def snapshot_table(series: SnapshotSeries) -> pd.DataFrame:
    """One row a snapshot: time, particles, effective sample size, duplicates.

    Examples
    --------
    >>> series = SnapshotSeries.from_arrays([0, 1], [[0.0, 2.0], [5.0, 5.0]])
    >>> snapshot_table(series)["duplicates"].tolist()
    [0, 1]
    """
    import pandas

    rows = [
        {
            time_axis_name(series): found.time,
            "particles": found.count,
            "effective sample size": found.effective_sample_size,
            "duplicates": found.duplicates,
        }
        for found in describe_snapshots(series)
    ]
    return pandas.DataFrame(rows)


def position_table(series: SnapshotSeries) -> pd.DataFrame:
    """One row a coordinate: its mean ± spread (standard deviation) in every snapshot.

    Examples
    --------
    >>> series = SnapshotSeries.from_arrays([0, 1], [[0.0, 2.0], [5.0, 5.0]])
    >>> position_table(series).iloc[0].tolist()
    ['x', '1 ± 1', '5 ± 0']
    """
    import pandas

    described = describe_snapshots(series)
    rows = []
    for axis, name in enumerate(series.position_names):
        row = {"coordinate": axis_name(name, series.length_unit)}
        for found in described:
            row[time_text(series, found.time)] = f"{found.mean[axis]:.3g} ± {found.spread[axis]:.3g}"
        rows.append(row)
    return pandas.DataFrame(rows)


def _squared_spread(series: SnapshotSeries, prior: LinearGaussianPrior, gap: int) -> float:
    """tr Q over one gap."""
    return float(np.trace(prior.transition(series.durations[gap], series.dimension).covariance))


def _ratios(series: SnapshotSeries, prior: LinearGaussianPrior) -> np.ndarray:
    """Squared displacement over tr Q for each gap: the factor that would make the two equal."""
    gaps = range(len(series) - 1)
    return np.array(
        [displacement(series, gap).squared_displacement / _squared_spread(series, prior, gap) for gap in gaps]
    )


def gap_table(series: SnapshotSeries, prior: LinearGaussianPrior) -> pd.DataFrame:
    """One row a gap: how far the cloud moved, how far the prior spreads, and the diffusion at which the two are equal.

    The displacement is that of `snapshots.summary.displacement`; the spread is sqrt(tr Q), Q the covariance of the
    prior's transition. Q is proportional to D, so the diffusion that makes them equal is D times the squared ratio;
    the mean over the axes, tr D / d, is given for both.

    Examples
    --------
    >>> from ensembles import Brownian
    >>> series = SnapshotSeries.from_arrays([0, 2], [[-1.0, 1.0], [1.0, 5.0]])
    >>> gap_table(series, Brownian(0.5)).round(3).iloc[0].tolist()
    [0.0, 0.0, 2.0, 2.0, 3.162, 1.414, 0.5, 2.5]
    """
    import pandas

    dimension = series.dimension
    diffusion = float(np.trace(prior.diffusion_matrix(dimension))) / dimension
    rows = []
    for gap, ratio in enumerate(_ratios(series, prior)):
        moved = displacement(series, gap)
        rows.append(
            {
                "gap": gap,
                axis_name("from", series.time_unit): moved.start,
                axis_name("to", series.time_unit): moved.end,
                axis_name("duration", series.time_unit): moved.duration,
                axis_name("displacement", series.length_unit): np.sqrt(moved.squared_displacement),
                axis_name("prior's spread", series.length_unit): np.sqrt(_squared_spread(series, prior, gap)),
                axis_name("diffusion", parameter_unit("diffusion", series)): diffusion,
                axis_name("equal at", parameter_unit("diffusion", series)): diffusion * ratio,
            }
        )
    return pandas.DataFrame(rows)


def verdicts(series: SnapshotSeries, prior: LinearGaussianPrior) -> Sequence[str]:
    """One sentence a gap: is the diffusion much too small, of the right order, or much too large?

    Examples
    --------
    >>> from ensembles import Brownian
    >>> series = SnapshotSeries.from_arrays([0, 2], [[-1.0, 1.0], [1.0, 5.0]])
    >>> print(*verdicts(series, Brownian(0.001)))
    time = 0 → 2: the diffusion is much too small for what the data moved: 2.5e+03 times as much would make the prior's
    spread equal to the displacement; the bridge would be close to a matching along straight lines
    """
    sentences = []
    for gap, ratio in enumerate(_ratios(series, prior)):
        if ratio > _FAR:
            text = (
                f"the diffusion is much too small for what the data moved: {ratio:.3g} times as much would make the "
                "prior's spread equal to the displacement; the bridge would be close to a matching along straight lines"
            )
        elif ratio < 1.0 / _FAR:
            text = (
                f"the diffusion is much too large for what the data moved: {ratio:.3g} times as much would make the "
                "prior's spread equal to the displacement; ends would hardly depend on starts (a population at rest "
                "always looks like this: then the data cannot tell)"
            )
        else:
            text = f"the diffusion is of the right order (spread equals displacement at {ratio:.3g} times as much)"
        sentences.append(f"{gap_title(series, gap)}: {text}")
    return sentences


def crowding(series: SnapshotSeries, prior: LinearGaussianPrior) -> Sequence[str]:
    """For the same particles in every frame, one sentence a gap: how far do they move beside how near they are?

    The noise length is sqrt(tr Q / d), Q the covariance of the prior's transition.

    Examples
    --------
    >>> from ensembles import Brownian
    >>> series = SnapshotSeries.from_arrays([0, 2], [[0.0, 10.0, 20.0], [0.5, 10.1, 19.0]])
    >>> print(*crowding(series, Brownian(0.25)))
    time = 0 → 2: the noise length 1 is 0.1 of the mean distance to the nearest neighbour, 10; most links will be clear
    """
    sentences = []
    for gap in range(len(series) - 1):
        noise = float(np.sqrt(_squared_spread(series, prior, gap) / series.dimension))
        tree = cKDTree(series.clouds[gap])
        near = float(tree.query(tree.data, k=2)[0][:, 1].mean()) if tree.n > 1 else np.inf
        means = "most links will be clear"
        if noise > _CLEAR * near:
            means = "several particles compete for a place, and links are probabilities between them"
        if noise > _CROWDED * near:
            means = "links tell little; a shorter gap would tell more"
        sentences.append(
            f"{gap_title(series, gap)}: the noise length {noise:.3g} is {noise / near:.2g} of the mean distance to the nearest "
            f"neighbour, {near:.3g}; {means}"
        )
    return sentences
