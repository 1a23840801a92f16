"""Certificates: how far a pair of potentials is from solving the Schrödinger system, in exact float64 passes.

Hilbert's metric d_H contracts under a plain sweep S by κ ≤ tanh(Δ/4)² (Birkhoff 1957; Franklin and Lorenz 1989), so from
d_H(g, g*) ≤ d_H(g, S g) + κ d_H(g, g*) follows d_H(g, g*) ≤ d_H(g, S g) / (1 - κ).
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import linprog
from scipy.sparse import coo_matrix, vstack

from ..kernels.base import Kernel
from ..logspace import birkhoff_contraction, hilbert_distance
from .solution import Certificate

__all__ = ["certify", "marginal_errors", "scaling_exists"]


def marginal_errors(
    kernel: Kernel, log_weights: tuple[np.ndarray, np.ndarray], log_f: np.ndarray, log_g: np.ndarray
) -> tuple[float, float]:
    """L1 errors of the row and column sums of a_i b_j exp(f_i + g_j) k_ij, from one exact pass."""
    log_a, log_b = log_weights
    sweep = kernel.sweep(log_f, log_b + log_g, log_a, 0.0)
    with np.errstate(over="ignore"):
        row_error = float(np.exp(log_a) @ np.abs(np.expm1(sweep.row_excess)))
        column_error = float(np.exp(log_b) @ np.abs(np.expm1(log_g + sweep.column_log_sums)))
    return row_error, column_error


def certify(
    kernel: Kernel,
    log_weights: tuple[np.ndarray, np.ndarray],
    potentials: tuple[np.ndarray, np.ndarray],
    contraction_seen: float,
    tolerance: float,
) -> Certificate:
    """Recompute everything a certificate states; three passes over the kernel. `contraction_seen` may be NaN."""
    log_a, log_b = log_weights
    log_f, log_g = potentials
    row_error, column_error = marginal_errors(kernel, log_weights, log_f, log_g)
    first_f, first_g = _plain_sweep(kernel, log_weights, log_f, log_g)
    _, second_g = _plain_sweep(kernel, log_weights, first_f, first_g)
    step = hilbert_distance(first_g, log_g)
    next_step = hilbert_distance(second_g, first_g)
    # Below rounding the ratio of two steps says nothing about the contraction.
    rounding = 64.0 * np.finfo(float).eps * max(1.0, float(np.abs(log_g).max()))
    seen = [contraction_seen] if np.isfinite(contraction_seen) else []
    if step > rounding:
        seen.append(next_step / step)
    observed = min(max(seen), 1.0) if seen else float("nan")
    bound = birkhoff_contraction(kernel.diameter_bound())
    return Certificate(
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


def _plain_sweep(
    kernel: Kernel, log_weights: tuple[np.ndarray, np.ndarray], log_f: np.ndarray, log_g: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    sweep = kernel.sweep(log_f, log_weights[1] + log_g, log_weights[0], 1.0)
    return sweep.log_f, -sweep.column_log_sums


def scaling_exists(log_kernel: np.ndarray, a: np.ndarray, b: np.ndarray) -> bool:
    """Whether a coupling with row sums a and column sums b is positive exactly where the kernel is.

    Only then do potentials exist (Sinkhorn and Knopp 1967 for square matrices; from memory). Linear programme: the
    largest t such that some x with these sums has x_ij ≥ t wherever k_ij > 0.
    """
    rows, columns = np.nonzero(np.isfinite(log_kernel))
    count = rows.size
    n, m = log_kernel.shape
    ones, entry = np.ones(count), np.arange(count)
    sums = vstack([
        coo_matrix((ones, (rows, entry)), shape=(n, count + 1)),
        coo_matrix((ones, (columns, entry)), shape=(m, count + 1)),
    ]).tocsr()  # fmt: skip
    floor = coo_matrix(
        (np.concatenate([-ones, ones]), (np.concatenate([entry, entry]), np.concatenate([entry, np.full(count, count)]))),
        shape=(count, count + 1),
    ).tocsr()
    objective = np.zeros(count + 1)
    objective[-1] = -1.0
    result = linprog(objective, A_ub=floor, b_ub=np.zeros(count), A_eq=sums, b_eq=np.concatenate([a, b]), method="highs")
    return bool(result.status == 0 and -result.fun > 1e-12)
