"""What a bridge claims, as numbers that can be given error bars.

To add a quantity, you must
1. write a frozen dataclass with `evaluate(bridge) -> (q,) array`, a pure function of the bridge (fixed random numbers),
2. give `labels(bridge) -> list of q dicts`, the same keys in each, which become columns of the table,
3. give `scales`, on which intervals are formed: "linear", "log" for positive numbers, "variance" for second moments (the
   logarithm, and wider limits in small samples), "logit" for probabilities,
4. list it in `QUANTITIES`.
tests/test_uncertainty.py runs the laws of a quantity on every listed one.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, ClassVar, Protocol

import numpy as np

from .. import checks
from ..bridges.bridge import Bridge

__all__ = ["QUANTITIES", "DensityAt", "DriftAt", "LinkProbabilities", "Moments", "PathQuantiles", "Quantity"]


class Quantity(Protocol):
    """See the module's docstring."""

    @property
    def scales(self) -> tuple[str, ...]:
        """Scale of intervals, one for all numbers or one each."""

    def evaluate(self, bridge: Bridge) -> np.ndarray:
        """The numbers, (q,)."""

    def labels(self, bridge: Bridge) -> list[dict[str, Any]]:
        """What each of them is."""


@dataclass(frozen=True)
class Moments:
    """Mean and variance of every coordinate of the population at `times` (lengths and lengths²)."""

    times: Sequence[float]
    scales: ClassVar[tuple[str, ...]] = ("linear", "variance")

    def evaluate(self, bridge: Bridge) -> np.ndarray:
        """Mean and variance, alternating over coordinates and times."""
        parts = []
        for t in self.times:
            mean, covariance = bridge.moments(t)
            parts.append(np.stack([mean, np.diag(covariance)], axis=1).ravel())
        return np.concatenate(parts)

    def labels(self, bridge: Bridge) -> list[dict[str, Any]]:
        """quantity, time, coordinate."""
        return [
            {"quantity": what, "time": float(t), "coordinate": name}
            for t in self.times
            for name in bridge.series.position_names
            for what in ("mean", "variance")
        ]


@dataclass(frozen=True, eq=False)
class DensityAt:
    """Density ρ_t of the population at points (m, d), such as those of a grid, in 1/length^d."""

    time: float
    points: np.ndarray
    scales: ClassVar[tuple[str, ...]] = ("log",)

    def evaluate(self, bridge: Bridge) -> np.ndarray:
        """ρ_t (m,)."""
        return np.exp(bridge.log_density(self.time, self.points))

    def labels(self, bridge: Bridge) -> list[dict[str, Any]]:
        """quantity, time and the coordinates of the point."""
        return _at_points("density", self.time, self.points, bridge)


@dataclass(frozen=True, eq=False)
class DriftAt:
    """Forward drift at points (m, d), in length/time: m · d numbers, one a coordinate of each point."""

    time: float
    points: np.ndarray
    scales: ClassVar[tuple[str, ...]] = ("linear",)

    def evaluate(self, bridge: Bridge) -> np.ndarray:
        """b + 2D ∇log φ_t, (m d,)."""
        return bridge.drift(self.time, self.points).ravel()

    def labels(self, bridge: Bridge) -> list[dict[str, Any]]:
        """quantity, time, coordinate and the point."""
        return [
            {**label, "coordinate": name}
            for label in _at_points("drift", self.time, self.points, bridge)
            for name in bridge.series.position_names
        ]


@dataclass(frozen=True)
class LinkProbabilities:
    """Probability that particle i of snapshot `gap` became particle j of the next, or one of several, given particle i.

    Σ_j π_ij / Σ_all π_ij for chosen pairs (i, j) or (i, [j, ...]). Another sample of the population would hardly hold the
    very same target, so the error bar of a link to a single particle is about as large as the probability itself; that
    of a link to a group of particles is the telling one.
    """

    pairs: Sequence[tuple[int, int | Sequence[int]]]
    gap: int = 0
    scales: ClassVar[tuple[str, ...]] = ("logit",)

    def evaluate(self, bridge: Bridge) -> np.ndarray:
        """(q,) probabilities."""
        coupling = bridge.coupling(self.gap)
        found = []
        for i, targets in self.pairs:
            chosen = np.atleast_1d(np.asarray(targets, dtype=np.int64))
            if chosen.size == 0 or chosen.min() < 0 or chosen.max() >= coupling.shape[1]:
                raise checks.InputError(
                    f"no such target; pair ({i}, {targets}) where snapshot {self.gap + 1} has {coupling.shape[1]} "
                    f"particles; use 0 to {coupling.shape[1] - 1}"
                )
            row = coupling.row(i)
            # A source of weight 0 has a row of zeros; it became nothing.
            found.append(row[chosen].sum() / row.sum() if row.sum() > 0 else 0.0)
        return np.array(found)

    def labels(self, bridge: Bridge) -> list[dict[str, Any]]:
        """quantity, gap, source, target (one row number, or "3 particles")."""
        named = [(int(i), np.atleast_1d(np.asarray(j))) for i, j in self.pairs]
        return [
            {
                "quantity": "link probability",
                "gap": self.gap,
                "source": i,
                "target": str(j[0]) if j.size == 1 else f"{j.size} particles",
            }
            for i, j in named
        ]


@dataclass(frozen=True)
class PathQuantiles:
    """Quantiles over paths of every coordinate at `times`, from `count` paths with a fixed seed."""

    times: Sequence[float]
    probabilities: Sequence[float] = (0.05, 0.5, 0.95)
    count: int = 1000
    seed: int = 0
    scales: ClassVar[tuple[str, ...]] = ("linear",)

    def evaluate(self, bridge: Bridge) -> np.ndarray:
        """(times · coordinates · probabilities,)."""
        paths = bridge.sample_paths(self.count, np.asarray(self.times, dtype=float), rng=self.seed)
        return np.moveaxis(np.quantile(paths.positions, list(self.probabilities), axis=0), 0, -1).ravel()

    def labels(self, bridge: Bridge) -> list[dict[str, Any]]:
        """quantity, time, coordinate, probability."""
        return [
            {"quantity": "path quantile", "time": float(t), "coordinate": name, "probability": float(p)}
            for t in self.times
            for name in bridge.series.position_names
            for p in self.probabilities
        ]


def _at_points(what: str, time: float, points: np.ndarray, bridge: Bridge) -> list[dict[str, Any]]:
    checked = checks.points(points, "points", bridge.series.dimension)
    names = [f"at {name}" for name in bridge.series.position_names]
    return [{"quantity": what, "time": float(time), **dict(zip(names, map(float, row)))} for row in checked]


QUANTITIES = (Moments, DensityAt, DriftAt, LinkProbabilities, PathQuantiles)
"""Every quantity."""
