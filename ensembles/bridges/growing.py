"""A gap over which particles divide and die: weights as the growth makes them, or as the data make them within reason."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from ..kernels.base import Kernel
from ..schrodinger.certificate import certify
from ..schrodinger.solution import Outcome, Solution
from ..schrodinger.unbalanced import solve_unbalanced

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["growing_weights", "growth_notes", "require_particles", "solve_growing", "unbalanced_start"]


def growing_weights(series: SnapshotSeries, gap: int) -> tuple[np.ndarray, np.ndarray]:
    """Weights of both snapshots in the coupling of a gap: the earlier ones multiplied by exp(rate · duration)."""
    if series.growth is None:
        return series.weights[gap], series.weights[gap + 1]
    return series.growth.later_weights(series, gap), series.weights[gap + 1]


def solve_growing(
    kernel: Kernel,
    weights: tuple[np.ndarray, np.ndarray],
    strengths: tuple[float, float],
    *,
    tolerance: float,
    start: np.ndarray | None,
    sweep_limit: int,
) -> tuple[tuple[np.ndarray, np.ndarray], Solution]:
    """Solve a gap whose weights may depart from the given ones; the weights found, and their balanced solution.

    A constant added to the costs only scales the penalised optimum, so its mass says nothing here; divided by it, the
    optimum is the balanced coupling of the weights found, with potentials f (1 + 1/λ1) and g (1 + 1/λ2) up to constants.
    The certificate measures that coupling against those weights: the residual of the penalised problem.
    """
    # The L1 errors of both marginals add up in the residual; dividing by sums can add as much again.
    found = solve_unbalanced(
        kernel, weights, strengths, tolerance=0.25 * tolerance, start=start, sweep_limit=sweep_limit
    )
    kept = (found.source_marginal, found.target_marginal)
    fitted = kept[0] / kept[0].sum(), kept[1] / kept[1].sum()
    for side, values in zip(("earlier", "later"), fitted):
        if not np.isfinite(values).all():
            raise checks.ComputationError(
                f"the {side} weights left the range of floating point; the penalties are {strengths[0]:.3g} and "
                f"{strengths[1]:.3g} against costs up to {kernel.largest_cost():.3g}; give a smaller uncertainty, or more "
                "noise"
            )
    rows, columns = (np.flatnonzero(values) for values in fitted)
    log_f, log_g = found.log_f * (1.0 + 1.0 / strengths[0]), found.log_g * (1.0 + 1.0 / strengths[1])
    reduced = kernel.exact.restrict(rows, columns)
    logs = np.log(fitted[0][rows]), np.log(fitted[1][columns])
    # The constant between the two pairs of potentials: one half step from the later one fixes it.
    start_f = -reduced.log_sum_targets(logs[1] + log_g[columns])
    final_f, certificate = certify(reduced, logs, start_f, log_g[columns], tolerance)
    log_f = log_f + float(np.median(final_f - log_f[rows]))
    log_f[rows] = final_f
    shift = 0.5 * float(fitted[1][columns] @ log_g[columns] - fitted[0][rows] @ final_f)
    outcome = found.outcome
    if outcome is Outcome.CONVERGED and not certificate.marginal_error <= tolerance:
        outcome = Outcome.STALLED
    history = np.array([[1.0, certificate.row_error, certificate.column_error, certificate.hilbert_step]])
    return fitted, Solution(log_f + shift, log_g - shift, found.iterations, outcome, certificate, history)


def unbalanced_start(solution: Solution, strengths: tuple[float, float]) -> np.ndarray:
    """The later potential of the penalised problem that a solved gap suggests."""
    return np.asarray(solution.log_g) / (1.0 + 1.0 / strengths[1])


def growth_notes(series: SnapshotSeries) -> tuple[str, ...]:
    """What a reader must know of a bridge with growth."""
    growth = series.growth
    if growth is None:
        return ()
    parts = ["growth: earlier weights are multiplied by exp(rate × duration) in every gap"]
    if not growth.exact:
        parts.append(
            f"the rates are known to ± {growth.uncertainty:g} per unit of time and the later weights to a factor "
            f"exp(± {growth.later:g}); the weights found are those of implied_growth"
        )
    parts.append("between snapshots the bridge describes the histories that reach the next snapshot")
    return tuple(parts)


def require_particles(series: SnapshotSeries, kind: str) -> None:
    """Refuse growth where the ends are smooth."""
    if series.growth is not None:
        raise checks.InputError(
            f"growth needs ends of particles; ends are {kind} and the series has {series.growth!r}; use ends='atoms', or "
            "series.with_growth(None)"
        )
