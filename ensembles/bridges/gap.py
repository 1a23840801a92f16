"""The bridge over one gap between two snapshots, in closed form from its potentials.

With φ_t the terminal potential carried back and φ̂_t the initial one carried forward by the prior,

    density ρ_t = φ_t φ̂_t,   forward drift b + 2D ∇log φ_t,   backward drift b - 2D ∇log φ̂_t.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..endpoints.atoms import AtomPotential
from ..kernels.choose import evaluation_kernel
from ..kernels.streamed import StreamedKernel
from ..kernels.truncated import TruncatedKernel
from ..priors.base import LinearGaussianPrior, Transition
from ..priors.pinned import PinnedLaw, pin, pinned_steps
from ..schrodinger.solution import Solution

__all__ = ["Gap"]


@dataclass(frozen=True, eq=False)
class Gap:
    """One gap: two clouds (n, d), (m, d) with weights that sum to 1, their times, the prior, and the solved potentials."""

    times: tuple[float, float]
    clouds: tuple[np.ndarray, np.ndarray]
    weights: tuple[np.ndarray, np.ndarray]
    prior: LinearGaussianPrior
    solution: Solution

    @property
    def dimension(self) -> int:
        """Number of coordinates d."""
        return self.clouds[0].shape[1]

    @cached_property
    def transition(self) -> Transition:
        """The prior over the whole gap."""
        return self.prior.transition(self.times[1] - self.times[0], self.dimension)

    @cached_property
    def log_p(self) -> np.ndarray:
        """log a + f (n,), -inf for weight 0."""
        with np.errstate(divide="ignore"):
            return np.log(self.weights[0]) + self.solution.log_f

    @cached_property
    def log_q(self) -> np.ndarray:
        """log b + g (m,), -inf for weight 0; π_ij = exp(log_p_i + log_q_j) k_ij."""
        with np.errstate(divide="ignore"):
            return np.log(self.weights[1]) + self.solution.log_g

    @cached_property
    def kernel(self) -> StreamedKernel | TruncatedKernel:
        """The unit Gaussian kernel between the whitened clouds."""
        transition = self.transition
        return evaluation_kernel(transition.whiten_sources(self.clouds[0]), transition.whiten_targets(self.clouds[1]))

    @cached_property
    def initial(self) -> AtomPotential:
        """φ̂ at the start of the gap."""
        return AtomPotential(self.clouds[0], self.log_p)

    @cached_property
    def terminal(self) -> AtomPotential:
        """φ at the end of the gap; the prior's normaliser is divided out so that ρ_t has mass 1."""
        return AtomPotential(self.clouds[1], self.log_q - self.transition.log_normaliser)

    def before(self, t: float) -> Transition:
        """The prior from the start of the gap to t."""
        return self.prior.transition(t - self.times[0], self.dimension)

    def after(self, t: float) -> Transition:
        """The prior from t to the end of the gap."""
        return self.prior.transition(self.times[1] - t, self.dimension)

    def log_density(self, t: float, points: np.ndarray) -> np.ndarray:
        """log ρ_t (m,), strictly inside the gap."""
        ahead, _ = self.terminal.carried_back(self.after(t), points)
        behind, _ = self.initial.carried_forward(self.before(t), points)
        return ahead + behind

    def forward_correction(self, t: float, points: np.ndarray) -> np.ndarray:
        """2D ∇log φ_t (m, d)."""
        _, gradient = self.terminal.carried_back(self.after(t), points)
        return 2.0 * gradient @ self.prior.diffusion_matrix(self.dimension)

    def backward_correction(self, t: float, points: np.ndarray) -> np.ndarray:
        """-2D ∇log φ̂_t (m, d)."""
        _, gradient = self.initial.carried_forward(self.before(t), points)
        return -2.0 * gradient @ self.prior.diffusion_matrix(self.dimension)

    @cached_property
    def joint_moments(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Mean of start and end, and the covariances start-start, start-end, end-end under the coupling."""
        a = self.weights[0]
        _, soft_mean = self.kernel.log_sum_and_mean(self.log_q)
        expected_end = soft_mean @ self.transition.cholesky.T
        start, end = self.clouds
        mean_start, mean_end = a @ start, self.weights[1] @ end
        x, y = start - mean_start, end - mean_end
        return (
            mean_start,
            mean_end,
            (x.T * a) @ x,
            (x.T * a) @ (expected_end - mean_end),
            (y.T * self.weights[1]) @ y,
        )

    def moments(self, t: float) -> tuple[np.ndarray, np.ndarray]:
        """Mean (d,) and covariance (d, d) of ρ_t: linear in the pair of ends, plus the pinned prior's own covariance."""
        law = self.pinned(t)
        mean_start, mean_end, start, cross, end = self.joint_moments
        p, q = law.start_matrix, law.end_matrix
        mixed = p @ cross @ q.T
        covariance = p @ start @ p.T + mixed + mixed.T + q @ end @ q.T + law.covariance
        return law.mean(mean_start[None], mean_end[None])[0], 0.5 * (covariance + covariance.T)

    def pinned(self, t: float) -> PinnedLaw:
        """The prior at t given both ends."""
        return pin(self.before(t), self.after(t))

    def draw_ends(self, starts: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """For each start row number, draw an end row number from the coupling; equal starts share their pass."""
        rows, inverse, counts = np.unique(starts, return_inverse=True, return_counts=True)
        picked = self.terminal.pick(self.transition, self.clouds[0][rows], counts, rng)
        ends = np.empty(starts.size, dtype=np.int64)
        ends[np.argsort(inverse, kind="stable")] = picked
        return ends

    def fill_path(
        self, start: float, begin: np.ndarray, end: np.ndarray, times: np.ndarray, rng: np.random.Generator
    ) -> np.ndarray:
        """Positions (count, T, d) of pinned paths from `begin` at `start` to `end`, at times strictly in between."""
        positions = np.empty((begin.shape[0], times.size, self.dimension))
        current = begin
        for k, law in enumerate(pinned_steps(self.prior, start, self.times[1], times, self.dimension)):
            current = law.sample(current, end, rng)
            positions[:, k] = current
        return positions
