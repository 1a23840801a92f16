"""The profile of held-out scores over a grid of priors, for given weights of the particles, with warm starts."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from ..bridges.bridge import Bridge
from ..bridges.fit import fit_bridge
from .parameters import with_parameters

if TYPE_CHECKING:
    from ..priors.base import LinearGaussianPrior
    from ..snapshots.series import SnapshotSeries

__all__ = ["Profile", "climb", "refined_maximum"]

Cell = tuple[int, ...]


class Profile:
    """Bridges over every left-out snapshot at every cell of a grid, made when they are asked for and kept."""

    def __init__(
        self,
        series: SnapshotSeries,
        prior: LinearGaussianPrior,
        grid: dict[str, np.ndarray],
        *,
        tolerance: float,
        warm: Profile | None = None,
    ) -> None:
        self.series, self.prior, self.grid, self.tolerance, self.warm = series, prior, grid, tolerance, warm
        self._bridges: dict[tuple[Cell, int], Bridge] = {}
        self._scores: dict[Cell, float] = {}
        self._last: dict[int, Bridge] = {}

    @property
    def shape(self) -> Cell:
        """Levels of each parameter."""
        return tuple(values.size for values in self.grid.values())

    @property
    def interior(self) -> range:
        """Numbers of the snapshots that are left out, one after another."""
        return range(1, len(self.series) - 1)

    def bridge(self, cell: Cell, k: int) -> Bridge:
        """The bridge over the neighbours of snapshot k under the prior of a cell."""
        if (cell, k) not in self._bridges:
            values = {name: float(self.grid[name][i]) for name, i in zip(self.grid, cell)}
            start = self.warm.bridge(cell, k) if self.warm is not None else self._last.get(k)
            self._bridges[cell, k] = fit_bridge(
                self.series.subset([k - 1, k + 1]),
                with_parameters(self.prior, values),
                tolerance=self.tolerance,
                start=start,
            )
        self._last[k] = self._bridges[cell, k]
        return self._bridges[cell, k]

    def log_densities(self, cell: Cell, k: int) -> np.ndarray:
        """log ρ (n_k,) at the particles of snapshot k, which the bridge has not seen."""
        return self.bridge(cell, k).log_density(float(self.series.times[k]), self.series.clouds[k])

    def score(self, cell: Cell) -> float:
        """Mean log-density of the held-out particles; each snapshot counts by its number of particles."""
        if cell not in self._scores:
            totals = [
                len(self.series.clouds[k]) * float(self.series.weights[k] @ self.log_densities(cell, k))
                for k in self.interior
            ]
            self._scores[cell] = sum(totals) / sum(len(self.series.clouds[k]) for k in self.interior)
        return self._scores[cell]

    def reweighted(self, weights: tuple[np.ndarray, ...], tolerance: float) -> Profile:
        """The same with other weights of all particles, started from the bridges of this one."""
        return Profile(
            replace(self.series, weights=weights), self.prior, self.grid, tolerance=tolerance, warm=self
        )


def climb(score: Callable[[Cell], float], start: Cell, shape: Cell) -> Cell:
    """Walk from cell to best neighbouring cell until none is better: the maximum of a profile with a single peak."""
    best = start
    while True:
        around = _neighbours(best, shape)
        top = max(around, key=score)
        if score(top) <= score(best):
            return best
        best = top


def _neighbours(cell: Cell, shape: Cell) -> list[Cell]:
    steps = np.array(np.meshgrid(*[(-1, 0, 1)] * len(shape), indexing="ij")).reshape(len(shape), -1).T
    cells = [tuple(int(i) for i in np.add(cell, step)) for step in steps if np.any(step)]
    return [c for c in cells if all(0 <= i < n for i, n in zip(c, shape))]


def refined_maximum(score: Callable[[Cell], float], best: Cell, axes: list[np.ndarray]) -> np.ndarray:
    """Maximum of the quadratic through the scores of the cells around the best one, in the coordinates `axes`.

    Along an axis on whose edge the best cell lies there is nothing to interpolate: it keeps its own value. The result
    stays within one level of the best cell.
    """
    point = np.array([axis[i] for axis, i in zip(axes, best)])
    inner = [k for k, axis in enumerate(axes) if 0 < best[k] < axis.size - 1]
    if not inner:
        return point
    steps = np.array(np.meshgrid(*[(-1, 0, 1)] * len(inner), indexing="ij")).reshape(len(inner), -1).T
    rows, values = [], []
    for step in steps:
        cell = list(best)
        for k, move in zip(inner, step):
            cell[k] += int(move)
        z = np.array([axes[k][cell[k]] - point[k] for k in inner])
        rows.append(np.concatenate([[1.0], z, [z[i] * z[j] for i in range(len(z)) for j in range(i, len(z))]]))
        values.append(score(tuple(cell)))
    finite = np.isfinite(values)
    if not finite.all():
        return point
    found = np.linalg.lstsq(np.array(rows), np.array(values), rcond=None)[0]
    size = len(inner)
    slope, hessian, at = found[1 : size + 1], np.zeros((size, size)), size + 1
    for i in range(size):
        for j in range(i, size):
            hessian[i, j] += found[at]
            hessian[j, i] += found[at]
            at += 1
    if np.linalg.eigvalsh(hessian)[-1] >= 0.0:
        return point
    move = np.linalg.solve(hessian, -slope)
    for position, k in enumerate(inner):
        low, high = axes[k][best[k] - 1] - point[k], axes[k][best[k] + 1] - point[k]
        point[k] += float(np.clip(move[position], low, high))
    return point
