"""Second-order steps on the target potential, where sweeps contract slowly (small noise, high dimension).

With the source potential eliminated, the dual F(g) = Σ b g + Σ a f(g) is concave with gradient b - c (c the column sums
of the coupling whose row sums are exact) and Hessian -(diag c - πᵀ diag(1/a) π). The coupling is sparsified for the
Hessian alone; the step is solved by conjugate gradients and the gradient comes from the exact kernel, so a coarse
Hessian costs steps, never accuracy. Every trial point is one pass over the kernel.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from scipy.sparse.linalg import LinearOperator, cg

from ..kernels.base import Kernel
from ..kernels.sparse import SchurOperator
from .solution import State

__all__ = ["newton_states"]

_DROPPED = (1e-14, 1e-7)  # mass of a row that the Hessian may lose, in units of 1/n, entry by entry: least and most
_DAMPING = (1e-13, 1e-9)  # added to the Hessian's diagonal, in units of b: least and most
_HALVINGS = 12


def newton_states(
    kernel: Kernel, log_a: np.ndarray, log_b: np.ndarray, state: State, entry_limit: int
) -> Iterator[State]:
    """Yield a state after every accepted step; ends when the coupling has too many entries or no step helps."""
    a, b = np.exp(log_a), np.exp(log_b)
    log_g, log_f = state.log_g, state.log_f
    sweeps = state.sweep
    sweep = kernel.sweep(log_f, log_b + log_g, log_a, 1.0)
    sweeps += 1
    log_f = sweep.log_f
    while True:
        columns = b * np.exp(np.minimum(log_g + sweep.column_log_sums, 50.0))
        gradient = b - columns
        error = float(np.abs(gradient).sum())
        # Where particles nearly pair off, the last error lies in links as weak as itself: they must not be dropped.
        dropped = float(np.clip(0.1 * error, *_DROPPED)) / max(kernel.shape)
        coupling = kernel.entries(log_a + log_f, log_b + log_g, dropped, entry_limit)
        if coupling is None:
            return
        direction = _direction(SchurOperator(coupling), b, gradient, error)
        slope = float(gradient @ direction)
        value = float(b @ log_g + a @ log_f)
        rounding = 1e-14 * max(1.0, float(b @ np.abs(log_g) + a @ np.abs(log_f)))
        length = min(1.0, 50.0 / max(float(np.abs(direction).max()), 1e-300))
        for _ in range(_HALVINGS):
            trial = log_g + length * direction
            sweep = kernel.sweep(log_f, log_b + trial, log_a, 1.0)
            sweeps += 1
            gain = float(b @ trial + a @ sweep.log_f) - value
            trial_error = _column_error(b, trial, sweep.column_log_sums)
            # The dual never falls, by more than rounding: the error alone may be halved and restored in turn for ever.
            if gain >= 1e-4 * length * slope and trial_error < 4.0 * error:
                break
            if gain >= -rounding and trial_error < 0.5 * error:
                break
            length *= 0.4
        else:
            return
        step = float(np.ptp(trial - log_g))
        log_g, log_f = trial, sweep.log_f
        yield State(sweeps, "newton", state.scale, log_f, log_g, 0.0, trial_error, step, 1.0, -sweep.column_log_sums)


def _column_error(b: np.ndarray, log_g: np.ndarray, column_log_sums: np.ndarray) -> float:
    return float(np.abs(b * np.expm1(np.minimum(log_g + column_log_sums, 50.0))).sum())


def _direction(operator: SchurOperator, b: np.ndarray, gradient: np.ndarray, error: float) -> np.ndarray:
    """Solve (diag c - πᵀ diag(1/r) π + small) d = gradient by conjugate gradients, scaled by the diagonal."""
    # A column that the sparse coupling hardly reaches gets the diagonal of a plain sweep's step.
    starved = np.maximum(b - operator.columns, 0.0) * (operator.columns < 0.5 * b)
    damping = np.clip(1e-3 * error, *_DAMPING) * b + starved
    diagonal = operator.diagonal() + damping

    def apply(vector: np.ndarray) -> np.ndarray:
        vector = vector.ravel()
        return operator.apply(vector) + damping * vector

    size = b.size
    system = LinearOperator((size, size), matvec=apply, dtype=float)
    preconditioner = LinearOperator((size, size), matvec=lambda vector: vector.ravel() / diagonal, dtype=float)
    accuracy = min(0.1, max(error, 1e-4))
    direction, _ = cg(system, gradient, rtol=accuracy, maxiter=2000, M=preconditioner)
    return direction - float(b @ direction)
