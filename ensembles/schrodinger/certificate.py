"""Certificates: how far a pair of potentials is from solving the Schrödinger system, in exact float64 passes.

Hilbert's metric d_H contracts under a plain sweep S by κ ≤ tanh(Δ/4)² (Birkhoff 1957; Franklin and Lorenz 1989), so
from d_H(g, g*) ≤ d_H(g, S g) + κ d_H(g, g*) follows d_H(g, g*) ≤ d_H(g, S g) / (1 - κ).
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import linprog
from scipy.sparse import coo_matrix, vstack

from ..kernels.base import Kernel
from ..logspace import birkhoff_contraction, hilbert_distance
from .solution import Certificate

__all__ = ["certify", "scaling_exists"]


_LEAST_SHARE = 1e-6  # of the independent coupling, that every allowed link must be able to carry


def certify(
    kernel: Kernel,
    log_weights: tuple[np.ndarray, np.ndarray],
    log_f: np.ndarray,
    log_g: np.ndarray,
    tolerance: float,
    *,
    contraction_seen: float = float("nan"),
    step_before: float = float("nan"),
) -> tuple[np.ndarray, Certificate]:
    """The source potential that goes with log_g, and everything a certificate states about the pair.

    One plain sweep of the exact kernel divides the row sums by themselves, which gives the returned f and leaves an error
    of rounding in the rows; the column sums that the same pass makes with this f are those of the returned pair. A kernel
    that leaves out pairs adds its bound on what they may carry. Where the run has seen no two plain sweeps
    (`contraction_seen` is NaN), the Hilbert step is compared with `step_before`, that of the sweep which gave log_g, and
    with that of a further sweep where this is not known either.
    """
    log_a, log_b = log_weights
    sweep = kernel.sweep(log_f, log_b + log_g, log_a, 1.0)
    new_f, next_g = sweep.log_f, -sweep.column_log_sums
    with np.errstate(over="ignore", invalid="ignore"):
        row_error = float(np.exp(log_a) @ np.abs(np.expm1(sweep.row_excess + (new_f - log_f)))) + kernel.left_out
        column_error = float(np.exp(log_b) @ np.abs(np.expm1(log_g - next_g))) + kernel.left_out
    step = hilbert_distance(next_g, log_g)
    # Below rounding the ratio of two steps says nothing about the contraction.
    rounding = 64.0 * np.finfo(float).eps * max(1.0, float(np.abs(log_g).max()))
    observed = contraction_seen
    if not np.isfinite(observed) and step > rounding:
        if np.isfinite(step_before):
            observed = step / step_before
        else:
            second = kernel.sweep(new_f, log_b + next_g, log_a, 1.0)
            observed = hilbert_distance(-second.column_log_sums, next_g) / step
    observed = min(observed, 1.0)
    bound = birkhoff_contraction(kernel.diameter_bound())
    return new_f, Certificate(
        row_error=row_error,
        column_error=column_error,
        marginal_error=max(row_error, column_error),
        hilbert_step=step,
        contraction_observed=observed,
        contraction_bound=bound,
        potential_error_bound=step / (1.0 - bound) if bound < 1.0 else float("inf"),
        potential_error_estimate=_estimate(step, observed, rounding),
        tolerance=tolerance,
    )


def _estimate(step: float, contraction: float, rounding: float) -> float:
    if step <= rounding and not np.isfinite(contraction):
        return step
    return step / (1.0 - contraction) if contraction < 1.0 else float("inf")


def scaling_exists(log_kernel: np.ndarray, a: np.ndarray, b: np.ndarray) -> bool:
    """Whether a coupling with row sums a and column sums b is positive exactly where the kernel is.

    Only then do potentials exist (Sinkhorn and Knopp 1967 for square matrices; from memory). Linear programme: the
    largest t such that some coupling x_ij = a_i y_ij b_j has y_ij ≥ t wherever k_ij > 0; with y the size of a weight does
    not matter.
    """
    rows, columns = np.nonzero(np.isfinite(log_kernel))
    count = rows.size
    n, m = log_kernel.shape
    ones, entry = np.ones(count), np.arange(count)
    sums = vstack([
        coo_matrix((b[columns], (rows, entry)), shape=(n, count + 1)),
        coo_matrix((a[rows], (columns, entry)), shape=(m, count + 1)),
    ]).tocsr()  # fmt: skip
    floor = coo_matrix(
        (
            np.concatenate([-ones, ones]),
            (np.concatenate([entry, entry]), np.concatenate([entry, np.full(count, count)])),
        ),
        shape=(count, count + 1),
    ).tocsr()
    objective = np.zeros(count + 1)
    objective[-1] = -1.0
    result = linprog(objective, A_ub=floor, b_ub=np.zeros(count), A_eq=sums, b_eq=np.ones(n + m), method="highs")
    return bool(result.status == 0 and -result.fun > _LEAST_SHARE)
