"""Which links are worth a message: a graph that grows until what it leaves out is negligible, and is known to be."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from .. import checks
from ..schrodinger.assignment import AssignmentGraph, AssignmentPosterior, propagate_beliefs
from .law import LinkLaw

__all__ = ["LinkOptions", "linked_posterior"]

_DENSE = 40_000  # pairs below which all of them are candidates
_MATRIX = 4_000_000  # pairs up to which what is left out is looked at pair by pair
_RADIUS = 6.5  # first search radius in units of the noise
_STEP = 2.5
_NEAREST = 6
_ROUNDS = 12
_KEPT = 1e-10  # odds below which a link is left out
_LEFT_OUT = 1e-6  # probability of a particle that may be left out in all
_ANY_ONE = 50.0
_MOST_EDGES = 40_000_000


@dataclass(frozen=True)
class LinkOptions:
    """How links are computed.

    Attributes
    ----------
    tolerance : mean |Σ probabilities - 1| of a particle under belief propagation; that of any one particle may be 50
        times as large.
    damping : share of the old message kept.
    iteration_limit : rounds of messages.
    cluster : particles of each frame in the exact sums around every particle, at most 12; 0 for belief propagation only.
    correlation : c of the displacements of neighbours, in [0, 1), as `neighbour_correlation` measures it. Links are then
        told apart by (1 - c) of the prior's variance; the log evidence is that of this law, not to be compared between c.
    hold_spread : hold the mean squared displacement over the links to what the prior says, by a factor of its variance. For
        particles that are crowded and keep apart, as all atoms of a liquid, where the diffusion is known from elsewhere:
        links by the prior's own variance are then too sure of the nearest. Not together with a correlation.
    """

    tolerance: float = 2e-4
    damping: float = 0.0
    iteration_limit: int = 20_000
    cluster: int = 10
    correlation: float = 0.0
    hold_spread: bool = False

    def __post_init__(self) -> None:
        checks.positive_number(self.tolerance, "tolerance", "give the error allowed, such as 2e-4")
        checks.whole_number(self.iteration_limit, "iteration_limit")
        if not 0.0 <= self.damping < 1.0:
            raise checks.InputError(f"damping must lie in [0, 1); it is {self.damping!r}; use 0 or 0.5")
        if not 0.0 <= self.correlation < 1.0:
            raise checks.InputError(
                f"correlation must lie in [0, 1); it is {self.correlation!r}; use 0 for particles that move independently"
            )
        if self.correlation and self.hold_spread:
            raise checks.InputError(
                f"hold_spread chooses the variance of links by itself; correlation is {self.correlation:g}; leave one of them out"
            )
        if checks.whole_number(self.cluster, "cluster", 0) > 12:
            raise checks.InputError(f"cluster must be at most 12; it is {self.cluster}; the cost doubles with each one")


def messages_of_all_pairs(posterior: AssignmentPosterior) -> np.ndarray | None:
    """Messages to rows of every pair (n m,), a start for nearby weights; None where there are too many pairs."""
    n, m = posterior.graph.shape
    if float(n) * m > _MATRIX:
        return None
    messages = np.tile(-posterior.log_column_sums, n)
    messages[posterior.graph.rows * m + posterior.graph.columns] = posterior.to_row
    return messages


def linked_posterior(
    law: LinkLaw,
    log_alone: tuple[np.ndarray, np.ndarray],
    options: LinkOptions,
    start: np.ndarray | None = None,
) -> tuple[AssignmentPosterior, float]:
    """Beliefs of the links between two frames, and the largest probability of a particle that the graph leaves out.

    `log_alone` are log-weights of a missed (n,) and of a new particle (m,), -inf where that cannot be; matched pairs
    weigh p(y | x), so a detection probability is divided out before. `start` are messages of all pairs (n m,).
    """
    n, m = law.shape
    pairs = float(n) * m
    if pairs <= _DENSE:
        rows, columns = np.divmod(np.arange(n * m), m)
        graph = AssignmentGraph.from_edges(rows, columns, law.log_weights(rows, columns), log_alone)
        return _propagate(graph, options, start), 0.0
    if pairs <= _MATRIX:
        return _from_matrix(law, log_alone, options, start)
    return _from_trees(law, log_alone, options)


def _propagate(
    graph: AssignmentGraph, options: LinkOptions, start: np.ndarray | None = None, *, rough: bool = False
) -> AssignmentPosterior:
    return propagate_beliefs(
        graph,
        tolerance=options.tolerance,
        largest=_ANY_ONE * options.tolerance,
        damping=options.damping,
        iteration_limit=min(8, options.iteration_limit) if rough else options.iteration_limit,
        start=start,
    )


def _absent_log_odds(
    posterior: AssignmentPosterior, rows: np.ndarray, columns: np.ndarray, log_weights: np.ndarray
) -> np.ndarray:
    """log odds that a link outside the graph would get: w / (row sum · column sum), to first order exact."""
    return log_weights - posterior.log_row_sums[rows] - posterior.log_column_sums[columns]


def _largest_share(rows: np.ndarray, columns: np.ndarray, log_odds: np.ndarray) -> float:
    odds = np.exp(np.minimum(log_odds, 0.0))
    return max(float(np.bincount(k, weights=odds).max(initial=0.0)) for k in (rows, columns))


def _from_matrix(
    law: LinkLaw, log_alone: tuple[np.ndarray, np.ndarray], options: LinkOptions, start: np.ndarray | None
) -> tuple[AssignmentPosterior, float]:
    """All pairs are weighed; those that matter after a few rounds are kept, and all are looked at again at the end."""
    n, m = law.shape
    rows, columns = np.divmod(np.arange(n * m), m)
    weights = law.log_weights(rows, columns)
    everything = AssignmentGraph.from_edges(rows, columns, weights, log_alone)
    rough = _propagate(everything, options, start, rough=True)
    log_odds = weights + rough.to_row + rough.to_column
    kept = log_odds > np.log(_KEPT)
    square = log_odds.reshape(n, m)
    for axis in (0, 1):  # every particle keeps its best links, however poor they are
        count = min(_NEAREST, square.shape[axis]) - 1
        best = square >= -np.partition(-square, count, axis=axis).take([count], axis=axis)
        kept |= best.ravel()
    start = rough.to_row[kept]
    rounds = rough.certificate.iterations
    for _ in range(_ROUNDS):
        graph = AssignmentGraph.from_edges(rows[kept], columns[kept], weights[kept], log_alone)
        posterior = _propagate(graph, options, start)
        rounds += posterior.certificate.iterations
        absent = ~kept
        log_odds = _absent_log_odds(posterior, rows[absent], columns[absent], weights[absent])
        left_out = _largest_share(rows[absent], columns[absent], log_odds)
        if left_out <= _LEFT_OUT:
            break
        full = np.full(weights.size, np.nan)
        full[kept] = posterior.to_row
        added = np.flatnonzero(absent)[log_odds > np.log(_KEPT)]
        full[added] = -posterior.log_column_sums[columns[added]]
        kept[added] = True
        start = full[kept]
    return _counted(posterior, rounds), left_out


def _from_trees(
    law: LinkLaw, log_alone: tuple[np.ndarray, np.ndarray], options: LinkOptions
) -> tuple[AssignmentPosterior, float]:
    """Near pairs from search trees; the radius grows until the pairs of the next shell are negligible."""
    m = law.shape[1]
    source_tree, target_tree = law.trees()
    radius = _RADIUS
    edges = _near(source_tree, target_tree, radius)
    for tree, other, first in ((target_tree, source_tree, True), (source_tree, target_tree, False)):
        near = tree.query(other.data, k=min(_NEAREST, tree.n))[1].reshape(other.n, -1)
        own = np.repeat(np.arange(other.n), near.shape[1])
        edges = np.concatenate([edges, own * m + near.ravel() if first else near.ravel() * m + own])
    edges = np.unique(edges)
    start = None
    rounds = 0
    for _ in range(_ROUNDS):
        rows, columns = np.divmod(edges, m)
        graph = AssignmentGraph.from_edges(rows, columns, law.log_weights(rows, columns), log_alone)
        posterior = _propagate(graph, options, start)
        rounds += posterior.certificate.iterations
        radius += _STEP
        shell = np.setdiff1d(_near(source_tree, target_tree, radius), edges, assume_unique=True)
        shell_rows, shell_columns = np.divmod(shell, m)
        weights = law.log_weights(shell_rows, shell_columns)
        log_odds = _absent_log_odds(posterior, shell_rows, shell_columns, weights)
        left_out = _largest_share(shell_rows, shell_columns, log_odds)
        if left_out <= _LEFT_OUT:
            break
        added = shell[log_odds > np.log(_KEPT)]
        merged = np.union1d(edges, added)
        start = -posterior.log_column_sums[merged % m]
        start[np.searchsorted(merged, edges)] = posterior.to_row
        edges = merged
    return _counted(posterior, rounds), left_out


def _counted(posterior: AssignmentPosterior, rounds: int) -> AssignmentPosterior:
    """The posterior with the rounds over all graphs on the way to it."""
    return replace(posterior, certificate=replace(posterior.certificate, iterations=rounds))


def _near(sources, targets, radius: float) -> np.ndarray:  # type: ignore[no-untyped-def]
    """Pairs within the radius as row * m + column, refused before they fill the memory."""
    count = sources.count_neighbors(targets, radius)
    if count > _MOST_EDGES:
        raise checks.ComputationError(
            f"too many possible links; {count} pairs lie within {radius:g} noise lengths of each other where "
            f"{_MOST_EDGES} fit in memory; links carry next to no information then: use fit_bridge, or a shorter gap"
        )
    found = sources.sparse_distance_matrix(targets, radius, output_type="ndarray")
    return np.sort(found["i"].astype(np.int64) * targets.n + found["j"])
