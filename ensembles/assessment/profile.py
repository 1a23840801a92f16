"""The profile of held-out scores over a grid of priors, for given weights of the particles, with warm starts."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from ..bridges.bridge import Bridge
from ..bridges.fit import fit_bridge
from .parameters import with_parameters
from .predictions import population_bridge

if TYPE_CHECKING:
    from ..priors.base import LinearGaussianPrior
    from ..snapshots.series import SnapshotSeries

__all__ = ["Cell", "Profile", "Quadratic", "climb", "quadratic_around"]

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

    def population(self, cell: Cell, k: int) -> Bridge:
        """That bridge as it foretells the population at the time of snapshot k; another one where particles grow."""
        return population_bridge(self.bridge(cell, k), float(self.series.times[k]))

    def log_densities(self, cell: Cell, k: int) -> np.ndarray:
        """log ρ (n_k,) at the particles of snapshot k, which the bridge has not seen."""
        return self.population(cell, k).log_density(float(self.series.times[k]), self.series.clouds[k])

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
        return Profile(replace(self.series, weights=weights), self.prior, self.grid, tolerance=tolerance, warm=self)


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
    steps = product((-1, 0, 1), repeat=len(shape))
    cells = [tuple(i + move for i, move in zip(cell, step)) for step in steps if any(step)]
    return [c for c in cells if all(0 <= i < n for i, n in zip(c, shape))]


@dataclass(frozen=True, eq=False)
class Quadratic:
    """constant + slope·z + ½ zᵀ H z around a cell, z along those axes on whose edge the cell does not lie.

    Attributes
    ----------
    origin : (p,) coordinates of the cell.
    inner : numbers of the axes that z stands for.
    reach : (inner, 2) lower and upper limits of z, one level to each side.
    """

    origin: np.ndarray
    inner: tuple[int, ...]
    reach: np.ndarray
    constant: float
    slope: np.ndarray
    hessian: np.ndarray

    def at(self, point: np.ndarray) -> float:
        """Value at a point in the coordinates of the axes."""
        z = (point - self.origin)[list(self.inner)]
        return float(self.constant + self.slope @ z + 0.5 * z @ self.hessian @ z)

    def maximum(self) -> np.ndarray:
        """The maximum within one level of the cell; the cell itself where the quadratic has none."""
        point = self.origin.copy()
        if self.inner and np.linalg.eigvalsh(self.hessian)[-1] < 0.0:
            move = np.linalg.solve(self.hessian, -self.slope)
            point[list(self.inner)] += np.clip(move, self.reach[:, 0], self.reach[:, 1])
        return point


def quadratic_around(score: Callable[[Cell], float], cell: Cell, axes: list[np.ndarray]) -> Quadratic:
    """Least squares through the scores of a cell and all its neighbours (exact with one parameter)."""
    origin = np.array([axis[i] for axis, i in zip(axes, cell)])
    inner = tuple(k for k, axis in enumerate(axes) if 0 < cell[k] < axis.size - 1)
    size = len(inner)
    reach = np.array([[axes[k][cell[k] + side] - origin[k] for side in (-1, 1)] for k in inner]).reshape(size, 2)
    if not inner:
        return Quadratic(origin, inner, reach, score(cell), np.zeros(0), np.zeros((0, 0)))
    pairs = [(i, j) for i in range(size) for j in range(i, size)]
    rows, values = [], []
    for step in product((-1, 0, 1), repeat=size):
        moved = list(cell)
        for k, move in zip(inner, step):
            moved[k] += move
        z = np.array([axes[k][moved[k]] - origin[k] for k in inner])
        rows.append(np.concatenate([[1.0], z, [z[i] * z[j] for i, j in pairs]]))
        values.append(score(tuple(moved)))
    found = np.linalg.lstsq(np.array(rows), np.array(values), rcond=None)[0]
    hessian = np.zeros((size, size))
    for (i, j), value in zip(pairs, found[size + 1 :]):
        hessian[i, j] += value
        hessian[j, i] += value
    return Quadratic(origin, inner, reach, float(found[0]), found[1 : size + 1], hessian)
