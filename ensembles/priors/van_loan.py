"""Exact moments of a linear stochastic differential equation over any duration, short or long.

One short step by Van Loan's block exponential (Van Loan, IEEE Trans. Automatic Control 23, 395, 1978; from memory),
then doubling: X over 2h is X over h, twice, so

    F(2h) = F F,   c(2h) = F c + c,   Q(2h) = Q + F Q Fᵀ.

The block exponential itself holds expm(-A τ), which overflows for a stable A over a long duration; after scaling to
|A| h ≤ ½ it never does, and every doubling adds positive semi-definite matrices. Diagonal A has a closed form.
"""

from __future__ import annotations

import numpy as np
from scipy.linalg import expm

__all__ = ["linear_transition"]


def _mean_decay(z: np.ndarray) -> np.ndarray:
    """(exp(z) - 1) / z, equal to 1 at z = 0."""
    safe = np.where(z == 0.0, 1.0, z)
    with np.errstate(over="ignore"):
        return np.where(z == 0.0, 1.0, np.expm1(safe) / safe)


def linear_transition(
    matrix: np.ndarray, constant: np.ndarray, noise: np.ndarray, duration: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """F (d, d), c (d,), Q (d, d) of dX = (A X + a) dt + noise^½ dW over `duration`; noise = 2D (d, d)."""
    if not np.any(matrix - np.diag(np.diag(matrix))):
        return _diagonal(np.diag(matrix), constant, noise, duration)
    dimension = constant.size
    doublings = max(0, int(np.ceil(np.log2(max(float(np.linalg.norm(matrix, 2)) * duration, 1e-300) / 0.5))))
    step = duration / 2.0**doublings
    scale = np.abs(noise).max()
    block = np.zeros((2 * dimension, 2 * dimension))
    block[:dimension, :dimension] = -matrix * step
    block[:dimension, dimension:] = noise / scale
    block[dimension:, dimension:] = matrix.T * step
    # The result is linear in the off-diagonal block, which is kept near 1 so that expm does not subdivide for its sake.
    exponential = expm(block)
    propagator = exponential[dimension:, dimension:].T
    covariance = scale * step * propagator @ exponential[:dimension, dimension:]
    affine = np.zeros((dimension + 1, dimension + 1))
    size = max(np.abs(constant).max(), 1e-300)
    affine[:dimension, :dimension] = matrix * step
    affine[:dimension, dimension] = constant / size
    shift = size * step * expm(affine)[:dimension, dimension]
    with np.errstate(over="ignore", invalid="ignore"):
        for _ in range(doublings):
            covariance = covariance + propagator @ covariance @ propagator.T
            shift = propagator @ shift + shift
            propagator = propagator @ propagator
    return propagator, shift, 0.5 * (covariance + covariance.T)


def _diagonal(
    rates: np.ndarray, constant: np.ndarray, noise: np.ndarray, duration: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    with np.errstate(over="ignore", invalid="ignore"):
        pair_rates = rates[:, None] + rates[None, :]
        covariance = noise * duration * _mean_decay(pair_rates * duration)
        shift = constant * duration * _mean_decay(rates * duration)
        return np.diag(np.exp(rates * duration)), shift, covariance
