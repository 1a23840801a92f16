"""Fit a bridge: the one place where data, dynamics and arithmetic meet."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from ..kernels.choose import MEMORY, evaluation_kernel, gaussian_kernel
from ..kernels.threads import one_blas_thread
from ..priors.base import LinearGaussianPrior, require_prior
from ..schrodinger.iteration import Strategy
from ..schrodinger.solution import ConvergenceError, Outcome, Solution, State
from ..schrodinger.solve import SWEEP_LIMIT, solve
from .boxed import gap_kernel
from .bridge import Bridge
from .choose_ends import chosen_ends
from .growing import growing_weights, growth_notes, require_particles, solve_growing, unbalanced_start
from .smooth import KernelEnds, MixtureEnds, SmoothSolution
from .smooth_fit import fit_smooth_gap
from .warm import GapProblem, gap_start, history_of

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["SolverOptions", "fit_bridge"]

_LARGEST_RATIO = 1e6  # mean squared whitened distance; beyond it the noise ladder is not known to arrive


@dataclass(frozen=True)
class SolverOptions:
    """How a fit is computed, apart from its tolerance.

    Attributes
    ----------
    sweep_limit : passes over the kernel allowed a gap.
    memory : bytes that a stored kernel may take; a larger problem is streamed.
    strategy : what the iteration may use; see `ensembles.schrodinger.iteration.Strategy`.
    allow_unconverged : return a bridge that misses its tolerance, with a warning, in place of an error.
    observe : called as observe(gap, state) after every pass over the kernel; a true return stops that gap.
    """

    sweep_limit: int = SWEEP_LIMIT
    memory: float = MEMORY
    strategy: Strategy = field(default_factory=Strategy)
    allow_unconverged: bool = False
    observe: Callable[[int, State], bool | None] | None = None


def fit_bridge(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    *,
    tolerance: float = 1e-6,
    ends: str | MixtureEnds | KernelEnds = "atoms",
    components: int | None = None,
    start: Bridge | None = None,
    options: SolverOptions | None = None,
) -> Bridge:
    """Fit the Schrödinger bridge through all snapshots of a series.

    Over every gap, π_ij = a_i b_j exp(f_i + g_j) k_ij with the prior's transition density k and the two clouds' weights as
    marginals; the bridge over K snapshots is the chain of the pairwise ones. Where the series says how particles grow
    (`SnapshotSeries.with_growth`), the earlier weights are those that birth and death leave at the end of the gap.

    Parameters
    ----------
    series : SnapshotSeries of K ≥ 2 snapshots.
    prior : Brownian or OrnsteinUhlenbeck, in the units of the series.
    tolerance : largest L1 error of either marginal of each coupling (weights sum to 1); of atoms.
    ends : "atoms", the particles themselves; "mixture" or "kernel", smooth potentials fitted by maximum likelihood (give a
        `MixtureEnds` or `KernelEnds` for their options); "auto", by dimension, numbers of particles and noise, with the
        reason in the bridge's notes.
    components : of smooth ends, Gaussian components or kernel centres; by default chosen by held-out likelihood, and 300
        centres. One full-covariance component is the bridge between two Gaussians.
    start : another bridge through the same snapshots, whose potentials are a warm start.
    options : `SolverOptions`: sweeps and memory allowed, progress, whether a bridge that missed its tolerance is returned.

    Returns
    -------
    Bridge

    Raises
    ------
    InputError
        If the noise is below 1e-6 of the squared distances in a gap, a parameter is out of range, or smooth ends cannot be
        fitted: more components than particles, a constant column, all particles at one place.
    ConvergenceError
        If a gap misses its tolerance; its `solution` is what was reached.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 2.0], [[0.0, 1.0], [0.5, 2.0, 3.0]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.43))
    >>> bridge.coupling(0).matrix().sum(axis=1).round(6).tolist()
    [0.5, 0.5]
    """
    require_prior(prior)
    options = options or SolverOptions()
    chosen, reason = chosen_ends(series, prior, ends, components)
    if prior.box is not None:
        if not isinstance(chosen, str):
            raise checks.InputError(
                f"smooth ends are not available in a box; ends = {ends!r} and the prior has a box; use ends='atoms'"
            )
        for time, cloud in zip(series.times, series.clouds):
            prior.box.require_inside(cloud, f" in snapshot t = {time:g}")
    if not isinstance(chosen, str):
        require_particles(series, "smooth")
        return _fit_smooth(series, prior, chosen, components, start, reason)
    if start is not None:
        _require_same_snapshots(start, series)
    solutions, weights = [], []
    for k in range(len(series.times) - 1):
        with one_blas_thread():
            found, solution = _solve_gap(series, prior, k, tolerance, start, options)
        if solution.outcome is not Outcome.CONVERGED:
            message = (
                f"the bridge did not converge between t = {series.times[k]:g} and t = {series.times[k + 1]:g}; "
                f"{solution.message}"
            )
            if solution.outcome is Outcome.UNREACHABLE or not options.allow_unconverged:
                raise ConvergenceError(message, solution)
            warnings.warn(message, RuntimeWarning, stacklevel=2)
        solutions.append(solution)
        weights.append(found)
    return Bridge(
        series,
        prior,
        tuple(solutions),
        float(tolerance),
        notes=(*reason, *growth_notes(series)),
        gap_weights=None if series.growth is None else tuple(weights),
        earlier=history_of(start),
    )


def _fit_smooth(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    ends: MixtureEnds | KernelEnds,
    components: int | None,
    start: Bridge | None,
    reason: tuple[str, ...],
) -> Bridge:
    kind = "mixture" if isinstance(ends, MixtureEnds) else "kernel"
    count = len(series.times) - 1
    if start is not None and (
        start.ends != kind or len(start.solutions) != count or start.series.dimension != series.dimension
    ):
        raise checks.InputError(
            f"start does not fit; it has {start.ends} ends and {len(start.solutions)} gap(s) in {start.series.dimension} "
            f"coordinate(s) where {kind} ends, {count} gap(s) and {series.dimension} are fitted; start from a like fit"
        )
    solutions = []
    notes = list(reason)
    for k in range(count):
        warm = start.solutions[k] if start is not None else None
        with one_blas_thread():
            solution = fit_smooth_gap(
                series, prior, k, ends, components, warm if isinstance(warm, SmoothSolution) else None
            )
        place = f"gap {k}: " if count > 1 else ""
        notes += [place + note for note in solution.notes]
        solutions.append(solution)
    return Bridge(series, prior, tuple(solutions), float("nan"), kind, tuple(notes))


def _solve_gap(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    k: int,
    tolerance: float,
    start: Bridge | None,
    options: SolverOptions,
) -> tuple[tuple[np.ndarray, np.ndarray], Solution]:
    """The weights that gap k couples, and its solution."""
    transition = prior.transition(float(series.times[k + 1] - series.times[k]), series.dimension)
    u = transition.whiten_sources(series.clouds[k])
    v = transition.whiten_targets(series.clouds[k + 1])
    weights = growing_weights(series, k)
    _require_enough_noise(u, v, weights, prior, series, k)

    def observe(state: State) -> bool | None:
        return options.observe(k, state) if options.observe is not None else None

    boxed = gap_kernel(prior, transition, series.clouds[k], series.clouds[k + 1]) if prior.box is not None else None
    if series.growth is not None and not series.growth.exact:
        strengths = series.growth.strengths(float(series.durations[k]))
        return solve_growing(
            evaluation_kernel(u, v) if boxed is None else boxed,
            weights,
            strengths,
            tolerance=tolerance,
            start=None if start is None else unbalanced_start(start.gaps[k].coupled, strengths),
            sweep_limit=options.sweep_limit,
        )
    if boxed is not None:
        return weights, solve(boxed, weights, tolerance=tolerance, sweep_limit=options.sweep_limit, observe=observe)
    problem = GapProblem(k, (u, v), weights, transition, tolerance)
    coarse = 4.0 * len(u) * len(v) > options.memory
    start_values, strategy = gap_start(problem, start, gaussian_kernel, options.strategy, coarse=coarse)
    return weights, solve(
        gaussian_kernel(u, v, options.memory),
        weights,
        tolerance=tolerance,
        sweep_limit=options.sweep_limit,
        start=start_values,
        strategy=strategy,
        observe=observe,
    )


def _require_same_snapshots(start: Bridge, series: SnapshotSeries) -> None:
    counts, wanted = ([len(cloud) for cloud in given.clouds] for given in (start.series, series))
    if counts != wanted or start.series.dimension != series.dimension:
        raise checks.InputError(
            f"start is a bridge through other snapshots; they hold {counts} particles where {wanted} are needed; "
            "start from a fit of the same snapshots"
        )


def _require_enough_noise(
    u: np.ndarray,
    v: np.ndarray,
    weights: tuple[np.ndarray, np.ndarray],
    prior: LinearGaussianPrior,
    series: SnapshotSeries,
    k: int,
) -> None:
    """Refuse noise below 1e-6 of the mean squared distance, and name the smallest diffusion that works."""
    a, b = weights
    mean_u, mean_v = a @ u, b @ v
    squared = float(
        a @ ((u - mean_u) ** 2).sum(axis=1) + b @ ((v - mean_v) ** 2).sum(axis=1) + ((mean_u - mean_v) ** 2).sum()
    )
    if squared <= _LARGEST_RATIO:
        return
    factor = squared / _LARGEST_RATIO
    diffusion = prior.diffusion_matrix(series.dimension)
    smallest = diffusion * factor
    uniform = np.array_equal(diffusion, diffusion[0, 0] * np.eye(series.dimension))
    named = f"{smallest[0, 0]:.3g}" if uniform else f"{np.diag(smallest).tolist()} on the diagonal"
    raise checks.InputError(
        f"the noise is too small for the displacement between t = {series.times[k]:g} and t = {series.times[k + 1]:g}; "
        f"its variance is {1.0 / squared:.3g} of the mean squared distance and at least {1.0 / _LARGEST_RATIO:g} is needed; "
        f"the smallest usable diffusion here is {named} ({factor:.3g} times the one given)"
    )
