"""The contract of an endpoint: what a bridge asks of its initial and terminal potentials.

A terminal potential φ sits at the later end of a gap and is carried back by the prior, an initial one φ̂ sits at the
earlier end and is carried forward; in between ρ_t = φ_t φ̂_t. Particles themselves (`atoms.AtomPotential`) and sums of
Gaussian bumps (`mixture.MixturePotential`) are the two kinds; atoms are bumps of covariance 0.

To add a potential, you must
1. write a frozen dataclass with the methods of `Potential`,
2. set `smooth`: whether log φ is finite at the end itself (then `log_value` is asked for it),
3. give `given`, the law of the end given points before it, from which bridges draw and predict.
tests/test_smooth_ends.py runs the laws of a potential on each.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar, Protocol

import numpy as np

if TYPE_CHECKING:
    from .conditional import ConditionalEnd

__all__ = ["GaussianTransition", "Potential"]


class GaussianTransition(Protocol):
    """What an endpoint needs of a transition N(F x + c, Q)."""

    @property
    def matrix(self) -> np.ndarray:
        """F (d, d)."""

    @property
    def shift(self) -> np.ndarray:
        """c (d,)."""

    @property
    def cholesky(self) -> np.ndarray:
        """L (d, d) with Q = L Lᵀ."""

    @property
    def log_normaliser(self) -> float:
        """-½ log det(2π Q)."""

    def mean(self, points: np.ndarray) -> np.ndarray:
        """F x + c."""

    def whiten_sources(self, points: np.ndarray) -> np.ndarray:
        """L⁻¹(F x + c)."""

    def whiten_targets(self, points: np.ndarray) -> np.ndarray:
        """L⁻¹ y."""


class Potential(Protocol):
    """A potential at one end of a gap; see the module's docstring to add one."""

    smooth: ClassVar[bool]

    def carried_back(self, transition: GaussianTransition, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ (m,) and its gradient (m, d) in 1/length, at x (m, d) one transition before this end."""

    def carried_forward(self, transition: GaussianTransition, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ̂ (m,) and its gradient (m, d) in 1/length, at y (m, d) one transition after this end."""

    def log_value(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ (m,) and its gradient (m, d) at the end itself; asked of smooth potentials only."""

    def given(self, transition: GaussianTransition, x: np.ndarray) -> ConditionalEnd:
        """The law of the end given x (m, d) one transition before it, ∝ p(y | x) φ(y)."""

    def draw(
        self, transition: GaussianTransition, x: np.ndarray, rng: np.random.Generator
    ) -> tuple[np.ndarray, np.ndarray]:
        """One end for each row of x: positions (m, d), and the row numbers of the particles, -1 where there are none."""
