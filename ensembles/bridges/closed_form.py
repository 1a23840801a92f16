"""The bridge between two Gaussians under a linear prior, in closed form.

In whitened coordinates (unit noise over the whole duration; means m, n; covariances A, B) the coupling is Gaussian with
E[v | u] = n + M (u - m), where M = B^½ r(B^½ A B^½) B^½ and r(z) = 2 / (1 + sqrt(1 + 4z)); the terminal potential is
φ_T ∝ exp(-½ ỹᵀ P ỹ - ỹᵀ(m - n)) in ỹ = v - n, with P = B⁻¹ + N - I and N = A^½ r(A^½ B A^½) A^½. Sources: Mallasto,
Gerolin and Minh 2022; Janati, Muzellec, Peyré and Cuturi 2020; Bunne, Hsieh, Cuturi and Krause 2023 (from memory,
derived again in tests/test_gaussian.py).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from .. import checks
from ..priors.base import LinearGaussianPrior, Transition, require_prior
from ..priors.pinned import pin, pinned_steps, square_root
from ..schrodinger.gaussian_start import gaussian_curvature
from .paths import Paths

__all__ = ["GaussianBridge", "gaussian_bridge"]


@dataclass(frozen=True, eq=False)
class GaussianBridge:
    """The bridge from N(mean_start, cov_start) at time 0 to N(mean_end, cov_end) at `duration`; see `gaussian_bridge`."""

    mean_start: np.ndarray
    cov_start: np.ndarray
    mean_end: np.ndarray
    cov_end: np.ndarray
    prior: LinearGaussianPrior
    duration: float

    @property
    def dimension(self) -> int:
        """Number of coordinates d."""
        return self.mean_start.size

    @cached_property
    def transition(self) -> Transition:
        """The prior over the whole duration."""
        return self.prior.transition(self.duration, self.dimension)

    @cached_property
    def _whitened(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """L⁻¹, A and B."""
        inverse = np.linalg.inv(self.transition.cholesky)
        to_u = inverse @ self.transition.matrix
        return inverse, to_u @ self.cov_start @ to_u.T, inverse @ self.cov_end @ inverse.T

    @cached_property
    def cross_covariance(self) -> np.ndarray:
        """Cov(X_0, X_T) (d, d) in length²: Σ_0 Fᵀ L⁻ᵀ M Lᵀ."""
        inverse, start, end = self._whitened
        regression = gaussian_curvature(start, end)
        return self.cov_start @ self.transition.matrix.T @ inverse.T @ regression @ self.transition.cholesky.T

    @cached_property
    def _terminal(self) -> tuple[np.ndarray, np.ndarray]:
        """Precision (d, d) and linear term (d,) of log φ_T around mean_end."""
        inverse, start, end = self._whitened
        precision = np.linalg.inv(end) + gaussian_curvature(end, start) - np.eye(self.dimension)
        shift = inverse @ (self.mean_end - self.transition.mean(self.mean_start[None])[0])
        return inverse.T @ precision @ inverse, inverse.T @ shift

    def moments(self, t: float) -> tuple[np.ndarray, np.ndarray]:
        """Mean (d,) and covariance (d, d) at t in [0, duration]."""
        t = self._time(t)
        if t == 0.0:
            return self.mean_start.copy(), self.cov_start.copy()
        if t == self.duration:
            return self.mean_end.copy(), self.cov_end.copy()
        law = pin(self.prior.transition(t, self.dimension), self.prior.transition(self.duration - t, self.dimension))
        p, q = law.start_matrix, law.end_matrix
        mixed = p @ self.cross_covariance @ q.T
        covariance = p @ self.cov_start @ p.T + mixed + mixed.T + q @ self.cov_end @ q.T + law.covariance
        return law.mean(self.mean_start[None], self.mean_end[None])[0], 0.5 * (covariance + covariance.T)

    def log_density(self, t: float, points: np.ndarray) -> np.ndarray:
        """log ρ_t at points (m, d), in nats per length^d."""
        mean, covariance = self.moments(t)
        residual = np.linalg.solve(np.linalg.cholesky(covariance), (self._points(points) - mean).T)
        _, log_det = np.linalg.slogdet(2.0 * np.pi * covariance)
        return -0.5 * (residual * residual).sum(axis=0) - 0.5 * log_det

    def drift(self, t: float, points: np.ndarray) -> np.ndarray:
        """Forward drift b + 2D ∇log φ_t at points (m, d), in length/time; finite at both ends.

        With z = F x + c - mean_end over the remaining time, R its covariance, and φ_T of precision Λ and linear term η,
        ∇log φ_t = Fᵀ (I + Λ R)⁻¹ (η - Λ z).
        """
        t, points = self._time(t), self._points(points)
        return self.prior.drift(points) + 2.0 * self._gradient(t, points) @ self.prior.diffusion_matrix(self.dimension)

    def backward_drift(self, t: float, points: np.ndarray) -> np.ndarray:
        """Backward drift b - 2D ∇log φ̂_t, from ∇log φ̂_t = ∇log ρ_t - ∇log φ_t; (m, d), in length/time."""
        t, points = self._time(t), self._points(points)
        gradient = self._score(t, points) - self._gradient(t, points)
        return self.prior.drift(points) - 2.0 * gradient @ self.prior.diffusion_matrix(self.dimension)

    def current_velocity(self, t: float, points: np.ndarray) -> np.ndarray:
        """½ (forward + backward drift); (m, d), in length/time."""
        return 0.5 * (self.drift(t, points) + self.backward_drift(t, points))

    def sample(self, t: float, count: int, rng: Any = 0) -> np.ndarray:
        """Draw `count` positions (count, d) at t."""
        mean, covariance = self.moments(t)
        noise = checks.generator(rng).standard_normal((checks.whole_number(count, "count"), self.dimension))
        return mean + noise @ square_root(covariance).T

    def sample_paths(self, count: int, times: np.ndarray, rng: Any = 0) -> Paths:
        """Draw paths at `times` in [0, duration]: both ends from the coupling, then the pinned prior; exact in law."""
        count = checks.whole_number(count, "count")
        times = checks.times(np.atleast_1d(times), "times")
        self._time(times[0]), self._time(times[-1])
        generator = checks.generator(rng)
        d = self.dimension
        joint = np.block([[self.cov_start, self.cross_covariance], [self.cross_covariance.T, self.cov_end]])
        ends = generator.standard_normal((count, 2 * d)) @ square_root(joint).T
        start, end = self.mean_start + ends[:, :d], self.mean_end + ends[:, d:]
        positions = np.empty((count, times.size, d))
        positions[:, times == 0.0] = start[:, None]
        positions[:, times == self.duration] = end[:, None]
        inside = np.flatnonzero((times > 0.0) & (times < self.duration))
        current = start
        for k, law in zip(inside, pinned_steps(self.prior, 0.0, self.duration, times[inside], d), strict=True):
            current = law.sample(current, end, generator)
            positions[:, k] = current
        return Paths(times, positions, np.full((count, 2), -1, dtype=np.int64), tuple(f"x{k + 1}" for k in range(d)))

    def _gradient(self, t: float, points: np.ndarray) -> np.ndarray:
        precision, linear = self._terminal
        if t == self.duration:
            return linear - (points - self.mean_end) @ precision
        after = self.prior.transition(self.duration - t, self.dimension)
        z = after.mean(points) - self.mean_end
        inner = np.linalg.solve(np.eye(self.dimension) + precision @ after.covariance, (linear - z @ precision).T).T
        return inner @ after.matrix

    def _score(self, t: float, points: np.ndarray) -> np.ndarray:
        mean, covariance = self.moments(t)
        return -np.linalg.solve(covariance, (points - mean).T).T

    def _points(self, points: np.ndarray) -> np.ndarray:
        return checks.points(points, "points", self.dimension)

    def _time(self, t: float) -> float:
        if not 0.0 <= float(t) <= self.duration:
            raise checks.InputError(
                f"the time lies outside the bridge; t = {float(t):g} in a bridge from 0 to {self.duration:g}; "
                "give a time in between"
            )
        return float(t)


def gaussian_bridge(
    mean_start: Any, cov_start: Any, mean_end: Any, cov_end: Any, prior: LinearGaussianPrior, duration: float
) -> GaussianBridge:
    """The Schrödinger bridge between two Gaussians under a linear-Gaussian prior, in closed form.

    Parameters
    ----------
    mean_start, mean_end : float or (d,), in length.
    cov_start, cov_end : float or (d, d) symmetric positive definite, in length².
    prior : Brownian or OrnsteinUhlenbeck.
    duration : T, in time; the bridge runs from 0 to T.

    Raises
    ------
    InputError
        If a covariance is not positive definite, shapes disagree, or the duration is not positive.

    Examples
    --------
    One dimension, unit variances, 2 D T = 1.5: Cov(X_0, X_T) = ½ and the variance half-way is 1.125.

    >>> import ensembles
    >>> bridge = ensembles.gaussian_bridge(0.0, 1.0, 0.0, 1.0, ensembles.Brownian(diffusion=0.75), 1.0)
    >>> bridge.cross_covariance.round(12).tolist(), bridge.moments(0.5)[1].round(12).tolist()
    ([[0.5]], [[1.125]])
    """
    require_prior(prior)
    checked = []
    for name, value in (("mean_start", mean_start), ("mean_end", mean_end)):
        mean = np.atleast_1d(checks.as_float_array(value, name))
        if mean.ndim > 1 or mean.size == 0:
            raise checks.InputError(f"{name} must be a number or d numbers; its shape is {mean.shape}; reshape it")
        checks.require_finite(mean, name)
        checked.append(mean)
    covariances = []
    for name, value in (("cov_start", cov_start), ("cov_end", cov_end)):
        covariance = checks.spd_matrix(np.atleast_2d(checks.as_float_array(value, name)), name)
        if covariance.shape[0] != checked[0].size or checked[1].shape != checked[0].shape:
            raise checks.InputError(
                f"{name} does not fit; it is {covariance.shape} beside means of {checked[0].size} and {checked[1].size} "
                "coordinate(s); give all four in the same dimension"
            )
        covariances.append(covariance)
    duration = checks.positive_number(duration, "duration", "give the time from start to end")
    return GaussianBridge(checked[0], covariances[0], checked[1], covariances[1], prior, duration)
