"""How the covariances of a fitted mixture are parametrised: diagonal, full, or low-rank plus diagonal.

Each kind turns a vector without constraints into K positive covariances and pulls a gradient with respect to them back.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .. import checks

__all__ = ["COVARIANCES", "Parametrisation", "parametrisation"]

COVARIANCES = ("diagonal", "full", "low-rank")


@dataclass(frozen=True)
class Parametrisation:
    """K covariances of d coordinates: C = diag(exp s), C = T Tᵀ with T lower triangular, or C = diag(exp s) + V Vᵀ."""

    kind: str
    count: int
    dimension: int
    rank: int = 0

    @property
    def diagonal(self) -> bool:
        """Whether covariances are kept as (K, d)."""
        return self.kind == "diagonal"

    @property
    def size(self) -> int:
        """Numbers in the parameter vector."""
        d = self.dimension
        return self.count * {"diagonal": d, "full": d * (d + 1) // 2, "low-rank": d * (1 + self.rank)}[self.kind]

    def pack(self, covariances: np.ndarray) -> np.ndarray:
        """Parameters of given covariances (K, d, d) or (K, d); for the low-rank kind, the nearest by eigenvectors."""
        if self.kind == "diagonal":
            variances = covariances if covariances.ndim == 2 else np.diagonal(covariances, axis1=1, axis2=2)
            return np.log(variances).ravel()
        full = covariances if covariances.ndim == 3 else covariances[:, :, None] * np.eye(self.dimension)
        if self.kind == "full":
            roots = np.linalg.cholesky(full)
            i, j = np.tril_indices(self.dimension)
            packed = roots[:, i, j]
            packed[:, i == j] = np.log(packed[:, i == j])
            return packed.ravel()
        values, vectors = np.linalg.eigh(full)
        values, vectors = values[:, ::-1], vectors[:, :, ::-1]
        rest = values[:, self.rank :].mean(axis=1) if self.rank < self.dimension else 0.5 * values[:, -1]
        # A little of each direction in V, so that a gradient can turn it.
        lengths = np.sqrt(np.maximum(values[:, : self.rank] - rest[:, None], 1e-2 * rest[:, None]))
        log_rest = np.log(np.repeat(rest[:, None], self.dimension, axis=1))
        return np.concatenate([log_rest.ravel(), (vectors[:, :, : self.rank] * lengths[:, None]).ravel()])

    def unpack(self, packed: np.ndarray) -> np.ndarray:
        """Covariances (K, d) or (K, d, d)."""
        k, d = self.count, self.dimension
        if self.kind == "diagonal":
            return np.exp(packed.reshape(k, d))
        if self.kind == "full":
            roots = self._roots(packed)
            return roots @ roots.swapaxes(1, 2)
        values, factors = np.exp(packed[: k * d].reshape(k, d)), packed[k * d :].reshape(k, d, self.rank)
        return factors @ factors.swapaxes(1, 2) + values[:, :, None] * np.eye(d)

    def pulled_back(self, packed: np.ndarray, gradient: np.ndarray) -> np.ndarray:
        """Gradient in the parameters from the one in the covariances (as unpacked; symmetric where full)."""
        k, d = self.count, self.dimension
        if self.kind == "diagonal":
            return gradient.ravel() * np.exp(packed)
        if self.kind == "full":
            roots = self._roots(packed)
            i, j = np.tril_indices(d)
            by_root = (2.0 * gradient @ roots)[:, i, j]
            by_root[:, i == j] *= roots[:, i, j][:, i == j]
            return by_root.ravel()
        values, factors = np.exp(packed[: k * d].reshape(k, d)), packed[k * d :].reshape(k, d, self.rank)
        by_value = np.diagonal(gradient, axis1=1, axis2=2) * values
        return np.concatenate([by_value.ravel(), (2.0 * gradient @ factors).ravel()])

    def _roots(self, packed: np.ndarray) -> np.ndarray:
        d = self.dimension
        i, j = np.tril_indices(d)
        flat = packed.reshape(self.count, -1).copy()
        flat[:, i == j] = np.exp(flat[:, i == j])
        roots = np.zeros((self.count, d, d))
        roots[:, i, j] = flat
        return roots


def parametrisation(kind: str, count: int, dimension: int, rank: int = 0) -> Parametrisation:
    """Check the kind and the rank."""
    if kind not in COVARIANCES:
        raise checks.unknown_name("covariance", kind, COVARIANCES)
    if kind == "low-rank" and not 1 <= rank <= dimension:
        raise checks.InputError(
            f"rank does not fit the dimension; rank = {rank} in {dimension} coordinate(s); use 1 to {dimension}"
        )
    return Parametrisation(kind, count, dimension, rank)
