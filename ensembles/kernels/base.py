"""The contract of a kernel: what the solver and the bridge ask of k_ij > 0.

With log-weights w, the one primitive is ``log_sum(w)_i = log Σ_j exp(w_j) k_ij``. The fused `sweep` gives the row sums
and the column sums of a coupling while reading the kernel once. Nothing here knows weights, potentials' meaning or
priors.

To add a kernel, you must
1. inherit `Kernel` and give every abstract method (a kernel between points gives `at_scale` too),
2. keep results independent of the number of threads (fixed blocks, fixed order of summation),
3. list it in `kernels/choose.py`, the only place with thresholds.
tests/test_kernels.py runs every law on every listed kernel.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_matrix

__all__ = ["Kernel", "Sweep", "lost_columns"]


@dataclass(frozen=True)
class Sweep:
    """One pass over the kernel at potentials (f, g), before and after the update of f.

    Attributes
    ----------
    log_f : (n,) the updated f - ω (row_excess).
    row_excess : (n,) log Σ_j exp(f_i + q_j) k_ij: 0 where the row sum of the incoming coupling is right.
    column_log_sums : (m,) log Σ_i exp(log a_i + log_f_i) k_ij with the updated f.
    """

    log_f: np.ndarray
    row_excess: np.ndarray
    column_log_sums: np.ndarray


def lost_columns(sums: np.ndarray, log_gains: np.ndarray, row_excess: np.ndarray) -> np.ndarray:
    """Numbers of the column sums of a fused sweep that over- or underflowed and must be summed again on their own.

    A row's exponentials are multiplied by exp(log_gains), log_gains = log a + the update of f (n,); those of a row
    whose sum left the range 1e-200 to 1e200 are taken relative to that sum, exp(row_excess), and multiplied by it as
    well. What lay below exp(-700) counted as 0 before, so a sum is trusted only if it is 1e17 times what all the rows
    can have lost.
    """
    rescaled = np.where(np.abs(row_excess) > 460.6, row_excess, 0.0)
    rescaled[np.abs(np.abs(row_excess) - 460.5) <= 0.1] = 460.6  # either may have been done: the larger is safe
    most = float(np.max(log_gains + rescaled))
    with np.errstate(divide="ignore"):
        floor = max(most - 660.0 + np.log(row_excess.size), -460.0)
        trusted = (np.log(sums) > floor) & (sums < 1e200) & (most <= 700.0)
    return np.flatnonzero(~trusted)


class Kernel(ABC):
    """A positive n by m matrix k that need not exist in memory. See the module's docstring to add one."""

    shape: tuple[int, int]
    floor: float = 0.0
    """L1 error of the marginals below which this kernel's own rounding may show."""

    left_out: float = 0.0
    """Bound on the mass of a coupling with normalised rows that this kernel does not see."""
    entry_time: float = 1.0
    """Nanoseconds that a sweep takes an entry, roughly: to weigh sweeps against other steps."""

    @property
    def exact(self) -> Kernel:
        """The kernel in double precision, entry by entry: this one, unless it keeps a rounded copy."""
        return self

    @abstractmethod
    def log_sum_targets(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_j exp(log_weights_j) k_ij for every source i; log_weights (m,), result (n,)."""

    @abstractmethod
    def log_sum_sources(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_i exp(log_weights_i) k_ij for every target j; log_weights (n,), result (m,)."""

    @abstractmethod
    def sweep(self, log_f: np.ndarray, q: np.ndarray, log_a: np.ndarray, relaxation: float) -> Sweep:
        """Row sums, the relaxed update of f, and the column sums with it; q = log b + g (m,). Reads the kernel once."""

    @abstractmethod
    def entries(self, p: np.ndarray, q: np.ndarray, cutoff: float, limit: int) -> csr_matrix | None:
        """Sparse exp(p_i + q_j) k_ij above `cutoff`, or None if there are more than `limit` of them; p (n,), q (m,)."""

    @abstractmethod
    def restrict(self, rows: np.ndarray, columns: np.ndarray) -> Kernel:
        """The kernel between some sources and some targets, by their row numbers."""

    @abstractmethod
    def nearest_costs(self) -> np.ndarray:
        """min_i -log k_ij for every target j, shape (m,)."""

    @abstractmethod
    def largest_cost(self) -> float:
        """An upper bound on -log k_ij, cheap; infinite for a kernel with zeros."""

    @abstractmethod
    def mean_cost(self) -> float:
        """Mean of -log k_ij over finite entries, the size of the problem in units of the noise."""

    @abstractmethod
    def diameter_bound(self) -> float:
        """A rigorous upper bound on Birkhoff's projective diameter of k."""

    def at_scale(self, scale: float) -> Kernel:
        """The kernel k^(1/scale): the same costs at `scale` times the noise variance."""
        raise NotImplementedError
