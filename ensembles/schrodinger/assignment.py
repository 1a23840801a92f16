"""One-to-one assignments under weights: link probabilities by belief propagation, in log domain, on sparse graphs.

Weights w_ij of linking row i with column j, u_i of a row and v_j of a column that stays alone. The sum over all partial
one-to-one assignments, Z = Σ Π_links w_ij Π_alone u_i Π_alone v_j, is the permanent of w where nothing may stay alone.
Belief propagation finds the stationary point of the Bethe free energy

    log Z_B = Σ_ij [β log(w/β) + (1 - β) log(1 - β)] + Σ_i β_i0 log(u_i/β_i0) + Σ_j β_0j log(v_j/β_0j),

whose β_ij estimate the link probabilities; Z_B ≤ Z ≤ 2^{n/2} Z_B for n rows and columns without loners (Gurvits 2011;
Anari and Rezaei 2019). Messages: Chertkov, Kroc, Krzakala, Vergassola and Zdeborová, PNAS 2010; convergence: Vontobel,
IEEE Trans. Information Theory 59, 1866, 2013. Sources from memory; tests hold the results against exact enumeration.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ..checks import ComputationError
from ..kernels import compiled_links
from ..kernels.threads import block_bounds, run_blocks

__all__ = ["AssignmentCertificate", "AssignmentGraph", "AssignmentPosterior", "propagate_beliefs"]

_BLOCKS = 8
_HEAVY = 8.0  # work of one edge in kernel entries
_FEW = 0.02  # share of edges still moving below which the others wait
_BURST = 10  # rounds among what still moves, between two full ones


@dataclass(frozen=True, eq=False)
class AssignmentGraph:
    """Possible links with their log-weights, row after row.

    Attributes
    ----------
    starts : (n + 1,) where each row's edges begin; columns : (E,) increasing inside a row; log_weights : (E,).
    log_alone_rows : (n,) log u, -inf where a row must be linked; log_alone_columns : (m,) log v.
    """

    starts: np.ndarray
    columns: np.ndarray
    log_weights: np.ndarray
    log_alone_rows: np.ndarray
    log_alone_columns: np.ndarray

    @classmethod
    def from_edges(
        cls,
        rows: np.ndarray,
        columns: np.ndarray,
        log_weights: np.ndarray,
        log_alone: tuple[np.ndarray, np.ndarray],
    ) -> AssignmentGraph:
        """Sort edges given in any order, each pair once."""
        n = log_alone[0].size
        keys = rows.astype(np.int64) * log_alone[1].size + columns
        order = slice(None) if (keys[1:] > keys[:-1]).all() else np.argsort(keys, kind="stable")
        starts = np.concatenate([[0], np.cumsum(np.bincount(rows, minlength=n))]).astype(np.int64)
        return cls(starts, columns[order].astype(np.int64), log_weights[order].astype(float), *log_alone)

    @classmethod
    def dense(cls, log_weights: np.ndarray, log_alone: tuple[np.ndarray, np.ndarray] | None = None) -> AssignmentGraph:
        """Every pair of a matrix (n, m) whose log-weight is finite; nothing may stay alone by default."""
        n, m = log_weights.shape
        rows, columns = np.nonzero(np.isfinite(log_weights))
        alone = (np.full(n, -np.inf), np.full(m, -np.inf)) if log_alone is None else log_alone
        return cls.from_edges(rows, columns, log_weights[rows, columns], alone)

    @property
    def shape(self) -> tuple[int, int]:
        """Rows and columns."""
        return self.log_alone_rows.size, self.log_alone_columns.size

    @property
    def edges(self) -> int:
        """Number of possible links."""
        return self.columns.size

    @cached_property
    def rows(self) -> np.ndarray:
        """(E,) the row of every edge."""
        return np.repeat(np.arange(self.shape[0]), np.diff(self.starts))

    @cached_property
    def by_column(self) -> tuple[np.ndarray, np.ndarray]:
        """Where each column's edges begin (m + 1,) in the order of columns, and the places (E,) of these edges."""
        places = np.argsort(self.columns, kind="stable")
        counts = np.bincount(self.columns, minlength=self.shape[1])
        return np.concatenate([[0], np.cumsum(counts)]).astype(np.int64), places


@dataclass(frozen=True)
class AssignmentCertificate:
    """How converged the beliefs are, from their own equations.

    Attributes
    ----------
    converged : whether the mean and the largest error met what was asked for.
    message_change : largest change of a log-message in the last iteration, over edges with a probability between
        0.1 % and 99.9 %; those of decided edges may grow without end.
    row_error, column_error : largest |Σ probabilities - 1| of a row and of a column, loners included.
    mean_error : the same as a mean over rows or columns, the larger one.
    evidence_difference : |log Z_B from the beliefs - log Z_B from the messages|: 0 at a stationary point.
    iterations : rounds of messages.
    """

    converged: bool
    message_change: float
    row_error: float
    column_error: float
    mean_error: float
    evidence_difference: float
    iterations: int
    tolerance: float


@dataclass(frozen=True, eq=False)
class AssignmentPosterior:
    """Beliefs over links: probabilities (E,) of the graph's edges, and of staying alone, rows (n,) and columns (m,)."""

    graph: AssignmentGraph
    probabilities: np.ndarray
    alone_rows: np.ndarray
    alone_columns: np.ndarray
    log_evidence: float
    certificate: AssignmentCertificate
    to_row: np.ndarray
    to_column: np.ndarray
    log_row_sums: np.ndarray
    log_column_sums: np.ndarray


def propagate_beliefs(
    graph: AssignmentGraph,
    *,
    tolerance: float = 1e-9,
    largest: float | None = None,
    damping: float = 0.0,
    iteration_limit: int = 20_000,
    start: np.ndarray | None = None,
) -> AssignmentPosterior:
    """Damped belief propagation from `start` (E,), the messages of an earlier run on the same edges.

    Parameters
    ----------
    graph : `AssignmentGraph`; every row and column needs an edge or a weight of staying alone.
    tolerance : mean |Σ probabilities - 1| of rows and of columns.
    largest : the same of any one row or column; by default `tolerance` too. Few rows of many converge slowly, like 1/t.
    damping : share of the old message kept, in [0, 1).
    iteration_limit : rounds of messages; beyond it the certificate says that the beliefs have not converged.

    Raises
    ------
    ComputationError
        If a row or column can neither be linked nor stay alone.

    Examples
    --------
    >>> import numpy as np
    >>> posterior = propagate_beliefs(AssignmentGraph.dense(np.zeros((3, 3))))
    >>> posterior.probabilities.round(6).tolist()[:3]
    [0.333333, 0.333333, 0.333333]
    """
    _require_edges(graph)
    largest = tolerance if largest is None else largest
    run = _Propagation(graph, damping, start)
    iteration = 0
    while True:
        difference = run.full_round()
        iteration += 1
        mean, most = _mismatch(graph, difference)
        if (mean <= 0.9 * tolerance and most <= 0.9 * largest) or iteration >= iteration_limit:
            break
        done = min(_BURST if iteration > _BURST else 3, iteration_limit - iteration)
        moving = difference > 0.01 * tolerance
        if moving.mean() > _FEW:  # to hold the rest still would slow down those that move together
            moving[:] = True
        run.partial_rounds(moving, done)
        iteration += done
    return _posterior(graph, run, iteration, (tolerance, largest))


class _Propagation:
    """Messages in both directions, (E,) each, and the log-sums of both sides that go with them."""

    def __init__(self, graph: AssignmentGraph, damping: float, start: np.ndarray | None) -> None:
        self.graph, self.damping = graph, damping
        self.column_starts, self.column_places = graph.by_column
        self.row_places = np.arange(graph.edges)
        n, m = graph.shape
        self.row_sums, self.column_sums = np.empty(n), np.empty(m)
        self.row_change, self.column_change = np.zeros(n), np.zeros(m)
        self.all_rows, self.all_columns = np.arange(n), np.arange(m)
        self.to_column = np.zeros(graph.edges)
        self.to_row = np.zeros(graph.edges) if start is None else np.array(start)
        if start is None:
            self.from_columns(self.all_columns, 0.0)
        self.from_rows(self.all_rows, 0.0)

    def from_rows(self, rows: np.ndarray, damping: float) -> None:
        """Messages from some rows to their columns."""
        graph = self.graph
        sides = (graph.starts, self.row_places, self.to_row, graph.log_alone_rows)
        self._send(*sides, damping, rows, self.to_column, self.row_sums, self.row_change)

    def from_columns(self, columns: np.ndarray, damping: float) -> None:
        """Messages from some columns to their rows."""
        sides = (self.column_starts, self.column_places, self.to_column, self.graph.log_alone_columns)
        self._send(*sides, damping, columns, self.to_row, self.column_sums, self.column_change)

    def _send(
        self,
        starts: np.ndarray,
        places: np.ndarray,
        incoming: np.ndarray,
        log_alone: np.ndarray,
        damping: float,
        selected: np.ndarray,
        outgoing: np.ndarray,
        log_sums: np.ndarray,
        change: np.ndarray,
    ) -> None:
        weights = self.graph.log_weights

        def task(block: int, first: int, last: int) -> None:
            compiled_links.propagate(
                starts, places, weights, incoming, log_alone, damping, selected, first, last, outgoing, log_sums, change
            )

        work = _HEAVY * places.size * selected.size / max(1, log_alone.size)
        run_blocks(task, block_bounds(selected.size, _BLOCKS), work)

    def full_round(self) -> np.ndarray:
        """Undamped messages once in both directions; how much the belief of every edge (E,) changed in between."""
        graph = self.graph
        self.from_columns(self.all_columns, self.damping)
        by_column = graph.log_weights + self.to_column - self.column_sums[graph.columns]
        self.from_rows(self.all_rows, self.damping)
        by_row = graph.log_weights + self.to_row - self.row_sums[graph.rows]
        return np.abs(np.exp(by_row) - np.exp(by_column))

    def partial_rounds(self, moving: np.ndarray, rounds: int) -> None:
        """Rounds among the rows and columns that have an edge (E,) still moving; the others wait."""
        rows = np.unique(self.graph.rows[moving])
        columns = np.unique(self.graph.columns[moving])
        for _ in range(rounds):
            self.from_columns(columns, self.damping)
            self.from_rows(rows, self.damping)

    @property
    def change(self) -> float:
        """Largest change of a log-message in the last messages sent."""
        return float(max(self.row_change.max(initial=0.0), self.column_change.max(initial=0.0)))


def _mismatch(graph: AssignmentGraph, difference: np.ndarray) -> tuple[float, float]:
    """Mean and largest change, summed over a row or a column, from beliefs whose column sums are 1 to those of rows.

    Right sums alone would not do: any scaled matrix has them.
    """
    rows, columns = (np.bincount(k, weights=difference) for k in (graph.rows, graph.columns))
    most = max(rows.max(initial=0.0), columns.max(initial=0.0))
    return float(difference.sum()) / max(1, min(graph.shape)), float(most)


def _posterior(
    graph: AssignmentGraph, run: _Propagation, iterations: int, goals: tuple[float, float]
) -> AssignmentPosterior:
    n, m = graph.shape
    # One more half step each, undamped, so that sums and messages of both sides belong together.
    run.from_columns(run.all_columns, 0.0)
    to_column = run.to_column.copy()
    change = run.change
    run.from_rows(run.all_rows, 0.0)
    row_sums, column_sums = run.row_sums, run.column_sums
    log_odds = graph.log_weights + run.to_row + to_column
    beliefs = 1.0 / (1.0 + np.exp(-np.clip(log_odds, -700.0, 700.0)))
    alone_rows, alone_columns = np.exp(graph.log_alone_rows - row_sums), np.exp(graph.log_alone_columns - column_sums)
    rows_off = np.abs(np.bincount(graph.rows, weights=beliefs, minlength=n) + alone_rows - 1.0)
    columns_off = np.abs(np.bincount(graph.columns, weights=beliefs, minlength=m) + alone_columns - 1.0)
    row_error, column_error = rows_off.max(), columns_off.max()
    mean_error = max(float(rows_off.mean()), float(columns_off.mean()))
    from_messages = float(row_sums.sum() + column_sums.sum() - np.logaddexp(0.0, log_odds).sum())
    from_beliefs = _free_energy(graph, log_odds, alone_rows, alone_columns)
    certificate = AssignmentCertificate(
        converged=bool(mean_error <= goals[0] and max(row_error, column_error) <= goals[1]),
        message_change=change,
        row_error=float(row_error),
        column_error=float(column_error),
        mean_error=mean_error,
        evidence_difference=abs(from_messages - from_beliefs),
        iterations=iterations,
        tolerance=goals[0],
    )
    return AssignmentPosterior(
        graph,
        beliefs,
        alone_rows,
        alone_columns,
        from_messages,
        certificate,
        run.to_row,
        to_column,
        row_sums,
        column_sums,
    )


def _free_energy(
    graph: AssignmentGraph, log_odds: np.ndarray, alone_rows: np.ndarray, alone_columns: np.ndarray
) -> float:
    """log Z_B from the beliefs alone; log β and log(1 - β) from the log-odds, so that neither is lost near 0 or 1."""
    log_belief, log_rest = -np.logaddexp(0.0, -log_odds), -np.logaddexp(0.0, log_odds)
    belief, rest = np.exp(log_belief), np.exp(log_rest)
    total = float((belief * (graph.log_weights - log_belief) + rest * log_rest).sum())
    for alone, log_alone in ((alone_rows, graph.log_alone_rows), (alone_columns, graph.log_alone_columns)):
        some = alone > 0.0
        total += float((alone[some] * (log_alone[some] - np.log(alone[some]))).sum())
    return total


def _require_edges(graph: AssignmentGraph) -> None:
    m = graph.shape[1]
    for name, counts, alone in (
        ("row", np.diff(graph.starts), graph.log_alone_rows),
        ("column", np.bincount(graph.columns, minlength=m), graph.log_alone_columns),
    ):
        lost = np.flatnonzero((counts == 0) & np.isneginf(alone))
        if lost.size:
            raise ComputationError(
                f"a {name} can neither be linked nor stay alone; {name} {int(lost[0])} of {counts.size} has no possible "
                "link; allow missed or new particles, or more noise"
            )
