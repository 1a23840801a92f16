"""Who became whom between two snapshots, as probabilities, without the n by m matrix unless asked."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from ..kernels.dense import DenseKernel
from ..kernels.streamed import StreamedKernel
from ..kernels.truncated import TruncatedKernel

if TYPE_CHECKING:
    import pandas

__all__ = ["Coupling"]

_LARGEST_MATRIX = 200_000_000  # entries, 1.6 GB


@dataclass(frozen=True)
class Coupling:
    """The coupling π_ij = exp(log_p_i + log_q_j) k_ij between snapshots `source` and `target`; its entries sum to 1.

    These are inferences under the prior, not observed links.
    """

    kernel: StreamedKernel | TruncatedKernel
    log_p: np.ndarray
    log_q: np.ndarray
    source: int
    target: int

    @property
    def shape(self) -> tuple[int, int]:
        """Particles in the earlier and the later snapshot."""
        return self.kernel.shape

    def matrix(self) -> np.ndarray:
        """All of π, (n, m); rows sum to the earlier weights, columns to the later ones.

        Raises
        ------
        InputError
            Above 200 million entries; `row` and `top_links` have no such limit.
        """
        if self.shape[0] * self.shape[1] > _LARGEST_MATRIX:
            raise checks.InputError(
                f"the coupling is too large for one matrix; it has {self.shape[0]} x {self.shape[1]} entries; "
                "use row(i) for one particle or top_links(k) for the most probable links"
            )
        log_kernel = DenseKernel.between(self.kernel.sources, self.kernel.targets).log_kernel
        return np.exp(log_kernel + self.log_p[:, None] + self.log_q[None, :])

    def row(self, i: int) -> np.ndarray:
        """Row i of π, (m,); divide by its sum for the probabilities given that particle."""
        if not -self.shape[0] <= i < self.shape[0]:
            raise checks.InputError(
                f"no such row; row {i} of a coupling with {self.shape[0]} sources; use 0 to {self.shape[0] - 1}"
            )
        log_kernel = DenseKernel.between(self.kernel.sources[i][None], self.kernel.targets).log_kernel[0]
        return np.exp(log_kernel + self.log_p[i] + self.log_q)

    def top_links(self, count: int = 3) -> pandas.DataFrame:
        """The `count` most probable targets of every source, streamed.

        Returns
        -------
        DataFrame
            source, target : row numbers in the two snapshots; probability : of that target given the source, so a
            source's probabilities sum to at most 1; mass : the entry π_ij. Sources of weight 0 have mass 0; targets of
            weight 0 are never listed.
        """
        import pandas

        count = checks.whole_number(count, "count")
        targets, probability = self.kernel.top_targets(self.log_q, count)
        log_rows = self.log_p + self.kernel.log_sum_targets(self.log_q)
        kept = targets.ravel() >= 0
        return pandas.DataFrame({
            "source": np.repeat(np.arange(self.shape[0]), targets.shape[1])[kept],
            "target": targets.ravel()[kept],
            "probability": probability.ravel()[kept],
            "mass": (probability * np.exp(log_rows)[:, None]).ravel()[kept],
        })  # fmt: skip

    def expectation(self, values: np.ndarray) -> np.ndarray:
        """Σ_j π_ij values_j / Σ_j π_ij for every source: values (m,) or (m, k), result (n,) or (n, k); streamed."""
        return _averages(self.kernel, self.log_q, values)

    def expectation_of_sources(self, values: np.ndarray) -> np.ndarray:
        """Σ_i π_ij values_i / Σ_i π_ij for every target: values (n,) or (n, k), result (m,) or (m, k); streamed."""
        return _averages(self.kernel.reversed, self.log_p, values)

    def draw_sources(self, targets: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """One source for each target row number, drawn with probability ∝ π_ij; row numbers."""
        rows, inverse, counts = np.unique(targets, return_inverse=True, return_counts=True)
        kernel = self.kernel.reversed.restrict(rows, np.arange(self.shape[0]))
        drawn = np.empty(targets.size, dtype=np.int64)
        # Draws come back target after target.
        drawn[np.argsort(inverse, kind="stable")] = kernel.sample_targets(self.log_p, counts, rng.random(targets.size))
        return drawn

    def __repr__(self) -> str:
        return f"Coupling({self.shape[0]} particles of snapshot {self.source} with {self.shape[1]} of snapshot {self.target})"


def _averages(kernel: StreamedKernel | TruncatedKernel, log_weights: np.ndarray, values: np.ndarray) -> np.ndarray:
    values = np.asarray(values, dtype=float)
    flat = kernel.expectation(log_weights, values.reshape(values.shape[0], -1))
    return flat.reshape(kernel.shape[0], *values.shape[1:])
