"""The compiled loops that sum over the assignments of a small cluster of rows and columns exactly.

Around each row a cluster grows along the strongest beliefs. Inside it all assignments are summed by dynamic programming
over subsets of its columns; what lies outside enters through the messages of belief propagation: a row may leave for a
column outside with weight u + Σ_outside w b, a column may be taken from outside with weight v + Σ_outside w a.
"""

from __future__ import annotations

import math

import numpy as np

from .fast_exp import compiled, exponential

__all__ = ["cluster_sums"]

_WEAKEST = 1e-5  # strength of the connection to the centre below which nothing joins a cluster

_LEAST_TOTAL = 1e-280  # well above the numbers that lose their digits


@compiled
def _mean_of_finite(values, count):
    total, found = 0.0, 0
    for k in range(count):
        if math.isfinite(values[k]):
            total += values[k]
            found += 1
    return total / found if found else math.nan


@compiled
def _find(values, count, wanted):
    for k in range(count):
        if values[k] == wanted:
            return k
    return -1


@compiled
def _offer(nodes, strengths, count, node, strength):
    """Put a node on the list of candidates, or raise its strength; returns the new length of the list."""
    k = _find(nodes, count, node)
    if k >= 0:
        strengths[k] = max(strengths[k], strength)
        return count
    if count < nodes.size:
        nodes[count] = node
        strengths[count] = strength
        return count + 1
    weakest = 0
    for j in range(count):
        if strengths[j] < strengths[weakest]:
            weakest = j
    if strengths[weakest] < strength:
        nodes[weakest] = node
        strengths[weakest] = strength
    return count


@compiled
def _grow(centre, limit, starts, columns, column_starts, places, edge_rows, beliefs, rows, cols):
    """Fill `rows` and `cols` with the cluster around a row; strengths are products of beliefs along the best path.

    Rows are numbered from 0 and columns from -1 downwards in the list of candidates.
    """
    nodes = np.empty(8 * limit, dtype=np.int64)
    strengths = np.empty(8 * limit)
    count = _offer(nodes, strengths, 0, centre, 1.0)
    n_rows, n_cols = 0, 0
    while count > 0:
        best = -1
        for k in range(count):
            full = (n_rows if nodes[k] >= 0 else n_cols) >= limit
            if not full and (best < 0 or strengths[k] > strengths[best]):
                best = k
        if best < 0 or strengths[best] < _WEAKEST:
            break
        node, strength = nodes[best], strengths[best]
        count -= 1
        nodes[best] = nodes[count]
        strengths[best] = strengths[count]
        if node >= 0:
            rows[n_rows] = node
            n_rows += 1
            for e in range(starts[node], starts[node + 1]):
                other = strength * beliefs[e]
                if other >= _WEAKEST and _find(cols, n_cols, columns[e]) < 0:
                    count = _offer(nodes, strengths, count, -1 - columns[e], other)
        else:
            column = -1 - node
            cols[n_cols] = column
            n_cols += 1
            for c in range(column_starts[column], column_starts[column + 1]):
                e = places[c]
                other = strength * beliefs[e]
                if other >= _WEAKEST and _find(rows, n_rows, edge_rows[e]) < 0:
                    count = _offer(nodes, strengths, count, edge_rows[e], other)
    return n_rows, n_cols


@compiled
def _add_logs(x, y):
    if x < y:
        x, y = y, x
    if y == -np.inf:
        return x
    return x + math.log1p(math.exp(y - x))


@compiled
def cluster_sums(
    starts, columns, column_starts, places, edge_rows, beliefs, log_weights, to_row, to_column, log_alone_rows,
    log_alone_columns, log_row_sums, log_column_sums, limit, first, last, out, out_alone, corrections, sizes,
):  # fmt: skip
    """Probabilities of the edges of rows first..last (`out`) and of staying alone, each exact inside its cluster.

    corrections[i] = (log of the exact sum of row i's cluster - its Bethe value) / its number of rows.
    """
    rows, cols = np.empty(limit, dtype=np.int64), np.empty(limit, dtype=np.int64)
    w, log_w = np.empty((limit, limit)), np.empty((limit, limit))
    leave, taken = np.empty(limit), np.empty(limit)
    table, fresh = np.empty(1 << limit), np.empty(1 << limit)
    for i in range(first, last):
        n, m = _grow(i, limit, starts, columns, column_starts, places, edge_rows, beliefs, rows, cols)
        bethe = 0.0
        log_w[:] = -np.inf
        for r in range(n):
            leave[r] = log_alone_rows[rows[r]]
            bethe += log_row_sums[rows[r]]
            for e in range(starts[rows[r]], starts[rows[r] + 1]):
                c = _find(cols, m, columns[e])
                if c >= 0:
                    log_w[r, c] = log_weights[e]
                    odds = log_weights[e] + to_row[e] + to_column[e]
                    bethe -= odds + math.log1p(math.exp(-odds)) if odds > 0.0 else math.log1p(math.exp(odds))
                else:
                    leave[r] = _add_logs(leave[r], log_weights[e] + to_row[e])
        for c in range(m):
            taken[c] = log_alone_columns[cols[c]]
            bethe += log_column_sums[cols[c]]
            for p in range(column_starts[cols[c]], column_starts[cols[c] + 1]):
                e = places[p]
                if _find(rows, n, edge_rows[e]) < 0:
                    taken[c] = _add_logs(taken[c], log_weights[e] + to_column[e])
        # In every assignment n - m more rows leave than columns are taken: e^balance for each that leaves and e^-balance for
        # each that is taken is one factor on the whole sum. Messages are known up to such a factor, which may be huge.
        balance = 0.5 * (_mean_of_finite(taken, m) - _mean_of_finite(leave, n))
        if math.isnan(balance):  # nothing leaves, or nothing is taken
            balance = 0.0
        for r in range(n):
            leave[r] += balance
        for c in range(m):
            taken[c] -= balance
        # A factor on a row or a column is a factor on the whole sum too: bring the largest entries near 1.
        shift = balance * (m - n)
        for r in range(n):
            top = leave[r]
            for c in range(m):
                top = max(top, log_w[r, c])
            shift += top
            leave[r] = exponential(leave[r] - top)
            for c in range(m):
                log_w[r, c] -= top
        for c in range(m):
            top = taken[c]
            for r in range(n):
                top = max(top, log_w[r, c])
            shift += top
            taken[c] = exponential(taken[c] - top)
            for r in range(n):
                w[r, c] = exponential(log_w[r, c] - top)
        # The centre is row 0 of its cluster and comes last, so that no pass backwards is needed.
        subsets = 1 << m
        table[:subsets] = 0.0
        table[0] = 1.0
        for r in range(n - 1, 0, -1):
            for s in range(subsets):
                fresh[s] = leave[r] * table[s]
            for c in range(m):
                weight = w[r, c]
                if weight > 0.0:
                    bit = 1 << c
                    for s in range(subsets):
                        if s & bit:
                            fresh[s] += weight * table[s ^ bit]
            table[:subsets] = fresh[:subsets]
        # fresh[s] = product of `taken` over the columns outside s
        fresh[subsets - 1] = 1.0
        for s in range(subsets - 2, -1, -1):
            c = 0
            while (s >> c) & 1:
                c += 1
            fresh[s] = taken[c] * fresh[s | (1 << c)]
        away = 0.0
        for s in range(subsets):
            away += table[s] * fresh[s]
        away *= leave[0]
        total = away
        for c in range(m):
            bit = 1 << c
            linked = 0.0
            if w[0, c] > 0.0:
                for s in range(subsets):
                    if not s & bit:
                        linked += table[s] * fresh[s | bit]
            w[0, c] *= linked
            total += w[0, c]
        if not total > _LEAST_TOTAL:  # everything underflowed: keep what belief propagation said
            sizes[i] = 0
            corrections[i] = 0.0
            out_alone[i] = exponential(log_alone_rows[i] - log_row_sums[i])
            for e in range(starts[i], starts[i + 1]):
                out[e] = exponential(log_weights[e] + to_row[e] - log_row_sums[i])
            continue
        sizes[i] = n
        corrections[i] = (math.log(total) + shift - bethe) / n
        # What leaves is shared among the row's columns outside, and staying alone, in proportion to their messages.
        outside = log_alone_rows[i]
        for e in range(starts[i], starts[i + 1]):
            if _find(cols, m, columns[e]) < 0:
                outside = _add_logs(outside, log_weights[e] + to_row[e])
        out_alone[i] = away / total * exponential(log_alone_rows[i] - outside) if outside > -np.inf else 0.0
        for e in range(starts[i], starts[i + 1]):
            c = _find(cols, m, columns[e])
            if c >= 0:
                out[e] = w[0, c] / total
            else:
                out[e] = away / total * exponential(log_weights[e] + to_row[e] - outside)
