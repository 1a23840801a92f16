"""Smooth potentials: φ = Σ_k of exponentials of quadratics, Gaussian mixtures among them.

In the frame y = L z + centre (L: Cholesky factor of the prior's covariance over the gap), φ(y) = q(z) with the
`QuadraticMixture` q. Carried back over a transition N(F x + c, Q), m = L⁻¹(F x + c - centre) and R = L⁻¹ Q L⁻ᵀ give
φ_t(x) = E q(m + N(0, R)); a potential at the start is carried forward by the same formula at
m = L⁻¹(F⁻¹(y - c) - centre), R = L⁻¹ F⁻¹ Q F⁻ᵀ L⁻ᵀ, divided by |det F|.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from scipy.linalg import solve_triangular

from .. import checks
from ..logspace import log_sum_exp
from .base import GaussianTransition
from .conditional import ConditionalEnd
from .quadratic import QuadraticMixture, as_diagonal, as_full

__all__ = ["MixturePotential", "gaussian_mixture_potential"]


@dataclass(frozen=True)
class MixturePotential:
    """φ(y) = q(L⁻¹(y - centre)): centre (d,) and basis L (d, d) lower triangular in length, `mixture` dimensionless."""

    centre: np.ndarray
    basis: np.ndarray
    mixture: QuadraticMixture
    smooth: ClassVar[bool] = True

    @property
    def count(self) -> int:
        """Number of components K."""
        return self.mixture.count

    def shifted(self, log_factor: float) -> MixturePotential:
        """exp(log_factor) φ."""
        m = self.mixture
        return MixturePotential(
            self.centre, self.basis, QuadraticMixture(m.log_weights + log_factor, m.linear, m.precision)
        )

    def frame(self, points: np.ndarray) -> np.ndarray:
        """L⁻¹(y - centre) of points (n, d)."""
        return np.ascontiguousarray(solve_triangular(self.basis, (points - self.centre).T, lower=True).T)

    def log_value(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ (m,) and its gradient (m, d) in 1/length at the end itself."""
        values, gradients = self.mixture.evaluate(self.frame(points))
        return values, self._to_length(gradients)

    def carried_back(self, transition: GaussianTransition, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ (m,) and its gradient (m, d) in 1/length, at x (m, d) one transition before."""
        at, noise = self._before(transition, x)
        values, gradients = self.mixture.carried(noise).evaluate(at)
        return values, self._to_length(gradients) @ transition.matrix

    def carried_forward(self, transition: GaussianTransition, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ̂ (m,) and its gradient (m, d) in 1/length, at y (m, d) one transition after."""
        inverse = np.linalg.inv(transition.matrix)
        root = solve_triangular(self.basis, inverse @ transition.cholesky, lower=True)
        at = self.frame((y - transition.shift) @ inverse.T)
        values, gradients = self.mixture.carried(as_diagonal(root @ root.T)).evaluate(at)
        _, log_det = np.linalg.slogdet(transition.matrix)
        return values - log_det, self._to_length(gradients) @ inverse

    def given(self, transition: GaussianTransition, x: np.ndarray) -> ConditionalEnd:
        """The law of the end given x (m, d) one transition before: a Gaussian mixture for each row."""
        at, noise = self._before(transition, x)
        logs = self.mixture.carried(noise).log_components(at)
        weights = np.exp(logs - log_sum_exp(logs, axis=1)[:, None])
        if not np.isfinite(weights).all():
            self.carried_back(transition, x)  # names the row
        return ConditionalEnd(weights, at, self.mixture.posterior(noise), self.centre, self.basis)

    def draw(
        self, transition: GaussianTransition, x: np.ndarray, rng: np.random.Generator
    ) -> tuple[np.ndarray, np.ndarray]:
        """One end for each row of x: positions (m, d), and -1 in place of row numbers."""
        return self.given(transition, x).sample_with_components(rng)[0], np.full(len(x), -1, dtype=np.int64)

    def backed_up(self, transition: GaussianTransition, centre: np.ndarray, basis: np.ndarray) -> QuadraticMixture:
        """φ one transition before, as a function of z with x = basis z + centre."""
        _, noise = self._before(transition, centre[None])
        at = solve_triangular(self.basis, (transition.mean(centre[None]) - self.centre).T, lower=True)[:, 0]
        matrix = solve_triangular(self.basis, transition.matrix @ basis, lower=True)
        return self.mixture.carried(noise).moved(as_diagonal(matrix), at)

    def _before(self, transition: GaussianTransition, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        root = solve_triangular(self.basis, transition.cholesky, lower=True)
        return self.frame(transition.mean(x)), as_diagonal(root @ root.T)

    def _to_length(self, gradients: np.ndarray) -> np.ndarray:
        return solve_triangular(self.basis, gradients.T, lower=True, trans="T").T


def gaussian_mixture_potential(
    weights: Any, means: Any, covariances: Any, transition: GaussianTransition
) -> MixturePotential:
    """φ(y) = Σ_k w_k N(y | μ_k, S_k), framed for a gap with this transition.

    Parameters
    ----------
    weights : (K,) non-negative.
    means : (K, d) in length.
    covariances : (K, d) diagonals or (K, d, d) in length².
    transition : the prior over the whole gap.

    Examples
    --------
    >>> import ensembles
    >>> step = ensembles.Brownian(diffusion=0.5).transition(1.0, 1)
    >>> phi = gaussian_mixture_potential([1.0], [[0.0]], [[3.0]], step)
    >>> import numpy as np
    >>> bool(np.isclose(phi.carried_back(step, np.zeros((1, 1)))[0][0], -0.5 * np.log(2 * np.pi * 4.0)))
    True
    """
    means = checks.points(means, "means")
    count, dimension = means.shape
    weights = checks.weights(weights, count)
    covariances = checks.as_float_array(covariances, "covariances")
    if covariances.shape not in ((count, dimension), (count, dimension, dimension)):
        raise checks.InputError(
            f"covariances do not fit the means; their shape is {covariances.shape} for {count} means of {dimension} "
            "coordinate(s); give one diagonal or one matrix a mean"
        )
    basis = np.asarray(transition.cholesky)
    full = np.stack([checks.spd_matrix(c, f"covariances[{k}]") for k, c in enumerate(as_full(covariances))])
    inverse = solve_triangular(basis, np.eye(dimension), lower=True)
    precision = np.linalg.inv(inverse @ full @ inverse.T)
    if covariances.ndim == 2 and as_diagonal(basis).ndim == 1:
        precision = np.diagonal(precision, axis1=1, axis2=2).copy()
    centre = weights @ means / weights.sum()
    z = (means - centre) @ inverse.T
    linear = (precision * z) if precision.ndim == 2 else np.einsum("kij,kj->ki", precision, z)
    _, log_det = np.linalg.slogdet(2.0 * np.pi * full)
    with np.errstate(divide="ignore"):
        log_weights = np.log(weights) - 0.5 * log_det - 0.5 * (linear * z).sum(axis=1)
    return MixturePotential(centre, basis, QuadraticMixture(log_weights, linear, precision))
