"""Brownian motion with constant drift."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np

from .. import checks
from .base import LinearGaussianPrior
from .box import Box, read_box
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
    box : Box, optional
        Periodic axes and reflecting walls. `transition` stays that of unbounded space; a bridge or links under this
        prior sum over the images of every particle.

    Raises
    ------
    InputError
        If D is not positive (definite) or a value is not finite; if in a box a drift points at a reflecting wall.

    Examples
    --------
    >>> import ensembles
    >>> prior = ensembles.Brownian(diffusion=0.43, drift=[1.0, 0.0])
    >>> prior.transition(2.0, dimension=2).shift.tolist()
    [2.0, 0.0]
    """

    diffusion: Any
    drift_velocity: Any = None
    box: Box | None = None
    kind: ClassVar[str] = "brownian"

    def __init__(self, diffusion: Any, drift: Any = None, box: Any = None) -> None:
        object.__setattr__(self, "diffusion", diffusion_parameter(diffusion))
        object.__setattr__(self, "drift_velocity", vector_parameter(0.0 if drift is None else drift, "drift"))
        object.__setattr__(self, "box", read_box(box))
        if self.box is not None:
            self._require_separable(self.box)

    def _require_separable(self, box: Box) -> None:
        """Images of a particle stand on the axes: noise must not couple an axis with walls to another one."""
        matrix, drift = self.diffusion_matrix(box.dimension), self.linear_drift(box.dimension)[1]
        for axis, kind in enumerate(box.boundary):
            others = np.delete(matrix[axis], axis)
            if kind != "open" and others.any():
                raise checks.InputError(
                    f"in a box the noise of an axis with a boundary must be independent of the others; diffusion couples "
                    f"axis {axis} ({kind}) to another one by {others[np.argmax(np.abs(others))]:g}; give a diffusion per axis"
                )
            if kind == "reflecting" and drift[axis]:
                raise checks.InputError(
                    f"a drift towards a reflecting wall has no images; drift[{axis}] = {drift[axis]:g} on a reflecting axis; "
                    "set it to 0, or make that axis open"
                )

    def linear_drift(self, dimension: int) -> tuple[np.ndarray, np.ndarray]:
        """A = 0 and a = v."""
        return np.zeros((dimension, dimension)), expand_vector(self.drift_velocity, dimension, "drift")

    def diffusion_matrix(self, dimension: int) -> np.ndarray:
        """D (d, d) in length²/time."""
        return expand_matrix(self.diffusion, dimension, "diffusion")

    def parameters(self) -> dict[str, Any]:
        """The constructor's arguments as plain numbers and lists."""
        boxed = {} if self.box is None else {"box": self.box.parameters()}
        return {"diffusion": plain(self.diffusion), "drift": plain(self.drift_velocity), **boxed}

    def __repr__(self) -> str:
        moving = f", drift={plain(self.drift_velocity)}" if np.any(self.drift_velocity) else ""
        boxed = "" if self.box is None else f", box={self.box!r}"
        return f"Brownian(diffusion={plain(self.diffusion)}{moving}{boxed})"
