"""What a solver returns: potentials, a closed set of outcomes, and a certificate in numbers a user can act on."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import Enum

import numpy as np

from ..checks import ComputationError

__all__ = ["Certificate", "ConvergenceError", "Outcome", "Solution", "State"]


class Outcome(Enum):
    """How a solve ended; `sentence` says what it means and what to do."""

    CONVERGED = "converged"
    ITERATION_LIMIT = "iteration limit"
    STALLED = "stalled"
    UNREACHABLE = "unreachable"

    @property
    def sentence(self) -> str:
        """One sentence with the remedy."""
        return _SENTENCES[self]


_SENTENCES = {
    Outcome.CONVERGED: "both marginals are met to the tolerance; nothing to do.",
    Outcome.ITERATION_LIMIT: "the marginals are not met within the allowed sweeps; "
    "allow more sweeps, a larger tolerance, or more noise (a larger diffusion coefficient).",
    Outcome.STALLED: "the error no longer falls, at the limit of floating point or because no positive scaling exists; "
    "use a larger tolerance or more noise, and look for isolated particles.",
    Outcome.UNREACHABLE: "some rows cannot be reached under the prior in floating point; "
    "drop the rows named, or use more noise (a larger diffusion coefficient).",
}


@dataclass(frozen=True)
class Certificate:
    """How converged a solution is, recomputed in float64 on the exact kernel after the last sweep.

    Attributes
    ----------
    row_error, column_error : Σ_i |Σ_j π_ij - a_i| and Σ_j |Σ_i π_ij - b_j| of the returned coupling (weights sum to 1).
    marginal_error : the larger of the two, the number compared with the tolerance.
    hilbert_step : Hilbert distance between the target potentials before and after one further plain sweep.
    contraction_observed : largest ratio of successive Hilbert steps over plain sweeps at the final noise.
    contraction_bound : Birkhoff's a-priori bound tanh(Δ/4)² on that ratio; 1.0 where floating point cannot tell it
        from 1.
    potential_error_bound : hilbert_step / (1 - contraction_bound), rigorous; infinite where the bound is 1.
    potential_error_estimate : the same with the observed contraction; an estimate, not a bound.
    """

    row_error: float
    column_error: float
    marginal_error: float
    hilbert_step: float
    contraction_observed: float
    contraction_bound: float
    potential_error_bound: float
    potential_error_estimate: float
    tolerance: float


@dataclass(frozen=True)
class State:
    """Where an iteration stands after one pass over the kernel; states can be iterated, shown, or abandoned.

    `log_f`, `log_g` belong to the noise variance `scale` times the final one; errors are those of their coupling.
    `next_g` is what a plain sweep makes of `log_g`, once a pass has been made.
    """

    sweep: int
    stage: str
    scale: float
    log_f: np.ndarray
    log_g: np.ndarray
    row_error: float
    column_error: float
    hilbert_step: float
    relaxation: float
    next_g: np.ndarray | None = None

    @property
    def error(self) -> float:
        """The larger L1 error of the two marginals."""
        return max(self.row_error, self.column_error)


@dataclass(frozen=True)
class Solution:
    """Log-potentials with π_ij = a_i b_j exp(f_i + g_j) k_ij, and how far they can be trusted.

    Attributes
    ----------
    log_f : (n,), log_g : (m,), dimensionless; normalised so that Σ a_i f_i = Σ b_j g_j.
    iterations : passes over the kernel.
    outcome : one of `Outcome`.
    certificate : `Certificate`.
    history : (passes, 4) array: scale, row error, column error, Hilbert step of each pass.
    unreachable : row numbers of targets that no source reaches in floating point.
    relaxation : factor of the last sweeps, for a later solve to begin with; 0 if second-order steps finished this one.
    """

    log_f: np.ndarray
    log_g: np.ndarray
    iterations: int
    outcome: Outcome
    certificate: Certificate
    history: np.ndarray = field(repr=False)
    unreachable: tuple[int, ...] = ()
    relaxation: float = 1.0

    @property
    def message(self) -> str:
        """The outcome in one sentence, with the rows concerned and the error reached."""
        rows = ""
        if self.unreachable:
            shown = ", ".join(map(str, self.unreachable[:5]))
            more = f" and {len(self.unreachable) - 5} more" if len(self.unreachable) > 5 else ""
            rows = f" target row(s) {shown}{more};"
        return (
            f"{self.outcome.value};{rows} L1 error of the marginals {self.certificate.marginal_error:.3g} against a "
            f"tolerance of {self.certificate.tolerance:.3g} after {self.iterations} sweep(s); {self.outcome.sentence}"
        )


class ConvergenceError(ComputationError):
    """A solve did not reach its tolerance; `solution` is the result that is not to be trusted."""

    def __init__(self, message: str, solution: Solution) -> None:
        super().__init__(message)
        self.solution = solution
