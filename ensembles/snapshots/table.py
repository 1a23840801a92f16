"""Series from tables and back: columns by name, rows grouped by their time, messages that name row and column."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..checks import InputError
from .columns import feature_array, label_array, time_text, too_few_snapshots
from .series import SnapshotSeries

if TYPE_CHECKING:
    import pandas

__all__ = ["ChosenColumns", "choose_columns", "frame_from_series", "require_columns", "series_from_frame"]

# From here on a 64-bit float no longer holds every whole number.
_LARGEST_EXACT = 2**53


@dataclass(frozen=True)
class ChosenColumns:
    """The names of the columns of a table that make a series."""

    time: str
    position: tuple[str, ...]
    weight: str | None = None
    label: str | None = None
    features: tuple[str, ...] = ()

    @property
    def numbers(self) -> tuple[str, ...]:
        """The columns that must hold finite numbers."""
        return (self.time, *self.position, *(() if self.weight is None else (self.weight,)))

    @property
    def names(self) -> tuple[str, ...]:
        """Every column."""
        return (*self.numbers, *(() if self.label is None else (self.label,)), *self.features)


def choose_columns(
    time: str,
    position: str | Sequence[str],
    *,
    weight: str | None = None,
    label: str | None = None,
    features: Sequence[str] = (),
) -> ChosenColumns:
    """Return the chosen columns; a single name is read as a list of one."""
    position = (position,) if isinstance(position, str) or not isinstance(position, Iterable) else tuple(position)
    features = (features,) if isinstance(features, str) else tuple(features)
    if not position:
        raise InputError("a series needs coordinates; position is an empty list; name at least one column")
    used = (time, *position)
    for name in used:
        if used.count(name) > 1:
            raise InputError(
                f"time and position must be different columns; {name!r} is named {used.count(name)} times; "
                "name each column once"
            )
    return ChosenColumns(time, position, weight, label, features)


def require_columns(columns: ChosenColumns, present: Sequence[Any], source: str) -> None:
    """Refuse a name that `present` does not hold exactly once; `source` names the table."""
    for name in columns.names:
        if name not in present:
            shown = ", ".join(map(str, present[:20])) + (", ..." if len(present) > 20 else "")
            raise InputError(
                f"missing column in {source}; there is no column {name!r}{checks.nearest_name(name, present)}; "
                f"use one of: {shown}"
            )
        if list(present).count(name) > 1:
            raise InputError(
                f"ambiguous column in {source}; {list(present).count(name)} columns are named {name!r}; "
                "give each column its own name"
            )


def series_from_frame(
    frame: pandas.DataFrame,
    columns: ChosenColumns,
    *,
    units: Mapping[str, str] | None = None,
    source: str = "the frame",
    place: Callable[[int], str] = lambda row: f"row {row} (counted from 0)",
) -> SnapshotSeries:
    """Make a series from a frame; `place` words where a row stands."""
    import pandas

    if not isinstance(frame, pandas.DataFrame):
        raise InputError(
            f"frame must be a pandas DataFrame; it is {type(frame).__name__}; wrap it in pandas.DataFrame(...)"
        )
    require_columns(columns, list(frame.columns), source)
    if len(frame) == 0:
        raise InputError(f"there are no particles; {source} has 0 rows; give at least one particle at two times each")
    numbers = {name: _numbers(frame[name], name, place) for name in columns.numbers}
    times, order, parts = _group(numbers[columns.time], frame[columns.time], columns.time)
    positions = np.column_stack([numbers[name] for name in columns.position])
    given = None if columns.weight is None else numbers[columns.weight]
    if given is not None and (given < 0).any():
        row = int(np.argmax(given < 0))
        snapshot = time_text(numbers[columns.time][row])
        raise InputError(
            f"weights must be non-negative; column {columns.weight!r}, {place(row)} = {given[row]:g} in snapshot "
            f"t = {snapshot}; drop that particle or set it to 0"
        )

    def split(values: np.ndarray) -> list[np.ndarray]:
        return np.split(values[order], parts)

    series = SnapshotSeries.from_arrays(
        times,
        split(positions),
        None if given is None else split(given),
        labels=None if columns.label is None else split(label_array(frame[columns.label], "labels", "")),
        features={name: split(feature_array(frame[name], name, "")) for name in columns.features},
        units=units,
        position_names=columns.position,
    )
    return replace(series, time_name=str(columns.time), rows=tuple(split(np.arange(len(frame)))))


def _group(times: np.ndarray, column: pandas.Series, name: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the distinct times, the (stable) order of the rows by time, and where every later snapshot begins."""
    if column.dtype.kind in "iu" and np.abs(times).max() >= _LARGEST_EXACT:
        raise InputError(
            f"times are too large to be told apart; the largest in column {name!r} is {np.abs(times).max():.17g}; "
            "subtract the first time and choose a larger unit"
        )
    distinct, number = np.unique(times, return_inverse=True)
    if len(distinct) < 2:
        raise too_few_snapshots(f"column {name!r} holds one time only, {time_text(distinct[0])}")
    order = np.argsort(number, kind="stable")
    return distinct, order, np.cumsum(np.bincount(number))[:-1]


def _numbers(column: pandas.Series, name: str, place: Callable[[int], str]) -> np.ndarray:
    """Return a column as finite float64 numbers, or name the first row that is none."""
    from pandas.api import types

    if types.is_numeric_dtype(column) and not types.is_bool_dtype(column) and not types.is_complex_dtype(column):
        values = column.to_numpy(dtype=float, na_value=np.nan)
    else:
        values = _mixed_numbers(column, name, place)
    bad = ~np.isfinite(values)
    if bad.any():
        row = int(np.argmax(bad))
        found = "is empty or NaN" if np.isnan(values[row]) else f"is {values[row]}"
        more = f" ({int(bad.sum())} such rows)" if bad.sum() > 1 else ""
        raise InputError(f"column {name!r} must be finite; {place(row)} {found}{more}; correct it or delete that row")
    return values


def _mixed_numbers(column: pandas.Series, name: str, place: Callable[[int], str]) -> np.ndarray:
    """Return a column of mixed types as numbers; a text is refused, even one that looks like a number."""
    import pandas

    def refuse(row: int) -> InputError:
        entry = column.iloc[row]
        kind = "text" if isinstance(entry, str) else type(entry).__name__
        return InputError(
            f"column {name!r} must hold numbers; {place(row)} holds the {kind} {str(entry)!r}; write a number there"
        )

    values = np.empty(len(column))
    first_text = None
    for row, entry in enumerate(column):
        if entry is None or entry is pandas.NA or entry is pandas.NaT:
            values[row] = np.nan
            continue
        if isinstance(entry, (bool, np.bool_)) or (isinstance(entry, str) and "_" in entry):
            raise refuse(row)
        try:
            values[row] = float(entry)
        except (TypeError, ValueError):
            raise refuse(row) from None
        if first_text is None and isinstance(entry, str):
            first_text = row
    # Only now: a text that is no number at all is the more telling one to name.
    if first_text is not None:
        raise refuse(first_text)
    return values


def frame_from_series(series: SnapshotSeries) -> pandas.DataFrame:
    """Return one row per particle, in order of time; see `SnapshotSeries.to_frame`."""
    import pandas

    columns: dict[str, np.ndarray] = {}

    def add(name: str, values: np.ndarray) -> None:
        if name in columns:
            raise InputError(
                f"the columns of a table must have different names; {name!r} would stand for two of them; "
                "rename that feature or coordinate"
            )
        columns[name] = values

    add(series.time_name, np.repeat(series.times, series.counts))
    positions = np.concatenate(series.clouds)
    for axis, name in enumerate(series.position_names):
        add(name, positions[:, axis])
    if not all(_is_counted(w, mass) for w, mass in zip(series.weights, series.masses)):
        add("weight", np.concatenate([w * mass for w, mass in zip(series.weights, series.masses)]))
    if series.labels is not None:
        add("label", np.concatenate(series.labels))
    for name, values in series.features.items():
        add(name, np.concatenate(values))
    return pandas.DataFrame(columns)


def _is_counted(weights: np.ndarray, mass: float) -> bool:
    """Tell whether every particle counts as one, as it does where no weights were given."""
    return mass == len(weights) and bool((weights == 1 / mass).all())
