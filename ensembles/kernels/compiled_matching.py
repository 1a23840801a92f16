"""The compiled loops of minimum-cost one-to-one matching on a sparse graph, by shortest augmenting paths.

Reduced costs c - u_row - v_column stay non-negative; each row that is still free searches the nearest free column among
them with a heap (Dijkstra), so that a search stays local where costs are. Jonker and Volgenant 1987, from memory; the tests
hold the results against scipy.
"""

from __future__ import annotations

import numpy as np

from .fast_exp import compiled

__all__ = ["match_rows"]


@compiled
def _push(keys, nodes, size, key, node):
    at = size
    while at > 0:
        up = (at - 1) >> 1
        if keys[up] <= key:
            break
        keys[at] = keys[up]
        nodes[at] = nodes[up]
        at = up
    keys[at] = key
    nodes[at] = node
    return size + 1


@compiled
def _pop(keys, nodes, size):
    size -= 1
    key, node = keys[size], nodes[size]
    at = 0
    while True:
        child = 2 * at + 1
        if child >= size:
            break
        if child + 1 < size and keys[child + 1] < keys[child]:
            child += 1
        if key <= keys[child]:
            break
        keys[at] = keys[child]
        nodes[at] = nodes[child]
        at = child
    keys[at] = key
    nodes[at] = node
    return size


@compiled
def match_rows(starts, columns, costs, count, row_of, column_of, v):
    """Match every row at the least total cost; returns the first row that cannot be matched, or -1.

    `row_of` (columns) and `column_of` (rows) are filled with -1 before; `v` (columns) holds starting prices, zeros or
    the least cost of each column. `count` is the number of columns.
    """
    rows = starts.size - 1
    distance = np.full(count, np.inf)
    previous = np.empty(count, dtype=np.int64)
    done = np.zeros(count, dtype=np.bool_)
    touched = np.empty(count, dtype=np.int64)
    keys = np.empty(costs.size + 1)
    nodes = np.empty(costs.size + 1, dtype=np.int64)
    for i in range(rows):  # greedy: rows whose cheapest column is free
        best, at = np.inf, -1
        for e in range(starts[i], starts[i + 1]):
            if costs[e] - v[columns[e]] < best:
                best = costs[e] - v[columns[e]]
                at = columns[e]
        if at >= 0 and row_of[at] < 0:
            row_of[at] = i
            column_of[i] = at
    for free in range(rows):
        if column_of[free] >= 0:
            continue
        size, seen = 0, 0
        row, base = free, 0.0
        end = -1
        while True:
            # Prices make the matched edge of a row its cheapest: u is not stored but found again.
            cheapest = np.inf
            for e in range(starts[row], starts[row + 1]):
                cheapest = min(cheapest, costs[e] - v[columns[e]])
            for e in range(starts[row], starts[row + 1]):
                j = columns[e]
                if done[j]:
                    continue
                to = base + max(costs[e] - v[j] - cheapest, 0.0)
                if to < distance[j]:
                    if distance[j] == np.inf:
                        touched[seen] = j
                        seen += 1
                    distance[j] = to
                    previous[j] = row
                    if size >= keys.size - 1:
                        break
                    size = _push(keys, nodes, size, to, j)
            found = -1
            while size > 0:
                key, j = keys[0], nodes[0]
                size = _pop(keys, nodes, size)
                if not done[j] and key <= distance[j]:
                    found = j
                    break
            if found < 0:
                return free
            done[found] = True
            base = distance[found]
            if row_of[found] < 0:
                end = found
                break
            row = row_of[found]
        for k in range(seen):
            j = touched[k]
            if done[j]:
                v[j] -= base - distance[j]
            distance[j] = np.inf
            done[j] = False
        at = end
        while True:
            row = previous[at]
            after = column_of[row]
            row_of[at] = row
            column_of[row] = at
            if row == free:
                break
            at = after
    return -1
