"""The labels of a snapshot as numbers, and what is worth saying about them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .. import checks

if TYPE_CHECKING:
    from ..bridges.bridge import Bridge
    from ..snapshots.series import SnapshotSeries

__all__ = ["UNLABELLED", "SnapshotLabels", "label_notes", "labels_at", "snapshot_pair"]

UNLABELLED = "(no label)"
"""The column of particles whose label is empty."""


@dataclass(frozen=True, eq=False)
class SnapshotLabels:
    """Labels of one snapshot: their sorted names (p,), and the number of each particle's (n,)."""

    names: tuple[str, ...]
    codes: np.ndarray

    @property
    def indicators(self) -> np.ndarray:
        """(n, p), 1 where particle i carries label p."""
        return np.eye(len(self.names))[self.codes]


def labels_at(series: SnapshotSeries, snapshot: int) -> SnapshotLabels:
    """The labels of a snapshot.

    Raises
    ------
    InputError
        If the series has no labels, or this snapshot has none.
    """
    if series.labels is None:
        raise checks.InputError(
            "the series has no labels; labels is None; read it with label=..., or give labels to from_arrays"
        )
    given = series.labels[snapshot]
    if not (given != "").any():
        raise checks.InputError(
            f"labels are missing at one time; all {given.size} particle(s) of snapshot t = {series.times[snapshot]:g} "
            "have an empty label; label them, or choose another snapshot"
        )
    names, codes = np.unique(given, return_inverse=True)
    return SnapshotLabels(tuple(str(name) or UNLABELLED for name in names), codes)


def snapshot_pair(bridge: Bridge, start: int, end: int) -> tuple[int, int]:
    """Numbers of an earlier and a later snapshot, negative ones counted from the end."""
    count = len(bridge.series)
    found = []
    for name, k in (("start", start), ("end", end)):
        if isinstance(k, bool) or not isinstance(k, (int, np.integer)) or not -count <= k < count:
            raise checks.InputError(
                f"no such snapshot; {name} = {k!r} of a series of {count}; use {-count} to {count - 1}"
            )
        found.append(int(k) % count)
    if found[0] >= found[1]:
        raise checks.InputError(
            f"start must come before end; start = {start} is snapshot {found[0]} and end = {end} is snapshot {found[1]}; "
            "exchange them, and use ancestors to look back"
        )
    return found[0], found[1]


def label_notes(series: SnapshotSeries) -> tuple[str, ...]:
    """Sentences on labels seen at one time only, which nothing can be compared with.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0], [1.0, 2.0]], labels=[["a"], ["a", "b"]])
    >>> label_notes(series)
    ("label 'b' is seen at t = 1 only",)
    """
    if series.labels is None:
        return ()
    seen: dict[str, list[float]] = {}
    for t, labels in zip(series.times, series.labels):
        for name in np.unique(labels[labels != ""]):
            seen.setdefault(str(name), []).append(float(t))
    return tuple(f"label {name!r} is seen at t = {at[0]:g} only" for name, at in seen.items() if len(at) == 1)
