"""The prior pinned at both ends: its law at any times in between, exact.

With X_t | x ~ N(m, Q_t), X_T | X_t = z ~ N(F z + c, R), Q_t = L Lᵀ, R = S Sᵀ and the singular values S⁻¹ F L = U s Vᵀ,
the pinned law is Gaussian with

    mean = H m + G (y - c),   H = L V (1 + s²)⁻¹ Vᵀ L⁻¹,   G = L V s (1 + s²)⁻¹ Uᵀ S⁻¹,   covariance = L V (1 + s²)⁻¹
    Vᵀ Lᵀ.

Nothing is subtracted, so the weights of both ends are accurate where they are tiny (an unstable drift over a long
duration), and the covariance is a sum of squares.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import solve_triangular

from .base import LinearGaussianPrior, Transition

__all__ = ["PinnedLaw", "pin", "pinned_steps", "square_root"]


@dataclass(frozen=True)
class PinnedLaw:
    """X_t | X_0 = x, X_T = y  ~  N(start_matrix x + end_matrix y + shift, covariance); shapes (d, d), (d,)."""

    start_matrix: np.ndarray
    end_matrix: np.ndarray
    shift: np.ndarray
    covariance: np.ndarray

    def mean(self, start: np.ndarray, end: np.ndarray) -> np.ndarray:
        """Mean for matching rows of start and end, (n, d)."""
        return start @ self.start_matrix.T + end @ self.end_matrix.T + self.shift

    def sample(self, start: np.ndarray, end: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """One draw for each pair of rows, (n, d)."""
        noise = rng.standard_normal(start.shape)
        return self.mean(start, end) + noise @ square_root(self.covariance).T


def square_root(covariance: np.ndarray) -> np.ndarray:
    """A matrix S with S Sᵀ = covariance, also when it is singular."""
    values, vectors = np.linalg.eigh(covariance)
    return vectors * np.sqrt(np.clip(values, 0.0, None))


def pin(before: Transition, after: Transition) -> PinnedLaw:
    """Pin the path between `before` (from the start to t) and `after` (from t to the end)."""
    root = before.cholesky
    left, stretches, axes = np.linalg.svd(solve_triangular(after.cholesky, after.matrix @ root, lower=True))
    narrowed = 1.0 / np.hypot(1.0, stretches)
    half = root @ axes.T * narrowed
    keep = half * narrowed @ solve_triangular(root, axes.T, lower=True, trans="T").T
    gain = half * (stretches * narrowed) @ solve_triangular(after.cholesky, left, lower=True, trans="T").T
    return PinnedLaw(
        start_matrix=keep @ before.matrix,
        end_matrix=gain,
        shift=keep @ before.shift - gain @ after.shift,
        covariance=half @ half.T,
    )


def pinned_steps(
    prior: LinearGaussianPrior, start: float, end: float, times: np.ndarray, dimension: int
) -> list[PinnedLaw]:
    """Laws to draw a pinned path one time after another: law k takes X at the time before and the end y.

    `times` increases strictly inside (start, end). Drawing X_1 from law 0 with (x, y), X_2 from law 1 with (X_1, y),
    ... has the exact joint law of the pinned path at all these times, since the prior is Markov.
    """
    laws = []
    previous = start
    for time in times:
        laws.append(pin(prior.transition(time - previous, dimension), prior.transition(end - time, dimension)))
        previous = time
    return laws
