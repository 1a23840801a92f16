"""Solve the static Schrödinger problem: run the iteration, judge its end, certify the result."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import fields, replace

import numpy as np

from .. import checks
from ..kernels.base import Kernel
from ..kernels.dense import DenseKernel
from ..logspace import hilbert_distance
from .certificate import certify, scaling_exists
from .iteration import Start, Strategy, level_states, solver_states
from .solution import Certificate, Outcome, Solution, State

__all__ = ["SWEEP_LIMIT", "solve"]

SWEEP_LIMIT = 20_000
_UNRESOLVED_COST = 1e12  # at this cost the exponent is rounded to 2e-4: the kernel itself is no longer known
_ATTEMPTS = 3  # times that a run is resumed when its certificate does not bear it out
_PATIENCE = 1_000  # sweeps without a new best error by 1 % before the run counts as stalled
_SUPPORT_ENTRIES = 200_000  # entries up to which the existence of a scaling is decided by linear programming


def solve(
    kernel: Kernel,
    weights: tuple[np.ndarray, np.ndarray],
    *,
    tolerance: float = 1e-6,
    start: Start | tuple[np.ndarray, np.ndarray] | None = None,
    sweep_limit: int = SWEEP_LIMIT,
    strategy: Strategy | None = None,
    observe: Callable[[State], bool | None] | None = None,
) -> Solution:
    """Find f, g with π_ij = a_i b_j exp(f_i + g_j) k_ij of row sums a and column sums b.

    Parameters
    ----------
    kernel : Kernel of shape (n, m).
    weights : a (n,) and b (m,), non-negative; each is divided by its sum.
    tolerance : largest L1 error of either marginal.
    start : potentials (n,), (m,) to start from at the problem's own noise, or a function of the noise scale that gives
        them at the top of the ladder; zeros by default.
    sweep_limit : passes over the kernel.
    strategy : what the iteration may use.
    observe : called with every `State`; a true return stops the run, which counts as having met its limit unless
        its potentials meet the tolerance.

    Returns
    -------
    Solution : always with its outcome and certificate; a coupling that misses the tolerance says so.

    Examples
    --------
    >>> import numpy as np
    >>> from ensembles.kernels.dense import DenseKernel
    >>> half = np.array([0.5, 0.5])
    >>> solution = solve(DenseKernel(np.log([[1.0, 0.5], [0.5, 1.0]])), (half, half))
    >>> solution.outcome.value
    'converged'
    """
    tolerance = checks.positive_number(tolerance, "tolerance", "give the L1 error allowed, such as 1e-6")
    sweep_limit = checks.whole_number(sweep_limit, "sweep_limit")
    a = checks.weights(weights[0], kernel.shape[0], "source weights")
    b = checks.weights(weights[1], kernel.shape[1], "target weights")
    rows, columns = np.flatnonzero(a), np.flatnonzero(b)
    reduced = kernel
    if rows.size < a.size or columns.size < b.size:
        reduced = kernel.restrict(rows, columns)
    pair = (a[rows] / a.sum(), b[columns] / b.sum())
    unreached = _unreached(reduced, pair)
    if unreached is not None:
        return _refused(kernel, tolerance, tuple(int(columns[j]) for j in unreached))

    run = _Run(tolerance, sweep_limit, observe)
    begin = _restricted_start(start, kernel.shape, rows, columns)
    strategy = strategy or Strategy()
    if isinstance(start, tuple):
        strategy = strategy.without_ladder()
    log_weights = (np.log(pair[0]), np.log(pair[1]))
    states = solver_states(reduced, pair, tolerance, begin, strategy)
    for _ in range(_ATTEMPTS):
        state = next(state for state in states if run.ends(state))
        last_g = state.next_g if state.next_g is not None else state.log_g
        step = hilbert_distance(last_g, state.log_g) if state.scale == 1.0 and state.stage == "sweep" else float("nan")
        # Where the run ended on the ladder: potentials times noise variance are lengths², alike at every noise.
        state = replace(state, log_f=state.log_f * state.scale, log_g=last_g * state.scale, scale=1.0)
        final_f, certificate = certify(
            reduced.exact, log_weights, state.log_f, state.log_g, tolerance,
            contraction_seen=run.contraction, step_before=step,
        )  # fmt: skip
        state = replace(state, log_f=final_f)
        if certificate.marginal_error <= tolerance:
            run.outcome = Outcome.CONVERGED  # also where the run had given up or was stopped: this is what counts
            break
        if run.outcome is not Outcome.CONVERGED:
            break
        # The run was content with a rounded kernel, or with an f on its way between two sweeps: go on with the exact one.
        run.outcome = Outcome.ITERATION_LIMIT
        states = level_states(reduced.exact, log_weights, state, tolerance, strategy, True)
    else:
        run.outcome = Outcome.STALLED
    log_f, log_g = _extended(kernel, (a, b), rows, columns, state)
    shift = 0.5 * (pair[1] @ log_g[columns] - pair[0] @ log_f[rows])
    return Solution(
        log_f + shift,
        log_g - shift,
        state.sweep,
        run.outcome,
        certificate,
        np.array(run.history),
        relaxation=run.relaxation,
    )


class _Run:
    """Judges the states of one run: goal, limit, stall; keeps the history and the contraction of plain sweeps."""

    def __init__(self, tolerance: float, limit: int, observe: Callable[[State], bool | None] | None) -> None:
        self.tolerance, self.limit, self.observe = tolerance, limit, observe
        self.outcome = Outcome.ITERATION_LIMIT
        self.history: list[tuple[float, float, float, float]] = []
        self.contraction = float("nan")
        self.relaxation = 1.0
        self._last: State | None = None
        self._best, self._best_at = np.inf, 0

    def ends(self, state: State) -> bool:
        self.history.append((state.scale, state.row_error, state.column_error, state.hilbert_step))
        if state.scale == 1.0:
            self.relaxation = state.relaxation if state.stage == "sweep" else 0.0
        last, self._last = self._last, state
        if last and last.stage == state.stage == "sweep" and last.relaxation == state.relaxation == 1.0:
            rounding = 1e-9 * max(1.0, float(np.abs(state.log_g).max()))
            if last.scale == state.scale == 1.0 and last.hilbert_step > rounding:
                self.contraction = float(np.fmax(self.contraction, state.hilbert_step / last.hilbert_step))
        if self.observe is not None and self.observe(state):
            return True
        if state.scale == 1.0 and state.error <= self.tolerance:
            self.outcome = Outcome.CONVERGED
            return True
        if state.scale != 1.0 or state.error < 0.99 * self._best:
            self._best, self._best_at = (np.inf if state.scale != 1.0 else state.error), state.sweep
        elif state.sweep - self._best_at > _PATIENCE:
            self.outcome = Outcome.STALLED
            return True
        return state.sweep >= self.limit


def _unreached(kernel: Kernel, weights: tuple[np.ndarray, np.ndarray]) -> np.ndarray | None:
    """Target rows that stop the solve: no source reaches them, or the zeros of the kernel admit no scaling at all."""
    if not kernel.largest_cost() < _UNRESOLVED_COST:
        far = np.flatnonzero(~(kernel.nearest_costs() < _UNRESOLVED_COST))
        if far.size:
            return far
    if isinstance(kernel, DenseKernel) and kernel.log_kernel.size <= _SUPPORT_ENTRIES:
        zeros = np.isneginf(kernel.log_kernel)
        if zeros.any() and not scaling_exists(kernel.log_kernel, *weights):
            return np.flatnonzero(zeros.any(axis=0))
    return None


def _refused(kernel: Kernel, tolerance: float, unreached: tuple[int, ...]) -> Solution:
    nothing = float("nan")
    values = dict.fromkeys((field.name for field in fields(Certificate)), nothing)
    return Solution(
        np.full(kernel.shape[0], nothing),
        np.full(kernel.shape[1], nothing),
        0,
        Outcome.UNREACHABLE,
        Certificate(**(values | {"tolerance": tolerance})),
        np.empty((0, 4)),
        unreached,
    )


def _restricted_start(
    start: Start | tuple[np.ndarray, np.ndarray] | None,
    shape: tuple[int, int],
    rows: np.ndarray,
    columns: np.ndarray,
) -> Start:
    def begin(scale: float) -> tuple[np.ndarray, np.ndarray]:
        if start is None:
            return np.zeros(rows.size), np.zeros(columns.size)
        log_f, log_g = start if isinstance(start, tuple) else start(scale)
        for name, values, size in (("log_f", log_f, shape[0]), ("log_g", log_g, shape[1])):
            if np.shape(values) != (size,):
                raise checks.InputError(
                    f"start potentials do not fit; {name} has shape {np.shape(values)} for {size} particle(s); "
                    "start from a fit of the same snapshots"
                )
        return np.array(log_f[rows]), np.array(log_g[columns])

    return begin


def _extended(
    kernel: Kernel, weights: tuple[np.ndarray, np.ndarray], rows: np.ndarray, columns: np.ndarray, state: State
) -> tuple[np.ndarray, np.ndarray]:
    """Potentials at every row: those of weight 0 by the formula that the others satisfy."""
    log_f, log_g = state.log_f, state.log_g
    a, b = weights[0] / weights[0].sum(), weights[1] / weights[1].sum()
    if rows.size < a.size:
        p = np.log(b[columns]) + log_g
        full = -kernel.restrict(np.arange(a.size), columns).log_sum_targets(p)
        full[rows] = log_f
        log_f = full
    if columns.size < b.size:
        p = np.log(a[rows]) + state.log_f
        full = -kernel.restrict(rows, np.arange(b.size)).log_sum_sources(p)
        full[columns] = log_g
        log_g = full
    return log_f, log_g
