"""The growth that a bridge implies for every particle, what it sheds, and masses over time."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge

__all__ = ["implied_growth", "kept_weights", "masses"]


def implied_growth(bridge: Bridge) -> pandas.DataFrame:
    """Net growth rate of every particle over its gap, as given and as the bridge implies.

    Rates are relative to the population's: log(a'_i / a_i) / τ with the weights a of the snapshot and a' of the coupling,
    so that the mean of exp(rate τ) is 1. How many particles there are in all, a coupling of shares does not say: see
    `masses`.

    Returns
    -------
    DataFrame
        gap, time, particle, given, implied (1/time; 0 and 0 without growth, -inf for a particle that leaves nothing,
        NaN for one of weight 0), and label where there are any.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays(
    ...     [0, 2], [[0.0, 1.0], [0.0, 1.0]], features={"r": [[0.5, 0.0], [0.0, 0.0]]}
    ... ).with_growth(ensembles.Growth("r"))
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    >>> ensembles.implied_growth(bridge)["implied"].round(4).tolist()
    [0.1899, -0.3101]
    """
    import pandas

    series, parts = bridge.series, []
    for k, gap in enumerate(bridge.gaps):
        before, duration = series.weights[k], float(series.durations[k])
        given = np.zeros(before.size)
        if series.growth is not None:
            given = series.growth.rates(series, k) - series.growth.log_factor(series, k) / duration
        with np.errstate(divide="ignore", invalid="ignore"):
            implied = np.log(gap.weights[0] / before) / duration
        columns = {
            "gap": k,
            "time": series.times[k],
            "particle": np.arange(before.size),
            "given": np.where(before > 0, given, np.nan),
            "implied": implied,
        }
        if series.labels is not None:
            columns["label"] = series.labels[k]
        parts.append(pandas.DataFrame(columns))
    return pandas.concat(parts, ignore_index=True)


def kept_weights(bridge: Bridge) -> pandas.DataFrame:
    """By which factor the bridge changed the weight of every later particle: near 0 it found no origin for it.

    Returns
    -------
    DataFrame
        gap, time (of the later snapshot), particle, kept = b'_j / b_j (all 1 where the later weights are exact), and label
        where there are any.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [0.5, 1.5, 9.0]])
    >>> series = series.with_growth(ensembles.Growth(uncertainty=1.0, later=1.0))
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    >>> bool(ensembles.kept_weights(bridge)["kept"].iloc[2] < 1e-6)
    True
    """
    import pandas

    series, parts = bridge.series, []
    for k, gap in enumerate(bridge.gaps):
        before = series.weights[k + 1]
        with np.errstate(invalid="ignore"):
            kept = gap.weights[1] / before
        columns = {"gap": k, "time": series.times[k + 1], "particle": np.arange(before.size), "kept": kept}
        if series.labels is not None:
            columns["label"] = series.labels[k + 1]
        parts.append(pandas.DataFrame(columns))
    return pandas.concat(parts, ignore_index=True)


def masses(bridge: Bridge) -> pandas.DataFrame:
    """Mass of every snapshot as measured, and as the given growth makes it from the snapshot before and from the first.

    Returns
    -------
    DataFrame
        time, measured (sum of the weights given, or the number of particles), from_before, from_first.

    Examples
    --------
    >>> import math, ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [0.5, 1.5, 2.0, 3.0]])
    >>> bridge = ensembles.fit_bridge(series.with_growth(ensembles.Growth(math.log(2))), ensembles.Brownian(diffusion=0.5))
    >>> ensembles.masses(bridge)["from_first"].round(6).tolist()
    [2.0, 4.0]
    """
    import pandas

    series = bridge.series
    factors = [
        0.0 if series.growth is None else series.growth.log_factor(series, gap) for gap in range(len(bridge.gaps))
    ]
    before = np.concatenate([[np.nan], series.masses[:-1] * np.exp(factors)])
    with np.errstate(over="ignore"):
        first = series.masses[0] * np.exp(np.concatenate([[0.0], np.cumsum(factors)]))
    return pandas.DataFrame(
        {"time": series.times, "measured": series.masses, "from_before": before, "from_first": first}
    )
