"""The fitted bridge over a series of snapshots: the chain of the bridges over its gaps."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..endpoints.conditional import ConditionalEnd
from ..priors.base import LinearGaussianPrior
from ..schrodinger.solution import Outcome, Solution
from .boxed import BoxCoupling, BoxGap
from .coupling import Coupling
from .gap import Gap
from .histories import history_paths
from .paths import Paths
from .smooth import SmoothSolution
from .wording import bridge_html, bridge_text

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["Bridge"]


@dataclass(frozen=True, eq=False, repr=False)
class Bridge:
    """A Schrödinger bridge through K snapshots, under a Markov prior with hard marginals; made by `fit_bridge`.

    Over each gap ρ_t = φ_t φ̂_t with the potentials carried by the prior; all methods are closed forms or exact draws.
    Couplings and paths are inferences under the prior, not observed lineages or tracks.

    Attributes
    ----------
    series, prior : what was bridged, and under which dynamics.
    solutions : one `Solution` a gap, with log_f, log_g, iterations, outcome and certificate; with smooth ends one
        `SmoothSolution`, with both potentials.
    tolerance : L1 error of the marginals that was asked for; smooth ends have none.
    ends : "atoms", "kernel" or "mixture".
    notes : sentences worth knowing: why these ends, what was chosen.
    gap_weights : the weights of both snapshots in the coupling of each gap, where growth makes them others than the
        series' own; otherwise None.
    earlier : the last fits of a sweep that this one started from, for the next to start from; not saved.
    """

    series: SnapshotSeries
    prior: LinearGaussianPrior
    solutions: tuple[Solution | SmoothSolution, ...]
    tolerance: float
    ends: str = "atoms"
    notes: tuple[str, ...] = ()
    gap_weights: tuple[tuple[np.ndarray, np.ndarray], ...] | None = None
    earlier: tuple[Bridge, ...] = field(default=(), repr=False)

    @cached_property
    def gaps(self) -> tuple[Gap, ...]:
        """The bridge over each gap, K - 1 of them."""
        s = self.series
        kind = Gap if self.prior.box is None else BoxGap
        return tuple(
            kind(
                (float(s.times[k]), float(s.times[k + 1])),
                (s.clouds[k], s.clouds[k + 1]),
                (s.weights[k], s.weights[k + 1]) if self.gap_weights is None else self.gap_weights[k],
                self.prior,
                solution,
            )
            for k, solution in enumerate(self.solutions)
        )

    @property
    def converged(self) -> bool:
        """Whether every gap met its tolerance."""
        return all(solution.outcome is Outcome.CONVERGED for solution in self.solutions)

    def log_density(self, t: float, points: np.ndarray) -> np.ndarray:
        """log ρ_t = log φ_t + log φ̂_t at points (m, d), in nats per length^d; result (m,).

        Raises
        ------
        InputError
            Outside the series, and with atoms at a snapshot time, where the fitted population is a sum of atoms and
            has no density. With smooth ends a snapshot belongs to the gap that begins there, the last to the last gap.

        Examples
        --------
        >>> import numpy as np, ensembles
        >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0], [0.0, 1.0]])
        >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
        >>> x = np.linspace(-8, 8, 2001)
        >>> round(float(np.exp(bridge.log_density(0.5, x)).sum() * (x[1] - x[0])), 6)
        1.0
        """
        gap = self._gap_inside(t, "the density")
        return gap.log_density(float(t), self._points(points))

    def drift(self, t: float, points: np.ndarray) -> np.ndarray:
        """Forward drift b + 2D ∇log φ_t at points (m, d), in length/time; result (m, d).

        At a snapshot time it belongs to the gap that begins there. With atoms it grows like 1/(T - t) towards the end of
        a gap, so integrating it up to T in time steps is not a way to draw paths: use `sample_paths`.
        """
        points = self._points(points)
        gap = self._gap_from(t, "the forward drift")
        return self.prior.drift(points) + gap.forward_correction(float(t), points)

    def backward_drift(self, t: float, points: np.ndarray) -> np.ndarray:
        """Backward drift b - 2D ∇log φ̂_t at points (m, d), in length/time; result (m, d).

        It is the velocity of the process run backwards, with its sign turned: E[X_t - X_(t-h) | X_t = x] / h as h →
        0. At a snapshot time it belongs to the gap that ends there.
        """
        points = self._points(points)
        gap = self._gap_until(t, "the backward drift")
        return self.prior.drift(points) + gap.backward_correction(float(t), points)

    def current_velocity(self, t: float, points: np.ndarray) -> np.ndarray:
        """½ (forward + backward drift), the velocity v of the population: ∂ρ/∂t + ∇·(ρ v) = 0; (m, d), length/time."""
        points = self._points(points)
        gap = self._gap_inside(t, "the current velocity")
        correction = gap.forward_correction(float(t), points) + gap.backward_correction(float(t), points)
        return self.prior.drift(points) + 0.5 * correction

    def moments(self, t: float) -> tuple[np.ndarray, np.ndarray]:
        """Mean (d,) and covariance (d, d) of the population at t, exact; at a snapshot time those of the cloud.

        With smooth ends those at a snapshot are the model's.
        """
        k = self._snapshot_at(t)
        if k is not None and self._smooth_at(k):
            return self._gap_at(k).end_moments(last=k == len(self.gaps))
        if k is not None:
            cloud, weights = self.series.clouds[k], self.series.weights[k]
            mean = weights @ cloud
            return mean, ((cloud - mean).T * weights) @ (cloud - mean)
        return self._gap_inside(t, "the moments").moments(float(t))

    def sample(self, t: float, count: int, rng: Any = 0) -> np.ndarray:
        """Draw `count` positions (count, d) from the population at t; exact, also at a snapshot time."""
        count = checks.whole_number(count, "count")
        generator = checks.generator(rng)
        k = self._snapshot_at(t)
        if k is not None and not self._smooth_at(k):
            cloud = self.series.clouds[k]
            return cloud[generator.choice(len(cloud), size=count, p=self.series.weights[k])]
        gap = self._gap_inside(t, "a sample")
        starts, rows = gap.draw_starts(count, generator)
        if float(t) == gap.times[0]:
            return starts
        ends, _ = gap.draw_on(gap.times[0], starts, rows, generator)
        if float(t) == gap.times[1]:
            return ends
        return gap.pinned(float(t)).sample(starts, ends, generator)

    def sample_paths(self, count: int, times: np.ndarray, rng: Any = 0) -> Paths:
        """Draw paths through all snapshots, seen at `times` (T,): exact in law, with no time-step error.

        A start is drawn from the first snapshot, each next particle from the coupling given the one before, and the
        prior pinned between them. With smooth ends the places at the snapshots are drawn from the potentials, `members`
        is -1 there, and every later gap continues from where the one before arrived. With growth, the paths are the
        histories of the last snapshot: each runs back from one of its particles.
        """
        count = checks.whole_number(count, "count")
        generator = checks.generator(rng)
        if self.gap_weights is not None:
            return history_paths(self, count, self._path_times(times, float(self.series.times[0])), generator)
        starts, rows = self.gaps[0].draw_starts(count, generator)
        return self._continue_paths(starts, rows, 0, float(self.series.times[0]), times, generator)

    def sample_paths_from(self, points: np.ndarray, start: float, times: np.ndarray, rng: Any = 0) -> Paths:
        """Draw one path from each new start point (m, d) at time `start`, seen at `times` ≥ start; exact in law.

        The end of the first gap is drawn with probability ∝ φ(y) p(y | x), so a start need not be a particle.
        """
        points = self._points(points)
        generator = checks.generator(rng)
        gap = self._gap_from(start, "a path")
        index = self.gaps.index(gap)
        nowhere = np.full(len(points), -1, dtype=np.int64)
        return self._continue_paths(points, nowhere, index, float(start), times, generator)

    def _continue_paths(
        self,
        begin: np.ndarray,
        rows: np.ndarray,
        index: int,
        start: float,
        times: np.ndarray,
        rng: np.random.Generator,
    ) -> Paths:
        times = self._path_times(times, start)
        positions = np.empty((begin.shape[0], times.size, self.series.dimension))
        members = np.full((begin.shape[0], len(self.series.times)), -1, dtype=np.int64)
        members[:, index] = rows
        positions[:, times == start] = begin[:, None]
        for k in range(index, len(self.gaps)):
            gap = self.gaps[k]
            end, rows = gap.draw_on(start, begin, rows, rng)
            inside = slice(*np.searchsorted(times, [np.nextafter(start, np.inf), gap.times[1]]))
            gap.fill_path(start, begin, end, times[inside], rng, positions[:, inside])
            positions[:, times == gap.times[1]] = end[:, None]
            members[:, k + 1] = rows
            begin, start = end, gap.times[1]
        return Paths(times, positions, members, self.series.position_names)

    def coupling(self, gap: int = 0) -> Coupling:
        """The coupling between snapshots `gap` and `gap + 1`: who became whom, as probabilities.

        Smooth ends do not couple particles: ask for `conditional_end`.
        """
        chosen = self._gap_number(gap)
        if isinstance(chosen, BoxGap):
            return BoxCoupling(chosen.kernel, chosen.log_p, chosen.log_q, int(gap), int(gap) + 1, chosen)
        return Coupling(chosen.kernel, chosen.log_p, chosen.log_q, int(gap), int(gap) + 1)

    def conditional_end(self, points: np.ndarray, start: float | None = None) -> ConditionalEnd:
        """The law of the end of a gap given points (m, d) at time `start` (default: the first snapshot): a mixture.

        π(y | x) ∝ p(y | x) φ(y); its `mean()` is the prediction for a new point.

        Examples
        --------
        >>> import ensembles
        >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 1.0], [2.0, 3.0]])
        >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
        >>> bridge.conditional_end([[0.5]]).mean().round(6).tolist()
        [[2.5]]
        """
        start = float(self.series.times[0]) if start is None else start
        points = self._points(points)
        t = self._time(start)
        if t == self.series.times[-1]:
            raise checks.InputError(f"nothing follows the last snapshot; start = {t:g}; give a time before it")
        gap = self.gaps[int(np.searchsorted(self.series.times, t, side="right")) - 1]
        return gap.conditional_end(t, points)

    def relative_entropy(self, gap: int = 0) -> float:
        """Relative entropy of the bridge over a gap to the prior from the same start, in nats; smooth ends only.

        mean log φ over the end cloud minus mean log (φ carried back) over the start cloud, the quantity that the fit
        maximises: the model's own value with one component, else its estimate on the two clouds.

        Raises
        ------
        InputError
            With atoms, which the prior reaches with probability 0: there it is infinite.
        """
        solution = self._gap_number(gap).solution
        if not isinstance(solution, SmoothSolution):
            raise checks.InputError(
                f"the relative entropy to the prior is infinite with atoms; gap {gap} ends in "
                f"{len(self.series.clouds[gap + 1])} of them; fit with ends='mixture' or ends='kernel'"
            )
        return solution.log_likelihood

    def save(self, path: str | Path) -> None:
        """Write the bridge to an .npz file (no pickle); read it with `load_bridge`."""
        from .storage import save_bridge

        save_bridge(self, path)

    def _gap_number(self, gap: int) -> Gap:
        if isinstance(gap, bool) or not isinstance(gap, (int, np.integer)) or not 0 <= gap < len(self.gaps):
            raise checks.InputError(
                f"no such gap; gap {gap!r} of a bridge with {len(self.gaps)} gap(s); use 0 to {len(self.gaps) - 1}"
            )
        return self.gaps[gap]

    def _gap_at(self, k: int) -> Gap:
        """The gap that snapshot k belongs to: the one that begins there, for the last the one before."""
        return self.gaps[min(k, len(self.gaps) - 1)]

    def _smooth_at(self, k: int) -> bool:
        gap = self._gap_at(k)
        return gap.terminal.smooth if k == len(self.gaps) else gap.initial.smooth

    def _points(self, points: np.ndarray) -> np.ndarray:
        return checks.points(points, "points", self.series.dimension)

    def _time(self, t: float) -> float:
        try:
            time = float(t)
        except (TypeError, ValueError):
            raise checks.InputError(f"the time must be a number; it is {t!r}; give one time of the series") from None
        first, last = float(self.series.times[0]), float(self.series.times[-1])
        if not first <= time <= last:
            raise checks.InputError(
                f"the time lies outside the series; t = {time:g} with snapshots from {first:g} to {last:g}; "
                "a bridge says nothing before its first or after its last snapshot"
            )
        return time

    def _snapshot_at(self, t: float) -> int | None:
        found = np.flatnonzero(self.series.times == self._time(t))
        return int(found[0]) if found.size else None

    def _gap_inside(self, t: float, what: str) -> Gap:
        t = self._time(t)
        k = self._snapshot_at(t)
        if k is not None and self._smooth_at(k):
            return self._gap_at(k)
        if k is not None:
            raise checks.InputError(
                f"{what} does not exist at a snapshot; t = {t:g} is one, where the fitted population is a sum of atoms; "
                "ask at a time strictly between two snapshots"
            )
        return self.gaps[int(np.searchsorted(self.series.times, t)) - 1]

    def _gap_from(self, t: float, what: str) -> Gap:
        t = self._time(t)
        last = len(self.gaps)
        if t == self.series.times[-1] and self._smooth_at(last) and what != "a path":
            return self._gap_at(last)
        if t == self.series.times[-1]:
            raise checks.InputError(
                f"{what} does not exist at the last snapshot; t = {t:g}, where it grows without bound; ask at an earlier time"
            )
        return self.gaps[int(np.searchsorted(self.series.times, t, side="right")) - 1]

    def _gap_until(self, t: float, what: str) -> Gap:
        t = self._time(t)
        if t == self.series.times[0] and self._smooth_at(0):
            return self.gaps[0]
        if t == self.series.times[0]:
            raise checks.InputError(
                f"{what} does not exist at the first snapshot; t = {t:g}, where it grows without bound; ask at a later time"
            )
        return self.gaps[int(np.searchsorted(self.series.times, t)) - 1]

    def _path_times(self, times: np.ndarray, start: float) -> np.ndarray:
        checked = checks.times(np.atleast_1d(times), "times")
        self._time(checked[0])
        self._time(checked[-1])
        if checked[0] < start:
            raise checks.InputError(
                f"times begin before the paths do; times[0] = {checked[0]:g} and the start is {start:g}; leave out earlier times"
            )
        return checked

    def __repr__(self) -> str:
        return bridge_text(self)

    def _repr_html_(self) -> str:
        return bridge_html(self)
