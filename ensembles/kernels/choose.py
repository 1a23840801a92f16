"""The one place that decides which kernel serves a problem."""

from __future__ import annotations

import numpy as np

from .base import Kernel
from .cached import CachedKernel
from .streamed import StreamedKernel

__all__ = ["gaussian_kernel"]

MEMORY = 512 * 2**20  # bytes that a stored kernel may take unless the caller allows more
_TINY = 40_000  # entries below which nothing is gained by storing


def gaussian_kernel(sources: np.ndarray, targets: np.ndarray, memory: float = MEMORY) -> Kernel:
    """exp(-½|u_i - v_j|²) between whitened clouds (n, d), (m, d): stored if it fits into `memory` bytes, else streamed."""
    streamed = StreamedKernel(sources, targets)
    entries = float(sources.shape[0]) * targets.shape[0]
    if _TINY < entries <= memory / 4:
        return CachedKernel(streamed)
    return streamed
