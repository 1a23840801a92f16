"""Values with units, such as "0.43 um^2/s", read into the units of a study. The library that knows units loads when needed."""

from __future__ import annotations

import re
from functools import cache
from typing import Any

from . import checks

__all__ = ["DIMENSIONS", "quantity", "read_quantity"]

DIMENSIONS = {
    "time": (0, 1),
    "length": (1, 0),
    "diffusion": (2, -1),
    "rate": (0, -1),
    "drift": (1, -1),
    "friction": (0, -1),
    "velocity_spread": (1, -1),
    "centre": (1, 0),
    "localisation": (1, 0),
    "lower": (1, 0),
    "upper": (1, 0),
}
"""Powers of length and time of every quantity that a study file may give with a unit."""


@cache
def _registry() -> Any:
    import pint

    return pint.UnitRegistry()


_NUMBER = re.compile(r"\s*([-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*(.*)", re.DOTALL)


def _parse(text: str, name: str) -> Any:
    import pint

    # A text that is written otherwise, such as µ or Å, means the same.
    plain = text.replace("µ", "u").replace("μ", "u").replace("²", "^2").replace("Å", "angstrom")
    match = _NUMBER.fullmatch(plain)
    try:
        if match is None:
            raise ValueError("it does not begin with a number")
        # Number and unit apart: 25 degC is a temperature, not 25 times a degree.
        return _registry().Quantity(float(match[1]), match[2])
    except (pint.UndefinedUnitError, pint.errors.DefinitionSyntaxError, ValueError, TypeError, AttributeError) as cause:
        raise checks.InputError(
            f"{name} has a unit that is not known; it is {text!r} ({cause}); write a number and a unit, such as "
            '"0.43 um^2/s" or "10 ps"'
        ) from None


def quantity(text: str, unit: str, name: str = "value") -> float:
    """The number of a quantity in another unit of the same kind.

    Raises
    ------
    InputError
        An unknown unit, or one of another kind.

    Examples
    --------
    >>> round(quantity("0.5 um", "m"), 12)
    5e-07
    """
    import pint

    found = _parse(text, name)
    goal = _parse(f"1 {unit}", name)
    try:
        if getattr(found, "dimensionless", False) and not goal.dimensionless:
            raise pint.DimensionalityError(found.units, goal.units)
        return float(found.to(goal.units).magnitude)
    except (pint.DimensionalityError, pint.OffsetUnitCalculusError):
        raise checks.InputError(
            f"the unit of {name} does not match its quantity; it is {text!r} where a unit like {unit} is needed; correct it"
        ) from None


def read_quantity(value: Any, name: str, time_unit: str, length_unit: str) -> Any:
    """A number as it is, or a text with a unit as a number in the units of the study; lists entry by entry.

    Parameters
    ----------
    value : number, text, or list of them.
    name : which quantity: a key of `DIMENSIONS`.
    time_unit, length_unit : units of the study; needed for texts only.

    Raises
    ------
    InputError
        A unit that does not match the quantity, or units of the study that are missing.

    Examples
    --------
    >>> read_quantity("430 nm^2/ms", "diffusion", "s", "µm")
    0.43
    """
    if isinstance(value, list):
        return [read_quantity(item, name, time_unit, length_unit) for item in value]
    if not isinstance(value, str):
        return value
    if name not in DIMENSIONS:
        raise checks.unknown_name("quantity", name, list(DIMENSIONS))
    powers = DIMENSIONS[name]
    for unit, power, key in ((length_unit, powers[0], "length"), (time_unit, powers[1], "time")):
        if power and not unit:
            raise checks.InputError(
                f"{name} has a unit but the study has none to convert it to; it is {value!r}; add {key} to [units]"
            )
    parts = [f"({unit})**({power})" for unit, power in ((length_unit, powers[0]), (time_unit, powers[1])) if power]
    return _rounded(quantity(value, " * ".join(parts), name))


def _rounded(number: float) -> float:
    """Drop what conversion factors add in the last two digits: 0.43 stays 0.43."""
    return float(f"{number:.14g}")
