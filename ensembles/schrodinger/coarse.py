"""A start for large clouds: solve a coarser pair of clouds, then carry its potentials to every particle.

At the solution f(x) = -log Σ_j b_j exp(g_j) k(x, y_j) and likewise g, for any x: the potentials of a coarser pair are
functions on the whole space. In few dimensions the coarser cloud is the centres of mass of small tiles of neighbours, which
keeps the mass right on every scale above the tiles; in many dimensions, where tiles would be wide, it is a random subsample.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from ..kernels.base import Kernel
from ..kernels.tiles import make_tiles
from .gaussian_start import gaussian_potentials
from .iteration import Start, Strategy, solver_states, sweep_states
from .relaxation import RelaxationControl, best_factor
from .solution import State

__all__ = ["coarse_potentials", "gaussian_start"]

MakeKernel = Callable[[np.ndarray, np.ndarray], Kernel]
Pair = tuple[np.ndarray, np.ndarray]

_SMALLEST = 5_000  # particles of a cloud that are solved without a coarser level
_FACTOR = 8  # ratio of particles between levels
_TILED_DIMENSIONS = 3
_GOAL = 1e-4  # error at which a coarse level ends: its own coarseness is larger
_SWEEPS = 400  # passes a coarse level may take: its result is a start, not an answer
_PROBE = 60  # plain sweeps by which the slowest error stands out


def gaussian_start(clouds: Pair, weights: Pair) -> Start:
    """The closed-form start for whitened clouds at any noise scale."""

    def begin(scale: float) -> Pair:
        root = np.sqrt(scale)
        return gaussian_potentials(clouds[0] / root, clouds[1] / root, *weights)

    return begin


def coarse_potentials(
    clouds: Pair, weights: Pair, tolerance: float, make_kernel: MakeKernel, strategy: Strategy
) -> tuple[Pair, float]:
    """Potentials (n,), (m,) for whitened clouds (n, d), (m, d) of positive weights, and a relaxation factor to begin with.

    Coarser levels are nested. Random subsamples are drawn from a fixed seed, so that a fit is repeated to the last digit.
    """
    (x, a), (y, b) = (_coarser(cloud, weight) for cloud, weight in zip(clouds, weights, strict=True))
    kernel = make_kernel(x, y)
    if max(a.size, b.size) > _SMALLEST:
        potentials, factor = coarse_potentials((x, y), (a, b), tolerance, make_kernel, strategy)
        plan = replace(strategy.without_ladder(), first_factor=factor)
        start: Start = lambda scale: potentials  # noqa: E731
    else:
        plan, start = strategy, gaussian_start((x, y), (a, b))
    goal = max(tolerance, _GOAL)
    for state in solver_states(kernel, (a, b), goal, start, plan):
        if (state.scale == 1.0 and state.error <= goal) or state.sweep >= _SWEEPS:
            break
    if max(a.size, b.size) <= _SMALLEST:
        factor = _factor(kernel, y, (a, b), state)
    log_f = -make_kernel(clouds[0], y).log_sum_targets(np.log(b) + state.log_g)
    log_g = -make_kernel(clouds[1], x).log_sum_targets(np.log(a) + state.log_f)
    return (log_f, log_g), factor


def _factor(kernel: Kernel, targets: np.ndarray, weights: Pair, state: State) -> float:
    """The best relaxation factor, from the contraction that plain sweeps settle to after a smooth push off the solution."""
    spread = np.maximum(targets.std(axis=0), 1e-300)
    push = np.sin((targets - targets.mean(axis=0)) / spread).sum(axis=1)
    state = replace(state, log_g=state.log_g + 0.1 * push)
    errors: list[float] = []
    for swept in sweep_states(kernel, np.log(weights[0]), np.log(weights[1]), state, RelaxationControl(), False):
        errors.append(swept.column_error)
        if len(errors) == _PROBE or swept.column_error < 1e-8:
            break
    contraction = errors[-1] / errors[-2] if len(errors) > 1 else 0.0
    return best_factor(min(contraction, 0.9999))


def _coarser(points: np.ndarray, weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    if points.shape[0] <= _SMALLEST:
        return points, weights / weights.sum()
    if points.shape[1] <= _TILED_DIMENSIONS:
        tiles = make_tiles(points, -(-points.shape[0] // max(_SMALLEST, points.shape[0] // _FACTOR)))
        starts = tiles.bounds[:, 0]
        mass = np.add.reduceat(weights[tiles.order], starts)
        moment = np.add.reduceat((points * weights[:, None])[tiles.order], starts, axis=0)
        return moment / mass[:, None], mass / mass.sum()
    count = max(_SMALLEST, points.shape[0] // _FACTOR)
    chosen = np.sort(np.random.default_rng(0).choice(points.shape[0], size=count, replace=False))
    return points[chosen], weights[chosen] / weights[chosen].sum()
