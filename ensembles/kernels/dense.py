"""A kernel held as a matrix of logarithms: any positive matrix, zeros included, or small Gaussian problems."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_matrix

from .. import logspace
from . import compiled_sweeps
from .base import Kernel, Sweep, lost_columns
from .threads import block_bounds, run_blocks

__all__ = ["DenseKernel"]

_BLOCKS = 8
_EXACT_DIAMETER = 200  # rows up to which the n² m diameter is computed rather than bounded


class DenseKernel(Kernel):
    """Any non-negative matrix k, given as log k (n, m); -inf stands for 0.

    Examples
    --------
    >>> import numpy as np
    >>> DenseKernel(np.log([[1.0, 2.0], [3.0, 4.0]])).log_sum_targets(np.zeros(2)).round(6).tolist()
    [1.098612, 1.94591]
    """

    def __init__(self, log_kernel: np.ndarray) -> None:
        self.log_kernel = np.ascontiguousarray(log_kernel, dtype=float)
        self.shape = (self.log_kernel.shape[0], self.log_kernel.shape[1])

    @classmethod
    def between(cls, sources: np.ndarray, targets: np.ndarray) -> DenseKernel:
        """-½|u_i - v_j|² for clouds (n, d) and (m, d), by differences, so that nothing cancels."""
        log_kernel = np.zeros((sources.shape[0], targets.shape[0]))
        for axis in range(sources.shape[1]):
            difference = sources[:, axis, None] - targets[None, :, axis]
            log_kernel -= 0.5 * difference * difference
        return cls(log_kernel)

    def at_scale(self, scale: float) -> DenseKernel:
        """The kernel k^(1/scale)."""
        return DenseKernel(self.log_kernel / scale)

    def restrict(self, rows: np.ndarray, columns: np.ndarray) -> DenseKernel:
        """Some rows and columns of the matrix."""
        return DenseKernel(self.log_kernel[np.ix_(rows, columns)])

    def log_sum_targets(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_j exp(log_weights_j) k_ij, shape (n,)."""
        return logspace.log_sum_exp(self.log_kernel + log_weights[None, :], axis=1)

    def log_sum_sources(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_i exp(log_weights_i) k_ij, shape (m,)."""
        return logspace.log_sum_exp(self.log_kernel + log_weights[:, None], axis=0)

    def sweep(self, log_f: np.ndarray, q: np.ndarray, log_a: np.ndarray, relaxation: float) -> Sweep:
        """One fused pass; see `Kernel.sweep`."""
        n, m = self.shape
        bounds = block_bounds(n, _BLOCKS)
        new_f, excess = np.empty(n), np.empty(n)
        partial = np.zeros((len(bounds), m))

        def task(block: int, start: int, stop: int) -> None:
            compiled_sweeps.sweep_matrix(
                self.log_kernel,
                q,
                log_f,
                log_a,
                relaxation,
                start,
                stop,
                np.empty((1, m)),
                new_f,
                excess,
                partial[block],
            )

        run_blocks(task, bounds, float(n) * m)
        sums = partial.sum(axis=0)
        lost = lost_columns(sums, log_a + new_f - log_f, excess)
        with np.errstate(divide="ignore"):
            logs = np.log(sums) - q
        if lost.size:
            logs[lost] = logspace.log_sum_exp(self.log_kernel[:, lost] + (log_a + new_f)[:, None], axis=0)
        return Sweep(new_f, excess, logs)

    def entries(self, p: np.ndarray, q: np.ndarray, cutoff: float, limit: int) -> csr_matrix | None:
        """Sparse exp(p_i + q_j) k_ij above `cutoff`, or None beyond `limit` entries."""
        values = np.exp(self.log_kernel + p[:, None] + q[None, :])
        values[values <= cutoff] = 0.0
        if np.count_nonzero(values) > limit:
            return None
        return csr_matrix(values)

    def nearest_costs(self) -> np.ndarray:
        """min_i -log k_ij, infinite for a column of zeros."""
        return -self.log_kernel.max(axis=0)

    def largest_cost(self) -> float:
        """max -log k_ij."""
        return -float(self.log_kernel.min())

    def mean_cost(self) -> float:
        """Mean of -log k_ij above its smallest value, over non-zero entries."""
        finite = self.log_kernel[np.isfinite(self.log_kernel)]
        return float(finite.max() - finite.mean()) if finite.size else 0.0

    def diameter_bound(self) -> float:
        """Birkhoff's diameter: exact up to 200 rows, beyond that twice the spread against the first row."""
        if self.shape[0] <= _EXACT_DIAMETER:
            return logspace.birkhoff_diameter(self.log_kernel)
        if not np.isfinite(self.log_kernel).all():
            return float("inf")
        difference = self.log_kernel - self.log_kernel[0]
        return 2.0 * float(np.max(np.ptp(difference, axis=1)))
