"""Inertia: a particle with position and velocity, friction and temperature, of which positions are observed.

    dx = v dt,   dv = -γ v dt + σ dW,   σ² = 2 γ ⟨v²⟩ = 2 γ² D

The pair (x, v) is Markov and linear; the position alone is not. With Maxwell velocities at the start the displacement over
t is exactly Gaussian, of variance a coordinate (Fürth 1920, with τ = 1/γ)

    2 D [t - τ (1 - e^{-t/τ})].
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from .. import checks
from .base import Transition
from .van_loan import linear_transition

__all__ = ["Kinetic", "KineticPin"]


@dataclass(frozen=True)
class KineticPin:
    """Position and velocity at t given the positions at both ends of a gap (and the velocities, where these are given).

    One coordinate: (x, v)_t ~ N(gain · ends + offset, covariance); gain (2, k), covariance (2, 2).
    """

    gain: np.ndarray
    covariance: np.ndarray

    def mean(self, ends: np.ndarray) -> np.ndarray:
        """Mean (n, 2) of (x, v) for ends (n, k)."""
        return ends @ self.gain.T


@dataclass(frozen=True, eq=False)
class Kinetic:
    """Inertial Brownian motion of friction γ and diffusion coefficient D, positions observed.

    Parameters
    ----------
    friction : γ in 1/time, the inverse of the momentum relaxation time τ.
    diffusion : D in length²/time at long times; ⟨v²⟩ = D γ is k_B T / m a coordinate.

    Raises
    ------
    InputError
        If either is not positive.

    Examples
    --------
    >>> prior = Kinetic(friction=2.0, diffusion=1.0)
    >>> round(float(prior.displacement_variance(3.0)), 6)  # Fürth: 2 D [t - τ (1 - e^{-t/τ})]
    5.002479
    """

    friction: float
    diffusion: float

    def __init__(self, friction: float, diffusion: float) -> None:
        object.__setattr__(self, "friction", checks.positive_number(friction, "friction", "give it in 1/time"))
        object.__setattr__(self, "diffusion", checks.positive_number(diffusion, "diffusion", "give it in length²/time"))

    @property
    def velocity_variance(self) -> float:
        """⟨v²⟩ = D γ of one coordinate, in length²/time²: k_B T / m."""
        return self.diffusion * self.friction

    def displacement_variance(self, duration: float) -> float:
        """Variance of one coordinate of the displacement with Maxwell velocities at the start; Fürth 1920."""
        return float(self._joint(np.array([float(duration)]))[0, 0])

    def phase_transition(self, duration: float) -> Transition:
        """Exact transition of (x, v) of one coordinate over a duration: F (2, 2), Q (2, 2), by Van Loan."""
        duration = checks.positive_number(duration, "duration", "give the later time minus the earlier one")
        matrix = np.array([[0.0, 1.0], [0.0, -self.friction]])
        noise = np.diag([0.0, 2.0 * self.friction**2 * self.diffusion])
        return Transition(*linear_transition(matrix, np.zeros(2), noise, duration))

    def position_transition(self, duration: float, dimension: int) -> Transition:
        """Exact transition of the position with Maxwell velocities at the start: F = 1, Q by Fürth; not composable."""
        variance = self.displacement_variance(checks.positive_number(duration, "duration"))
        return Transition(np.eye(dimension), np.zeros(dimension), variance * np.eye(dimension))

    def _joint(self, times: np.ndarray) -> np.ndarray:
        """Covariance of x_t - x_0 at the times (k,) and v at time 0 and at the times: order x.., v_0, v.. (2 k + 1)."""
        count = times.size
        covariance = np.zeros((2 * count + 1, 2 * count + 1))
        # State (x - x_0, v) stepped from one time to the next; every state is F_k v_0 + noise.
        previous, state = 0.0, np.array([[0.0, 0.0], [0.0, self.velocity_variance]])
        carried = [np.zeros((2, 2))] * count
        cross_start = np.array([0.0, self.velocity_variance])
        covariance[count, count] = self.velocity_variance
        for k, time in enumerate(times):
            if time > previous:
                step = self.phase_transition(time - previous)
                state = step.matrix @ state @ step.matrix.T + step.covariance
                cross_start = step.matrix @ cross_start
                carried = [step.matrix @ c for c in carried[:k]] + carried[k:]
            carried[k] = state
            rows = np.array([k, count + 1 + k])
            covariance[np.ix_(rows, rows)] = state
            covariance[rows, count] = covariance[count, rows] = cross_start
            for j in range(k):
                others = np.array([j, count + 1 + j])
                covariance[np.ix_(rows, others)] = carried[j]
                covariance[np.ix_(others, rows)] = carried[j].T
            previous = time
        return covariance

    def pin_positions(self, time: float, duration: float) -> KineticPin:
        """(x, v) at `time` given x at 0 and at `duration`, Maxwell velocities: gain for the two positions."""
        law = self._conditional(np.array([time, duration]), [1])
        gain = np.column_stack([np.array([1.0, 0.0]) - law[0][:, 0], law[0][:, 0]])
        return KineticPin(gain, law[1])

    def _conditional(self, times: np.ndarray, observed: list[int]) -> tuple[np.ndarray, np.ndarray]:
        """Gain on the observed entries of `_joint` and covariance, of (x - x_0, v) at the first of two times."""
        joint = self._joint(times)
        wanted = [0, times.size + 1]
        block = joint[np.ix_(observed, observed)]
        gain = np.linalg.solve(block, joint[np.ix_(observed, wanted)]).T
        covariance = joint[np.ix_(wanted, wanted)] - gain @ joint[np.ix_(observed, wanted)]
        return gain, 0.5 * (covariance + covariance.T)

    def sample_pinned(
        self, start: np.ndarray, end: np.ndarray, times: np.ndarray, duration: float, rng: Any
    ) -> tuple[np.ndarray, np.ndarray]:
        """Positions and velocities (n, T, d) at `times` in (0, duration) of paths between positions (n, d); exact in law."""
        generator = checks.generator(rng)
        times = np.asarray(times, dtype=float)
        count = times.size
        joint = self._joint(np.append(times, duration))
        size = count + 1
        wanted = [*range(count), *range(size + 1, size + 1 + count)]
        gain = joint[wanted, count] / joint[count, count]
        covariance = joint[np.ix_(wanted, wanted)] - np.outer(gain, joint[count, wanted])
        values, vectors = np.linalg.eigh(0.5 * (covariance + covariance.T))
        root = vectors * np.sqrt(np.clip(values, 0.0, None))
        moved = (end - start)[:, None, :] * gain[None, :, None]
        noise = np.einsum("kl,nld->nkd", root, generator.standard_normal((len(start), 2 * count, start.shape[1])))
        both = moved + noise
        return both[:, :count] + start[:, None, :], both[:, count:]

    def parameters(self) -> dict[str, float]:
        """The constructor's arguments."""
        return {"friction": self.friction, "diffusion": self.diffusion}

    def __repr__(self) -> str:
        return f"Kinetic(friction={self.friction}, diffusion={self.diffusion})"
