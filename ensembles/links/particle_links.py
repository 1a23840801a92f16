"""The links between two frames of the same particles, as probabilities."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from scipy.sparse import csr_matrix

from .. import checks
from ..kernels import compiled_links, compiled_matching
from ..schrodinger.assignment import AssignmentCertificate, AssignmentGraph

if TYPE_CHECKING:
    import pandas

__all__ = ["LinkCertificate", "ParticleLinks"]

_LARGEST_MATRIX = 200_000_000  # entries, 1.6 GB
_UNINFORMATIVE = 0.9  # share of log n above which the mean entropy means that next to nothing is known


@dataclass(frozen=True)
class LinkCertificate:
    """How far link probabilities can be trusted as a computation (not as a model).

    Attributes
    ----------
    propagation : `AssignmentCertificate` of belief propagation: message change, row and column error, and the difference
        of the two formulas for the log evidence.
    left_out : largest probability of a particle given to links that were not looked at.
    row_error, column_error : largest |Σ probabilities - 1| of what is returned.
    cluster_mismatch : mean |Σ probabilities - 1| of a later particle before balancing: what the exact sums over clusters
        miss. 0 where every particle fits into one cluster.
    """

    propagation: AssignmentCertificate
    left_out: float
    row_error: float
    column_error: float
    cluster_mismatch: float

    @property
    def converged(self) -> bool:
        """Whether belief propagation met its tolerance and nothing that matters was left out."""
        return self.propagation.converged and self.left_out < 1e-5


@dataclass(frozen=True, eq=False, repr=False)
class ParticleLinks:
    """Who is who between frames `source` and `target`, n and m particles, under the prior; made by `link_particles`.

    Attributes
    ----------
    probability_left : (n,) that a particle is in no place of the later frame; 0 without a detection probability.
    probability_new : (m,) that a particle was in no place of the earlier frame.
    propagated : (E,) probabilities of belief propagation alone, in the order of `sparse().data`.
    log_evidence : log Σ over assignments of the density of the later frame given the earlier one, in nats. Belief
        propagation gives a lower bound (the Bethe permanent); exact where `method` is "enumeration".
    log_evidence_error : estimate of what the bound misses, from exact sums over clusters; 0 by enumeration.
    log_evidence_upper : a rigorous upper bound for frames without missed or new particles, else infinite.
    certificate : `LinkCertificate`.
    method : "enumeration" up to 12 particles, else "propagation and clusters" or "propagation".
    variance_factor : times the prior's variance that told links apart: 1 - c with a `correlation` c, what was found with
        `hold_spread`, else 1.
    spread : mean squared displacement over the links, relative to what the prior says; near 1 where the prior fits.
    """

    source: int
    target: int
    graph: AssignmentGraph
    probabilities: np.ndarray
    propagated: np.ndarray
    probability_left: np.ndarray
    probability_new: np.ndarray
    log_evidence: float
    log_evidence_error: float
    log_evidence_upper: float
    certificate: LinkCertificate
    method: str
    variance_factor: float = 1.0
    spread: float = 1.0

    @property
    def shape(self) -> tuple[int, int]:
        """Particles in the earlier and the later frame."""
        return self.graph.shape

    def sparse(self) -> csr_matrix:
        """Link probabilities (n, m): row i over the later particles that particle i may be; sums 1 - probability_left."""
        return csr_matrix((self.probabilities, self.graph.columns, self.graph.starts), shape=self.shape)

    def matrix(self) -> np.ndarray:
        """The same as a full matrix (n, m).

        Raises
        ------
        InputError
            Above 200 million entries; `sparse` has no such limit.
        """
        if self.shape[0] * self.shape[1] > _LARGEST_MATRIX:
            raise checks.InputError(
                f"the links are too many for one matrix; they have {self.shape[0]} x {self.shape[1]} entries; use sparse()"
            )
        return self.sparse().toarray()

    @cached_property
    def assignment(self) -> np.ndarray:
        """The single most probable one-to-one assignment (n,): the later particle of each; -1 where it left.

        Under a Brownian prior with one diffusion coefficient it has the smallest sum of squared displacements.
        """
        alone = self.graph.log_alone_rows, self.graph.log_alone_columns
        return _best_assignment(self.graph, self.graph.log_weights, *alone)

    @cached_property
    def expected_assignment(self) -> np.ndarray:
        """The one-to-one assignment (n,) with the largest expected number of right links; -1 where it left."""
        with np.errstate(divide="ignore"):
            left = np.log(self.probability_left), np.log(self.probability_new)
        values = np.maximum(self.probabilities, 0.0)
        # Leaving a particle alone counts for nothing here: only where links are impossible is it alone.
        alone = tuple(np.where(np.isfinite(side), 0.0, -np.inf) for side in left)
        return _best_assignment(self.graph, values, alone[0], alone[1])

    def probability_of(self, assignment: np.ndarray) -> np.ndarray:
        """Link probability of each row under an assignment (n,), probability_left where it is -1."""
        found = np.array(self.probability_left)
        linked = assignment >= 0
        rows = np.flatnonzero(linked)
        found[linked] = np.asarray(self.sparse()[rows, assignment[linked]]).ravel()
        return found

    @property
    def expected_right_links(self) -> float:
        """Expected number of right links of `assignment`: the sum of their probabilities."""
        linked = self.assignment >= 0
        return float(self.probability_of(self.assignment)[linked].sum())

    @cached_property
    def entropy(self) -> np.ndarray:
        """Entropy (n,) in nats of where each particle went: 0 where it is certain, log m where nothing is known."""
        p = self.probabilities
        terms = np.where(p > 0.0, -p * np.log(np.where(p > 0.0, p, 1.0)), 0.0)
        total = np.bincount(self.graph.rows, weights=terms, minlength=self.shape[0])
        left = np.where(self.probability_left > 0.0, self.probability_left, 1.0)
        return total - left * np.log(left)

    @property
    def informative(self) -> bool:
        """Whether the links say anything: mean entropy below 0.9 log m."""
        return self.shape[1] < 3 or float(self.entropy.mean()) < _UNINFORMATIVE * np.log(self.shape[1])

    def top_alternatives(self, count: int = 3) -> pandas.DataFrame:
        """The `count` most probable later particles of every particle: source, rank, target, probability."""
        import pandas

        count = checks.whole_number(count, "count")
        n = self.shape[0]
        columns, values = np.empty((n, count), dtype=np.int64), np.empty((n, count))
        graph = self.graph
        compiled_links.best_columns(graph.starts, graph.columns, self.probabilities, count, 0, n, columns, values)
        kept = columns.ravel() >= 0
        return pandas.DataFrame({
            "source": np.repeat(np.arange(n), count)[kept],
            "rank": np.tile(np.arange(1, count + 1), n)[kept],
            "target": columns.ravel()[kept],
            "probability": values.ravel()[kept],
        })  # fmt: skip

    def __repr__(self) -> str:
        c = self.certificate.propagation
        return (
            f"ParticleLinks({self.shape[0]} particles of frame {self.source} with {self.shape[1]} of frame {self.target}: "
            f"{self.expected_right_links:.1f} right links expected of the most probable assignment, mean entropy "
            f"{self.entropy.mean():.2f} nats, log evidence {self.log_evidence:.2f} (+ about {self.log_evidence_error:.2g}), "
            f"{self.method}, {'converged' if c.converged else 'NOT converged'} in {c.iterations} rounds)"
        )


def _best_assignment(
    graph: AssignmentGraph, values: np.ndarray, alone_rows: np.ndarray, alone_columns: np.ndarray
) -> np.ndarray:
    """Maximise Σ values over links + Σ alone over loners; values (E,), -inf alone means must be linked."""
    n, m = graph.shape
    row_alone, column_alone = np.isfinite(alone_rows), np.isfinite(alone_columns)
    # A link takes the place of two loners: their values are subtracted where both are possible.
    gain = (
        values
        - np.where(row_alone, alone_rows, 0.0)[graph.rows]
        - np.where(column_alone, alone_columns, 0.0)[graph.columns]
    )
    rows, columns, entries = graph.rows, graph.columns, gain
    width = m
    if row_alone.any():  # a private column of worth 0 for every row that may stay alone
        extra = np.flatnonzero(row_alone)
        rows = np.concatenate([rows, extra])
        columns = np.concatenate([columns, m + np.arange(extra.size)])
        entries = np.concatenate([entries, np.zeros(extra.size)])
        width += extra.size
    order = np.argsort(rows, kind="stable")
    starts = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=n))]).astype(np.int64)
    costs, columns = entries.max() - entries[order], columns[order]
    prices = np.full(width, np.inf)
    np.minimum.at(prices, columns, costs)
    # Rows compete at the least cost of a column only where every column is needed.
    prices = np.where(np.isfinite(prices), prices, 0.0) if n == width else np.zeros(width)
    found = np.full(n, -1, dtype=np.int64)
    stuck = compiled_matching.match_rows(
        starts, columns, costs, width, np.full(width, -1, dtype=np.int64), found, prices
    )
    if stuck >= 0:
        raise checks.ComputationError(
            f"the links that were kept hold no one-to-one assignment; particle {stuck} finds all its candidates taken; "
            "give a detection probability below 1, or more noise"
        )
    return np.where(found < m, found, -1)
