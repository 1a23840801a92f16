"""The compiled walk along pinned paths: noise becomes positions in place, one linear-Gaussian step after another."""

from __future__ import annotations

import numpy as np

from .fast_exp import compiled
from .threads import block_bounds, run_blocks

__all__ = ["walk"]

_PATHS = 2048  # paths whose noise is drawn at a time; stays in cache
_BLOCKS = 8


@compiled
def _walk_block(keep, pull, shift, spread, begin, end, noise, diagonal, start, stop, out):
    steps = keep.shape[0]
    d = begin.shape[1]
    current = np.empty(d)
    for i in range(start, stop):
        for r in range(d):
            current[r] = begin[i, r]
        target = end[i]
        for k in range(steps):
            row = out[i, k]
            drawn = noise[i, k]
            if diagonal:
                for r in range(d):
                    value = shift[k, r] + keep[k, r, r] * current[r] + pull[k, r, r] * target[r]
                    row[r] = value + spread[k, r, r] * drawn[r]
            else:
                for r in range(d):
                    value = shift[k, r]
                    for c in range(d):
                        value += keep[k, r, c] * current[c] + pull[k, r, c] * target[c] + spread[k, r, c] * drawn[c]
                    row[r] = value
            for r in range(d):
                current[r] = row[r]


def walk(
    steps: tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray],
    begin: np.ndarray,
    end: np.ndarray,
    rng: np.random.Generator,
    out: np.ndarray,
) -> None:
    """Fill out (count, T, d) with X_k = P_k X_(k-1) + Q_k y + s_k + S_k z_k from X_0 = begin towards y = end, both (count, d).

    `steps` is P (T, d, d), Q (T, d, d), s (T, d), S (T, d, d). Noise is drawn path by path in one thread, so the result
    does not depend on the number of threads.
    """
    keep, pull, shift, spread = steps
    count, length, d = out.shape
    diagonal = not any(np.any(matrix * (1.0 - np.eye(d))) for matrix in (keep, pull, spread))
    for first in range(0, count, _PATHS):
        part = slice(first, min(first + _PATHS, count))
        noise = rng.standard_normal((part.stop - first, length, d))
        starts, ends, view = np.ascontiguousarray(begin[part]), np.ascontiguousarray(end[part]), out[part]

        def task(block: int, start: int, stop: int, noise=noise, starts=starts, ends=ends, view=view) -> None:
            _walk_block(keep, pull, shift, spread, starts, ends, noise, diagonal, start, stop, view)

        run_blocks(task, block_bounds(part.stop - first, _BLOCKS), float(noise.size))
