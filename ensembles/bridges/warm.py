"""Where the fit of a gap starts: from other fits of the same snapshots, from coarser clouds, or in closed form.

Potentials times the noise variance ε are lengths², φ = ε f, and change smoothly with log ε. Along a sweep of noise levels the
last few fits are therefore extrapolated (Lagrange's polynomial in log ε), and the relaxation factor is carried over with
1 - θ ∝ ε, the small-noise law of the contraction θ of plain sweeps.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..kernels.base import Kernel
from ..priors.base import Transition
from ..schrodinger.coarse import coarse_potentials, gaussian_start
from ..schrodinger.iteration import Start, Strategy
from ..schrodinger.relaxation import best_factor

if TYPE_CHECKING:
    from .bridge import Bridge

__all__ = ["GapProblem", "gap_start", "history_of"]

Pair = tuple[np.ndarray, np.ndarray]

_WARM_RATIO = 8.0  # change of noise variance up to which another fit's potentials beat the closed-form start
_REMEMBERED = 4  # earlier fits that are extrapolated
_REACH = 1.5  # steps of log ε, in units of the last one, that an extrapolation may go


def history_of(start: Bridge | None) -> tuple[Bridge, ...]:
    """What a fit that started from `start` remembers: it, and the fits that it remembered, oldest first."""
    if start is None:
        return ()
    return (*start.earlier, replace(start, earlier=()))[-_REMEMBERED:]


@dataclass(frozen=True)
class GapProblem:
    """One gap to be solved: its number, whitened clouds (n, d), (m, d), weights that sum to 1, transition, and L1 error."""

    number: int
    clouds: Pair
    weights: Pair
    transition: Transition
    tolerance: float


def gap_start(
    problem: GapProblem,
    warm: Bridge | None,
    make_kernel: Callable[[np.ndarray, np.ndarray], Kernel],
    strategy: Strategy,
    *,
    coarse: bool,
) -> tuple[Start | Pair, Strategy]:
    """Potentials to start a gap from, and the strategy that goes with them; `coarse` begins with coarser clouds."""
    if warm is not None:
        found = _from_fits(warm, problem.number, problem.transition)
        if found is not None:
            potentials, factor = found
            return potentials, replace(strategy, first_factor=factor)
    clouds, weights = problem.clouds, problem.weights
    if not coarse:
        return gaussian_start(clouds, weights), strategy
    chosen = [np.flatnonzero(weight) for weight in weights]
    potentials, factor = coarse_potentials(
        (clouds[0][chosen[0]], clouds[1][chosen[1]]),
        (weights[0][chosen[0]], weights[1][chosen[1]]),
        problem.tolerance,
        make_kernel,
        strategy,
    )
    full = (np.zeros(weights[0].size), np.zeros(weights[1].size))
    for values, rows, part in zip(full, chosen, potentials, strict=True):
        values[rows] = part
    return full, replace(strategy, first_factor=factor)


def _from_fits(warm: Bridge, k: int, transition: Transition) -> tuple[Pair, float] | None:
    noise = _log_noise(transition)
    latest = warm.gaps[k]
    step = noise - _log_noise(latest.transition)
    if abs(step) > np.log(_WARM_RATIO):
        return None
    fits = [latest]
    for bridge in reversed(warm.earlier):
        gap = bridge.gaps[k]
        if bridge.series is not warm.series:
            break
        if abs(_log_noise(fits[-1].transition) - _log_noise(gap.transition)) * _REACH < abs(step) or step == 0.0:
            break
        fits.append(gap)
    nodes = np.array([_log_noise(gap.transition) for gap in fits])
    if np.unique(nodes).size < nodes.size or not (np.all(np.diff(nodes) * step < 0.0) or nodes.size == 1):
        fits, nodes = fits[:1], nodes[:1]
    shares = _lagrange(nodes, noise) * np.exp(nodes - noise)
    log_f = sum(share * gap.coupled.log_f for share, gap in zip(shares, fits, strict=True))
    log_g = sum(share * gap.coupled.log_g for share, gap in zip(shares, fits, strict=True))
    return (np.asarray(log_f), np.asarray(log_g)), _carried_factor(latest.coupled.relaxation, step)


def _log_noise(transition: Transition) -> float:
    """log of det(Q)^(1/d): the noise variance of a transition, up to a constant."""
    return -2.0 * transition.log_normaliser / transition.dimension


def _lagrange(nodes: np.ndarray, place: float) -> np.ndarray:
    shares = np.ones(nodes.size)
    for i in range(nodes.size):
        for j in range(nodes.size):
            if i != j:
                shares[i] *= (place - nodes[j]) / (nodes[i] - nodes[j])
    return shares


def _carried_factor(factor: float, step: float) -> float:
    """The best relaxation factor after a change of log ε by `step`: 1 - θ = (2 / ω - 1)² goes with ε."""
    if factor <= 1.0:
        return factor
    return best_factor(1.0 - min((2.0 / factor - 1.0) ** 2 * np.exp(step), 1.0))
