"""Particles in a box and their images: where they stand, which one a path runs to, and folded potentials.

A path in the box is the folded path of unbounded space: wrapped on periodic axes, mirrored at reflecting walls. Its end
is one of the images of the particle it is linked with, drawn with probability ∝ p(image | start), axis by axis.
"""

from __future__ import annotations

import numpy as np

from ..kernels.images import PERIODIC, REFLECTING, AxisWalls, axis_log_kernel, image_shifts
from ..priors.base import Transition
from ..priors.box import Box

__all__ = ["BoxLaw", "draw_images"]


def draw_images(box: Box, step: Transition, start: np.ndarray, end: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """An image of each row of `end` (n, d), in the box, for a path from `start` (n, d), in unbounded space.

    The noise of an axis with a boundary is independent of the others, so that each axis is drawn on its own.
    """
    out = np.array(end, dtype=float)
    mean = step.mean(start)
    for axis, kind in enumerate(box.boundary):
        if kind not in (PERIODIC, REFLECTING):
            continue
        sigma, length, low = float(np.sqrt(step.covariance[axis, axis])), float(box.lengths[axis]), box.lower[axis]
        period = length if kind == PERIODIC else 2.0 * length
        offset = end[:, axis] - low
        seeds = [offset] if kind == PERIODIC else [offset, -offset]
        shifts = image_shifts(period / sigma) * sigma
        images = []
        for seed in seeds:
            # Images are counted from the one nearest to where the path would go by itself.
            nearest = np.round((mean[:, axis] - low - seed) / period) * period
            images.append(low + (seed + nearest)[:, None] + shifts)
        places = np.concatenate(images, axis=1)
        log_weights = -0.5 * ((places - mean[:, [axis]]) / sigma) ** 2
        weights = np.exp(log_weights - log_weights.max(axis=1, keepdims=True))
        sums = np.cumsum(weights, axis=1)
        pick = (rng.random(len(out))[:, None] * sums[:, -1:] >= sums).sum(axis=1)
        out[:, axis] = places[np.arange(len(out)), np.minimum(pick, places.shape[1] - 1)]
    return out


class BoxLaw:
    """A transition in a box, with coordinates in units of its noise counted from the lower walls."""

    def __init__(self, box: Box, step: Transition) -> None:
        scale = np.sqrt(np.diag(step.covariance))
        self.step = step
        self.scale = scale
        closed = np.array([kind != "open" for kind in box.boundary])
        self.origin = np.where(closed, box.lower / scale, 0.0)
        self.walls = tuple(AxisWalls(kind, float(size)) for kind, size in zip(box.boundary, box.lengths / scale))

    def sources(self, points: np.ndarray) -> np.ndarray:
        """Whitened start points (n, d)."""
        return self.step.whiten_sources(points) - self.origin

    def targets(self, points: np.ndarray) -> np.ndarray:
        """Whitened end points (m, d)."""
        return self.step.whiten_targets(points) - self.origin

    def log_sum(
        self, points: np.ndarray, atoms: np.ndarray, log_weights: np.ndarray, *, forward: bool
    ) -> tuple[np.ndarray, np.ndarray]:
        """log Σ_j exp(log_weights_j) p(atom_j | x) (m,) and its gradient (m, d) at points x; with `forward`, of p(y | atom_i).

        The law of an axis with a boundary is that of its image sum; open axes may be coupled to one another.
        """
        values = np.empty(len(points))
        gradients = np.empty_like(points)
        tile = max(1, 1_000_000 // max(1, len(atoms)))
        at = self.targets(points) if forward else self.sources(points)
        others = self.sources(atoms) if forward else self.targets(atoms)
        for begin in range(0, len(points), tile):
            part = at[begin : begin + tile, None, :]
            total = np.broadcast_to(log_weights, (part.shape[0], len(atoms))).copy()
            slopes = []
            for axis, wall in enumerate(self.walls):
                # The kernels are symmetric, so the slope in the first argument serves both directions.
                value, slope = axis_log_kernel(wall, part[..., axis], others[None, :, axis])
                total += value
                slopes.append(slope)
            top = total.max(axis=1, keepdims=True)
            weights = np.exp(total - top)
            sums = weights.sum(axis=1, keepdims=True)
            values[begin : begin + tile] = np.log(sums[:, 0]) + top[:, 0]
            weights /= sums
            gradients[begin : begin + tile] = np.column_stack([(weights * slope).sum(axis=1) for slope in slopes])
        # From whitened to plain coordinates: u = L⁻¹ x, F = I for a Brownian prior.
        plain = np.linalg.solve(self.step.cholesky.T, gradients.T).T
        return values + self.step.log_normaliser, plain
