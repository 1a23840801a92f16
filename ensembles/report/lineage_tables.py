"""Lineage as tables, one row a particle, flow, time or feature; rows and names are those of the user's table."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np

from ..lineage.fates import ancestors, commitment, descendants
from ..lineage.growth import implied_growth, kept_weights

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge

__all__ = ["ancestors_table", "descendants_table", "growth_table", "kept_table"]


def descendants_table(bridge: Bridge, end: int) -> pandas.DataFrame:
    """Probability of each label at snapshot `end` for every particle before it.

    Returns
    -------
    DataFrame
        row, time, label; a column P(label) for each; entropy (nats) and effective_labels.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 4.0], [0.0, 4.0]], labels=[["a", "a"], ["b", "c"]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> list(descendants_table(bridge, 1).columns)
    ['row', 'time', 'label', 'P(b)', 'P(c)', 'entropy', 'effective_labels']
    """
    return _stacked(bridge, range(end), lambda k: descendants(bridge, k, end))


def ancestors_table(bridge: Bridge, start: int) -> pandas.DataFrame:
    """Probability of each label at snapshot `start` for every particle after it; columns as in `descendants_table`."""
    return _stacked(bridge, range(start + 1, len(bridge.series)), lambda k: ancestors(bridge, start, k))


def _stacked(bridge: Bridge, snapshots: range, table: Callable[[int], pandas.DataFrame]) -> pandas.DataFrame:
    import pandas

    series, parts = bridge.series, []
    for k in snapshots:
        found = table(k)
        spread = commitment(found)
        named = found.rename(columns=lambda name: f"P({name})")
        named.insert(0, "row", series.rows[k])
        named.insert(1, "time", series.times[k])
        if series.labels is not None:
            named.insert(2, "label", series.labels[k])
        parts.append(named.assign(entropy=spread["entropy"], effective_labels=spread["effective_labels"]))
    return pandas.concat(parts, ignore_index=True)


def growth_table(bridge: Bridge) -> pandas.DataFrame:
    """`implied_growth` with the rows of the user's table."""
    return _with_rows(implied_growth(bridge), bridge, 0)


def kept_table(bridge: Bridge) -> pandas.DataFrame:
    """`kept_weights` with the rows of the user's table."""
    return _with_rows(kept_weights(bridge), bridge, 1)


def _with_rows(frame: pandas.DataFrame, bridge: Bridge, first: int) -> pandas.DataFrame:
    rows = np.concatenate(bridge.series.rows[first : first + len(bridge.gaps)])
    frame = frame.drop(columns="particle")
    frame.insert(1, "row", rows)
    return frame
