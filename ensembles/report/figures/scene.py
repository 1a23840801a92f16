"""What several pictures share: the plane that is drawn, its window, the times, the gaps shown."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from ..wording import axis_name, intermediate_times
from .style import plain

if TYPE_CHECKING:
    from ...bridges.bridge import Bridge
    from ...bridges.paths import Paths

__all__ = ["Plane", "Scene"]

_MOST_GAPS = 6
_MOST_POINTS = 2000
_WIDEST = 6.0  # ratio of the sides of a window up to which both axes have one scale


@dataclass(frozen=True, eq=False)
class Plane:
    """Two directions of space, orthonormal axes (d, 2) through `centre` (d,); up to two dimensions space itself."""

    centre: np.ndarray
    axes: np.ndarray
    names: tuple[str, ...]

    def project(self, points: np.ndarray) -> np.ndarray:
        """Coordinates (n, 2) (or (n, 1) on a line) of points (n, d)."""
        return (points - self.centre) @ self.axes

    def turn(self, vectors: np.ndarray) -> np.ndarray:
        """The part of vectors (n, d) in the plane, (n, 2)."""
        return vectors @ self.axes


@dataclass(frozen=True, eq=False)
class Scene:
    """A bridge, some of its paths, and how they are shown."""

    bridge: Bridge
    paths: Paths

    @cached_property
    def times(self) -> np.ndarray:
        """Five times between the snapshots (more gaps than that: one in some of them)."""
        return intermediate_times(self.bridge.series.times, 5)

    @cached_property
    def gaps(self) -> list[int]:
        """The gaps that have a panel: all, or six spread evenly."""
        count = len(self.bridge.gaps)
        return sorted(set(np.linspace(0, count - 1, min(count, _MOST_GAPS)).round().astype(int).tolist()))

    @property
    def gaps_left_out(self) -> str:
        """A sentence about gaps without a panel, or nothing."""
        count = len(self.bridge.gaps)
        return f" {len(self.gaps)} of the {count} gaps are shown." if len(self.gaps) < count else ""

    @cached_property
    def plane(self) -> Plane:
        """Space itself, or above two dimensions the two principal axes of all snapshots, each weighing as much."""
        series = self.bridge.series
        dimension, unit = series.dimension, series.length_unit
        if dimension <= 2:
            names = tuple(plain(axis_name(name, unit)) for name in series.position_names)
            return Plane(np.zeros(dimension), np.eye(dimension), names)
        centre = np.mean([weights @ cloud for weights, cloud in zip(series.weights, series.clouds)], axis=0)
        covariance = np.mean(
            [
                ((cloud - centre).T * weights) @ (cloud - centre)
                for weights, cloud in zip(series.weights, series.clouds)
            ],
            axis=0,
        )
        values, vectors = np.linalg.eigh(covariance)
        axes = vectors[:, [-1, -2]]
        axes = axes * np.sign(axes[np.abs(axes).argmax(axis=0), [0, 1]])
        shares = 100.0 * values[[-1, -2]] / values.sum()
        names = tuple(
            plain(axis_name(f"principal axis {k + 1}, {share:.0f} % of variance", unit))
            for k, share in enumerate(shares)
        )
        return Plane(centre, axes, names)

    @property
    def projection_sentence(self) -> str:
        """Where the picture is a projection, what of; and whether its axes differ in scale."""
        if self.bridge.series.dimension == 1:
            return ""
        scales = "" if self.one_scale else " The two axes have different scales."
        if self.bridge.series.dimension == 2:
            return scales
        return (
            f" Positions in {self.bridge.series.dimension} coordinates are projected onto the first two principal axes "
            f"of all snapshots together.{scales}"
        )

    @cached_property
    def window(self) -> np.ndarray:
        """Lower and upper ends (2, 2), on a line (2, 1), of what is drawn: all snapshots, and draws at mid-gap."""
        series = self.bridge.series
        middles = 0.5 * (series.times[:-1] + series.times[1:])
        # A seed of its own: the window of a bridge is always the same. 500 draws of a Gaussian reach about 3 spreads.
        corners = [self.plane.project(self.bridge.sample(t, 500, rng=0)) for t in middles]
        corners += [self.plane.project(cloud) for cloud in series.clouds]
        points = np.concatenate(corners)
        low, high = points.min(axis=0), points.max(axis=0)
        margin = 0.07 * (high - low)
        return np.array([low - margin, high + margin])

    @property
    def sides(self) -> np.ndarray:
        """Width and height of the window, in length."""
        return self.window[1] - self.window[0]

    @property
    def one_scale(self) -> bool:
        """Whether a length looks the same along both axes; not so in windows longer than six times their width."""
        return bool(self.sides.max() <= _WIDEST * self.sides.min())

    @property
    def ratio(self) -> float:
        """Height over width of a panel that shows the window."""
        return float(self.sides[1] / self.sides[0]) if self.one_scale else 0.5

    def ticks(self, axis: int, count: int) -> np.ndarray:
        """`count` even positions across the window along one axis."""
        return np.linspace(self.window[0, axis], self.window[1, axis], count)

    def frame(self, ax: Axes) -> None:
        """Set the window of a panel in space."""
        ax.set_xlim(*self.window[:, 0])
        ax.set_ylim(*self.window[:, 1])
        if self.one_scale:
            ax.set_aspect("equal")

    def name_axes(self, figure: Figure) -> None:
        """Name the axes of a figure of several panels in space."""
        figure.supxlabel(self.plane.names[0])
        figure.supylabel(self.plane.names[1])

    def some(
        self, cloud: np.ndarray, weights: np.ndarray, rng: np.random.Generator, most: int = _MOST_POINTS
    ) -> np.ndarray:
        """Row numbers of the points of a cloud that are drawn: those with weight, or `most` of them at random."""
        rows = np.flatnonzero(weights > 0)
        return rows if rows.size <= most else np.sort(rng.choice(rows, most, replace=False))
