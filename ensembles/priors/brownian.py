"""Brownian motion with constant drift."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from .base import LinearGaussianPrior
from .parameters import diffusion_parameter, expand_matrix, expand_vector, plain, vector_parameter

__all__ = ["Brownian"]


@dataclass(frozen=True, eq=False)
class Brownian(LinearGaussianPrior):
    """Brownian motion dX = v dt + sqrt(2 D) dW, so X_τ | x ~ N(x + v τ, 2 D τ).

    Parameters
    ----------
    diffusion : float, (d,) or (d, d) array
        Diffusion coefficient D in length²/time: one number, one an axis, or a symmetric positive definite matrix.
    drift : float or (d,) array, optional
        Constant velocity v in length/time; none by default.

    Raises
    ------
    InputError
        If D is not positive (definite) or a value is not finite.

    Examples
    --------
    >>> import ensembles
    >>> prior = ensembles.Brownian(diffusion=0.43, drift=[1.0, 0.0])
    >>> prior.transition(2.0, dimension=2).shift.tolist()
    [2.0, 0.0]
    """

    diffusion: Any
    drift_velocity: Any = None
    kind: ClassVar[str] = "brownian"

    def __init__(self, diffusion: Any, drift: Any = None) -> None:
        object.__setattr__(self, "diffusion", diffusion_parameter(diffusion))
        object.__setattr__(self, "drift_velocity", vector_parameter(0.0 if drift is None else drift, "drift"))

    def linear_drift(self, dimension: int) -> tuple[np.ndarray, np.ndarray]:
        """A = 0 and a = v."""
        return np.zeros((dimension, dimension)), expand_vector(self.drift_velocity, dimension, "drift")

    def diffusion_matrix(self, dimension: int) -> np.ndarray:
        """D (d, d) in length²/time."""
        return expand_matrix(self.diffusion, dimension, "diffusion")

    def parameters(self) -> dict[str, Any]:
        """The constructor's arguments as plain numbers and lists."""
        return {"diffusion": plain(self.diffusion), "drift": plain(self.drift_velocity)}

    def __repr__(self) -> str:
        moving = f", drift={plain(self.drift_velocity)}" if np.any(self.drift_velocity) else ""
        return f"Brownian(diffusion={plain(self.diffusion)}{moving})"
