"""Sample paths as a plain result."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    import pandas

__all__ = ["Paths"]


@dataclass(frozen=True)
class Paths:
    """Paths drawn from a bridge.

    Attributes
    ----------
    times : (T,) in the series' unit of time.
    positions : (count, T, d) in its unit of length.
    members : (count, K) row numbers of the particles that a path runs through, one a snapshot; -1 where a path that
        began later, or stopped earlier, does not pass.
    names : names of the coordinates.
    """

    times: np.ndarray
    positions: np.ndarray
    members: np.ndarray
    names: tuple[str, ...]

    def to_frame(self) -> pandas.DataFrame:
        """One row a path and time: path, time, and the coordinates by name."""
        import pandas

        count, steps, dimension = self.positions.shape
        columns = {"path": np.repeat(np.arange(count), steps), "time": np.tile(self.times, count)}
        flat = self.positions.reshape(count * steps, dimension)
        return pandas.DataFrame(columns | {name: flat[:, k] for k, name in enumerate(self.names)})

    def __repr__(self) -> str:
        count, steps, dimension = self.positions.shape
        return f"Paths({count} paths at {steps} times from {self.times[0]:g} to {self.times[-1]:g}, {dimension} dimension(s))"
