"""The Ornstein-Uhlenbeck process: mean reversion, a harmonic trap, rotation."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from .. import checks
from .base import LinearGaussianPrior
from .parameters import diffusion_parameter, expand_matrix, expand_vector, plain, vector_parameter

__all__ = ["OrnsteinUhlenbeck"]


@dataclass(frozen=True, eq=False)
class OrnsteinUhlenbeck(LinearGaussianPrior):
    """Mean-reverting motion dX = -K (X - θ) dt + sqrt(2 D) dW.

    With a scalar rate κ: X_τ | x ~ N(θ + e^{-κτ}(x - θ), D (1 - e^{-2κτ}) / κ).

    Parameters
    ----------
    rate : float, (d,) or (d, d) array
        K in 1/time: one number, one an axis, or any matrix. Rotation is allowed, and so is a direction of rate 0
        (Brownian there) or below 0 (running away from the centre).
    centre : float or (d,) array
        θ in length.
    diffusion : float, (d,) or (d, d) array
        D in length²/time.

    Raises
    ------
    InputError
        If a value is not finite, D is not positive (definite), or the shapes disagree.

    Examples
    --------
    >>> import ensembles
    >>> step = ensembles.OrnsteinUhlenbeck(rate=1.0, centre=0.0, diffusion=1.0).transition(0.5, 1)
    >>> step.mean([[3.0]]).round(10).tolist(), step.covariance.round(10).tolist()
    ([[1.8195919791]], [[0.6321205588]])
    """

    rate: Any
    centre: Any
    diffusion: Any
    kind: ClassVar[str] = "ornstein-uhlenbeck"

    def __init__(self, rate: Any, centre: Any = 0.0, diffusion: Any = None) -> None:
        if diffusion is None:
            raise checks.InputError(
                "diffusion is missing; an Ornstein-Uhlenbeck prior needs it beside the rate; give it in length²/time"
            )
        matrix = checks.as_float_array(rate, "rate")
        checks.require_finite(matrix, "rate", "give it in 1/time")
        if matrix.ndim > 2 or matrix.size == 0 or (matrix.ndim == 2 and matrix.shape[0] != matrix.shape[1]):
            raise checks.InputError(
                f"rate must be a number, d numbers or a d by d matrix; its shape is {matrix.shape}; reshape it"
            )
        object.__setattr__(self, "rate", matrix)
        object.__setattr__(self, "centre", vector_parameter(centre, "centre"))
        object.__setattr__(self, "diffusion", diffusion_parameter(diffusion))

    def linear_drift(self, dimension: int) -> tuple[np.ndarray, np.ndarray]:
        """A = -K and a = K θ."""
        rate = expand_matrix(self.rate, dimension, "rate")
        return -rate, rate @ expand_vector(self.centre, dimension, "centre")

    def diffusion_matrix(self, dimension: int) -> np.ndarray:
        """D (d, d) in length²/time."""
        return expand_matrix(self.diffusion, dimension, "diffusion")

    def parameters(self) -> dict[str, Any]:
        """The constructor's arguments as plain numbers and lists."""
        return {"rate": plain(self.rate), "centre": plain(self.centre), "diffusion": plain(self.diffusion)}

    def __repr__(self) -> str:
        return (
            f"OrnsteinUhlenbeck(rate={plain(self.rate)}, centre={plain(self.centre)}, "
            f"diffusion={plain(self.diffusion)})"
        )
