"""The law of the end given points before it: a mixture, whose components are atoms where their covariance is 0."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.linalg import solve_triangular

from .. import checks
from ..logspace import log_sum_exp
from .quadratic import Posterior, apply, as_full

__all__ = ["ConditionalEnd"]

_LARGEST = 200_000_000  # numbers in one result, 1.6 GB


@dataclass(frozen=True, repr=False)
class ConditionalEnd:
    """π(y | x_i) = Σ_k weights_ik N(y | mean_ik, covariance_k) for m given points; K components, d coordinates.

    In the frame y = basis z + centre, mean_ik = basis (gains_k at_i + offsets_k) + centre and the covariances are those of
    `components`.

    Attributes
    ----------
    weights : (m, K); rows sum to 1.
    at : (m, d), the given points carried to the end by the prior's mean, in the frame.
    components : gains, offsets, covariances in the frame.
    centre, basis : (d,) and lower triangular (d, d), in length.
    """

    weights: np.ndarray
    at: np.ndarray
    components: Posterior
    centre: np.ndarray
    basis: np.ndarray

    @property
    def shape(self) -> tuple[int, int, int]:
        """Given points m, components K, coordinates d."""
        return (*self.weights.shape, self.centre.size)

    @property
    def covariances(self) -> np.ndarray:
        """Covariance of every component, (K, d, d) in length²; 0 for atoms."""
        self._require_size(self.shape[1] * self.shape[2] ** 2)
        full = self.basis @ as_full(self.components.covariances) @ self.basis.T
        return np.broadcast_to(full, (self.shape[1], *full.shape[1:]))

    @property
    def means(self) -> np.ndarray:
        """Mean of every component given every point, (m, K, d) in length."""
        self._require_size(int(np.prod(self.shape)))
        return np.stack([self._mean(k) for k in range(self.shape[1])], axis=1) @ self.basis.T + self.centre

    def mean(self) -> np.ndarray:
        """E[y | x_i], (m, d) in length."""
        gains = self.components.gains
        total = self.weights @ self.components.offsets
        if gains.ndim == 2:
            total += (gains[0] if len(gains) == 1 else self.weights @ gains) * self.at
        elif len(gains) == 1:
            total += self.at @ gains[0].T
        else:
            for k, gain in enumerate(gains):
                total += self.weights[:, k, None] * (self.at @ gain.T)
        return total @ self.basis.T + self.centre

    def covariance(self) -> np.ndarray:
        """Cov[y | x_i], (m, d, d) in length²: within components and between their means."""
        m, _, d = self.shape
        self._require_size(m * d * d)
        within = as_full(self.components.covariances)
        out = np.empty((m, d, d))
        gains, offsets = as_full(self.components.gains), self.components.offsets
        weights = np.ones((m, 1)) if len(within) == 1 else self.weights
        flat = within.reshape(len(within), d * d)
        for i in range(m):
            means = offsets + self.at[i] @ gains.swapaxes(1, 2)
            row = self.weights[i]
            apart = means - row @ means
            out[i] = (weights[i] @ flat).reshape(d, d) + (apart.T * row) @ apart
        return self.basis @ out @ self.basis.T

    def log_density(self, y: np.ndarray) -> np.ndarray:
        """log π(y_i | x_i) for matching rows, y (m, d); result (m,) in nats per length^d.

        Raises
        ------
        InputError
            For atoms, which have no density.
        """
        y = checks.points(y, "y", self.shape[2])
        if len(y) != self.shape[0]:
            raise checks.InputError(
                f"y must have a row for every given point; it has {len(y)} for {self.shape[0]}; match the rows"
            )
        if not self.components.covariances.any():
            raise checks.InputError(
                "the end given a point has no density; its components are atoms (ends='atoms'); "
                "fit with ends='mixture' or ends='kernel'"
            )
        z = solve_triangular(self.basis, (y - self.centre).T, lower=True).T
        roots = np.linalg.cholesky(as_full(self.components.covariances))
        logs = np.empty(self.weights.shape)
        for k in range(self.shape[1]):
            root = roots[k if len(roots) > 1 else 0]
            apart = solve_triangular(root, (z - self._mean(k)).T, lower=True)
            logs[:, k] = -0.5 * (apart * apart).sum(axis=0) - np.log(np.diag(root)).sum()
        constant = 0.5 * self.shape[2] * np.log(2.0 * np.pi) + np.log(np.diag(self.basis)).sum()
        with np.errstate(divide="ignore"):
            return log_sum_exp(logs + np.log(self.weights), axis=1) - constant

    def sample(self, rng: Any = 0) -> np.ndarray:
        """One end for each given point, (m, d); exact."""
        return self.sample_with_components(checks.generator(rng))[0]

    def sample_with_components(self, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
        """One end for each given point (m, d), and the component (m,) it was drawn from."""
        cumulative = np.cumsum(self.weights, axis=1)
        picked = (rng.random(len(self.at))[:, None] * cumulative[:, -1:] >= cumulative).sum(axis=1)
        picked = np.minimum(picked, self.shape[1] - 1)
        noise = rng.standard_normal(self.at.shape)
        z = np.empty_like(self.at)
        covariances = self.components.covariances
        for k in np.unique(picked):
            rows = picked == k
            c = covariances[k if len(covariances) > 1 else 0]
            # A square root that also serves covariance 0.
            moved = noise[rows] * np.sqrt(c) if c.ndim == 1 else noise[rows] @ _root(c).T
            z[rows] = self._mean(k, rows) + moved
        return z @ self.basis.T + self.centre, picked

    def _mean(self, k: int, rows: np.ndarray | slice = slice(None)) -> np.ndarray:
        gains = self.components.gains
        gain = gains[k if len(gains) > 1 else 0]
        at = self.at[rows]
        return (
            apply(gain[None], at) + self.components.offsets[k]
            if gain.ndim == 1
            else at @ gain.T + self.components.offsets[k]
        )

    def _require_size(self, numbers: int) -> None:
        if numbers > _LARGEST:
            raise checks.InputError(
                f"the result is too large; it would hold {numbers:,} numbers (points, components, coordinates: "
                f"{self.shape}); ask for fewer points at a time"
            )

    def __repr__(self) -> str:
        m, count, d = self.shape
        kind = "atoms" if not self.components.covariances.any() else "Gaussian components"
        return f"ConditionalEnd({m} point(s), {count} {kind}, {d} dimension(s))"


def _root(covariance: np.ndarray) -> np.ndarray:
    values, vectors = np.linalg.eigh(covariance)
    return vectors * np.sqrt(np.clip(values, 0.0, None))
