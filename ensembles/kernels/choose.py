"""The one place that decides which kernel serves a problem."""

from __future__ import annotations

import numpy as np

from .base import Kernel
from .cached import CachedKernel
from .streamed import StreamedKernel
from .truncated import TruncatedKernel

__all__ = ["MEMORY", "evaluation_kernel", "gaussian_kernel"]

MEMORY = 512 * 2**20  # bytes that a stored kernel may take unless the caller allows more
_TINY = 40_000  # entries below which nothing is gained by storing
_LARGE = 1e9  # entries from which leaving out pairs pays for the search
_FEW_DIMENSIONS = 3  # beyond, boxes of neighbours overlap with most others
_WIDE = 40.0  # mean cost of the balanced clouds from which most pairs can be left out


def gaussian_kernel(sources: np.ndarray, targets: np.ndarray, memory: float = MEMORY) -> Kernel:
    """exp(-½|u_i - v_j|²) between whitened clouds (n, d), (m, d).

    Stored if it fits into `memory` bytes; truncated where the clouds are large, of few
    dimensions and wide against the noise; else streamed.
    """
    entries = float(sources.shape[0]) * targets.shape[0]
    if _TINY < entries <= memory / 4:
        return CachedKernel(StreamedKernel(sources, targets))
    return evaluation_kernel(sources, targets)


def evaluation_kernel(sources: np.ndarray, targets: np.ndarray) -> StreamedKernel | TruncatedKernel:
    """The kernel for a single pass, when nothing is worth storing."""
    if float(sources.shape[0]) * targets.shape[0] > _LARGE and sources.shape[1] <= _FEW_DIMENSIONS:
        spread = float(np.sqrt(sources.var(axis=0).sum() * targets.var(axis=0).sum()))
        if spread > _WIDE:
            return TruncatedKernel(sources, targets)
    return StreamedKernel(sources, targets)
