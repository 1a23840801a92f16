"""The Gaussian kernel in a box, one axis at a time, by images: periodic axes and reflecting walls.

On an axis of length ℓ in units of the noise, with w(z) = Σ_k exp(-½(z + k ℓ)²) the wrapped Gaussian of period ℓ,

    periodic     k(u, v) = w(v - u; ℓ),
    reflecting   k(u, v) = w(v - u; 2ℓ) + w(v + u; 2ℓ),   u and v counted from the lower wall.

Images are summed until what is left out is below 1e-13 of the sum. The kernel over several axes is the product.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .dense import DenseKernel

__all__ = [
    "OPEN",
    "PERIODIC",
    "REFLECTING",
    "AxisWalls",
    "axis_log_kernel",
    "box_kernel",
    "image_shifts",
    "log_box_kernel",
    "wrapped_log_sum",
]

OPEN, PERIODIC, REFLECTING = "open", "periodic", "reflecting"
_LEFT_OUT = 31.0  # -log of the first image left out over the nearest one


@dataclass(frozen=True)
class AxisWalls:
    """One axis of a box: its boundary (`open`, `periodic` or `reflecting`) and its length in units of the noise."""

    boundary: str
    length: float


def image_shifts(period: float) -> np.ndarray:
    """Multiples of the period that count for a displacement of at most half a period."""
    # The first image left out lies (K + ½) periods away, the nearest at most ½: ½ K (K + 1) period² ≥ _LEFT_OUT.
    count = int(np.ceil(-0.5 + np.sqrt(0.25 + 2.0 * _LEFT_OUT / period**2)))
    return period * np.arange(-count, count + 1)


def wrapped_log_sum(displacement: np.ndarray, period: float) -> tuple[np.ndarray, np.ndarray]:
    """log Σ_k exp(-½(z + k period)²) and its derivative with respect to z, for displacements z of any size."""
    z = displacement - period * np.round(displacement / period)
    total, slope = np.zeros_like(z), np.zeros_like(z)
    nearest = 0.5 * z * z
    for shift in image_shifts(period):
        image = z + shift
        term = np.exp(nearest - 0.5 * image * image)
        total += term
        slope -= image * term
    return np.log(total) - nearest, slope / total


def axis_log_kernel(walls: AxisWalls, u: np.ndarray, v: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """log k(u, v) on one axis and its derivative with respect to u; u and v are broadcast against each other."""
    if walls.boundary == PERIODIC:
        value, slope = wrapped_log_sum(v - u, walls.length)
        return value, -slope
    if walls.boundary == REFLECTING:
        direct, direct_slope = wrapped_log_sum(v - u, 2.0 * walls.length)
        mirror, mirror_slope = wrapped_log_sum(v + u, 2.0 * walls.length)
        total = np.logaddexp(direct, mirror)
        return total, -np.exp(direct - total) * direct_slope + np.exp(mirror - total) * mirror_slope
    difference = v - u
    return -0.5 * difference * difference, difference


def log_box_kernel(walls: tuple[AxisWalls, ...], u: np.ndarray, v: np.ndarray) -> np.ndarray:
    """log k for points u (..., d) and v (..., d) that broadcast against each other, shape (...)."""
    total = np.zeros(np.broadcast_shapes(u.shape[:-1], v.shape[:-1]))
    for k, wall in enumerate(walls):
        total += axis_log_kernel(wall, u[..., k], v[..., k])[0]
    return total


def box_kernel(walls: tuple[AxisWalls, ...], sources: np.ndarray, targets: np.ndarray) -> DenseKernel:
    """The kernel in a box between clouds u (n, d) and v (m, d), held as logarithms: 8 n m bytes."""
    log_kernel = np.empty((sources.shape[0], targets.shape[0]))
    tile = max(1, 2_000_000 // max(1, targets.shape[0]))
    for start in range(0, sources.shape[0], tile):
        part = sources[start : start + tile, None, :]
        log_kernel[start : start + tile] = log_box_kernel(walls, part, targets[None, :, :])
    return DenseKernel(log_kernel)
