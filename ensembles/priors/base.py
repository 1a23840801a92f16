"""The contract of a linear-Gaussian prior, and its exact transition.

Prior ``dX = (A X + a) dt + sqrt(2 D) dW`` with D in length²/time. Over a duration τ

    X_τ | X_0 = x  ~  N(F x + c, Q),   F = expm(A τ),   c = ∫ expm(A s) a ds,   Q = ∫ expm(A s) 2D expm(Aᵀ s) ds.

To add a prior, you must
1. write a frozen dataclass that inherits `LinearGaussianPrior` and checks its parameters on construction,
2. give `linear_drift(dimension) -> (A, a)` and `diffusion_matrix(dimension) -> D`,
3. give `parameters() -> dict` of plain numbers and lists, such that ``type(prior)(**prior.parameters())`` is the same
prior, 4. set `kind` (the name in study files and saved bridges) and list it in `priors/registry.py`.
Every law in tests/test_priors.py then runs on it by itself.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from functools import cached_property
from typing import Any, ClassVar

import numpy as np
from scipy.linalg import solve_triangular

from .. import checks
from .box import Box
from .van_loan import linear_transition

__all__ = ["LinearGaussianPrior", "Transition", "require_prior"]


@dataclass(frozen=True)
class Transition:
    """The exact law X_τ | X_0 = x ~ N(F x + c, Q) of a linear-Gaussian prior over one duration.

    Attributes
    ----------
    matrix : (d, d) array, F, dimensionless.
    shift : (d,) array, c, in length.
    covariance : (d, d) array, Q, in length².
    """

    matrix: np.ndarray
    shift: np.ndarray
    covariance: np.ndarray

    @property
    def dimension(self) -> int:
        """Number of coordinates d."""
        return self.shift.size

    @cached_property
    def cholesky(self) -> np.ndarray:
        """Lower triangular L with Q = L Lᵀ."""
        try:
            return np.linalg.cholesky(self.covariance)
        except np.linalg.LinAlgError:
            smallest = float(np.linalg.eigvalsh(self.covariance)[0])
            raise checks.ComputationError(
                f"the prior's covariance over this duration is singular in floating point; its smallest eigenvalue is "
                f"{smallest:.3g}; use more even diffusion coefficients or rates, or rescale the coordinates"
            ) from None

    @cached_property
    def log_normaliser(self) -> float:
        """-½ log det(2π Q): p(y | x) = exp(log_normaliser) k(whitened x, whitened y)."""
        return float(-np.log(np.diag(self.cholesky)).sum() - 0.5 * self.dimension * np.log(2.0 * np.pi))

    def mean(self, points: np.ndarray) -> np.ndarray:
        """F x + c for each row x of points (n, d)."""
        return points @ self.matrix.T + self.shift

    def whiten_sources(self, points: np.ndarray) -> np.ndarray:
        """U = L⁻¹ (F x + c), shape (n, d), dimensionless."""
        return np.ascontiguousarray(solve_triangular(self.cholesky, self.mean(points).T, lower=True).T)

    def whiten_targets(self, points: np.ndarray) -> np.ndarray:
        """V = L⁻¹ y, shape (m, d), dimensionless."""
        return np.ascontiguousarray(solve_triangular(self.cholesky, points.T, lower=True).T)

    def sample(self, points: np.ndarray, rng: Any) -> np.ndarray:
        """Draw X_τ for each start point; points (n, d) in length, result (n, d)."""
        points = checks.points(points, "points", self.dimension)
        noise = checks.generator(rng).standard_normal(points.shape)
        return self.mean(points) + noise @ self.cholesky.T

    def log_density(self, x: np.ndarray, y: np.ndarray) -> np.ndarray:
        """log p(y | x) for matching rows of x and y (n, d); one may have a single row. In nats per length^d."""
        x = checks.points(x, "x", self.dimension)
        y = checks.points(y, "y", self.dimension)
        residual = self.whiten_targets(y) - self.whiten_sources(x)
        return self.log_normaliser - 0.5 * np.einsum("ij,ij->i", residual, residual)


class LinearGaussianPrior(ABC):
    """dX = (A X + a) dt + sqrt(2 D) dW: what every prior offers. See the module's docstring to add one."""

    kind: ClassVar[str]
    box: Box | None = None
    """Boundaries that the dynamics live in; `transition` is that of unbounded space, folded by those who ask."""

    @abstractmethod
    def linear_drift(self, dimension: int) -> tuple[np.ndarray, np.ndarray]:
        """A (d, d) in 1/time and a (d,) in length/time, of the drift A x + a."""

    @abstractmethod
    def diffusion_matrix(self, dimension: int) -> np.ndarray:
        """D (d, d), symmetric positive definite, in length²/time."""

    @abstractmethod
    def parameters(self) -> dict[str, Any]:
        """The constructor's arguments as plain numbers and lists."""

    def drift(self, points: np.ndarray) -> np.ndarray:
        """Prior drift A x + a at points (n, d), in length/time."""
        points = checks.points(points, "points")
        matrix, constant = self.linear_drift(points.shape[1])
        return points @ matrix.T + constant

    def transition(self, duration: float, dimension: int) -> Transition:
        """Exact transition over `duration` (time) in `dimension` coordinates.

        F = expm(A τ), c = ∫ expm(A s) a ds, Q = ∫ expm(A s) 2D expm(Aᵀ s) ds (Van Loan 1978).

        Raises
        ------
        InputError
            If the duration is not positive, or a parameter has another dimension.

        Examples
        --------
        >>> import ensembles
        >>> ensembles.Brownian(diffusion=0.5).transition(3.0, 1).covariance.tolist()
        [[3.0]]
        """
        duration = checks.positive_number(duration, "duration", "give the later time minus the earlier one")
        dimension = checks.whole_number(dimension, "dimension")
        matrix, constant = self.linear_drift(dimension)
        transition = Transition(*linear_transition(matrix, constant, 2.0 * self.diffusion_matrix(dimension), duration))
        if not np.isfinite(transition.covariance).all():
            raise checks.ComputationError(
                f"the prior's transition overflows over the duration {duration:g}; its drift is unstable; "
                "use a shorter gap or a drift that does not grow so fast"
            )
        return transition


def require_prior(prior: Any) -> None:
    """Refuse what is not a prior."""
    if not isinstance(prior, LinearGaussianPrior):
        raise checks.InputError(
            f"prior must be a prior of this package; it is {type(prior).__name__}; use Brownian or OrnsteinUhlenbeck"
        )
