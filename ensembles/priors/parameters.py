"""Reading scalar, per-axis and matrix parameters of a prior."""

from __future__ import annotations

from typing import Any

import numpy as np

from .. import checks

__all__ = ["diffusion_parameter", "expand_matrix", "expand_vector", "plain", "vector_parameter"]


def plain(value: np.ndarray) -> Any:
    """A number or nested lists, for text files."""
    return value.tolist()


def diffusion_parameter(value: Any) -> np.ndarray:
    """Check a diffusion coefficient: positive scalar, (d,) positive, or (d, d) symmetric positive definite."""
    array = checks.as_float_array(value, "diffusion")
    checks.require_finite(array, "diffusion", "give it in length²/time")
    if array.ndim == 2:
        return checks.spd_matrix(array, "diffusion")
    if array.ndim > 2 or array.size == 0:
        raise checks.InputError(
            f"diffusion must be a number, d numbers or a d by d matrix; its shape is {array.shape}; reshape it"
        )
    if (array <= 0).any():
        where = "" if array.ndim == 0 else f"[{int(np.argmax(array <= 0))}]"
        bad = float(array) if array.ndim == 0 else array[array <= 0][0]
        raise checks.InputError(
            f"diffusion must be positive; diffusion{where} = {bad:g}; "
            "give the diffusion coefficient in length²/time; for a motion almost without noise, a small positive one"
        )
    return array


def vector_parameter(value: Any, name: str) -> np.ndarray:
    """Check a finite scalar or (d,) parameter."""
    array = checks.as_float_array(value, name)
    checks.require_finite(array, name)
    if array.ndim > 1 or array.size == 0:
        raise checks.InputError(f"{name} must be a number or d numbers; its shape is {array.shape}; reshape it")
    return array


def _require_dimension(array: np.ndarray, dimension: int, name: str) -> None:
    if array.ndim and array.shape[0] != dimension:
        raise checks.InputError(
            f"{name} has the wrong dimension; it is given for {array.shape[0]} coordinate(s), the positions have "
            f"{dimension}; give one number, or {dimension}"
        )


def expand_matrix(array: np.ndarray, dimension: int, name: str) -> np.ndarray:
    """The (d, d) matrix of a scalar, per-axis or matrix parameter."""
    _require_dimension(array, dimension, name)
    if array.ndim == 2:
        return array.copy()
    return np.diag(np.broadcast_to(array, (dimension,)).astype(float))


def expand_vector(array: np.ndarray, dimension: int, name: str) -> np.ndarray:
    """The (d,) vector of a scalar or per-axis parameter."""
    _require_dimension(array, dimension, name)
    return np.broadcast_to(array, (dimension,)).astype(float)
