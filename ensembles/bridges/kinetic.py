"""The bridge of inertial particles between two snapshots of positions, exact in position.

With Maxwell velocities at the start the positions at both ends are jointly Gaussian, so the coupling of two snapshots is
that of a Gaussian kernel of Fürth's variance, and the path between two linked positions is a pinned Gaussian path in phase
space. Three snapshots would need the law of the velocity at the middle one, which positions do not show: the position is
not Markov, the chain of pairwise bridges would redraw every velocity there, and is refused.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..kernels.choose import gaussian_kernel
from ..kernels.streamed import StreamedKernel
from ..priors.kinetic import Kinetic
from ..schrodinger.solution import ConvergenceError, Outcome, Solution
from ..schrodinger.solve import solve
from .coupling import Coupling
from .paths import Paths

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["KineticBridge", "fit_kinetic_bridge"]


@dataclass(frozen=True, eq=False)
class KineticBridge:
    """A bridge of inertial particles between two snapshots; made by `fit_kinetic_bridge`."""

    series: SnapshotSeries
    prior: Kinetic
    solution: Solution

    @property
    def _duration(self) -> float:
        return float(self.series.times[1] - self.series.times[0])

    def coupling(self) -> Coupling:
        """Who became whom, as probabilities."""
        step = self.prior.position_transition(self._duration, self.series.dimension)
        start, end = self.series.clouds
        with np.errstate(divide="ignore"):
            logs = [np.log(w) for w in self.series.weights]
        return Coupling(
            StreamedKernel(step.whiten_sources(start), step.whiten_targets(end)),
            logs[0] + self.solution.log_f, logs[1] + self.solution.log_g, 0, 1,
        )  # fmt: skip

    def moments(self, t: float) -> tuple[np.ndarray, np.ndarray]:
        """Mean (d,) and covariance (d, d) of the positions at t, exact."""
        coupling = self.coupling()
        start, end = self.series.clouds
        a, b = self.series.weights
        mean_start, mean_end = a @ start, b @ end
        x, y = start - mean_start, end - mean_end
        cross = (x.T * a) @ (coupling.expectation(end) - mean_end)
        offset = self._inside(t)
        law = self.prior.pin_positions(offset, self._duration)
        p, q = law.gain[0]
        covariance = p * p * (x.T * a) @ x + p * q * (cross + cross.T) + q * q * (y.T * b) @ y
        return p * mean_start + q * mean_end, covariance + law.covariance[0, 0] * np.eye(self.series.dimension)

    def sample_paths(self, count: int, times: np.ndarray, rng: Any = 0) -> tuple[Paths, np.ndarray]:
        """Paths of positions, and the velocities (count, T, d) that go with them, at times between the snapshots."""
        generator = checks.generator(rng)
        count = checks.whole_number(count, "count")
        seen = checks.times(np.atleast_1d(times), "times")
        for t in seen:
            self._inside(t)
        coupling = self.coupling()
        starts = generator.choice(len(self.series.clouds[0]), size=count, p=self.series.weights[0])
        rows, inverse, counts = np.unique(starts, return_inverse=True, return_counts=True)
        kernel = coupling.kernel.restrict(rows, np.arange(coupling.shape[1]))
        picked = kernel.sample_targets(coupling.log_q, counts, generator.random(count))
        ends = np.empty(count, dtype=np.int64)
        ends[np.argsort(inverse, kind="stable")] = picked
        begin, end = self.series.clouds[0][starts], self.series.clouds[1][ends]
        positions, velocities = self.prior.sample_pinned(
            begin, end, seen - self.series.times[0], self._duration, generator
        )
        members = np.column_stack([starts, ends])
        return Paths(seen, positions, members, self.series.position_names), velocities

    def _inside(self, t: float) -> float:
        first, last = map(float, self.series.times)
        if not first < t < last:
            raise checks.InputError(
                f"the time must lie between the snapshots; t = {t:g} with snapshots at {first:g} and {last:g}; ask in between"
            )
        return float(t) - first


def fit_kinetic_bridge(series: SnapshotSeries, prior: Kinetic, *, tolerance: float = 1e-6) -> KineticBridge:
    """Fit the bridge of inertial particles between two snapshots of positions.

    π_ij = a_i b_j exp(f_i + g_j) exp(-|y_j - x_i|² / (2 q)),   q = 2 D [t - τ (1 - e^{-t/τ})]   (Fürth 1920)

    Raises
    ------
    InputError
        With more than two snapshots: positions do not show the velocity that joins two gaps.
    ConvergenceError
        If the tolerance is missed.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 1.0], [0.5, 2.0]])
    >>> bridge = ensembles.fit_kinetic_bridge(series, ensembles.Kinetic(friction=2.0, diffusion=0.5))
    >>> bridge.coupling().matrix().sum(axis=1).round(6).tolist()
    [0.5, 0.5]
    """
    if not isinstance(prior, Kinetic):
        raise checks.InputError(f"prior must be Kinetic; it is {type(prior).__name__}; use fit_bridge for other priors")
    if len(series) != 2:
        raise checks.InputError(
            f"a kinetic bridge joins two snapshots; there are {len(series)}; positions do not show the velocity at a middle "
            "snapshot, and without it the path before does not determine the one after: bridge pairs of snapshots on their own"
        )
    step = prior.position_transition(float(series.times[1] - series.times[0]), series.dimension)
    kernel = gaussian_kernel(step.whiten_sources(series.clouds[0]), step.whiten_targets(series.clouds[1]))
    solution = solve(kernel, (series.weights[0], series.weights[1]), tolerance=tolerance)
    if solution.outcome is not Outcome.CONVERGED:
        raise ConvergenceError(f"the kinetic bridge did not converge; {solution.message}", solution)
    return KineticBridge(series, prior, solution)
