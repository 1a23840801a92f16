"""Products with a sparse coupling on both cores, in the one form that second-order steps need."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_matrix

from .fast_exp import compiled
from .layout import BLOCKS
from .threads import block_bounds, run_blocks

__all__ = ["SchurOperator"]


@compiled
def _multiply(row_starts, columns, values, vector, start, stop, out):
    for i in range(start, stop):
        total = 0.0
        for k in range(row_starts[i], row_starts[i + 1]):
            total += values[k] * vector[columns[k]]
        out[i] = total


def _unsigned(matrix: csr_matrix) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    # Unsigned numbers spare the compiled loop the question whether an index counts from the end.
    return matrix.indptr.astype(np.uint64), matrix.indices.astype(np.uint32), matrix.data.astype(np.float32)


class SchurOperator:
    """x ↦ (diag(c) - πᵀ diag(1/r) π) x for a sparse coupling π (n, m) with row sums r and column sums c.

    Values are kept in single precision and summed in double; with r and c summed from the same values the operator is
    positive semi-definite, and constants are its kernel.
    """

    def __init__(self, coupling: csr_matrix) -> None:
        self.shape = coupling.shape
        transposed = coupling.T.tocsr()
        self._forward = _unsigned(coupling)
        self._backward = _unsigned(transposed)
        self.rows = self._product(self._forward, np.ones(self.shape[1]), self.shape[0])
        self.columns = self._product(self._backward, np.ones(self.shape[0]), self.shape[1])
        self._inverse_rows = 1.0 / np.maximum(self.rows, 1e-300)

    def diagonal(self) -> np.ndarray:
        """c_j - Σ_i π_ij² / r_i, shape (m,), not negative."""
        starts, columns, values = self._backward
        squared = (starts, columns, values * values)
        return np.maximum(self.columns - self._product(squared, self._inverse_rows, self.shape[1]), 0.0)

    def apply(self, vector: np.ndarray) -> np.ndarray:
        """The product with a vector (m,)."""
        ahead = self._product(self._forward, vector, self.shape[0])
        return self.columns * vector - self._product(self._backward, self._inverse_rows * ahead, self.shape[1])

    @staticmethod
    def _product(matrix: tuple[np.ndarray, np.ndarray, np.ndarray], vector: np.ndarray, size: int) -> np.ndarray:
        starts, columns, values = matrix
        out = np.empty(size)

        def task(block: int, start: int, stop: int) -> None:
            _multiply(starts, columns, values, vector, start, stop, out)

        run_blocks(task, block_bounds(size, BLOCKS), float(values.size))
        return out
