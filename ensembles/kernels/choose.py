"""The one place that decides which kernel serves a problem."""

from __future__ import annotations

import numpy as np

from .base import Kernel
from .dense import DenseKernel
from .streamed import StreamedKernel

__all__ = ["gaussian_kernel"]

_DENSE_ENTRIES = 4_000_000  # 32 MB of logarithms
_DENSE_DIMENSION = 8  # below this, computing a distance is cheaper than reading it from memory


def gaussian_kernel(sources: np.ndarray, targets: np.ndarray) -> Kernel:
    """exp(-½|u_i - v_j|²) between whitened clouds (n, d) and (m, d): stored when small and high-dimensional, else streamed."""
    n, d = sources.shape
    if d >= _DENSE_DIMENSION and n * targets.shape[0] <= _DENSE_ENTRIES:
        return DenseKernel.between(sources, targets)
    return StreamedKernel(sources, targets)
