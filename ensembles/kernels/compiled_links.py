"""The compiled loops of belief propagation on one-to-one assignments.

Edges stand row after row: row i owns the edges starts[i]..starts[i + 1]. A message is the log of an odds that the edge
is used. With w the weight of an edge, b the message from its column and u the weight of a row that stays alone, the
message from row to edge is a = 1 / (u + Σ_others w b): the same law serves columns, whose edges are found through
`places`. Every function works on its own rows and writes only to places that belong to them.
"""

from __future__ import annotations

import math

import numpy as np

from .fast_exp import compiled, exponential

__all__ = ["best_columns", "propagate"]

_OPEN = 7.0  # log-odds within which an edge is open
_CAP = 600.0  # log-odds beyond which an edge is decided for every purpose in double precision


@compiled
def propagate(
    starts, places, log_weights, incoming, log_alone, damping, selected, first, last, outgoing, log_sums, change
):  # fmt: skip
    """Send messages from the rows selected[first:last]: outgoing = -log(alone + Σ_others exp(log_weight + incoming)).

    Edge e of a row stands at places[e] in the arrays of edges. New messages are mixed with the old ones in `outgoing`,
    (1 - damping) new + damping old; log_sums[i] = log(alone + Σ exp(...)), all edges included; change[i] is the largest
    change of a message of row i, over edges that are still open: of a
    probability between 0.1 % and 99.9 %.
    """
    widest = 1
    for i in selected[first:last]:
        widest = max(widest, starts[i + 1] - starts[i])
    values = np.empty(widest)
    for i in selected[first:last]:
        begin = starts[i]
        width = starts[i + 1] - begin
        mine = places[begin : begin + width]
        top = log_alone[i]
        best = -1
        for k in range(width):
            value = log_weights[mine[k]] + incoming[mine[k]]
            values[k] = value
            if value > top or (best < 0 and value == top):
                top = value
                best = k
        if top == -np.inf:
            log_sums[i] = -np.inf
            change[i] = 0.0
            continue
        rest = exponential(log_alone[i] - top) if best >= 0 else 1.0
        # The largest term is taken out of its own sum, never subtracted: nothing cancels.
        if best >= 0:
            values[best] = -np.inf
        for k in range(width):
            values[k] = exponential(values[k] - top)
            rest += values[k]
        total = rest + 1.0 if best >= 0 else rest
        log_total = math.log(total)
        log_sums[i] = top + log_total
        base = -top - log_total
        largest = 0.0
        for k in range(width):
            place = mine[k]
            share = values[k] / total
            message = base + share + 0.5 * share * share if share < 1e-5 else base - math.log(1.0 - share)
            if k == best:
                message = min(-top - math.log(rest), _CAP - top) if rest > 0.0 else _CAP - top
            old = outgoing[place]
            message = (1.0 - damping) * message + damping * old
            if abs(message - old) > largest and abs(message + log_weights[place] + incoming[place]) < _OPEN:
                largest = abs(message - old)
            outgoing[place] = message
        change[i] = largest


@compiled
def best_columns(starts, columns, values, count, first, last, out_columns, out_values):
    """The `count` largest values of rows first..last and their columns, in falling order; -1 where a row has fewer."""
    for i in range(first, last):
        for r in range(count):
            out_columns[i, r] = -1
            out_values[i, r] = 0.0
        for e in range(starts[i], starts[i + 1]):
            value = values[e]
            r = count
            while r > 0 and (out_columns[i, r - 1] < 0 or out_values[i, r - 1] < value):
                r -= 1
            if r < count:
                for s in range(count - 1, r, -1):
                    out_columns[i, s] = out_columns[i, s - 1]
                    out_values[i, s] = out_values[i, s - 1]
                out_columns[i, r] = columns[e]
                out_values[i, r] = value
