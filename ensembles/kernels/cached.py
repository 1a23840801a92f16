"""The Gaussian kernel between two clouds, kept in single precision with the potentials absorbed.

What is stored are the rows π_ij / a_i of a coupling near the solution: numbers between 0 and 1 whose relative
rounding of 6e-8 averages out in sums made in double precision. Later potentials enter as factors exp(f - f₀), exp(q -
q₀); when these leave e^±30, entries that underflowed in storage might count again, and the kernel is stored anew. One
sweep reads four bytes an entry. The exact kernel stays at hand for everything else, above all for certificates.
"""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_matrix

from . import compiled_sweeps
from .base import Kernel, Sweep
from .layout import BLOCKS
from .streamed import StreamedKernel
from .threads import block_bounds, run_blocks

__all__ = ["CachedKernel"]

_DRIFT = 30.0  # stored entries end at 1e-38, so what is missing stays below e^60 * 1e-38 of a row
_FLOOR = 2e-7  # L1 error below which rounding in storage may show


class _Storage:
    """Memory for one stored kernel, and whose it is at present. Fresh memory costs more than filling it does."""

    def __init__(self) -> None:
        self.rows = np.empty((0, 0), dtype=np.float32)
        self.owner: CachedKernel | None = None


class CachedKernel(Kernel):
    """exp(-½|u_i - v_j|²), stored as float32 when first swept, n m * 4 bytes; levels of noise share them in turn."""

    floor = _FLOOR
    entry_time = 0.15

    def __init__(self, exact: StreamedKernel, storage: _Storage | None = None) -> None:
        self._exact = exact
        self.shape = exact.shape
        self._storage = _Storage() if storage is None else storage
        self._f = np.empty(0)
        self._q = np.empty(0)

    @property
    def exact(self) -> StreamedKernel:
        """The streamed kernel in double precision."""
        return self._exact

    def at_scale(self, scale: float) -> CachedKernel:
        """The same clouds at `scale` times the noise variance, stored in the same place when first swept."""
        return CachedKernel(self.exact.at_scale(scale), self._storage)

    def restrict(self, rows: np.ndarray, columns: np.ndarray) -> CachedKernel:
        """The kernel between some sources and some targets."""
        return CachedKernel(self.exact.restrict(rows, columns))

    def sweep(self, log_f: np.ndarray, q: np.ndarray, log_a: np.ndarray, relaxation: float) -> Sweep:
        """One pass over the stored kernel; over the exact one at first, and after a large change of potentials."""
        storage = self._storage
        if storage.owner is not self or self._drifted(log_f, q):
            if storage.rows.shape != self.shape:
                storage.rows = np.empty(self.shape, dtype=np.float32)
            storage.owner = None  # an interruption leaves rows of two kinds
            sweep = self.exact.sweep_and_store(log_f, q, log_a, relaxation, storage.rows)
            # Rows were stored at sum 1, whatever the update of f that the caller asked for.
            self._f, self._q, storage.owner = log_f - sweep.row_excess, q.copy(), self
            return sweep
        n, m = self.shape
        u, v = np.exp(log_f - self._f), np.exp(q - self._q)
        bounds = block_bounds(n, BLOCKS)
        update, excess = np.empty(n), np.empty(n)
        partial = np.zeros((len(bounds), m))

        def task(block: int, start: int, stop: int) -> None:
            compiled_sweeps.sweep_stored(
                storage.rows, v, u, log_a, relaxation, start, stop, update, excess, partial[block]
            )

        run_blocks(task, bounds, float(n) * m)
        sums = partial.sum(axis=0)
        # A stored entry below 1e-37 may have lost digits: a sum is trusted only far above what all rows can have lost.
        largest = float(np.exp(np.max(log_a + update + log_f - self._f)))
        lost = np.flatnonzero(~(sums > 1e-29 * n * largest))
        # exp(q - q₀) belongs to π but not to the sums asked for, which is why q₀ and not q is taken off.
        logs = self.exact.column_logs(sums, self._q, log_a + log_f + update, lost)
        return Sweep(log_f + update, excess, logs)

    def _drifted(self, log_f: np.ndarray, q: np.ndarray) -> bool:
        return bool(np.abs(log_f - self._f).max() > _DRIFT or np.abs(q - self._q).max() > _DRIFT)

    def entries(self, p: np.ndarray, q: np.ndarray, cutoff: float, limit: int) -> csr_matrix | None:
        """Sparse exp(p_i + q_j) k_ij above `cutoff`, from the stored kernel where it holds."""
        if self._storage.owner is not self or np.abs(q - self._q).max() > _DRIFT:
            return self.exact.entries(p, q, cutoff, limit)
        n, m = self.shape
        factors, v = np.exp(p - self._f), np.exp(q - self._q)
        counts = np.zeros(n, dtype=np.int64)
        bounds = block_bounds(n, BLOCKS)

        def count(block: int, start: int, stop: int) -> None:
            compiled_sweeps.count_stored(self._storage.rows, v, factors, cutoff, start, stop, counts)

        run_blocks(count, bounds, float(n) * m)
        row_starts = np.concatenate([[0], np.cumsum(counts)])
        if row_starts[-1] > limit:
            return None
        columns = np.empty(row_starts[-1], dtype=np.int32)
        values = np.empty(row_starts[-1])

        def fill(block: int, start: int, stop: int) -> None:
            compiled_sweeps.fill_stored(
                self._storage.rows, v, factors, cutoff, start, stop, row_starts, columns, values
            )

        run_blocks(fill, bounds, float(n) * m)
        return csr_matrix((values, columns, row_starts), shape=(n, m))

    def log_sum_targets(self, log_weights: np.ndarray) -> np.ndarray:
        """Exact; see `StreamedKernel.log_sum_targets`."""
        return self.exact.log_sum_targets(log_weights)

    def log_sum_sources(self, log_weights: np.ndarray) -> np.ndarray:
        """Exact; see `StreamedKernel.log_sum_sources`."""
        return self.exact.log_sum_sources(log_weights)

    def nearest_costs(self) -> np.ndarray:
        """min_i ½|u_i - v_j|², shape (m,)."""
        return self.exact.nearest_costs()

    def largest_cost(self) -> float:
        """See `StreamedKernel.largest_cost`."""
        return self.exact.largest_cost()

    def mean_cost(self) -> float:
        """Mean of ½|u_i - v_j|²."""
        return self.exact.mean_cost()

    def diameter_bound(self) -> float:
        """See `StreamedKernel.diameter_bound`."""
        return self.exact.diameter_bound()
