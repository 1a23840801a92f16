"""Which rows meet which columns, in an order that does not depend on the number of threads."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .threads import block_bounds

__all__ = ["Layout", "aligned", "full_layout"]

BLOCKS = 8  # groups of rows with column sums of their own: fixed, so that the order of summation is fixed


@dataclass(frozen=True)
class Layout:
    """Chunks of rows, and for each the ranges of columns that take part.

    Attributes
    ----------
    bounds : (c, 2) first and last + 1 row of each chunk.
    pointers : (c + 1,) where each chunk's ranges begin and end.
    ranges : (r, 2) first and last + 1 column of each range.
    groups : chunks (first, last + 1) that one thread works on at a time.
    """

    bounds: np.ndarray
    pointers: np.ndarray
    ranges: np.ndarray
    groups: list[tuple[int, int]]

    @property
    def width(self) -> int:
        """Most columns that a row meets."""
        lengths = self.ranges[:, 1] - self.ranges[:, 0]
        sums = np.concatenate([[0], np.cumsum(lengths)])[self.pointers]
        return int(np.diff(sums).max(initial=0))

    @property
    def entries(self) -> float:
        """Kernel entries of one pass."""
        lengths = self.ranges[:, 1] - self.ranges[:, 0]
        sums = np.concatenate([[0], np.cumsum(lengths)])[self.pointers]
        return float(np.diff(sums) @ (self.bounds[:, 1] - self.bounds[:, 0]).astype(float))


def full_layout(rows: int, columns: int) -> Layout:
    """Every row meets every column."""
    bounds = np.array(block_bounds(rows, BLOCKS), dtype=np.int64).reshape(-1, 2)
    chunks = bounds.shape[0]
    return Layout(
        bounds,
        np.arange(chunks + 1, dtype=np.int64),
        np.tile(np.array([[0, columns]], dtype=np.int64), (chunks, 1)),
        [(c, c + 1) for c in range(chunks)],
    )


_LINE = 8  # doubles of a line of cache, and of the widest vectors


def aligned(rows: int, columns: int) -> np.ndarray:
    """Zeros (rows, at least columns), every row beginning where a line of cache does: vectors are then loaded in one piece."""
    width = -(-columns // _LINE) * _LINE
    raw = np.zeros(rows * width + _LINE)
    skipped = (-raw.ctypes.data // raw.itemsize) % _LINE
    return raw[skipped : skipped + rows * width].reshape(rows, width)
