"""Link probabilities and evidence beyond belief propagation: exact sums over clusters, messages at their edges.

Belief propagation overrates what is likely where few particles compete: for two rows and two columns on their own it
says 0 or 1 for any weights. Around every row the most strongly connected rows and columns, up to `limit` of each, are
summed over exactly; what lies outside enters as weights of leaving and of being taken, from the messages. With up to
`limit` particles nothing is left outside and the result is exact.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..kernels import compiled_clusters
from ..kernels.threads import block_bounds, run_blocks
from .assignment import AssignmentGraph, AssignmentPosterior

__all__ = ["ClusterSums", "scale_edges", "sum_clusters"]

_BALANCE_ROUNDS = 300
_BALANCE_ERROR = 1e-10


@dataclass(frozen=True, eq=False)
class ClusterSums:
    """Probabilities (E,), alone_rows (n,), alone_columns (m,) after balancing, and what the clusters said about them.

    Attributes
    ----------
    column_mismatch : mean |Σ probabilities - 1| of a column before balancing: each row has a cluster of its own, so
        this measures what the clusters miss.
    log_evidence_correction : Σ over rows of the excess of the exact over the Bethe value, a row's share of its cluster.
    sizes : (n,) rows in each cluster.
    """

    probabilities: np.ndarray
    alone_rows: np.ndarray
    alone_columns: np.ndarray
    column_mismatch: float
    log_evidence_correction: float
    sizes: np.ndarray


def scale_edges(
    graph: AssignmentGraph,
    log_weights: np.ndarray,
    log_alone: tuple[np.ndarray, np.ndarray],
    *,
    tolerance: float = 1e-10,
    rounds: int = 1000,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Scale edges and loners by factors of rows and columns so that every row and column sums to 1 (Sinkhorn).

    Returns the edges (E,), the rows alone (n,) and the columns alone (m,); columns sum to 1 exactly, rows to
    `tolerance` or as far as `rounds` sweeps go.
    """
    n, m = graph.shape
    top = np.maximum.reduceat(log_weights, graph.starts[:-1]) if np.diff(graph.starts).min() > 0 else np.zeros(n)
    top = np.maximum(top, log_alone[0])
    edges = np.exp(log_weights - top[graph.rows])
    row_alone, column_alone = np.exp(log_alone[0] - top), np.exp(log_alone[1])
    row_factor, column_factor = np.ones(n), np.ones(m)
    tiny = np.finfo(float).tiny
    for _ in range(rounds):
        sums = np.bincount(graph.rows, weights=edges * column_factor[graph.columns], minlength=n) + row_alone
        error = float(np.abs(row_factor * sums - 1.0).max())
        row_factor = 1.0 / np.maximum(sums, tiny)
        sums = np.bincount(graph.columns, weights=edges * row_factor[graph.rows], minlength=m) + column_alone
        column_factor = 1.0 / np.maximum(sums, tiny)
        if error <= tolerance:
            break
    scaled = edges * row_factor[graph.rows] * column_factor[graph.columns]
    return scaled, row_alone * row_factor, column_alone * column_factor


def sum_clusters(posterior: AssignmentPosterior, *, limit: int = 10) -> ClusterSums:
    """Exact sums over a cluster of up to `limit` rows and columns around every row, then balanced to sums of 1.

    Examples
    --------
    >>> import numpy as np
    >>> from ensembles.schrodinger.assignment import propagate_beliefs
    >>> posterior = propagate_beliefs(AssignmentGraph.dense(np.log([[3.0, 1.0], [1.0, 2.0]])))
    >>> sum_clusters(posterior).probabilities.round(6).tolist()
    [0.857143, 0.142857, 0.142857, 0.857143]
    """
    graph = posterior.graph
    n, m = graph.shape
    column_starts, places = graph.by_column
    alone = (graph.log_alone_rows, graph.log_alone_columns)
    # Scaled weights are softer than beliefs, which are 0 or 1 where they are most wrong: they say what belongs together.
    soft, _, _ = scale_edges(graph, graph.log_weights, alone, tolerance=1e-3, rounds=100)
    out, out_alone = np.empty(graph.edges), np.empty(n)
    corrections, sizes = np.empty(n), np.empty(n, dtype=np.int64)

    def task(block: int, first: int, last: int) -> None:
        compiled_clusters.cluster_sums(
            graph.starts, graph.columns, column_starts, places, graph.rows, np.minimum(soft, 1.0), graph.log_weights,
            posterior.to_row, posterior.to_column, *alone, posterior.log_row_sums, posterior.log_column_sums, limit,
            first, last, out, out_alone, corrections, sizes,
        )  # fmt: skip

    run_blocks(task, block_bounds(n, 64), 2.0**limit * limit * n)
    sums = np.bincount(graph.columns, weights=out, minlength=m)
    mismatch = float(np.abs(sums + posterior.alone_columns - 1.0).mean())
    possible = np.isfinite(graph.log_alone_columns)
    column_alone = np.where(possible, np.maximum(1.0 - sums, 1e-3 * posterior.alone_columns), 0.0)
    with np.errstate(divide="ignore"):
        logs = (np.log(out), (np.log(out_alone), np.log(column_alone)))
    balanced = scale_edges(graph, *logs, tolerance=_BALANCE_ERROR, rounds=_BALANCE_ROUNDS)
    return ClusterSums(*balanced, mismatch, float(corrections.sum()), sizes)
