"""Sums of exponentials of quadratics, the functions that Gaussian transitions map into themselves.

    q(z) = Σ_k exp(β_k + η_k·z - ½ zᵀ Λ_k z)

Λ_k need not be positive: a bump that grows outwards serves ends that are wider than the prior alone reaches. Averaged
over N(m, R) with I + Λ_k R positive,

    β' = β - ½ log det(I + Λ R) + ½ ηᵀ R (I + Λ R)⁻¹ η,   η' = (I + Λ R)⁻¹ η,   Λ' = (I + Λ R)⁻¹ Λ,

and z ∝ N(z | m, R) q(z) is a Gaussian mixture: component k has covariance R (I + Λ_k R)⁻¹ and mean
(I + R Λ_k)⁻¹ (m + R η_k).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..checks import ComputationError
from ..logspace import log_sum_exp

__all__ = ["Posterior", "QuadraticMixture", "apply", "as_diagonal", "as_full"]

_TILE = 1_000_000  # numbers in a block of points by components, and by coordinates where precisions are full


@dataclass(frozen=True)
class Posterior:
    """Given m, component k is N(gains_k m + offsets_k, covariances_k); diagonal ones are (K, d), full ones (K, d, d).

    `gains` and `covariances` have a first axis of 1 where all components share them.
    """

    gains: np.ndarray
    offsets: np.ndarray
    covariances: np.ndarray


@dataclass(frozen=True)
class QuadraticMixture:
    """q(z): log_weights (K,), linear (K, d), precision (K, d) on the diagonal or (K, d, d); one for all: (1, ...)."""

    log_weights: np.ndarray
    linear: np.ndarray
    precision: np.ndarray

    @property
    def diagonal(self) -> bool:
        """Whether the precisions are diagonal."""
        return self.precision.ndim == 2

    @property
    def count(self) -> int:
        """Number of components K."""
        return self.log_weights.size

    def full(self) -> QuadraticMixture:
        """The same with precisions as matrices."""
        return QuadraticMixture(self.log_weights, self.linear, as_full(self.precision))

    def carried(self, covariance: np.ndarray) -> QuadraticMixture:
        """m -> E q(m + noise) for Gaussian noise of `covariance` (d,) or (d, d)."""
        if self.diagonal and covariance.ndim == 1:
            growth = 1.0 + self.precision * covariance
            _require_positive(growth.min())
            log_det = np.log(growth).sum(axis=1)
            linear, precision = self.linear / growth, self.precision / growth
            gain = (self.linear * covariance * linear).sum(axis=1)
        else:
            precision, covariance = as_full(self.precision), _matrix(covariance)
            inverse, log_det = _inverse_growth(precision, covariance)
            linear, precision = apply(inverse, self.linear), inverse @ precision
            precision = 0.5 * (precision + precision.swapaxes(1, 2))
            gain = (self.linear @ covariance * linear).sum(axis=1)
        return QuadraticMixture(self.log_weights + 0.5 * (gain - log_det), linear, precision)

    def posterior(self, covariance: np.ndarray) -> Posterior:
        """The law ∝ N(z | m, covariance) q(z) as a Gaussian mixture, for every m."""
        if self.diagonal and covariance.ndim == 1:
            gains = 1.0 / (1.0 + self.precision * covariance)
            covariances = gains * covariance
        else:
            covariance = _matrix(covariance)
            gains = _inverse_growth(as_full(self.precision), covariance)[0].swapaxes(1, 2)
            covariances = gains @ covariance
            covariances = 0.5 * (covariances + covariances.swapaxes(1, 2))
        return Posterior(gains, apply(covariances, self.linear), covariances)

    def moved(self, matrix: np.ndarray, shift: np.ndarray) -> QuadraticMixture:
        """z -> q(matrix z + shift); matrix (d,) for a diagonal one, or (d, d)."""
        pulled = apply(self.precision, np.broadcast_to(shift, self.linear.shape))
        inner = self.linear - pulled
        log_weights = self.log_weights + (self.linear - 0.5 * pulled) @ shift
        if self.diagonal and matrix.ndim == 1:
            return QuadraticMixture(log_weights, inner * matrix, self.precision * matrix**2)
        matrix = _matrix(matrix)
        precision = matrix.T @ as_full(self.precision) @ matrix
        return QuadraticMixture(log_weights, inner @ matrix, 0.5 * (precision + precision.swapaxes(1, 2)))

    def log_components(self, points: np.ndarray) -> np.ndarray:
        """β_k + η_k·z - ½ zᵀΛ_k z for points (n, d); result (n, K)."""
        logs = points @ self.linear.T + self.log_weights
        if self.diagonal:
            return logs - 0.5 * ((points * points) @ self.precision.T)
        for k, precision in enumerate(self.precision):
            quadratic = np.einsum("ij,ij->i", points @ precision, points)
            if self.precision.shape[0] == 1:
                return logs - 0.5 * quadratic[:, None]
            logs[:, k] -= 0.5 * quadratic
        return logs

    def evaluate(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log q (n,) and ∇ log q (n, d), in tiles of points; never NaN.

        Raises
        ------
        ComputationError
            Where a point is so far away that its square overflows.
        """
        values, gradients = np.empty(len(points)), np.empty_like(points)
        step = max(1, _TILE // (self.precision[..., 0].size + self.linear.size))
        for first in range(0, len(points), step):
            part = slice(first, first + step)
            with np.errstate(over="ignore", invalid="ignore"):
                values[part], gradients[part] = self._evaluate_tile(points[part])
        require_finite_results(values, gradients)
        return values, gradients

    def _evaluate_tile(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """`evaluate` without its check; every product Λ_k z of a full precision is formed once."""
        if self.diagonal:
            logs = self.log_components(points)
            values = log_sum_exp(logs, axis=1)
            shares = np.exp(logs - values[:, None])
            pulled = (self.precision[0] if len(self.precision) == 1 else shares @ self.precision) * points
            return values, shares @ self.linear - pulled
        n, d = points.shape
        products = (points @ self.precision.transpose(1, 0, 2).reshape(d, -1)).reshape(n, -1, d)
        logs = points @ self.linear.T + self.log_weights - 0.5 * np.matmul(products, points[:, :, None])[:, :, 0]
        values = log_sum_exp(logs, axis=1)
        shares = np.exp(logs - values[:, None])
        weights = np.ones((n, 1)) if len(self.precision) == 1 else shares
        return values, shares @ self.linear - np.matmul(weights[:, None], products)[:, 0]


def require_finite_results(values: np.ndarray, gradients: np.ndarray) -> None:
    """Refuse results that floating point could not hold."""
    bad = ~(np.isfinite(values) & np.isfinite(gradients).all(axis=1))
    if bad.any():
        raise ComputationError(
            f"the potential cannot be evaluated in floating point; row {int(np.argmax(bad))} of the points "
            f"({int(bad.sum())} such row(s)) lies too far from the snapshots; ask at points nearer to them"
        )


def as_full(values: np.ndarray) -> np.ndarray:
    """(K, d) diagonals as (K, d, d) matrices; matrices as they are."""
    return values[:, :, None] * np.eye(values.shape[1]) if values.ndim == 2 else values


def as_diagonal(matrix: np.ndarray) -> np.ndarray:
    """(d,) where a matrix (d, d) is diagonal up to rounding, else the matrix itself."""
    diagonal = np.diag(matrix)
    scale = np.sqrt(np.abs(np.outer(diagonal, diagonal)))
    return diagonal.copy() if (np.abs(matrix - np.diag(diagonal)) <= 1e-13 * scale).all() else matrix


def apply(matrices: np.ndarray, vectors: np.ndarray) -> np.ndarray:
    """matrices_k vectors_k, for diagonal (K|1, d) or full (K|1, d, d) matrices and vectors (K, d)."""
    return matrices * vectors if matrices.ndim == 2 else np.matmul(matrices, vectors[:, :, None])[:, :, 0]


def _matrix(values: np.ndarray) -> np.ndarray:
    return np.diag(values) if values.ndim == 1 else values


def _inverse_growth(precision: np.ndarray, covariance: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """(I + Λ R)⁻¹ and log det(I + Λ R), from the symmetric I + Tᵀ Λ T with R = T Tᵀ."""
    root = np.linalg.cholesky(covariance)
    symmetric = np.eye(len(root)) + root.T @ precision @ root
    try:
        factor = np.linalg.cholesky(symmetric)
    except np.linalg.LinAlgError:
        _require_positive(np.linalg.eigvalsh(symmetric).min())
        raise
    log_det = 2.0 * np.log(np.diagonal(factor, axis1=1, axis2=2)).sum(axis=1)
    return np.linalg.inv(np.eye(len(root)) + precision @ covariance), log_det


def _require_positive(smallest: float) -> None:
    if not smallest > 0:
        raise ComputationError(
            f"the potential grows faster than the prior's noise can average; the smallest eigenvalue of I + ΛR is "
            f"{smallest:.3g}; the transition is longer than the gap this potential was fitted for: use a shorter one"
        )
