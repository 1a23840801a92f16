"""The bridge over one gap between two snapshots, in closed form from its potentials.

With φ_t the terminal potential carried back and φ̂_t the initial one carried forward by the prior,

    density ρ_t = φ_t φ̂_t,   forward drift b + 2D ∇log φ_t,   backward drift b - 2D ∇log φ̂_t.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .. import checks
from ..endpoints.atoms import AtomPotential
from ..endpoints.base import Potential
from ..endpoints.conditional import ConditionalEnd
from ..endpoints.mixture import MixturePotential
from ..endpoints.pair import PairLaw
from ..kernels.choose import evaluation_kernel
from ..kernels.compiled_paths import walk
from ..kernels.streamed import StreamedKernel
from ..kernels.truncated import TruncatedKernel
from ..priors.base import LinearGaussianPrior, Transition
from ..priors.pinned import PinnedLaw, pin, pinned_steps, square_root
from ..schrodinger.solution import Solution
from .smooth import SmoothSolution

__all__ = ["Gap"]

_ROWS = 2048  # starts whose conditional covariances are held at once


@dataclass(frozen=True, eq=False)
class Gap:
    """One gap: two clouds (n, d), (m, d) with weights that sum to 1, their times, the prior, and the solved potentials."""

    times: tuple[float, float]
    clouds: tuple[np.ndarray, np.ndarray]
    weights: tuple[np.ndarray, np.ndarray]
    prior: LinearGaussianPrior
    solution: Solution | SmoothSolution

    @property
    def dimension(self) -> int:
        """Number of coordinates d."""
        return self.clouds[0].shape[1]

    @property
    def coupled(self) -> Solution:
        """The solved coupling between the particles; smooth ends have none."""
        if isinstance(self.solution, SmoothSolution):
            raise checks.InputError(
                f"smooth ends do not couple particles; the ends between t = {self.times[0]:g} and t = {self.times[1]:g} are "
                f"a {self.solution.kind}; ask for Bridge.conditional_end, the law of the end given any point, or fit with "
                "ends='atoms'"
            )
        return self.solution

    @cached_property
    def transition(self) -> Transition:
        """The prior over the whole gap."""
        return self.prior.transition(self.times[1] - self.times[0], self.dimension)

    @cached_property
    def log_p(self) -> np.ndarray:
        """log a + f (n,), -inf for weight 0."""
        with np.errstate(divide="ignore"):
            return np.log(self.weights[0]) + self.coupled.log_f

    @cached_property
    def log_q(self) -> np.ndarray:
        """log b + g (m,), -inf for weight 0; π_ij = exp(log_p_i + log_q_j) k_ij."""
        with np.errstate(divide="ignore"):
            return np.log(self.weights[1]) + self.coupled.log_g

    @cached_property
    def kernel(self) -> StreamedKernel | TruncatedKernel:
        """The unit Gaussian kernel between the whitened clouds."""
        transition = self.transition
        return evaluation_kernel(transition.whiten_sources(self.clouds[0]), transition.whiten_targets(self.clouds[1]))

    @cached_property
    def initial(self) -> Potential:
        """φ̂ at the start of the gap."""
        if isinstance(self.solution, SmoothSolution):
            return self.solution.initial
        return AtomPotential(self.clouds[0], self.log_p)

    @cached_property
    def terminal(self) -> Potential:
        """φ at the end of the gap; the prior's normaliser is divided out so that ρ_t has mass 1."""
        if isinstance(self.solution, SmoothSolution):
            return self.solution.terminal
        return AtomPotential(self.clouds[1], self.log_q - self.transition.log_normaliser)

    def ahead(self, t: float, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ_t (m,) and its gradient (m, d), up to the end itself where that is smooth."""
        if t == self.times[1]:
            return self.terminal.log_value(points)
        return self.terminal.carried_back(self.after(t), points)

    def behind(self, t: float, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """log φ̂_t (m,) and its gradient (m, d), from the start itself where that is smooth."""
        if t == self.times[0]:
            return self.initial.log_value(points)
        return self.initial.carried_forward(self.before(t), points)

    def conditional_end(self, t: float, points: np.ndarray) -> ConditionalEnd:
        """The law of the end of the gap given points (m, d) at t before it."""
        return self.terminal.given(self.after(t), points)

    def before(self, t: float) -> Transition:
        """The prior from the start of the gap to t."""
        return self.prior.transition(t - self.times[0], self.dimension)

    def after(self, t: float) -> Transition:
        """The prior from t to the end of the gap."""
        return self.prior.transition(self.times[1] - t, self.dimension)

    def log_density(self, t: float, points: np.ndarray) -> np.ndarray:
        """log ρ_t (m,), strictly inside the gap; at a smooth end as well."""
        return self.ahead(t, points)[0] + self.behind(t, points)[0]

    def forward_correction(self, t: float, points: np.ndarray) -> np.ndarray:
        """2D ∇log φ_t (m, d)."""
        _, gradient = self.ahead(t, points)
        return 2.0 * gradient @ self.prior.diffusion_matrix(self.dimension)

    def backward_correction(self, t: float, points: np.ndarray) -> np.ndarray:
        """-2D ∇log φ̂_t (m, d)."""
        _, gradient = self.behind(t, points)
        return -2.0 * gradient @ self.prior.diffusion_matrix(self.dimension)

    @cached_property
    def joint_moments(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Mean of start and end, and the covariances start-start, start-end, end-end under the coupling."""
        a = self.weights[0]
        if isinstance(self.initial, MixturePotential) and isinstance(self.terminal, MixturePotential):
            return PairLaw(self.initial, self.terminal, self.transition).moments
        if self.terminal.smooth:
            return self._moments_from_particles()
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

    def _moments_from_particles(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """`joint_moments` where the start is the particles and the end is smooth."""
        a, start = self.weights[0], self.clouds[0]
        mean_start, d = a @ start, self.dimension
        expected, within = np.empty_like(start), np.zeros((d, d))
        for first in range(0, len(start), _ROWS):
            rows = slice(first, first + _ROWS)
            law = self.terminal.given(self.transition, start[rows])
            expected[rows] = law.mean()
            within += np.tensordot(a[rows], law.covariance(), axes=1)
        mean_end = a @ expected
        x, y = start - mean_start, expected - mean_end
        return mean_start, mean_end, (x.T * a) @ x, (x.T * a) @ y, (y.T * a) @ y + within

    def moments(self, t: float) -> tuple[np.ndarray, np.ndarray]:
        """Mean (d,) and covariance (d, d) of ρ_t: linear in the pair of ends, plus the pinned prior's own covariance."""
        law = self.pinned(t)
        mean_start, mean_end, start, cross, end = self.joint_moments
        p, q = law.start_matrix, law.end_matrix
        mixed = p @ cross @ q.T
        covariance = p @ start @ p.T + mixed + mixed.T + q @ end @ q.T + law.covariance
        return law.mean(mean_start[None], mean_end[None])[0], 0.5 * (covariance + covariance.T)

    def end_moments(self, last: bool) -> tuple[np.ndarray, np.ndarray]:
        """Mean and covariance at the start of the gap or, with `last`, at its end."""
        mean_start, mean_end, start, _, end = self.joint_moments
        return (mean_end, end) if last else (mean_start, start)

    def draw_starts(self, count: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
        """Starts (count, d) from ρ at the start of the gap, and their row numbers, -1 where the start is smooth."""
        if isinstance(self.initial, MixturePotential) and isinstance(self.terminal, MixturePotential):
            law = PairLaw(self.initial, self.terminal, self.transition)
            return law.draw_starts(count, rng), np.full(count, -1, dtype=np.int64)
        rows = rng.choice(len(self.clouds[0]), size=count, p=self.weights[0])
        return self.clouds[0][rows], rows

    def draw_on(
        self, t: float, begin: np.ndarray, rows: np.ndarray, rng: np.random.Generator
    ) -> tuple[np.ndarray, np.ndarray]:
        """One end for each point at t: positions (count, d) and row numbers; rows of `begin` where it is particles."""
        if not self.terminal.smooth and t == self.times[0] and (rows >= 0).all():
            ends = self.draw_ends(rows, rng)
            return self.clouds[1][ends], ends
        return self.terminal.draw(self.after(t), begin, rng)

    def pinned(self, t: float) -> PinnedLaw:
        """The prior at t given both ends."""
        return pin(self.before(t), self.after(t))

    def draw_ends(self, starts: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """For each start row number, draw an end row number from the coupling; equal starts share their pass."""
        terminal = AtomPotential(self.clouds[1], self.log_q)  # refused by log_q with smooth ends
        rows, inverse, counts = np.unique(starts, return_inverse=True, return_counts=True)
        picked = terminal.pick(self.transition, self.clouds[0][rows], counts, rng)
        ends = np.empty(starts.size, dtype=np.int64)
        ends[np.argsort(inverse, kind="stable")] = picked
        return ends

    def fill_path(
        self,
        start: float,
        begin: np.ndarray,
        end: np.ndarray,
        times: np.ndarray,
        rng: np.random.Generator,
        out: np.ndarray,
    ) -> None:
        """Write pinned paths from `begin` at `start` to `end` into out (count, T, d), at times strictly in between."""
        laws = pinned_steps(self.prior, start, self.times[1], times, self.dimension)
        if not laws:
            return
        steps = (
            np.array([law.start_matrix for law in laws]),
            np.array([law.end_matrix for law in laws]),
            np.array([law.shift for law in laws]),
            np.array([square_root(law.covariance) for law in laws]),
        )
        walk(steps, begin, end, rng, out)
