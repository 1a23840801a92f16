"""A smooth initial potential, fitted to the start cloud while the terminal one stays.

With φ carried back to the start, φ_0 = Σ_k exp(β_k + η_k·z - ½ zᵀ Λ_k z) in the frame of the start cloud, the density of
the start is ρ_0 = φ̂_0 φ_0. The initial potential is φ̂_0 ∝ T(z) Σ_j w_j N(z | p_j, E_j) with the shared tilt
T = exp(-½ zᵀ U z - η̄·z) where U + Λ_k ⪰ 0 for every k: then ρ_0 has finite mass for all positive E_j,

    ρ_0 ∝ Σ_jk w_j N(z | p_j, E_j) exp(β_k + (η_k - η̄)·z - ½ zᵀ (U + Λ_k) z),

a Gaussian mixture with one component a pair, and Σ_i a_i log ρ_0(z_i) is maximised with exact gradients. The law of the
end given the start does not change, so the end cloud's likelihood is that of the terminal fit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..logspace import log_sum_exp
from .covariance import Parametrisation
from .likelihood import Tilted, coefficients, log_sums, statistics
from .quadratic import QuadraticMixture, as_full

__all__ = ["StartLikelihood", "upper_bound"]


def upper_bound(matrices: np.ndarray) -> np.ndarray:
    """U with U - matrices_k ⪰ 0 for every k: the largest entry for diagonals (K, d), a join by eigenvalues for (K, d, d)."""
    if matrices.ndim == 2:
        return matrices.max(axis=0)
    bound = matrices[0]
    for matrix in matrices[1:]:
        values, vectors = np.linalg.eigh(matrix - bound)
        bound = bound + (vectors * np.clip(values, 0.0, None)) @ vectors.T
    return bound


@dataclass(frozen=True)
class StartLikelihood:
    """Σ_i a_i log ρ_0(z_i) with its gradient; `ahead` is φ_0 in the frame of the points, `floor` and `strength` the stated
    prior of `Likelihood`."""

    points: np.ndarray
    weights: np.ndarray
    ahead: QuadraticMixture
    kind: Parametrisation
    floor: np.ndarray
    strength: float

    @property
    def size(self) -> int:
        """Numbers in the parameter vector: log w, p, covariances."""
        return self.kind.count * (1 + self.kind.dimension) + self.kind.size

    def pack(self, bumps: Tilted) -> np.ndarray:
        """The parameter vector of bumps log w, p, E."""
        return np.concatenate([bumps.log_alpha - bumps.log_alpha.max(), bumps.r.ravel(), self.kind.pack(bumps.c)])

    def unpack(self, theta: np.ndarray) -> Tilted:
        """The bumps of a parameter vector."""
        k, d = self.kind.count, self.kind.dimension
        return Tilted(theta[:k], theta[k : k * (1 + d)].reshape(k, d), self.kind.unpack(theta[k * (1 + d) :]))

    @property
    def tilt(self) -> tuple[np.ndarray, np.ndarray]:
        """U (d,) or (d, d) and η̄ (d,)."""
        logs = self.ahead.log_components(np.zeros((1, self.kind.dimension)))[0]
        shares = np.exp(logs - log_sum_exp(logs, axis=0))
        return upper_bound(-self.ahead.precision), shares @ self.ahead.linear

    def potential(self, theta: np.ndarray) -> QuadraticMixture:
        """φ̂_0 in the frame of the points, not normalised."""
        bumps, (bound, slope) = self.unpack(theta), self.tilt
        constant, linear, quadratic = coefficients(bumps)[0]
        precision = -2.0 * quadratic
        if precision.ndim == 2 and bound.ndim == 1:
            precision = precision + bound
        else:
            precision = as_full(precision) + as_full(bound[None])[0]
        return QuadraticMixture(constant, linear - slope, precision)

    def terms(self, theta: np.ndarray) -> np.ndarray:
        """log ρ_0 at every point (n,), in the frame."""
        bumps = self.unpack(theta)
        behind = log_sums(self.points, coefficients(bumps)[0])
        tilted = self.tilted()
        ahead = log_sum_exp(tilted.log_components(self.points), axis=1)
        return behind + ahead - float(log_sum_exp(self.pairs(bumps, tilted)[0], axis=None))

    def value_and_gradient(self, theta: np.ndarray) -> tuple[float, np.ndarray]:
        """Mean log ρ_0 up to a constant, with the stated prior, and its gradient."""
        bumps = self.unpack(theta)
        sums, (mass, first, second) = statistics(self.points, self.weights, coefficients(bumps)[0])
        logs, pair_means, pair_spreads = self.pairs(bumps, self.tilted())
        log_mass = float(log_sum_exp(logs, axis=None))
        shares = np.exp(logs - log_mass)
        p, c, diagonal = bumps.r, bumps.c, self.kind.diagonal
        apart = pair_means - p[:, None]
        model_first = np.einsum("jk,jkd->jd", shares, apart)
        net_mass = mass - shares.sum(axis=1)
        if diagonal:
            inverse = 1.0 / c
            model_second = np.einsum("jk,jkd->jd", shares, apart * apart + pair_spreads)
            own = second - 2.0 * p * first + mass[:, None] * p * p
            by_p = inverse * (first - mass[:, None] * p - model_first)
            by_c = 0.5 * inverse * (inverse * (own - model_second) - net_mass[:, None])
            penalty = (self.floor * inverse).sum()
            by_c += 0.5 * self.strength * self.floor * inverse**2
        else:
            inverse = np.linalg.inv(c)
            model_second = np.einsum("jk,jkd,jke->jde", shares, apart, apart, optimize=True)
            model_second += np.einsum("jk,jkde->jde", shares, pair_spreads)
            cross = first[:, :, None] * p[:, None]
            own = second - cross - cross.swapaxes(1, 2) + mass[:, None, None] * p[:, :, None] * p[:, None]
            by_p = np.einsum("jde,je->jd", inverse, first - mass[:, None] * p - model_first)
            by_c = 0.5 * (inverse @ (own - model_second) @ inverse - net_mass[:, None, None] * inverse)
            penalty = (np.diagonal(inverse, axis1=1, axis2=2) * self.floor).sum()
            by_c += 0.5 * self.strength * (inverse * self.floor @ inverse)
            by_c = 0.5 * (by_c + by_c.swapaxes(1, 2))
        value = float(self.weights @ sums) - log_mass - 0.5 * self.strength * penalty
        packed = theta[self.kind.count * (1 + self.kind.dimension) :]
        return value, np.concatenate([net_mass, by_p.ravel(), self.kind.pulled_back(packed, by_c)])

    def tilted(self) -> QuadraticMixture:
        """exp(β_k + (η_k - η̄)·z - ½ zᵀ (U + Λ_k) z)."""
        bound, slope = self.tilt
        return QuadraticMixture(self.ahead.log_weights, self.ahead.linear - slope, self.ahead.precision + bound)

    def pairs(self, bumps: Tilted, tilted: QuadraticMixture) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """log mass (J, K), mean (J, K, d) and spread (J, K, d) or (J, K, d, d) of every pair of bump and component."""
        logs, means, spreads = [], [], []
        for j in range(bumps.count):
            covariance = bumps.c[j]
            logs.append(bumps.log_alpha[j] + tilted.carried(covariance).log_components(bumps.r[j][None])[0])
            law = tilted.posterior(covariance)
            if law.gains.ndim == 2:
                means.append(law.gains * bumps.r[j] + law.offsets)
                spreads.append(law.covariances if self.kind.diagonal else as_full(law.covariances))
            else:
                means.append(law.gains @ bumps.r[j] + law.offsets)
                full = law.covariances
                spreads.append(np.diagonal(full, axis1=1, axis2=2) if self.kind.diagonal else full)
        shape = (len(logs[0]), *spreads[0].shape[1:])
        return np.stack(logs), np.stack(means), np.stack([np.broadcast_to(s, shape) for s in spreads])
