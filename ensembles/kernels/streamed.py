"""The Gaussian kernel between two clouds, never held in memory: distances, exponentials and both sums in one pass."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_matrix

from . import compiled
from .base import Kernel, Sweep, lost_columns
from .threads import block_bounds, run_blocks

__all__ = ["StreamedKernel", "pick_targets"]

_BLOCKS = 8  # fixed, so that the order of summation does not depend on the number of threads


class StreamedKernel(Kernel):
    """k_ij = exp(-½|u_i - v_j|²) for clouds u (n, d) and v (m, d), whitened and therefore dimensionless.

    Memory is that of the clouds and 2 * 8 rows of m numbers; time is n m (d + about 20) operations a pass.
    """

    def __init__(self, sources: np.ndarray, targets: np.ndarray) -> None:
        self.sources = np.ascontiguousarray(sources, dtype=float)
        self.targets = np.ascontiguousarray(targets, dtype=float)
        self.shape = (self.sources.shape[0], self.targets.shape[0])
        self._coordinates = np.ascontiguousarray(self.targets.T)

    @property
    def reversed(self) -> StreamedKernel:
        """The same kernel with sources and targets exchanged."""
        return StreamedKernel(self.targets, self.sources)

    def at_scale(self, scale: float) -> StreamedKernel:
        """Costs divided by `scale`: the same clouds at `scale` times the noise variance."""
        return StreamedKernel(self.sources / np.sqrt(scale), self.targets / np.sqrt(scale))

    def restrict(self, rows: np.ndarray, columns: np.ndarray) -> StreamedKernel:
        """The kernel between some rows of either cloud."""
        return StreamedKernel(self.sources[rows], self.targets[columns])

    def _blocks(self) -> tuple[list[tuple[int, int]], float]:
        return block_bounds(self.shape[0], _BLOCKS), float(self.shape[0]) * self.shape[1]

    def log_sum_targets(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_j exp(log_weights_j) k_ij, shape (n,)."""
        out = np.empty(self.shape[0])

        def task(block: int, start: int, stop: int) -> None:
            buffer = np.empty(self.shape[1])
            compiled.log_sum_rows(self.sources, self._coordinates, log_weights, start, stop, buffer, out)

        run_blocks(task, *self._blocks())
        return out

    def log_sum_sources(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_i exp(log_weights_i) k_ij, shape (m,)."""
        return self.reversed.log_sum_targets(log_weights)

    def log_sum_and_mean(self, log_weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The log sum (n,) and the soft mean of the targets (n, d) for every source."""
        out = np.empty(self.shape[0])
        mean = np.empty_like(self.sources)

        def task(block: int, start: int, stop: int) -> None:
            buffer = np.empty(self.shape[1])
            compiled.log_sum_and_mean(self.sources, self._coordinates, log_weights, start, stop, buffer, out, mean)

        run_blocks(task, *self._blocks())
        return out, mean

    def sweep(self, log_f: np.ndarray, q: np.ndarray, log_a: np.ndarray, relaxation: float) -> Sweep:
        """One fused pass; see `Kernel.sweep`."""
        n, m = self.shape
        bounds, entries = self._blocks()
        new_f, excess = np.empty(n), np.empty(n)
        partial = np.zeros((len(bounds), m))

        def task(block: int, start: int, stop: int) -> None:
            buffer = np.empty(m)
            compiled.sweep_rows(
                self.sources, self._coordinates, q, log_f, log_a, relaxation,
                start, stop, buffer, new_f, excess, partial[block],
            )  # fmt: skip

        run_blocks(task, bounds, entries)
        sums = partial.sum(axis=0)
        lost = lost_columns(sums, log_a + new_f - log_f, excess)
        with np.errstate(divide="ignore"):
            logs = np.log(sums) - q
        if lost.size:  # with a maximum of their own
            logs[lost] = StreamedKernel(self.targets[lost], self.sources).log_sum_targets(log_a + new_f)
        return Sweep(new_f, excess, logs)

    def entries(self, p: np.ndarray, q: np.ndarray, cutoff: float, limit: int) -> csr_matrix | None:
        """Sparse exp(p_i + q_j) k_ij above `cutoff`, shape (n, m); None beyond `limit` entries."""
        n, m = self.shape
        counts = np.zeros(n, dtype=np.int64)
        log_cutoff = float(np.log(cutoff))

        def count(block: int, start: int, stop: int) -> None:
            buffer = np.empty(m)
            compiled.count_entries(self.sources, self._coordinates, p, q, log_cutoff, start, stop, buffer, counts)

        run_blocks(count, *self._blocks())
        row_starts = np.concatenate([[0], np.cumsum(counts)])
        if row_starts[-1] > limit:
            return None
        columns = np.empty(row_starts[-1], dtype=np.int32)
        values = np.empty(row_starts[-1])

        def fill(block: int, start: int, stop: int) -> None:
            buffer = np.empty(m)
            compiled.fill_entries(
                self.sources, self._coordinates, p, q, log_cutoff, start, stop, buffer, row_starts, columns, values
            )

        run_blocks(fill, *self._blocks())
        return csr_matrix((values, columns, row_starts), shape=(n, m))

    def top_targets(self, log_weights: np.ndarray, count: int) -> tuple[np.ndarray, np.ndarray]:
        """The `count` most probable targets of every source and their probabilities given the source, (n, count).

        Row number -1 with probability 0 where fewer than `count` targets have a positive weight.
        """
        count = min(count, self.shape[1])
        targets = np.empty((self.shape[0], count), dtype=np.int64)
        values = np.empty((self.shape[0], count))

        def task(block: int, start: int, stop: int) -> None:
            buffer = np.empty(self.shape[1])
            compiled.top_entries(self.sources, self._coordinates, log_weights, start, stop, buffer, targets, values)

        run_blocks(task, *self._blocks())
        return targets, values

    def nearest_costs(self) -> np.ndarray:
        """min_i ½|u_i - v_j|², shape (m,)."""
        n, m = self.shape
        out = np.empty(m)
        coordinates = np.ascontiguousarray(self.sources.T)
        zeros = np.zeros(n)

        def task(block: int, start: int, stop: int) -> None:
            compiled.nearest_cost(self.targets, coordinates, start, stop, np.empty(n), zeros, out)

        run_blocks(task, block_bounds(m, _BLOCKS), float(n) * m)
        return out

    def mean_cost(self) -> float:
        """½ (tr Cov u + tr Cov v + |mean u - mean v|²), the mean of ½|u_i - v_j|²."""
        shift = self.sources.mean(axis=0) - self.targets.mean(axis=0)
        return float(0.5 * (self.sources.var(axis=0).sum() + self.targets.var(axis=0).sum() + shift @ shift))

    def diameter_bound(self) -> float:
        """Bound on max (u_i - u_j)·(v_k - v_l): ranges along principal axes, or twice the radii; exact in one dimension."""
        u, v = self.sources - self.sources.mean(axis=0), self.targets - self.targets.mean(axis=0)
        _, axes = np.linalg.eigh(u.T @ u + v.T @ v)
        by_axis = float(np.sum(np.ptp(u @ axes, axis=0) * np.ptp(v @ axes, axis=0)))
        by_radius = 4.0 * float(np.sqrt(np.max((u * u).sum(axis=1)) * np.max((v * v).sum(axis=1))))
        return min(by_axis, by_radius)


def pick_targets(
    points: np.ndarray, targets: np.ndarray, log_weights: np.ndarray, counts: np.ndarray, uniforms: np.ndarray
) -> np.ndarray:
    """Draw counts[i] target rows for each point i with probability ∝ exp(log_weights_j - ½|x_i - v_j|²).

    points (n, d), targets (m, d), counts (n,) whole numbers, uniforms (Σ counts,) in [0, 1); result (Σ counts,) rows.
    The cumulative sum is inverted, so the same uniforms give the same rows whatever the number of threads.
    """
    kernel = StreamedKernel(points, targets)
    row_starts = np.concatenate([[0], np.cumsum(counts)]).astype(np.int64)
    out = np.empty(row_starts[-1], dtype=np.int64)
    coordinates = kernel._coordinates

    def task(block: int, start: int, stop: int) -> None:
        buffer = np.empty(targets.shape[0])
        compiled.sample_targets(
            kernel.sources, coordinates, log_weights, uniforms, row_starts, start, stop, buffer, out
        )

    run_blocks(task, *kernel._blocks())
    return out
