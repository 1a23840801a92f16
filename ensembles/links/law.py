"""The density of one particle's displacement over one gap, as log-weights of possible links."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from ..kernels.images import OPEN, PERIODIC, AxisWalls, log_box_kernel
from ..priors.base import LinearGaussianPrior, Transition

__all__ = ["LinkLaw", "link_law", "wrapped_tree"]

_CHUNK = 4_000_000


@dataclass(frozen=True, eq=False)
class LinkLaw:
    """p(y_j | x_i) between two whitened clouds u (n, d) and v (m, d), on axes that may have walls.

    log p = log_normaliser + log k(u_i, v_j), k the unit Gaussian kernel or, in a box, its sum over images.
    """

    sources: np.ndarray
    targets: np.ndarray
    log_normaliser: float
    walls: tuple[AxisWalls, ...] | None

    @property
    def shape(self) -> tuple[int, int]:
        """Particles in the earlier and the later frame."""
        return self.sources.shape[0], self.targets.shape[0]

    def log_weights(self, rows: np.ndarray, columns: np.ndarray) -> np.ndarray:
        """log p(y_j | x_i) of matching rows and columns (E,), in nats per length^d."""
        out = np.empty(rows.size)
        for start in range(0, rows.size, _CHUNK):
            part = slice(start, start + _CHUNK)
            u, v = self.sources[rows[part]], self.targets[columns[part]]
            if self.walls is None:
                difference = v - u
                out[part] = -0.5 * np.einsum("ij,ij->i", difference, difference)
            else:
                out[part] = log_box_kernel(self.walls, u, v)
        return out + self.log_normaliser

    def trees(self) -> tuple[cKDTree, cKDTree]:
        """Search trees of both clouds, by the distance to the nearest image."""
        periods = np.zeros(self.sources.shape[1])
        if self.walls is not None:
            periods = np.array([wall.length if wall.boundary == PERIODIC else 0.0 for wall in self.walls])
        return wrapped_tree(self.sources, periods), wrapped_tree(self.targets, periods)

    def moved_cost(self) -> np.ndarray:
        """½ squared distance to the nearest target for every source, in units of the noise (n,)."""
        trees = self.trees()
        return 0.5 * trees[1].query(trees[0].data)[0] ** 2


def wrapped_tree(points: np.ndarray, periods: np.ndarray) -> cKDTree:
    """Search tree of points (n, d) by the distance to the nearest image; a period of 0 is an axis without images."""
    wrapped = periods > 0.0
    if not wrapped.any():
        return cKDTree(points)
    points = points.copy()
    points[:, wrapped] = np.mod(points[:, wrapped], periods[wrapped])
    # The remainder can round up to the period itself, which the tree refuses.
    points[:, wrapped] = np.where(points[:, wrapped] >= periods[wrapped], 0.0, points[:, wrapped])
    return cKDTree(points, boxsize=periods)


def link_law(
    prior: LinearGaussianPrior,
    duration: float,
    clouds: tuple[np.ndarray, np.ndarray],
    localisation: float = 0.0,
    variance_factor: float = 1.0,
) -> LinkLaw:
    """The law of links over one gap; a localisation error s of each coordinate adds s² (F Fᵀ + I) to the variance.

    `variance_factor` times the prior's variance tells links apart: 1 but for particles that do not move independently
    (correlation.py, held_spread.py).
    """
    dimension = clouds[0].shape[1]
    step = prior.transition(duration, dimension)
    if variance_factor != 1.0:
        step = Transition(step.matrix, step.shift, variance_factor * step.covariance)
    if localisation > 0.0:
        noise = localisation**2 * (step.matrix @ step.matrix.T + np.eye(dimension))
        step = Transition(step.matrix, step.shift, step.covariance + noise)
    u, v = step.whiten_sources(clouds[0]), step.whiten_targets(clouds[1])
    box = prior.box
    if box is None or box.is_open:
        return LinkLaw(u, v, step.log_normaliser, None)
    scale = np.sqrt(np.diag(step.covariance))
    closed = np.array([kind != OPEN for kind in box.boundary])
    origin = np.where(closed, box.lower / scale, 0.0)
    walls = tuple(AxisWalls(kind, float(length)) for kind, length in zip(box.boundary, box.lengths / scale))
    return LinkLaw(u - origin, v - origin, step.log_normaliser, walls)
