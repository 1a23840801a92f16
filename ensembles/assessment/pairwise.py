"""Scores of one prediction with their bootstrap errors, from distances that are computed once for all resamples.

A resample is a vector of weights, so a score that is a mean over pairs of particles is a quadratic form in them: all
resamples of a cloud cost one matrix product. Every prediction of one snapshot meets the same resamples of it, so that
differences between two predictions can be taken draw by draw.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.spatial.distance import cdist

from .transport import EXACT_LIMIT, optimal_plan

__all__ = ["MATRIX_LIMIT", "Comparison", "multinomial_weights"]

MATRIX_LIMIT = 4000
"""Particles a cloud up to which all pairs are kept (128 MB)."""


def multinomial_weights(weights: np.ndarray, repeats: int, rng: np.random.Generator) -> np.ndarray:
    """(repeats, n) weights of bootstrap resamples: n particles drawn with replacement, each keeping its weight.

    A resample that holds one particle only, n times, has no pairs and is drawn again.
    """
    n = weights.size
    present = np.flatnonzero(weights > 0)
    counts = np.zeros((repeats, n))
    drawn = rng.multinomial(present.size, np.full(present.size, 1.0 / present.size), size=repeats)
    while present.size > 1 and (alone := drawn.max(axis=1) == present.size).any():
        drawn[alone] = rng.multinomial(present.size, np.full(present.size, 1.0 / present.size), size=int(alone.sum()))
    counts[:, present] = drawn
    weighted = counts * weights
    return weighted / weighted.sum(axis=1, keepdims=True)


@dataclass(frozen=True, eq=False)
class Comparison:
    """A predicted cloud x (m, d) against an observed one y (n, d), with weights a, b and resampled weights (R, m), (R, n).

    Every method gives the value and R resampled values. Pairs of a particle with itself are left out of the energy
    distance and of the kernel discrepancy, so that clouds of different sizes can be compared; either may be negative.
    """

    x: np.ndarray
    y: np.ndarray
    a: np.ndarray
    b: np.ndarray
    resampled_a: np.ndarray
    resampled_b: np.ndarray
    bandwidth: float

    @cached_property
    def distances(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """All distances: between the clouds, within x, within y."""
        return cdist(self.x, self.y), cdist(self.x, self.x), cdist(self.y, self.y)

    @cached_property
    def _all_weights(self) -> tuple[np.ndarray, np.ndarray]:
        return np.vstack([self.a, self.resampled_a]), np.vstack([self.b, self.resampled_b])

    def energy_distance(self) -> np.ndarray:
        """2 E|X - Y| - E|X - X'| - E|Y - Y'|: first the value, then the resampled ones; in length."""
        crossed, within_x, within_y = self._pair_means(*self.distances)
        return 2.0 * crossed - within_x - within_y

    def kernel_discrepancy(self) -> np.ndarray:
        """E k(X, X') + E k(Y, Y') - 2 E k(X, Y) with k = exp(-½|x - y|²/h²)."""
        kernels = [np.exp(-0.5 * (d / self.bandwidth) ** 2) for d in self.distances]
        for kernel in kernels[1:]:
            np.fill_diagonal(kernel, 0.0)
        crossed, within_x, within_y = self._pair_means(*kernels)
        return within_x + within_y - 2.0 * crossed

    def mean_error(self) -> np.ndarray:
        """|x̄ - ȳ|, in length."""
        a, b = self._all_weights
        return np.linalg.norm(a @ self.x - b @ self.y, axis=1)

    def covariance_error(self) -> np.ndarray:
        """Frobenius norm of the difference between the covariances, in length²."""
        return np.linalg.norm(
            _covariances(self.x, self._all_weights[0]) - _covariances(self.y, self._all_weights[1]), axis=(1, 2)
        )

    def wasserstein(self, order: int, size: int, rng: np.random.Generator) -> tuple[float, float]:
        """W_p and its standard error, between `size` of the predicted points and the observed cloud.

        The distance between two finite clouds lies above that of their populations, by more for smaller clouds: every
        prediction is therefore reduced to the same number of points. The error is the one of the central limit theorem
        for the cost, Var(cost) = Var(u(X))/n + Var(v(Y))/m with dual potentials u, v (del Barrio and Loubes, Annals of
        Probability 47, 926 (2019), from memory), divided by p W^(p-1).
        """
        observed = _reduced(self.b, min(EXACT_LIMIT, len(self.y)), rng)
        rounds = 1 if len(self.x) <= size else 4
        values, variances = [], []
        for _ in range(rounds):
            i = _reduced(self.a, size, rng)
            a = self.a[i] if len(i) == len(self.x) else np.full(len(i), 1.0 / len(i))
            b = self.b[observed] if len(observed) == len(self.y) else np.full(len(observed), 1.0 / len(observed))
            cost, _, (u, v) = optimal_plan(self.x[i], self.y[observed], a, b, order=order)
            distance = max(cost, 0.0) ** (1.0 / order)
            slope = order * max(distance, 1e-300) ** (order - 1)
            values.append(distance)
            variances.append((_variance_of_mean(u, a) + _variance_of_mean(v, b)) / slope**2)
        return float(np.mean(values)), float(np.sqrt(np.mean(variances)))

    def _pair_means(
        self, crossed: np.ndarray, within_x: np.ndarray, within_y: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        a, b = self._all_weights
        return (
            np.einsum("ri,ri->r", a @ crossed, b),
            np.einsum("ri,ri->r", a @ within_x, a) / (1.0 - np.einsum("ri,ri->r", a, a)),
            np.einsum("ri,ri->r", b @ within_y, b) / (1.0 - np.einsum("ri,ri->r", b, b)),
        )


def _reduced(weights: np.ndarray, size: int, rng: np.random.Generator) -> np.ndarray:
    if len(weights) <= size:
        return np.arange(len(weights))
    return rng.choice(len(weights), size, replace=False, p=weights / weights.sum())


def _variance_of_mean(values: np.ndarray, weights: np.ndarray) -> float:
    weights = weights / weights.sum()
    return float(np.sum((weights * (values - weights @ values)) ** 2))


def _covariances(points: np.ndarray, weights: np.ndarray) -> np.ndarray:
    means = weights @ points
    second = np.einsum("rn,nd,ne->rde", weights, points, points, optimize=True)
    return second - means[:, :, None] * means[:, None, :]
