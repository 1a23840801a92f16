"""Both ends smooth: the joint law of start and end is a Gaussian mixture, one component a pair of components.

With φ̂ = Σ_j and φ carried back to the start = Σ_k, ρ_0 = φ̂ φ_0 = Σ_jk ω_jk N(p_jk, V_jk), V_jk = (Λ_j + Λ̃_k)⁻¹,
p_jk = V_jk (η_j + η̃_k); and given x and k the end is Gaussian with a mean that is affine in x. The sum of ω is the mass.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..checks import ComputationError
from .base import GaussianTransition
from .mixture import MixturePotential
from .quadratic import as_full

__all__ = ["PairLaw"]


@dataclass(frozen=True, eq=False)
class PairLaw:
    """The joint law of both ends, π ∝ φ̂(x) p(y | x) φ(y)."""

    initial: MixturePotential
    terminal: MixturePotential
    transition: GaussianTransition

    @cached_property
    def _products(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """log ω (J, K), means (J, K, d) and covariances (J|1, K|1, d) or (J|1, K|1, d, d), in the initial's frame."""
        first = self.initial.mixture
        second = self.terminal.backed_up(self.transition, self.initial.centre, self.initial.basis)
        if first.diagonal and second.diagonal:
            precision = first.precision[:, None] + second.precision[None]
            self._require_positive(precision.min())
            covariance = 1.0 / precision
            linear = first.linear[:, None] + second.linear[None]
            means = covariance * linear
            log_det = np.log(covariance).sum(axis=-1)
        else:
            precision = as_full(first.precision)[:, None] + as_full(second.precision)[None]
            try:
                factor = np.linalg.cholesky(precision)
            except np.linalg.LinAlgError:
                self._require_positive(np.linalg.eigvalsh(precision).min())
                raise
            covariance = np.linalg.inv(precision)
            linear = first.linear[:, None] + second.linear[None]
            means = np.matmul(covariance, linear[..., None])[..., 0]
            log_det = -2.0 * np.log(np.diagonal(factor, axis1=-2, axis2=-1)).sum(axis=-1)
        d = linear.shape[-1]
        log_mass = first.log_weights[:, None] + second.log_weights + 0.5 * (linear * means).sum(axis=-1)
        log_scale = np.log(np.diag(self.initial.basis)).sum() + 0.5 * d * np.log(2.0 * np.pi)
        return log_mass + 0.5 * log_det + log_scale, means, covariance

    @property
    def log_masses(self) -> np.ndarray:
        """log ω_jk (J, K); their exponentials sum to the mass of the bridge."""
        return self._products[0]

    def draw_starts(self, count: int, rng: np.random.Generator) -> np.ndarray:
        """Draw `count` starts (count, d) from ρ_0; exact."""
        logs, means, covariances = self._products
        shares = np.exp(logs - logs.max()).ravel()
        picked = rng.choice(shares.size, size=count, p=shares / shares.sum())
        noise = rng.standard_normal((count, means.shape[-1]))
        z = means.reshape(shares.size, -1)[picked]
        rows, columns = np.unravel_index(picked, logs.shape)
        rows, columns = (index % size for index, size in zip((rows, columns), covariances.shape[:2]))
        if covariances.ndim == 3:
            z = z + noise * np.sqrt(covariances[rows, columns])
        else:
            roots = np.linalg.cholesky(covariances)
            z = z.copy()
            for pair in np.unique(rows * covariances.shape[1] + columns):
                j, k = divmod(int(pair), covariances.shape[1])
                chosen = (rows == j) & (columns == k)
                z[chosen] += noise[chosen] @ roots[j, k].T
        return z @ self.initial.basis.T + self.initial.centre

    @cached_property
    def moments(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Mean of start and end, and the covariances start-start, start-end, end-end; in length and length²."""
        logs, means, covariances = self._products
        shares = np.exp(logs - logs.max())
        shares /= shares.sum()
        basis, centre = self.initial.basis, self.initial.centre
        d = centre.size
        law = self.terminal.given(self.transition, centre[None])
        gains, within = as_full(law.components.gains), as_full(law.components.covariances)
        # In frames: start z, carried to the end m = matrix z + at, end = gain_k m + offset_k.
        matrix = np.linalg.solve(self.terminal.basis, self.transition.matrix @ basis)
        first = np.zeros(2 * d)
        second = np.zeros((2 * d, 2 * d))
        for k in range(logs.shape[1]):
            share = shares[:, k]
            spread = as_full(covariances[:, k % covariances.shape[1]])
            spread = share.sum() * spread[0] if len(spread) == 1 else np.tensordot(share, spread, axes=1)
            gain = gains[k % len(gains)]
            slope = np.vstack([np.eye(d), gain @ matrix])
            offset = np.concatenate([np.zeros(d), gain @ law.at[0] + law.components.offsets[k]])
            both = means[:, k] @ slope.T + offset
            first += share @ both
            second += (both.T * share) @ both + slope @ spread @ slope.T
            second[d:, d:] += share.sum() * within[k % len(within)]
        second -= np.outer(first, first)
        to_length = np.block([[basis, np.zeros((d, d))], [np.zeros((d, d)), self.terminal.basis]])
        first = to_length @ first + np.concatenate([centre, self.terminal.centre])
        second = to_length @ second @ to_length.T
        return first[:d], first[d:], second[:d, :d], second[:d, d:], second[d:, d:]

    def _require_positive(self, smallest: float) -> None:
        if not smallest > 0:
            raise ComputationError(
                f"the two potentials have no finite mass together; the smallest eigenvalue of a joint precision is "
                f"{smallest:.3g}; fit both ends together with fit_bridge"
            )
