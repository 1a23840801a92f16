"""The growth that a bridge implies for every particle, what it sheds, and masses over time."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .. import checks

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge

__all__ = ["implied_growth", "kept_weights", "label_summary", "masses"]


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
    """By which factor the bridge changed the weight of every later particle, and how far the prior had to be stretched for it.

    A factor near 0 says that the bridge found no origin for the particle. A particle that keeps its weight must come from
    somewhere: its displacement (E[|y - F x - c|²_Q | y] / d)^½, over the ancestors x that the bridge gives it and in the prior's
    standard deviations on an axis, is about 1 where its movement is one that the prior makes and larger where it was forced.

    Returns
    -------
    DataFrame
        gap, time (of the later snapshot), particle, kept = b'_j / b_j (all 1 where the later weights are exact), displacement,
        and label where there are any.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [0.5, 1.5, 9.0]])
    >>> free = series.with_growth(ensembles.Growth(uncertainty=1.0, later=1.0))
    >>> bridge = ensembles.fit_bridge(free, ensembles.Brownian(diffusion=0.5))
    >>> bool(ensembles.kept_weights(bridge)["kept"].iloc[2] < 1e-6)
    True
    >>> ensembles.kept_weights(ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5)))["displacement"].round(1).tolist()
    [0.5, 1.3, 8.0]
    """
    import pandas

    series, parts = bridge.series, []
    for k, gap in enumerate(bridge.gaps):
        before = series.weights[k + 1]
        with np.errstate(invalid="ignore"):
            kept = gap.weights[1] / before
        columns = {"gap": k, "time": series.times[k + 1], "particle": np.arange(before.size), "kept": kept}
        columns["displacement"] = _displacement(bridge, k)
        if series.labels is not None:
            columns["label"] = series.labels[k + 1]
        parts.append(pandas.DataFrame(columns))
    return pandas.concat(parts, ignore_index=True)


def _displacement(bridge: Bridge, gap: int) -> np.ndarray:
    """(E|v - u|² / d)^½ of every later particle (m,), from the means of u and |u|² over its ancestors."""
    transition = bridge.gaps[gap].transition
    u = transition.whiten_sources(bridge.series.clouds[gap])
    v = transition.whiten_targets(bridge.series.clouds[gap + 1])
    centre = u.mean(axis=0)
    u, v = u - centre, v - centre
    means = bridge.coupling(gap).expectation_of_sources(np.column_stack([u, (u**2).sum(axis=1)]))
    squared = means[:, -1] - 2.0 * np.einsum("ij,ij->i", v, means[:, :-1]) + (v**2).sum(axis=1)
    return np.sqrt(np.maximum(squared, 0.0) / u.shape[1])


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


def label_summary(bridge: Bridge) -> pandas.DataFrame:
    """By time and label: what the bridge did to the weights of its particles and how far it had to stretch the prior.

    Returns
    -------
    DataFrame
        time, label, particles; of the gap that ends there the mean of kept and the root mean square of displacement (see
        `kept_weights`), NaN at the first time; of the gap that begins there the given and the implied net growth of the label as
        a whole, 1/time relative to the population's (see `implied_growth`), NaN at the last. Particles of weight 0 are left out.
    """
    import pandas

    series = bridge.series
    if series.labels is None:
        raise checks.InputError("a summary by label needs labels; the series has none; give labels=... when it is made")
    kept, growth = kept_weights(bridge), implied_growth(bridge)
    rows = []
    for k, t in enumerate(series.times):
        arrived, leaving = kept[kept["gap"] == k - 1], growth[growth["gap"] == k]
        weights = series.weights[k]
        for label in np.unique(series.labels[k]):
            chosen = (series.labels[k] == label) & (weights > 0)
            if not chosen.any():
                continue
            share = weights[chosen] / weights[chosen].sum()
            row = {"time": float(t), "label": str(label), "particles": int(chosen.sum())}
            row |= dict.fromkeys(("kept", "displacement", "given_growth", "implied_growth"), np.nan)
            if k > 0:
                row["kept"] = share @ arrived["kept"].to_numpy()[chosen]
                row["displacement"] = np.sqrt(share @ arrived["displacement"].to_numpy()[chosen] ** 2)
            if k < len(series) - 1:
                duration = series.durations[k]
                with np.errstate(divide="ignore"):
                    for name in ("given", "implied"):
                        numbers = share @ np.exp(leaving[name].to_numpy()[chosen] * duration)
                        row[f"{name}_growth"] = round(float(np.log(numbers) / duration), 12) + 0.0  # no -0 for 0
            rows.append(row)
    return pandas.DataFrame(rows)
