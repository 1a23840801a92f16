"""Potentials that sit on the particles themselves: φ = Σ_j w_j δ(y_j).

Carried back over a transition N(F x + c, Q), with Q = L Lᵀ, u = L⁻¹(F x + c), v_j = L⁻¹ y_j and v̄ the soft mean of
v_j,

    log φ(x) = log_normaliser + log Σ_j w_j exp(-½|u - v_j|²),   ∇ log φ(x) = Fᵀ L⁻ᵀ (v̄ - u);

carried forward (atoms at the start), with u_i = L⁻¹(F x_i + c), v = L⁻¹ y and ū the soft mean of u_i,

    log φ̂(y) = log_normaliser + log Σ_i w_i exp(-½|u_i - v|²),   ∇ log φ̂(y) = L⁻ᵀ (ū - v).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.linalg import solve_triangular

from ..kernels.streamed import StreamedKernel, pick_targets

__all__ = ["AtomPotential", "GaussianTransition"]


class GaussianTransition(Protocol):
    """What an endpoint needs of a transition N(F x + c, Q)."""

    @property
    def matrix(self) -> np.ndarray:
        """F (d, d)."""

    @property
    def cholesky(self) -> np.ndarray:
        """L (d, d) with Q = L Lᵀ."""

    @property
    def log_normaliser(self) -> float:
        """-½ log det(2π Q)."""

    def whiten_sources(self, points: np.ndarray) -> np.ndarray:
        """L⁻¹(F x + c)."""

    def whiten_targets(self, points: np.ndarray) -> np.ndarray:
        """L⁻¹ y."""


@dataclass(frozen=True)
class AtomPotential:
    """Σ_j exp(log_weights_j) δ(points_j); points (n, d) in length, log_weights (n,), -inf for a particle of weight 0."""

    points: np.ndarray
    log_weights: np.ndarray

    def carried_back(self, transition: GaussianTransition, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ (m,) and its gradient (m, d) in 1/length, at x (m, d) one transition before the atoms."""
        u = transition.whiten_sources(x)
        log_sum, mean = StreamedKernel(u, transition.whiten_targets(self.points)).log_sum_and_mean(self.log_weights)
        gradient = solve_triangular(transition.cholesky, (mean - u).T, lower=True, trans="T").T @ transition.matrix
        return transition.log_normaliser + log_sum, gradient

    def carried_forward(self, transition: GaussianTransition, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ̂ (m,) and its gradient (m, d) in 1/length, at y (m, d) one transition after the atoms."""
        v = transition.whiten_targets(y)
        log_sum, mean = StreamedKernel(v, transition.whiten_sources(self.points)).log_sum_and_mean(self.log_weights)
        gradient = solve_triangular(transition.cholesky, (mean - v).T, lower=True, trans="T").T
        return transition.log_normaliser + log_sum, gradient

    def pick(
        self, transition: GaussianTransition, x: np.ndarray, counts: np.ndarray, rng: np.random.Generator
    ) -> np.ndarray:
        """Draw counts[i] atoms, by row number, with probability ∝ w_j p(y_j | x_i); result (Σ counts,) in order of i."""
        uniforms = rng.random(int(counts.sum()))
        return pick_targets(
            transition.whiten_sources(x), transition.whiten_targets(self.points), self.log_weights, counts, uniforms
        )
