"""Telling raw counts from coordinates."""

from __future__ import annotations

from typing import Any

import numpy as np

from ..checks import InputError

__all__ = ["looks_like_counts", "require_no_counts"]

_DISPERSION = 10.0  # variance over mean; coordinates that happen to be whole numbers rarely reach it and stay positive


def looks_like_counts(values: Any) -> bool:
    """Whether a dense or sparse table (n, d) holds whole non-negative numbers with a variance far above the mean.

    Examples
    --------
    >>> looks_like_counts(np.array([[0, 3], [400, 0], [0, 90], [7, 2]]))
    True
    >>> looks_like_counts(np.array([[1.0, 2.0], [2.0, 1.0]]))
    False
    """
    entries = values.data if hasattr(values, "tocsr") else np.asarray(values)
    entries = np.ravel(entries)
    if entries.size == 0 or entries.min() < 0 or (entries != np.rint(entries)).any():
        return False
    size = float(np.prod(values.shape))
    mean = float(entries.sum(dtype=float)) / size
    variance = float((entries.astype(float) ** 2).sum()) / size - mean**2
    return variance > _DISPERSION * max(mean, 1e-300)


def require_no_counts(values: Any, name: str) -> None:
    """Refuse raw counts where coordinates are expected."""
    if looks_like_counts(values):
        largest = float(values.max())
        raise InputError(
            f"raw counts where coordinates are expected; {name} holds whole numbers from 0 to {largest:g} with a variance far "
            "above their mean; normalise each cell, take logarithms and make principal components first"
        )
