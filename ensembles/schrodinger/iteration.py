"""The iteration as a stream of states: noise ladder, over-relaxed sweeps, second-order finish.

One state follows every pass over the kernel, so a caller shows progress, stops early, or keeps the last state at will.
"""

from __future__ import annotations

from collections.abc import Callable, Generator, Iterator
from dataclasses import dataclass, replace

import numpy as np

from ..kernels.base import Kernel
from .newton import newton_states
from .relaxation import RelaxationControl
from .solution import State

__all__ = ["Start", "Strategy", "level_states", "solver_states", "sweep_states"]

_NEWTON_ENTRY = 30.0  # nanoseconds that a second-order step takes for an entry of the sparse coupling
_PASS = 1e5  # nanoseconds of a pass over the kernel apart from its entries
_RETRY = 60  # sweeps between two questions whether second-order steps pay

Start = Callable[[float], tuple[np.ndarray, np.ndarray]]


@dataclass(frozen=True)
class Strategy:
    """What the iteration may use; each part earns its place in `scripts/benchmark`.

    Attributes
    ----------
    ladder_factor : ratio of successive noise variances on the way down to the problem's own.
    ladder_top : mean cost at the top of the ladder; above it the kernel is too sharp to start on.
    level_sweeps, level_error : a level above the last ends after that many sweeps, or at that error.
    relaxation : whether sweeps are over-relaxed.
    first_factor : relaxation factor of the first sweeps at the problem's own noise, where one is known; 0 where sweeps are
        known to be slow.
    newton : whether second-order steps are taken.
    newton_after : sweeps that a second-order step costs apart from its entries.
    entry_limit : entries the sparsified coupling of a second-order step may have.
    """

    ladder_factor: float = 4.0
    ladder_top: float = 8.0
    level_sweeps: int = 12
    level_error: float = 0.02
    relaxation: bool = True
    first_factor: float = 1.0
    newton: bool = True
    newton_after: float = 6.0
    entry_limit: int = 12_000_000

    def without_ladder(self) -> Strategy:
        """The same, starting at the problem's own noise."""
        return replace(self, ladder_top=np.inf)


def ladder(mean_cost: float, strategy: Strategy) -> list[float]:
    """Noise variances from the top of the ladder down to 1, in units of the problem's own."""
    levels = int(np.ceil(np.log(max(mean_cost / strategy.ladder_top, 1.0)) / np.log(strategy.ladder_factor)))
    return [strategy.ladder_factor**k for k in range(levels, -1, -1)]


def sweep_states(
    kernel: Kernel, log_a: np.ndarray, log_b: np.ndarray, state: State, control: RelaxationControl, relaxation: bool
) -> Iterator[State]:
    """Sinkhorn sweeps without end from the potentials of `state`; one pass over the kernel each.

    f ← f - ω log(row sum / a), then g ← g - ω log(column sum / b), each with the other's newest value; ω = 1 is the
    plain Sinkhorn iteration. The state's errors belong to its own potentials: f after the update and g before it.
    """
    a, b = np.exp(log_a), np.exp(log_b)
    log_f, log_g, sweeps = state.log_f, state.log_g, state.sweep
    while True:
        factor = control.factor if relaxation else 1.0
        sweep = kernel.sweep(log_f, log_b + log_g, log_a, factor)
        residual = log_g + sweep.column_log_sums
        sweeps += 1
        with np.errstate(over="ignore"):
            row_error = float(a @ np.abs(np.expm1(sweep.row_excess + sweep.log_f - log_f)))
            column_error = float(b @ np.abs(np.expm1(residual)))
        yield State(
            sweeps, "sweep", state.scale, sweep.log_f, log_g, row_error, column_error,
            factor * float(np.ptp(residual)), factor, -sweep.column_log_sums,
        )  # fmt: skip
        log_f, log_g = sweep.log_f, log_g - factor * residual
        control.observe(max(row_error, column_error))


def solver_states(
    kernel: Kernel, weights: tuple[np.ndarray, np.ndarray], tolerance: float, start: Start, strategy: Strategy
) -> Iterator[State]:
    """States down the ladder to the first one at the problem's own noise with error ≤ tolerance; never ends before.

    `weights` are positive and sum to 1; `start(scale)` gives potentials at the top of the ladder.
    """
    log_a, log_b = np.log(weights[0]), np.log(weights[1])
    scales = ladder(kernel.mean_cost(), strategy)
    log_f, log_g = start(scales[0])
    state = State(0, "start", scales[0], log_f, log_g, np.inf, np.inf, np.inf, 1.0)
    for scale in scales:
        ratio = state.scale / scale
        state = State(
            state.sweep, "ladder", scale, state.log_f * ratio, state.log_g * ratio, np.inf, np.inf, np.inf, 1.0
        )
        scaled = kernel if scale == 1.0 else kernel.at_scale(scale)
        last = scale == 1.0
        goal = tolerance if last else max(strategy.level_error, tolerance)
        goal = max(goal, scaled.floor)
        state = yield from level_states(scaled, (log_a, log_b), state, goal, strategy, last)
    if tolerance < kernel.floor:  # the rounded copy has given what it can
        yield from level_states(kernel.exact, (log_a, log_b), state, tolerance, strategy, True)


def level_states(
    kernel: Kernel,
    log_weights: tuple[np.ndarray, np.ndarray],
    state: State,
    goal: float,
    strategy: Strategy,
    last: bool,
) -> Generator[State, None, State]:
    """States at one noise, until the goal is met or (above the last level) the sweeps of a level are used up."""
    begun = state.sweep
    control = RelaxationControl(strategy.first_factor if last else 1.0)
    next_try = 0
    while True:
        for swept in sweep_states(kernel, *log_weights, state, control, strategy.relaxation):
            yield swept
            if swept.error <= goal or (not last and swept.sweep - begun >= strategy.level_sweeps):
                return swept
            limit = _entries_worth(kernel, control.sweeps_to(swept.error, goal), swept.error, goal, strategy)
            if limit and control.settled and swept.sweep >= next_try:
                state = swept
                break
        tried = state
        for stepped in newton_states(kernel, *log_weights, state, limit):
            yield stepped
            if stepped.error <= goal:
                return stepped
            state = stepped
        if state is tried:  # too dense, or no step helped: sweep on as before, and ask again later
            next_try = state.sweep + _RETRY
        else:
            control = RelaxationControl()


def _entries_worth(kernel: Kernel, sweeps: float, error: float, goal: float, strategy: Strategy) -> int:
    """Entries up to which second-order steps cost less than `sweeps` more sweeps; 0 where they are not used.

    Near the solution each step squares the error. A step costs a few sweeps and, for an entry of the sparse coupling, the
    nanoseconds of building it and of some thirty products.
    """
    if not strategy.newton or not np.isfinite(error):
        return 0
    digits = np.log(min(error, 0.3))
    steps = 1.0 + max(float(np.log2(max(np.log(min(goal, 0.3)) / digits, 1.0))), 0.0)
    spared = sweeps - steps * strategy.newton_after
    if spared <= 0.0:
        return 0
    saved = spared * (_PASS + kernel.entry_time * kernel.shape[0] * kernel.shape[1])
    return int(min(saved / (_NEWTON_ENTRY * steps), strategy.entry_limit))
