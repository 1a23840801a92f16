"""The Gaussian kernel between two large clouds in few dimensions, without the pairs that carry no mass.

Both clouds are cut into tiles. For a tile I of sources and a tile J of targets with log-weights q,

    Σ_{j in J} exp(q_j) k_ij  ≤  exp(log Σ_J exp(q_j) - ½ gap(I, J)²)   for every i in I,

so J is left out where this is below a fixed small share of a lower bound on the whole row sum of every i in I. The shares
left out add up to `left_out`, a rigorous bound on the mass that a coupling with normalised rows can lose.

Weights that grow quickly from tile to tile make the bound loose, so the clouds are first balanced: u·v, the only part of
-½|u - v|² that is not a sum of a function of u and one of v, does not change under u → S u, v → S⁻¹ v, nor, up to such
functions, under shifts; S is chosen to give both clouds the same covariance.
"""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_matrix

from .base import Kernel, Sweep
from .fast_exp import compiled
from .layout import BLOCKS, Layout
from .streamed import StreamedKernel
from .threads import block_bounds, run_blocks
from .tiles import Tiles, make_tiles

__all__ = ["TruncatedKernel"]

_TILE = 128
_SHARE = 1e-9  # of a row's sum that may be left out
_DRIFT = 1.0  # change of any log-weight after which the tiles are chosen anew


class TruncatedKernel(Kernel):
    """k_ij = exp(-½|u_i - v_j|²) without the pairs of tiles that carry less than 1e-9 of a row; exact otherwise."""

    left_out = _SHARE

    def __init__(self, sources: np.ndarray, targets: np.ndarray) -> None:
        self.sources, self.targets = sources, targets
        self.shape = (sources.shape[0], targets.shape[0])
        self.entry_time = 0.5 + 0.035 * sources.shape[1]
        self._forward = _Side.balanced(sources, targets)
        self._row_sums: np.ndarray | None = None

    @property
    def reversed(self) -> TruncatedKernel:
        """The same kernel with sources and targets exchanged."""
        return TruncatedKernel(self.targets, self.sources)

    def at_scale(self, scale: float) -> TruncatedKernel:
        """The same clouds at `scale` times the noise variance."""
        return TruncatedKernel(self.sources / np.sqrt(scale), self.targets / np.sqrt(scale))

    def restrict(self, rows: np.ndarray, columns: np.ndarray) -> TruncatedKernel:
        """The kernel between some rows of either cloud."""
        return TruncatedKernel(self.sources[rows], self.targets[columns])

    def sweep(self, log_f: np.ndarray, q: np.ndarray, log_a: np.ndarray, relaxation: float) -> Sweep:
        """One fused pass over the pairs of tiles that matter; see `Kernel.sweep`."""
        side = self._forward
        kernel = side.kernel(side.columns(q))
        rows, columns = side.rows_order, side.columns_order
        swept = kernel.sweep((log_f + side.row_shift)[rows], side.columns(q), log_a[rows], relaxation)
        log_sums = swept.row_excess - (log_f + side.row_shift)[rows]
        side.remember(log_sums)
        new_f, excess, logs = np.empty(self.shape[0]), np.empty(self.shape[0]), np.empty(self.shape[1])
        new_f[rows], excess[rows], logs[columns] = swept.log_f, swept.row_excess, swept.column_log_sums
        return Sweep(new_f - side.row_shift, excess, logs + side.column_shift)

    def log_sum_targets(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_j exp(log_weights_j) k_ij, shape (n,)."""
        side = self._forward
        weights = side.columns(log_weights)
        out = np.empty(self.shape[0])
        out[side.rows_order] = side.kernel(weights).log_sum_targets(weights)
        return out + side.row_shift

    def log_sum_sources(self, log_weights: np.ndarray) -> np.ndarray:
        """log Σ_i exp(log_weights_i) k_ij, shape (m,)."""
        return self.reversed.log_sum_targets(log_weights)

    def log_sum_and_mean(self, log_weights: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The log sum (n,) and the soft mean of the targets (n, d) for every source."""
        side = self._forward
        weights = side.columns(log_weights)
        out, mean = np.empty(self.shape[0]), np.empty_like(self.sources)
        out[side.rows_order], mean[side.rows_order] = side.kernel(weights).log_sum_and_mean(weights)
        return out + side.row_shift, mean @ side.to_targets + side.target_mean

    def expectation(self, log_weights: np.ndarray, values: np.ndarray) -> np.ndarray:
        """Average of values (m, k) over the targets with weights exp(log_weights_j) k_ij, for every source; (n, k)."""
        side = self._forward
        weights = side.columns(log_weights)
        out = np.empty((self.shape[0], values.shape[1]))
        out[side.rows_order] = side.kernel(weights).expectation(weights, values[side.columns_order])
        return out

    def top_targets(self, log_weights: np.ndarray, count: int) -> tuple[np.ndarray, np.ndarray]:
        """The `count` most probable targets of every source and their probabilities given the source, (n, count)."""
        side = self._forward
        weights = side.columns(log_weights)
        found, probability = side.kernel(weights).top_targets(weights, count)
        targets, values = np.empty_like(found), np.empty_like(probability)
        targets[side.rows_order], values[side.rows_order] = side.columns_order[found], probability
        return targets, values

    def sample_targets(self, log_weights: np.ndarray, counts: np.ndarray, uniforms: np.ndarray) -> np.ndarray:
        """Draw counts[i] targets of source i with probability ∝ exp(log_weights_j) k_ij."""
        side = self._forward
        weights = side.columns(log_weights)
        row_of_draw = np.repeat(np.arange(self.shape[0]), counts)
        place = np.empty(self.shape[0], dtype=np.int64)
        place[side.rows_order] = np.arange(self.shape[0])
        draws = np.argsort(place[row_of_draw], kind="stable")
        out = np.empty(draws.size, dtype=np.int64)
        picked = side.kernel(weights).sample_targets(weights, counts[side.rows_order], uniforms[draws])
        out[draws] = side.columns_order[picked]
        return out

    def entries(self, p: np.ndarray, q: np.ndarray, cutoff: float, limit: int) -> csr_matrix | None:
        """Sparse exp(p_i + q_j) k_ij above `cutoff`, shape (n, m); None beyond `limit` entries."""
        side = self._forward
        weights = side.columns(q)
        found = side.kernel(weights).entries((p + side.row_shift)[side.rows_order], weights, cutoff, limit)
        if found is None:
            return None
        found = found.tocoo()
        return csr_matrix((found.data, (side.rows_order[found.row], side.columns_order[found.col])), shape=self.shape)

    def nearest_costs(self) -> np.ndarray:
        """min_i ½|u_i - v_j|², shape (m,), one exact pass."""
        return StreamedKernel(self.sources, self.targets).nearest_costs()

    def largest_cost(self) -> float:
        """See `StreamedKernel.largest_cost`."""
        return StreamedKernel(self.sources, self.targets).largest_cost()

    def mean_cost(self) -> float:
        """See `StreamedKernel.mean_cost`."""
        return StreamedKernel(self.sources, self.targets).mean_cost()

    def diameter_bound(self) -> float:
        """See `StreamedKernel.diameter_bound`."""
        return StreamedKernel(self.sources, self.targets).diameter_bound()


class _Side:
    """Sources as rows, targets as columns, balanced, in tile order; and the layout that goes with log-weights."""

    def __init__(self, rows: np.ndarray, columns: np.ndarray) -> None:
        row_tiles, column_tiles = make_tiles(rows, _TILE), make_tiles(columns, _TILE)
        self.rows_order, self.columns_order = row_tiles.order, column_tiles.order
        self._row_tiles, self._column_tiles = row_tiles, column_tiles
        self._whole = StreamedKernel(rows[row_tiles.order], columns[column_tiles.order])
        self._weights: np.ndarray | None = None
        self._lower: np.ndarray | None = None
        self._layout: Layout | None = None

    row_shift: np.ndarray
    column_shift: np.ndarray
    to_targets: np.ndarray
    target_mean: np.ndarray

    @classmethod
    def balanced(cls, sources: np.ndarray, targets: np.ndarray) -> _Side:
        """Centre both clouds and give them one covariance; log k = log k' + row_shift + column_shift."""
        mean_u, mean_v = sources.mean(axis=0), targets.mean(axis=0)
        u, v = sources - mean_u, targets - mean_v
        scale = _geometric_scale(u.T @ u / len(u), v.T @ v / len(v))
        rows, columns = u @ scale, v @ np.linalg.inv(scale)
        side = cls(rows, columns)
        shift = mean_u - mean_v
        side.row_shift = 0.5 * ((rows**2).sum(axis=1) - (u**2).sum(axis=1)) - u @ shift - 0.5 * shift @ shift
        side.column_shift = 0.5 * ((columns**2).sum(axis=1) - (v**2).sum(axis=1)) + v @ shift
        side.to_targets, side.target_mean = scale, mean_v
        return side

    def columns(self, log_weights: np.ndarray) -> np.ndarray:
        """Log-weights of the targets for the balanced kernel, in tile order."""
        return (log_weights + self.column_shift)[self.columns_order]

    def remember(self, row_log_sums: np.ndarray) -> None:
        """Take the row sums found (tile order): the next choice of tiles uses them as its lower bounds."""
        self._lower = np.minimum.reduceat(row_log_sums, self._row_tiles.bounds[:, 0])

    def kernel(self, weights: np.ndarray) -> StreamedKernel:
        """The streamed kernel over the tiles that matter for these log-weights (tile order)."""
        if self._weights is None or self._layout is None or _drift(weights, self._weights) > _DRIFT:
            lower = self._lower
            if lower is not None and self._weights is not None:
                lower = lower - _drift(weights, self._weights)
            self._layout = _choose_tiles(self._row_tiles, self._column_tiles, weights, lower)
            self._weights = weights.copy()
        kernel = self._whole
        kernel.layout = self._layout
        return kernel


def _drift(weights: np.ndarray, before: np.ndarray) -> float:
    return float(np.abs(weights - before).max()) if np.isfinite(weights).all() else float("inf")


def _geometric_scale(start: np.ndarray, end: np.ndarray) -> np.ndarray:
    """S, symmetric positive definite, with S A S = S⁻¹ B S⁻¹: the square root of the geometric mean A⁻¹ # B."""
    # Directions in which a cloud has hardly any extent are left as they are, near enough.
    size = (1e-6 * (np.trace(start) + np.trace(end)) + 1e-6) * np.eye(start.shape[0])
    values, vectors = np.linalg.eigh(start + size)
    root, inverse = (vectors * np.sqrt(values)) @ vectors.T, (vectors / np.sqrt(values)) @ vectors.T
    middle_values, middle = np.linalg.eigh(root @ (end + size) @ root)
    mean = inverse @ (middle * np.sqrt(np.maximum(middle_values, 0.0))) @ middle.T @ inverse
    values, vectors = np.linalg.eigh(0.5 * (mean + mean.T))
    return (vectors * np.sqrt(np.maximum(values, 1e-300))) @ vectors.T


def _choose_tiles(rows: Tiles, columns: Tiles, weights: np.ndarray, lower: np.ndarray | None) -> Layout:
    """For each tile of rows the ranges of columns that may carry more than their share."""
    starts = columns.bounds[:, 0]
    top = np.maximum.reduceat(weights, starts)
    safe = np.where(np.isfinite(top), top, 0.0)
    repeated = np.repeat(safe, np.diff(np.append(starts, weights.size)))
    with np.errstate(divide="ignore"):
        mass = safe + np.log(np.add.reduceat(np.exp(weights - repeated), starts))
    n_tiles, m_tiles = len(rows.bounds), len(columns.bounds)
    # The weights may drift by _DRIFT either way before the choice is made again.
    allowed = np.log(_SHARE / m_tiles) - 2.0 * _DRIFT
    keep = np.zeros((n_tiles, m_tiles), dtype=np.bool_)
    known = np.full(n_tiles, -np.inf) if lower is None else lower

    def task(block: int, start: int, stop: int) -> None:
        _mark(rows.low, rows.high, columns.low, columns.high, mass, known, allowed, start, stop, keep)

    run_blocks(task, block_bounds(n_tiles, BLOCKS), float(n_tiles) * m_tiles)
    edges = np.zeros((n_tiles, m_tiles + 2), dtype=np.int8)
    edges[:, 1:-1] = keep
    change = np.diff(edges, axis=1)
    first_row, first = np.nonzero(change == 1)
    _, last = np.nonzero(change == -1)
    ranges = np.stack([columns.bounds[first, 0], columns.bounds[last - 1, 1]], axis=1).astype(np.int64)
    pointers = np.concatenate([[0], np.cumsum(np.bincount(first_row, minlength=n_tiles))]).astype(np.int64)
    return Layout(rows.bounds, pointers, ranges, block_bounds(n_tiles, BLOCKS))


@compiled
def _mark(row_low, row_high, column_low, column_high, mass, known, allowed, start, stop, keep):
    d = row_low.shape[1]
    for i in range(start, stop):
        lower = known[i]
        if lower == -np.inf:
            for j in range(mass.size):
                far = 0.0
                for k in range(d):
                    reach = max(row_high[i, k] - column_low[j, k], column_high[j, k] - row_low[i, k])
                    far += reach * reach
                lower = max(lower, mass[j] - 0.5 * far)
        limit = lower + allowed
        for j in range(mass.size):
            near = 0.0
            for k in range(d):
                gap = max(max(row_low[i, k] - column_high[j, k], column_low[j, k] - row_high[i, k]), 0.0)
                near += gap * gap
            keep[i, j] = mass[j] - 0.5 * near > limit
