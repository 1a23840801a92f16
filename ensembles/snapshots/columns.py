"""Reading the arrays of a series: one value or one position per particle, one array per snapshot."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from .. import checks
from ..checks import InputError

__all__ = [
    "column_arrays",
    "default_position_names",
    "duplicate_count",
    "feature_array",
    "label_array",
    "position_clouds",
    "read_names",
    "read_units",
    "require_length",
    "snapshot_places",
    "text_array",
    "time_text",
    "too_few_snapshots",
    "weight_arrays",
]


def time_text(time: float) -> str:
    """Return a time in as few digits as tell it apart."""
    short = f"{time:g}"
    return short if float(short) == time else repr(float(time))


def snapshot_places(times: np.ndarray) -> list[str]:
    """Return ' in snapshot t = ...' for every time, for the messages."""
    return [f" in snapshot t = {time_text(t)}" for t in times]


def too_few_snapshots(found: str) -> InputError:
    """Build the error for a series of fewer than two snapshots."""
    return InputError(
        f"a series needs at least two snapshots; {found}; add another measured time or check the time column"
    )


def default_position_names(dimension: int) -> tuple[str, ...]:
    """Return x, y, z, or x1, x2, ... above three dimensions."""
    if dimension <= 3:
        return ("x", "y", "z")[:dimension]
    return tuple(f"x{axis + 1}" for axis in range(dimension))


def read_names(names: Sequence[str] | None, dimension: int) -> tuple[str, ...]:
    """Return one name per coordinate."""
    if names is None:
        return default_position_names(dimension)
    given = (names,) if isinstance(names, str) else tuple(map(str, names))
    if len(given) != dimension or len(set(given)) != dimension:
        raise InputError(
            f"position_names must name every coordinate once; {len(given)} name(s) {list(given)} for {dimension} "
            "coordinate(s); give one name a coordinate"
        )
    return given


def read_units(units: Mapping[str, str] | None) -> tuple[str, str]:
    """Return the units of time and length from {"time": ..., "length": ...}; '' where none is given."""
    if units is not None and not isinstance(units, Mapping):
        raise InputError(f'units must be a mapping; it is {units!r}; write {{"time": "s", "length": "um"}}')
    for key, value in (units or {}).items():
        if key not in ("time", "length"):
            raise checks.unknown_name("unit", key, ["time", "length"])
        if not isinstance(value, str):
            raise InputError(f"a unit must be a text; units[{key!r}] = {value!r}; write its symbol in quotes")
    return (units or {}).get("time", ""), (units or {}).get("length", "")


def position_clouds(clouds: Sequence[Any], places: list[str]) -> tuple[np.ndarray, ...]:
    """Return clouds as (n_k, d) arrays of finite numbers with one d."""
    tables = tuple(_cloud(cloud, place) for cloud, place in zip(clouds, places, strict=True))
    for table, place in zip(tables, places, strict=True):
        if table.shape[1] != tables[0].shape[1]:
            raise InputError(
                f"all snapshots must have one dimension; there are {table.shape[1]} coordinate(s){place} and "
                f"{tables[0].shape[1]}{places[0]}; use the same coordinates everywhere"
            )
    return tables


def _cloud(value: Any, place: str) -> np.ndarray:
    array = checks.as_float_array(value, f"positions{place}")
    if array.ndim == 1:
        array = array[:, None]
    if array.ndim != 2 or 0 in array.shape:
        raise InputError(
            f"positions must be a table of n particles by d coordinates; the shape is {array.shape}{place}; "
            "give at least one particle and one coordinate, or leave the snapshot out"
        )
    bad = ~np.isfinite(array)
    if bad.any():
        row, axis = map(int, np.argwhere(bad)[0])
        raise InputError(
            f"positions must be finite; row {row}, coordinate {axis} (counted from 0) is {array[row, axis]}{place}; "
            "drop that particle or correct it"
        )
    return array


def weight_arrays(
    weights: Sequence[Any] | None, counts: Sequence[int], places: list[str]
) -> tuple[tuple[np.ndarray, ...], np.ndarray]:
    """Return weights of sum 1 for every snapshot, and the sums as they were given (the counts where none were)."""
    given = [None] * len(counts) if weights is None else weights
    require_length(given, len(counts), "weights")
    normalised, masses = [], []
    for values, count, place in zip(given, counts, places, strict=True):
        array = np.ones(count) if values is None else checks.weights(values, count, place=place)
        # An overflow of the sum is refused just below, with its place: a warning would say less.
        with np.errstate(over="ignore"):
            mass = float(array.sum())
        if not np.isfinite(mass):
            raise InputError(
                f"weights must have a finite sum; the largest is {array.max():g}{place}; divide them by it"
            )
        normalised.append(array / mass)
        masses.append(mass)
    return tuple(normalised), np.array(masses)


def column_arrays(
    values: Sequence[Any],
    counts: Sequence[int],
    places: list[str],
    name: str,
    convert: Callable[[Any, str, str], np.ndarray],
) -> tuple[np.ndarray, ...]:
    """Return one converted array per snapshot, of one value per particle."""
    require_length(values, len(counts), name)
    arrays = []
    for column, count, place in zip(values, counts, places, strict=True):
        array = convert(column, name, place)
        if array.shape != (count,):
            raise InputError(
                f"{name} must be one value a particle; the shape is {array.shape} for {count} particle(s){place}; "
                "give as many values as particles"
            )
        arrays.append(array)
    return tuple(arrays)


def require_length(values: Sequence[Any], count: int, name: str) -> None:
    """Refuse a list that does not have one entry per snapshot."""
    given = len(values) if hasattr(values, "__len__") and not isinstance(values, str) else None
    if given != count:
        found = f"it is {values!r}" if given is None else f"{given} entries for {count} snapshots"
        raise InputError(f"{name} must be one list a snapshot; {found}; give one list for every snapshot")


def text_array(values: Any) -> np.ndarray:
    """Return an array of strings; what is missing (None, NaN, ...) becomes the empty string."""
    if isinstance(values, np.ndarray) and values.dtype.kind == "U":
        return values.copy()
    # By way of objects: from a mixed list numpy itself would make the label "nan" of a missing one.
    entries = np.array(values, dtype=object)
    texts = ["" if _is_missing(entry) else str(entry) for entry in entries.ravel()]
    return np.array(texts, dtype=np.str_).reshape(entries.shape)


def _is_missing(entry: Any) -> bool:
    # NaN and NaT are the values that differ from themselves; pandas.NA has no truth value, so it goes by its name.
    return (
        entry is None
        or type(entry).__name__ in ("NAType", "NaTType")
        or (isinstance(entry, (float, np.floating)) and entry != entry)
    )


def label_array(values: Any, name: str, place: str) -> np.ndarray:
    """Return labels as strings; a missing label is the empty string."""
    if isinstance(values, str) or not hasattr(values, "__len__"):
        raise InputError(f"{name} must be a list; it is {values!r}{place}; give one name a particle")
    return text_array(values)


def feature_array(values: Any, name: str, place: str) -> np.ndarray:
    """Return a feature: numbers and booleans keep their type, everything else becomes strings."""
    if isinstance(values, str) or not hasattr(values, "__len__"):
        raise InputError(f"{name} must be a list; it is {values!r}{place}; give one value a particle")
    array = np.array(values)
    return array if array.dtype.kind in "biuf" else text_array(values)


def duplicate_count(positions: np.ndarray) -> int:
    """Return the number of rows of an (n, d) array whose position an earlier row already holds.

    Examples
    --------
    >>> duplicate_count(np.array([[1.0, 2.0], [0.0, 0.0], [1.0, 2.0], [1.0, 2.0]]))
    2
    """
    ordered = positions[np.lexsort(positions.T)]
    return int((ordered[1:] == ordered[:-1]).all(axis=1).sum())
