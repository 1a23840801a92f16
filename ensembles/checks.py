"""Every check of an input, and the errors of the package.

An error message has three parts, joined by semicolons: what is wrong, the offending value and where it stands, what to
do about it. Nothing here repairs an input: a value is either accepted as it is or refused.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np

__all__ = [
    "ComputationError",
    "InputError",
    "nearest_name",
    "positive_number",
    "require_finite",
    "spd_matrix",
    "times",
    "points",
    "unknown_name",
    "weights",
    "whole_number",
]


class InputError(ValueError):
    """The input or the usage is wrong. The command line ends with exit status 2."""


class ComputationError(RuntimeError):
    """A computation did not give a result that can be trusted. The command line ends with exit status 1."""


def _first_bad(bad: np.ndarray) -> tuple[int, ...]:
    return tuple(int(i) for i in np.argwhere(bad)[0])


def _place(name: str, index: tuple[int, ...]) -> str:
    return f"{name}[{', '.join(map(str, index))}]" if index else name


def as_float_array(value: Any, name: str) -> np.ndarray:
    """Return `value` as a float64 array that the caller may not share with it."""
    try:
        array = np.array(value, dtype=float, order="C")
    except (TypeError, ValueError) as cause:
        raise InputError(
            f"{name} must be numbers; it holds {type(value).__name__} that cannot be read as numbers ({cause}); "
            "give a rectangular list or array of numbers"
        ) from None
    return array


def require_finite(array: np.ndarray, name: str, remedy: str = "remove or correct it", *, place: str = "") -> None:
    """Refuse NaN and infinite values, naming the first one; `place` (such as " in snapshot t = 3") says where."""
    bad = ~np.isfinite(array)
    if bad.any():
        index = _first_bad(bad)
        raise InputError(
            f"{name} must be finite; {_place(name, index)} = {array[index]}{place} ({int(bad.sum())} such value(s)); "
            f"{remedy}"
        )


def points(value: Any, name: str, dimension: int | None = None) -> np.ndarray:
    """Return an (n, d) float64 array of finite positions; a one-dimensional list is read as n points on a line."""
    array = as_float_array(value, name)
    if array.ndim == 1:
        array = array[:, None]
    if array.ndim != 2:
        raise InputError(f"{name} must be a table of n points by d coordinates; its shape is {array.shape}; reshape it")
    if array.shape[0] == 0 or array.shape[1] == 0:
        raise InputError(f"{name} is empty; its shape is {array.shape}; give at least one point and one coordinate")
    if dimension is not None and array.shape[1] != dimension:
        raise InputError(
            f"{name} has the wrong dimension; it has {array.shape[1]} coordinate(s) where {dimension} are expected; "
            "use the same position columns everywhere"
        )
    require_finite(array, name)
    return array


def times(value: Any, name: str = "times", minimum: int = 1) -> np.ndarray:
    """Return strictly increasing finite times, shape (K,)."""
    array = as_float_array(value, name)
    if array.ndim != 1:
        raise InputError(f"{name} must be a list of numbers; its shape is {array.shape}; give one number a time")
    require_finite(array, name)
    if array.size < minimum:
        raise InputError(f"{name} holds too few times; {array.size} where {minimum} are needed; add the missing ones")
    steps = np.diff(array)
    if (steps <= 0).any():
        k = int(np.argmax(steps <= 0))
        raise InputError(
            f"{name} must increase; {name}[{k}] = {array[k]:g} is followed by {name}[{k + 1}] = {array[k + 1]:g}; "
            "sort them and give each time once"
        )
    return array


def weights(value: Any, count: int, name: str = "weights", *, place: str = "") -> np.ndarray:
    """Return non-negative weights of one cloud, shape (count,), as given (not normalised)."""
    array = as_float_array(value, name)
    if array.shape != (count,):
        raise InputError(
            f"{name} must be one number a particle; its shape is {array.shape} for {count} particle(s){place}; "
            "give as many weights as particles"
        )
    require_finite(array, name, place=place)
    if (array < 0).any():
        i = int(np.argmax(array < 0))
        raise InputError(
            f"weights must be non-negative; {name}[{i}] = {array[i]:g}{place}; drop that particle or set it to 0"
        )
    if not array.any():
        raise InputError(
            f"weights must not all be zero; the {count} value(s) of {name}{place} are 0; "
            "give at least one a positive weight"
        )
    return array


def positive_number(value: Any, name: str, remedy: str = "give a positive number") -> float:
    """Return a finite number above zero."""
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise InputError(f"{name} must be a number; it is {value!r}; {remedy}") from None
    if not np.isfinite(number) or number <= 0:
        raise InputError(f"{name} must be positive and finite; it is {number:g}; {remedy}")
    return number


def whole_number(value: Any, name: str, minimum: int = 1) -> int:
    """Return a whole number of at least `minimum`."""
    if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or value < minimum:
        raise InputError(f"{name} must be a whole number of at least {minimum}; it is {value!r}; correct it")
    return int(value)


def spd_matrix(value: Any, name: str) -> np.ndarray:
    """Return a symmetric positive definite matrix, from a square table."""
    array = as_float_array(value, name)
    if array.ndim != 2 or array.shape[0] != array.shape[1]:
        raise InputError(f"{name} must be a square matrix; its shape is {array.shape}; give d rows of d numbers")
    require_finite(array, name)
    scale = np.abs(array).max()
    if not np.allclose(array, array.T, rtol=1e-10, atol=1e-12 * scale):
        i, j = np.unravel_index(np.argmax(np.abs(array - array.T)), array.shape)
        raise InputError(
            f"{name} must be symmetric; {name}[{i}, {j}] = {array[i, j]:g} but {name}[{j}, {i}] = {array[j, i]:g}; "
            "make the two equal"
        )
    smallest = float(np.linalg.eigvalsh(array)[0])
    if smallest <= 1e-14 * scale:
        raise InputError(
            f"{name} must be positive definite; its smallest eigenvalue is {smallest:.6g}; "
            "every direction needs some noise: give positive variances and correlations below 1"
        )
    return 0.5 * (array + array.T)


def nearest_name(name: str, known: Iterable[str]) -> str:
    """Return ' (did you mean ...?)' for the closest known name, or an empty string."""
    close = difflib.get_close_matches(str(name), [str(k) for k in known], n=1, cutoff=0.5)
    return f" (did you mean {close[0]!r}?)" if close else ""


def unknown_name(kind: str, name: str, known: Sequence[str]) -> InputError:
    """Build the error for a name that is not one of `known`."""
    listed = ", ".join(map(str, known))
    return InputError(f"unknown {kind}; {name!r}{nearest_name(name, known)}; use one of: {listed}")


def generator(rng: Any) -> np.random.Generator:
    """Return a numpy Generator from a seed or a Generator; None is refused so that every result can be repeated."""
    if isinstance(rng, np.random.Generator):
        return rng
    if rng is None or isinstance(rng, bool):
        raise InputError(f"rng must be a whole number or a numpy Generator; it is {rng!r}; give a seed such as rng=0")
    if isinstance(rng, (int, np.integer)) and rng >= 0:
        return np.random.default_rng(int(rng))
    if isinstance(rng, np.random.SeedSequence):
        return np.random.default_rng(rng)
    raise InputError(f"rng must be a whole number or a numpy Generator; it is {rng!r}; give a seed such as rng=0")
