"""Times written as words: "day 2", "48h", "E8.5"."""

from __future__ import annotations

import re

import numpy as np

from ..checks import InputError

__all__ = ["stage_times"]

_WORDS = {
    "d": ("d", "day", "days", "dpi", "dpf", "e"),
    "h": ("h", "hr", "hrs", "hour", "hours", "hpf", "hpi"),
    "min": ("min", "mins", "minute", "minutes"),
    "s": ("s", "sec", "second", "seconds"),
    "wk": ("w", "wk", "week", "weeks"),
}
_UNIT = {word: unit for unit, words in _WORDS.items() for word in words}
_STAGE = re.compile(r"^\s*(?P<before>[A-Za-z]+)?[\s_\-]*(?P<number>-?\d+(?:\.\d+)?)[\s_\-]*(?P<after>[A-Za-z]+)?\s*$")


def stage_times(values: np.ndarray, name: str) -> tuple[np.ndarray, str]:
    """Numbers (n,) and their unit ('' where none is written) from a column of numbers or of words such as "day 2".

    Examples
    --------
    >>> stage_times(np.array(["day 0", "day 2", "D7"], dtype=object), "stage")
    (array([0., 2., 7.]), 'd')
    """
    if values.dtype.kind in "iuf":
        numbers = values.astype(float)
        if not np.isfinite(numbers).all():
            i = int(np.argmin(np.isfinite(numbers)))
            raise InputError(
                f"times must be finite; column {name!r}, cell {i} is {numbers[i]}; correct or drop that cell"
            )
        return numbers, ""
    texts = np.array([str(value) for value in values])
    found: dict[str, tuple[float, str]] = {}
    for text in np.unique(texts):
        match = _STAGE.match(text)
        words = [] if match is None else [word for word in (match["before"], match["after"]) if word]
        if match is None or len(words) > 1 or any(word.lower() not in _UNIT for word in words):
            cell = int(np.argmax(texts == text))
            raise InputError(
                f"times must be numbers, or a number with a unit; column {name!r}, cell {cell} holds {str(text)!r}; make a "
                "column of numbers, or write values such as 'day 2' or '48h'"
            )
        found[str(text)] = float(match["number"]), _UNIT[words[0].lower()] if words else ""
    units = {unit: text for text, (_, unit) in found.items()}
    if len(units) > 1:
        raise InputError(
            f"times must have one unit; column {name!r} holds {' and '.join(map(repr, units.values()))}; convert them to one"
        )
    return np.array([found[str(text)][0] for text in texts]), next(iter(units))
