"""Potentials that sit on the particles themselves: φ = Σ_j w_j δ(y_j).

Carried back over a transition N(F x + c, Q), with Q = L Lᵀ, u = L⁻¹(F x + c), v_j = L⁻¹ y_j and v̄ the soft mean of
v_j,

    log φ(x) = log_normaliser + log Σ_j w_j exp(-½|u - v_j|²),   ∇ log φ(x) = Fᵀ L⁻ᵀ (v̄ - u);

carried forward (atoms at the start), with u_i = L⁻¹(F x_i + c), v = L⁻¹ y and ū the soft mean of u_i,

    log φ̂(y) = log_normaliser + log Σ_i w_i exp(-½|u_i - v|²),   ∇ log φ̂(y) = L⁻ᵀ (ū - v).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from scipy.linalg import solve_triangular

from ..checks import InputError
from ..kernels.streamed import StreamedKernel, pick_targets
from ..logspace import log_sum_exp
from .base import GaussianTransition
from .conditional import ConditionalEnd
from .quadratic import Posterior

__all__ = ["AtomPotential"]

_LARGEST = 200_000_000  # numbers in a table of points by particles, 1.6 GB


@dataclass(frozen=True)
class AtomPotential:
    """Σ_j exp(log_weights_j) δ(points_j); points (n, d) in length, log_weights (n,), -inf for a particle of weight 0."""

    points: np.ndarray
    log_weights: np.ndarray
    smooth: ClassVar[bool] = False

    def log_value(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Refused: atoms have no density at the end itself."""
        raise InputError(
            f"atoms have no density at a snapshot; {len(points)} point(s) were asked for at the end of a gap; "
            "ask at a time strictly between two snapshots, or fit with ends='mixture'"
        )

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

    def draw(
        self, transition: GaussianTransition, x: np.ndarray, rng: np.random.Generator
    ) -> tuple[np.ndarray, np.ndarray]:
        """One atom for each row of x: positions (m, d) and row numbers (m,)."""
        rows = self.pick(transition, x, np.ones(len(x), dtype=np.int64), rng)
        return self.points[rows], rows

    def given(self, transition: GaussianTransition, x: np.ndarray) -> ConditionalEnd:
        """The law of the end given x (m, d): a mixture of components of covariance 0, one an atom."""
        n, d = self.points.shape
        if len(x) * n > _LARGEST:
            raise InputError(
                f"the conditional law is too large; {len(x)} points by {n} atoms; ask for fewer points at a time"
            )
        u, v = transition.whiten_sources(x), transition.whiten_targets(self.points)
        centre = v.mean(axis=0)
        logs = (u - centre) @ (v - centre).T - 0.5 * ((v - centre) ** 2).sum(axis=1) + self.log_weights
        nothing = np.zeros((1, d))
        components = Posterior(nothing, self.points, nothing)
        weights = np.exp(logs - log_sum_exp(logs, axis=1)[:, None])
        return ConditionalEnd(weights, x, components, np.zeros(d), np.eye(d))
