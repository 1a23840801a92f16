"""Probabilities of the labels of descendants and ancestors, how committed particles are, and flows between labels."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .chain import expected_at_end, expected_at_start
from .labels import labels_at, snapshot_pair

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge

__all__ = ["ancestors", "commitment", "descendants", "label_flows"]


def descendants(bridge: Bridge, start: int = 0, end: int = -1) -> pandas.DataFrame:
    """Probability that a particle's descendants at a later snapshot carry each label.

    P_i(l) = Σ_j 1[label of j is l] π_ij / Σ_j π_ij over a gap, composed along the chain; with growth, a descendant on the
    way counts by the descendants that it leaves. These are inferences under the prior, not observed lineages.

    Parameters
    ----------
    bridge : a bridge between particles of a series with labels.
    start, end : numbers of the earlier and the later snapshot; negative ones count from the end.

    Returns
    -------
    DataFrame
        A row per particle of snapshot `start`, a column per label at snapshot `end`; rows sum to 1. Particles without
        label are a column "(no label)".

    Raises
    ------
    InputError
        Without labels at `end`, or with smooth ends, which couple no particles.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays(
    ...     [0, 1], [[0.0, 4.0], [0.0, 4.0]], labels=[["early", "early"], ["near", "far"]]
    ... )
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> ensembles.descendants(bridge).round(3).to_numpy().tolist()
    [[0.018, 0.982], [0.982, 0.018]]
    """
    start, end = snapshot_pair(bridge, start, end)
    found = labels_at(bridge.series, end)
    return _frame(expected_at_end(bridge, found.indicators, start, end), found.names)


def ancestors(bridge: Bridge, start: int = 0, end: int = -1) -> pandas.DataFrame:
    """Probability that a particle's ancestors at an earlier snapshot carried each label.

    Parameters
    ----------
    bridge, start, end : as for `descendants`.

    Returns
    -------
    DataFrame
        A row per particle of snapshot `end`, a column per label at snapshot `start`; rows sum to 1.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 4.0], [2.0]], labels=[["a", "b"], ["c"]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> ensembles.ancestors(bridge).round(3).to_numpy().tolist()
    [[0.5, 0.5]]
    """
    start, end = snapshot_pair(bridge, start, end)
    found = labels_at(bridge.series, start)
    return _frame(expected_at_start(bridge, found.indicators, start, end), found.names)


def _frame(probability: np.ndarray, names: tuple[str, ...]) -> pandas.DataFrame:
    import pandas

    probability = probability / probability.sum(axis=1, keepdims=True)  # away from 1 by rounding only
    frame = pandas.DataFrame(probability, columns=list(names))
    frame.index.name = "particle"
    return frame


def commitment(probabilities: pandas.DataFrame) -> pandas.DataFrame:
    """How committed each particle is: the entropy H = -Σ p log p of its label probabilities.

    Parameters
    ----------
    probabilities : what `descendants` or `ancestors` gave.

    Returns
    -------
    DataFrame
        label : the most probable one; probability : of that label; entropy : in nats; effective_labels : exp(entropy),
        1 for a committed particle.

    Examples
    --------
    >>> import pandas
    >>> table = pandas.DataFrame({"a": [0.5, 1.0], "b": [0.5, 0.0]})
    >>> commitment(table)["effective_labels"].round(6).tolist()
    [2.0, 1.0]
    """
    import pandas
    from scipy.special import entr

    values = probabilities.to_numpy(dtype=float)
    entropy = entr(values).sum(axis=1)
    return pandas.DataFrame(
        {
            "label": np.asarray(probabilities.columns)[values.argmax(axis=1)],
            "probability": values.max(axis=1),
            "entropy": entropy,
            "effective_labels": np.exp(entropy),
        },
        index=probabilities.index,
    )


def label_flows(bridge: Bridge) -> pandas.DataFrame:
    """Flow between the labels of consecutive snapshots, one row a gap and pair of labels.

    Returns
    -------
    DataFrame
        gap; earlier_time, later_time; earlier_label, later_label; mass : share of the later population (of each gap, sum
        1); probability : of the later label given the earlier; origin : of the earlier label given the later. A gap with
        a snapshot without labels is left out.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 4.0], [2.0]], labels=[["a", "b"], ["c"]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> ensembles.label_flows(bridge)[["earlier_label", "later_label", "mass"]].to_numpy().tolist()
    [['a', 'c', 0.5], ['b', 'c', 0.5]]
    """
    import pandas

    series = bridge.series
    labelled = [] if series.labels is None else [bool((names != "").any()) for names in series.labels]
    parts = []
    for gap in range(len(bridge.gaps)):
        if not labelled or not (labelled[gap] and labelled[gap + 1]):
            continue
        mass, early, late = flow_matrix(bridge, gap)
        with np.errstate(invalid="ignore"):
            forward, backward = mass / mass.sum(axis=1, keepdims=True), mass / mass.sum(axis=0)
        parts.append(
            pandas.DataFrame(
                {
                    "gap": gap,
                    "earlier_time": series.times[gap],
                    "later_time": series.times[gap + 1],
                    "earlier_label": np.repeat(early, len(late)),
                    "later_label": np.tile(late, len(early)),
                    "mass": mass.ravel(),
                    "probability": forward.ravel(),
                    "origin": backward.ravel(),
                }
            )
        )
    if not parts:
        for k in range(len(series)):
            labels_at(series, k)  # says what is missing, and where
    return pandas.concat(parts, ignore_index=True)


def flow_matrix(bridge: Bridge, gap: int) -> tuple[np.ndarray, tuple[str, ...], tuple[str, ...]]:
    """Mass (p, q) between the labels of the two snapshots of a gap, and both lists of names."""
    early, late = labels_at(bridge.series, gap), labels_at(bridge.series, gap + 1)
    towards = bridge.coupling(gap).expectation(late.indicators)
    mass = early.indicators.T @ (bridge.gaps[gap].weights[0][:, None] * towards)
    return mass / mass.sum(), early.names, late.names
