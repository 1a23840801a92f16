"""The interval of a parameter from the profile of a score, on a logarithmic scale where all levels are positive."""

from __future__ import annotations

import numpy as np

__all__ = ["coordinate", "from_coordinate", "largest_loss", "profile_interval"]

_CHANCE = 0.9


def coordinate(values: np.ndarray) -> np.ndarray:
    """Positive parameters are compared on a logarithmic scale."""
    return np.log(values) if (values > 0).all() else values


def from_coordinate(values: np.ndarray, point: float) -> float:
    """Back from the scale of `coordinate`."""
    return float(np.exp(point)) if (values > 0).all() else float(point)


def largest_loss(losses: np.ndarray) -> float:
    """The loss that one more resample stays below in 90 % of all cases: order statistic 0.9 (n + 1) of n.

    By 0.9 (n - 1) + 1, thirty refits would give 87 % on average.
    """
    return float(np.quantile(losses, _CHANCE, method="weibull"))


def profile_interval(
    grid: dict[str, np.ndarray], estimate: np.ndarray, top: float, scores: np.ndarray, loss: float
) -> dict[str, tuple[float, float]]:
    """Per parameter the values whose score, the best over the other parameter, lies less than `loss` below the top."""
    found = {}
    for position, (name, values) in enumerate(grid.items()):
        others = tuple(axis for axis in range(len(grid)) if axis != position)
        axis = coordinate(values)
        profile = np.sqrt(np.maximum(top - scores.max(axis=others), 0.0))
        limits = []
        for side in (-1.0, 1.0):
            beyond = side * (axis - estimate[position]) > 0
            # The root of the loss is straight for a quadratic profile, so it is interpolated along lines.
            z = np.concatenate([[0.0], np.sort(np.abs(axis[beyond] - estimate[position]))])
            order = np.argsort(np.abs(axis[beyond] - estimate[position]))
            height = np.maximum.accumulate(np.concatenate([[0.0], profile[beyond][order]]))
            limits.append(estimate[position] + side * _crossing(z, height, np.sqrt(loss)))
        found[name] = (from_coordinate(values, limits[0]), from_coordinate(values, limits[1]))
    return found


def _crossing(z: np.ndarray, height: np.ndarray, wanted: float) -> float:
    """Where a non-decreasing broken line first reaches `wanted`; its end if it never does."""
    above = np.flatnonzero(height >= wanted)
    if not above.size or above[0] == 0:
        return float(z[-1] if not above.size else z[0])
    i = int(above[0])
    share = (wanted - height[i - 1]) / (height[i] - height[i - 1])
    return float(z[i - 1] + share * (z[i] - z[i - 1]))
