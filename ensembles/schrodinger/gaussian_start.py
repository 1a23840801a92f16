"""Potentials of the bridge between two Gaussians with the moments of the clouds: a start, exact for Gaussian clouds.

For whitened clouds with means m, n and covariances A, B the coupling's log-density against the product of its
marginals is
-½ x̃ᵀ M x̃ - ½ ỹᵀ N ỹ + x̃ᵀ ỹ + constant (centred x̃, ỹ), with

    N = A^½ r(A^½ B A^½) A^½,   M = B^½ r(B^½ A B^½) B^½,   r(z) = 2 / (1 + sqrt(1 + 4 z)),

from the closed form in Janati, Muzellec, Peyré and Cuturi 2020 (from memory; derived again in
tests/test_gaussian.py). No inverse occurs, so clouds with fewer points than coordinates are served as well.
"""

from __future__ import annotations

import numpy as np

__all__ = ["gaussian_curvature", "gaussian_potentials"]


def _square_root(matrix: np.ndarray) -> np.ndarray:
    values, vectors = np.linalg.eigh(matrix)
    return (vectors * np.sqrt(np.clip(values, 0.0, None))) @ vectors.T


def gaussian_curvature(inner: np.ndarray, outer: np.ndarray) -> np.ndarray:
    """S r(S T S) S with S = outer^½ and T = inner: N for (B, A), M for (A, B); all (d, d)."""
    root = _square_root(outer)
    values, vectors = np.linalg.eigh(root @ inner @ root)
    weight = 2.0 / (1.0 + np.sqrt(1.0 + 4.0 * np.clip(values, 0.0, None)))
    half = root @ vectors
    return (half * weight) @ half.T


def gaussian_potentials(
    sources: np.ndarray, targets: np.ndarray, source_weights: np.ndarray, target_weights: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Start values log_f (n,), log_g (m,) from whitened clouds (n, d), (m, d); the sweeps fix their constant."""
    m, n = source_weights @ sources, target_weights @ targets
    x, y = sources - m, targets - n
    start_covariance = (x.T * source_weights) @ x
    end_covariance = (y.T * target_weights) @ y
    curvature_end = gaussian_curvature(end_covariance, start_covariance)
    curvature_start = gaussian_curvature(start_covariance, end_covariance)
    # ½|u - v|² in centred coordinates: ½|x|² + ½|y|² - x·y + (m - n)·(x - y) + constant
    shift = m - n
    # and -½ xᵀ M x of the coupling's density: together ½ xᵀ (1 - M) x.
    identity = np.eye(x.shape[1])
    log_f = 0.5 * np.einsum("ij,ij->i", x @ (identity - curvature_start), x) + x @ shift
    log_g = 0.5 * np.einsum("ij,ij->i", y @ (identity - curvature_end), y) - y @ shift
    return log_f, log_g
