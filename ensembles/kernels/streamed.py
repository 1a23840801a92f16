"""The Gaussian kernel between two clouds, never held in memory: distances, exponentials and both sums in one pass."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.sparse import csr_matrix

from . import compiled, compiled_sweeps
from .base import Kernel, Sweep, lost_columns
from .compiled_tiles import TILE
from .layout import Layout, aligned, full_layout
from .threads import run_blocks

__all__ = ["StreamedKernel", "pick_targets"]

_PRODUCT_DIMENSIONS = 4  # from which scalar products are cheaper than differences
_PRODUCT_RADIUS = 1e4  # largest |x|² for them: exponents are then right to about 1e-12
_NOT_STORED = np.empty((0, 0), dtype=np.float32)


class StreamedKernel(Kernel):
    """k_ij = exp(-½|u_i - v_j|²) for clouds u (n, d) and v (m, d), whitened and therefore dimensionless.

    Memory is that of the clouds and a few rows of m numbers a thread; time is n m (2 d + about 20) operations a pass.
    """

    def __init__(self, sources: np.ndarray, targets: np.ndarray, layout: Layout | None = None) -> None:
        self.sources = np.ascontiguousarray(sources, dtype=float)
        self.targets = np.ascontiguousarray(targets, dtype=float)
        self.shape = (self.sources.shape[0], self.targets.shape[0])
        self.layout = full_layout(*self.shape) if layout is None else layout
        self.entry_time = 0.4 + 0.03 * self.sources.shape[1]
        self._rows, self._coordinates, self._base, self._centre = _prepared(self.sources, self.targets)

    @property
    def reversed(self) -> StreamedKernel:
        """The same kernel, whole, with sources and targets exchanged."""
        return StreamedKernel(self.targets, self.sources)

    def at_scale(self, scale: float) -> StreamedKernel:
        """Costs divided by `scale`: the same clouds at `scale` times the noise variance."""
        return StreamedKernel(self.sources / np.sqrt(scale), self.targets / np.sqrt(scale))

    def restrict(self, rows: np.ndarray, columns: np.ndarray) -> StreamedKernel:
        """The kernel between some rows of either cloud."""
        return StreamedKernel(self.sources[rows], self.targets[columns])

    def _run(
        self, function: Callable[..., Any], log_weights: np.ndarray, inputs: tuple[Any, ...], outputs: tuple[Any, ...]
    ) -> None:
        """Call a compiled loop on every group of chunks, on all threads."""
        layout = self.layout
        width = layout.width
        base = self._weighted(log_weights)

        def task(group: int, first: int, last: int) -> None:
            buffer = aligned(1, width)[0]
            function(
                self._rows, self._coordinates, base, *inputs,
                layout.bounds, layout.pointers, layout.ranges, first, last, buffer, *outputs,
            )  # fmt: skip

        run_blocks(task, layout.groups, layout.entries)

    def _weighted(self, log_weights: np.ndarray) -> np.ndarray:
        base = aligned(1, self.shape[1])[0]
        np.add(log_weights, self._base, out=base[: self.shape[1]])
        return base

    def log_sum_targets(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_j exp(log_weights_j) k_ij, shape (n,)."""
        out = np.empty(self.shape[0])
        self._run(compiled.log_sum_rows, log_weights, (), (out,))
        return out

    def log_sum_sources(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_i exp(log_weights_i) k_ij, shape (m,)."""
        return self.reversed.log_sum_targets(log_weights)

    def log_sum_and_mean(self, log_weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The log sum (n,) and the soft mean of the targets (n, d) for every source."""
        out = np.empty(self.shape[0])
        mean = np.empty_like(self.sources)
        self._run(compiled.log_sum_and_mean, log_weights, (), (out, mean))
        return out, mean + self._centre

    def expectation(self, log_weights: np.ndarray, values: np.ndarray) -> np.ndarray:
        """Average of values (m, k) over the targets with weights exp(log_weights_j) k_ij, for every source; (n, k)."""
        out = np.empty((self.shape[0], values.shape[1]))
        self._run(compiled.expectation_rows, log_weights, (np.ascontiguousarray(values.T, dtype=float),), (out,))
        return out

    def sweep(self, log_f: np.ndarray, q: np.ndarray, log_a: np.ndarray, relaxation: float) -> Sweep:
        """One fused pass; see `Kernel.sweep`."""
        return self.sweep_and_store(log_f, q, log_a, relaxation, _NOT_STORED)

    def sweep_and_store(
        self, log_f: np.ndarray, q: np.ndarray, log_a: np.ndarray, relaxation: float, stored: np.ndarray
    ) -> Sweep:
        """`sweep`, keeping the rows exp(q_j) k_ij scaled to sum 1 in `stored` (n, m) unless that is empty."""
        n, m = self.shape
        layout = self.layout
        new_f, excess = np.empty(n), np.empty(n)
        partial = aligned(len(layout.groups), m)
        width = layout.width
        base = self._weighted(q)

        def task(group: int, first: int, last: int) -> None:
            buffer, tile = aligned(4, width), aligned(1, 4 * TILE)[0]
            compiled_sweeps.sweep_rows(
                self._rows, self._coordinates, base, log_f, log_a, relaxation, layout.bounds, layout.pointers,
                layout.ranges, first, last, tile, buffer, new_f, excess, partial[group], stored,
            )  # fmt: skip

        run_blocks(task, layout.groups, layout.entries)
        sums = partial.sum(axis=0)[:m]
        lost = lost_columns(sums, log_a + new_f - log_f, excess)
        return Sweep(new_f, excess, self.column_logs(sums, q, log_a + new_f, lost))

    def column_logs(self, sums: np.ndarray, q: np.ndarray, p: np.ndarray, lost: np.ndarray) -> np.ndarray:
        """log Σ_i exp(p_i) k_ij from sums that hold exp(q_j) too; the `lost` columns are summed again, exactly."""
        with np.errstate(divide="ignore"):
            logs = np.log(sums) - q
        if lost.size:
            logs[lost] = StreamedKernel(self.targets[lost], self.sources).log_sum_targets(p)
        return logs

    def entries(self, p: np.ndarray, q: np.ndarray, cutoff: float, limit: int) -> csr_matrix | None:
        """Sparse exp(p_i + q_j) k_ij above `cutoff`, shape (n, m); None beyond `limit` entries."""
        n, m = self.shape
        counts = np.zeros(n, dtype=np.int64)
        log_cutoff = float(np.log(cutoff))
        self._run(compiled.count_entries, q, (p, log_cutoff), (counts,))
        row_starts = np.concatenate([[0], np.cumsum(counts)])
        if row_starts[-1] > limit:
            return None
        columns = np.empty(row_starts[-1], dtype=np.int32)
        values = np.empty(row_starts[-1])
        self._run(compiled.fill_entries, q, (p, log_cutoff), (row_starts, columns, values))
        return csr_matrix((values, columns, row_starts), shape=(n, m))

    def top_targets(self, log_weights: np.ndarray, count: int) -> tuple[np.ndarray, np.ndarray]:
        """The `count` most probable targets of every source and their probabilities given the source, (n, count)."""
        count = min(count, self.shape[1])
        targets = np.empty((self.shape[0], count), dtype=np.int64)
        values = np.empty((self.shape[0], count))
        self._run(compiled.top_entries, log_weights, (), (targets, values))
        return targets, values

    def sample_targets(self, log_weights: np.ndarray, counts: np.ndarray, uniforms: np.ndarray) -> np.ndarray:
        """Draw counts[i] targets of source i with probability ∝ exp(log_weights_j) k_ij, by inverting cumulative sums."""
        row_starts = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
        out = np.empty(row_starts[-1], dtype=np.int64)
        self._run(compiled.sample_targets, log_weights, (uniforms, row_starts), (out,))
        return out

    def nearest_costs(self) -> np.ndarray:
        """min_i ½|u_i - v_j|², shape (m,)."""
        out = np.empty(self.shape[1])
        self.reversed._run(compiled.nearest_cost, np.zeros(self.shape[0]), (), (out,))
        return out

    def largest_cost(self) -> float:
        """½ (max |u_i| + max |v_j|)² around the middle of the two means."""
        centre = 0.5 * (self.sources.mean(axis=0) + self.targets.mean(axis=0))
        radii = [np.sqrt(np.max(((cloud - centre) ** 2).sum(axis=1))) for cloud in (self.sources, self.targets)]
        return float(0.5 * sum(radii) ** 2)

    def mean_cost(self) -> float:
        """½ (tr Cov u + tr Cov v + |mean u - mean v|²), the mean of ½|u_i - v_j|²."""
        shift = self.sources.mean(axis=0) - self.targets.mean(axis=0)
        return float(0.5 * (self.sources.var(axis=0).sum() + self.targets.var(axis=0).sum() + shift @ shift))

    def diameter_bound(self) -> float:
        """Bound on max (u_i - u_j)·(v_k - v_l): ranges along principal axes, or radii; exact in one dimension."""
        u, v = self.sources - self.sources.mean(axis=0), self.targets - self.targets.mean(axis=0)
        _, axes = np.linalg.eigh(u.T @ u + v.T @ v)
        by_axis = float(np.sum(np.ptp(u @ axes, axis=0) * np.ptp(v @ axes, axis=0)))
        by_radius = 4.0 * float(np.sqrt(np.max((u * u).sum(axis=1)) * np.max((v * v).sum(axis=1))))
        return min(by_axis, by_radius)


def _prepared(sources: np.ndarray, targets: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Rows, coordinates (d, m), an addition to log-weights (m,), and what was taken off every point (d,).

    By differences or products; see compiled_tiles.py. For products both clouds are moved to near the origin.
    """
    if sources.shape[1] >= _PRODUCT_DIMENSIONS and min(len(sources), len(targets)) > 0:
        centre = 0.5 * (sources.mean(axis=0) + targets.mean(axis=0))
        x, v = sources - centre, targets - centre
        x_squares, v_squares = (np.einsum("ik,ik->i", cloud, cloud) for cloud in (x, v))
        if max(x_squares.max(), v_squares.max()) <= _PRODUCT_RADIUS:
            return np.column_stack([x, -0.5 * x_squares]), _coordinates(v), -0.5 * v_squares, centre
    return sources, _coordinates(targets), np.zeros(len(targets)), np.zeros(targets.shape[1])


def _coordinates(points: np.ndarray) -> np.ndarray:
    """Coordinate after coordinate (d, at least m): what lies beyond the points belongs to no range of columns."""
    rows = aligned(points.shape[1], points.shape[0])
    rows[:, : points.shape[0]] = points.T
    return rows


def pick_targets(
    points: np.ndarray, targets: np.ndarray, log_weights: np.ndarray, counts: np.ndarray, uniforms: np.ndarray
) -> np.ndarray:
    """Draw counts[i] target rows for each point i with probability ∝ exp(log_weights_j - ½|x_i - v_j|²).

    points (n, d), targets (m, d), counts (n,) whole numbers, uniforms (Σ counts,) in [0, 1); result (Σ counts,) rows.
    The cumulative sum is inverted, so the same uniforms give the same rows whatever the number of threads.
    """
    return StreamedKernel(points, targets).sample_targets(log_weights, counts, uniforms)
