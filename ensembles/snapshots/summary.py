"""Numbers that describe a series before anything is fitted to it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..checks import InputError
from .columns import duplicate_count
from .series import SnapshotSeries

__all__ = ["Displacement", "SnapshotDescription", "describe_snapshots", "displacement"]


@dataclass(frozen=True, eq=False)
class SnapshotDescription:
    """One snapshot in numbers; `spread` is the weighted standard deviation per coordinate, sqrt(Σ w (x - mean)²)."""

    time: float
    count: int
    mass: float
    effective_sample_size: float
    mean: np.ndarray
    spread: np.ndarray
    duplicates: int


@dataclass(frozen=True, eq=False)
class Displacement:
    """How far a cloud moved over one gap; lengths squared in the unit of the positions squared."""

    gap: int
    start: float
    end: float
    mean_shift: np.ndarray
    squared_displacement: float
    squared_displacement_per_axis: np.ndarray

    @property
    def duration(self) -> float:
        """The time between the two snapshots, τ."""
        return self.end - self.start

    @property
    def matching_diffusion(self) -> float:
        """The diffusion coefficient at which 2 D d τ, the prior's spread, equals the squared displacement."""
        return self.squared_displacement / (2 * len(self.mean_shift) * self.duration)

    @property
    def matching_diffusion_per_axis(self) -> np.ndarray:
        """The same for every coordinate by itself, (d,)."""
        return self.squared_displacement_per_axis / (2 * self.duration)


def describe_snapshots(series: SnapshotSeries) -> list[SnapshotDescription]:
    """Return time, count, effective sample size (Σw)² / Σw², mean, spread and duplicates of every snapshot.

    Examples
    --------
    >>> series = SnapshotSeries.from_arrays([0, 1], [[0.0, 2.0], [5.0, 5.0]], weights=[None, [3, 1]])
    >>> first, second = describe_snapshots(series)
    >>> first.mean, first.spread, first.effective_sample_size
    (array([1.]), array([1.]), 2.0)
    >>> second.effective_sample_size, second.duplicates
    (1.6, 1)
    """
    described = []
    for time, cloud, weights, mass in zip(series.times, series.clouds, series.weights, series.masses):
        mean = weights @ cloud
        described.append(
            SnapshotDescription(
                time=float(time),
                count=len(cloud),
                mass=float(mass),
                effective_sample_size=float(weights.sum() ** 2 / (weights @ weights)),
                mean=mean,
                spread=np.sqrt(weights @ (cloud - mean) ** 2),
                duplicates=duplicate_count(cloud),
            )
        )
    return described


def displacement(series: SnapshotSeries, gap: int) -> Displacement:
    """Return how far the cloud moved between snapshots `gap` and `gap + 1`, by means and covariances alone.

    The squared displacement is the squared 2-Wasserstein distance of the Gaussians with the moments of the two clouds,

        |m₀ - m₁|² + tr(C₀) + tr(C₁) - 2 tr((C₀^½ C₁ C₀^½)^½),

    the smallest mean squared displacement that any coupling of two clouds with these moments can have. Per axis it is
    the same formula for one coordinate, (m₀ - m₁)² + (s₀ - s₁)²; their sum is never above the whole.

    Source
    ------
    Dowson and Landau (1982), The Fréchet distance between multivariate normal distributions, Journal of Multivariate
    Analysis 12, 450-455; lower bound for all distributions: Gelbrich (1990), Mathematische Nachrichten 147, 185-203
    (both from memory).

    Examples
    --------
    >>> series = SnapshotSeries.from_arrays([0, 2], [[-1.0, 1.0], [1.0, 5.0]])
    >>> moved = displacement(series, 0)
    >>> moved.mean_shift, round(moved.squared_displacement, 12), round(moved.matching_diffusion, 12)
    (array([3.]), 10.0, 2.5)
    """
    if isinstance(gap, bool) or not isinstance(gap, (int, np.integer)) or not 0 <= gap < len(series) - 1:
        raise InputError(
            f"gap must be the number of a gap; it is {gap!r} for {len(series) - 1} gap(s); "
            f"use a whole number from 0 to {len(series) - 2}"
        )
    (mean_start, root_start), (mean_end, root_end) = (_mean_and_root(series, k) for k in (gap, gap + 1))
    shift = mean_end - mean_start
    spreads = [np.sqrt((root**2).sum(axis=1)) for root in (root_start, root_end)]
    return Displacement(
        gap=int(gap),
        start=float(series.times[gap]),
        end=float(series.times[gap + 1]),
        mean_shift=shift,
        squared_displacement=float(shift @ shift) + _squared_bures(root_start, root_end),
        squared_displacement_per_axis=shift**2 + (spreads[1] - spreads[0]) ** 2,
    )


def _mean_and_root(series: SnapshotSeries, k: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the mean and a (d, d) root R of the covariance, R Rᵀ = C, without forming C (which squares the error)."""
    cloud, weights = series.clouds[k], series.weights[k]
    mean = weights @ cloud
    upper = np.asarray(np.linalg.qr(np.sqrt(weights)[:, None] * (cloud - mean), mode="r"))
    root = np.zeros((series.dimension, series.dimension))
    root[:, : upper.shape[0]] = upper.T
    return mean, root


def _squared_bures(root_start: np.ndarray, root_end: np.ndarray) -> float:
    """Return min over rotations U of |R₀ - R₁ U|² (Frobenius): the covariance part, as a sum of squares."""
    # tr C₀ + tr C₁ - 2 tr(...)^½ loses all digits for clouds that hardly changed; the Procrustes form loses none.
    left, _, right = np.linalg.svd(root_end.T @ root_start)
    return float(((root_start - root_end @ (left @ right)) ** 2).sum())
