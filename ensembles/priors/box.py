"""A box that particles cannot leave: periodic axes, reflecting walls, open axes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from .. import checks

__all__ = ["BOUNDARIES", "Box", "read_box"]

BOUNDARIES = ("periodic", "reflecting", "open")


@dataclass(frozen=True, eq=False, repr=False)
class Box:
    """A box with one boundary an axis.

    Parameters
    ----------
    lower, upper : (d,) arrays, in length. Those of an open axis do not matter.
    boundary : "periodic", "reflecting" or "open": one for all axes, or d of them.

    Raises
    ------
    InputError
        If the edges are not finite, an upper one is not above its lower one, or a boundary is unknown.

    Examples
    --------
    >>> box = Box([0.0, 0.0], [10.0, 4.0], boundary=["periodic", "reflecting"])
    >>> box.fold([[12.5, 5.0]]).tolist()
    [[2.5, 3.0]]
    """

    lower: np.ndarray
    upper: np.ndarray
    boundary: tuple[str, ...]

    def __init__(self, lower: Any, upper: Any, boundary: str | Sequence[str] = "periodic") -> None:
        low, high = (
            np.atleast_1d(checks.as_float_array(lower, "lower")),
            np.atleast_1d(checks.as_float_array(upper, "upper")),
        )
        for name, edge in (("lower", low), ("upper", high)):
            checks.require_finite(edge, name, "give the edges of the box in length")
        if low.ndim != 1 or low.shape != high.shape:
            raise checks.InputError(
                f"the edges of a box must be d numbers each; lower has shape {low.shape} and upper {high.shape}; "
                "give one number an axis for both"
            )
        kinds = (boundary,) * low.size if isinstance(boundary, str) else tuple(boundary)
        if len(kinds) != low.size:
            raise checks.InputError(
                f"a box needs one boundary an axis; there are {len(kinds)} for {low.size} axes; give one, or {low.size}"
            )
        for kind in kinds:
            if kind not in BOUNDARIES:
                raise checks.unknown_name("boundary", kind, list(BOUNDARIES))
        if (high <= low).any():
            axis = int(np.argmax(high <= low))
            raise checks.InputError(
                f"the upper edge of a box must lie above the lower one; on axis {axis} they are {low[axis]:g} and "
                f"{high[axis]:g}; correct them"
            )
        object.__setattr__(self, "lower", low)
        object.__setattr__(self, "upper", high)
        object.__setattr__(self, "boundary", kinds)

    @property
    def dimension(self) -> int:
        """Number of axes d."""
        return self.lower.size

    @property
    def lengths(self) -> np.ndarray:
        """Edge lengths (d,)."""
        return self.upper - self.lower

    @property
    def is_open(self) -> bool:
        """Whether no axis has a boundary."""
        return all(kind == "open" for kind in self.boundary)

    def fold(self, points: Any) -> np.ndarray:
        """Bring points (..., d) of unbounded space into the box: wrapped on periodic axes, mirrored at reflecting walls."""
        folded = np.array(points, dtype=float)
        for axis, kind in enumerate(self.boundary):
            low, length = self.lower[axis], self.lengths[axis]
            offset = folded[..., axis] - low
            if kind == "periodic":
                wrapped = low + np.mod(offset, length)
                # The remainder of a tiny negative number rounds up to the period: that is the lower edge.
                folded[..., axis] = np.where(wrapped < self.upper[axis], wrapped, low)
            elif kind == "reflecting":
                folded[..., axis] = low + length - np.abs(np.mod(offset, 2.0 * length) - length)
        return folded

    def shortest(self, displacements: Any) -> np.ndarray:
        """Displacements (..., d) to the nearest image on periodic axes, the others as they are."""
        found = np.array(displacements, dtype=float)
        for axis, kind in enumerate(self.boundary):
            if kind == "periodic":
                found[..., axis] -= self.lengths[axis] * np.round(found[..., axis] / self.lengths[axis])
        return found

    def require_inside(self, points: np.ndarray, place: str = "") -> None:
        """Refuse positions (n, d) outside the box, naming the first one."""
        if points.shape[1] != self.dimension:
            raise checks.InputError(
                f"the box has the wrong dimension; it has {self.dimension} axes and the positions {points.shape[1]}; "
                "give one edge and boundary for every position column"
            )
        closed = np.array([kind != "open" for kind in self.boundary])
        outside = closed & ((points < self.lower) | (points > self.upper))
        if outside.any():
            row, axis = (int(i) for i in np.argwhere(outside)[0])
            raise checks.InputError(
                f"positions must lie in the box; particle {row} has {points[row, axis]:g} on axis {axis}{place}, outside "
                f"{self.lower[axis]:g} to {self.upper[axis]:g} ({int(outside.any(axis=1).sum())} such particle(s)); "
                "wrap the positions (Box.fold), or correct the edges"
            )

    def parameters(self) -> dict[str, Any]:
        """The constructor's arguments as plain numbers and lists."""
        return {"lower": self.lower.tolist(), "upper": self.upper.tolist(), "boundary": list(self.boundary)}

    def __repr__(self) -> str:
        return f"Box({self.lower.tolist()}, {self.upper.tolist()}, boundary={list(self.boundary)})"


def read_box(value: Any) -> Box | None:
    """A box, none, or the box of a mapping of its constructor's arguments."""
    if value is None or isinstance(value, Box):
        return value
    if isinstance(value, Mapping):
        unknown = [name for name in value if name not in ("lower", "upper", "boundary")]
        if unknown:
            raise checks.unknown_name("key of a box", unknown[0], ["lower", "upper", "boundary"])
        if "lower" not in value or "upper" not in value:
            raise checks.InputError(
                f"a box needs both edges; it has {', '.join(value) or 'none'}; give lower and upper"
            )
        return Box(**value)
    raise checks.InputError(
        f"box must be a Box; it is {type(value).__name__}; use ensembles.Box(lower, upper, boundary)"
    )
