"""Values carried along the chain of couplings, in either direction, without an n by m matrix.

Given its particle, what follows a snapshot does not depend on what came before it (the chain is Markov), so conditional
expectations over several gaps are those over each gap, one after another; forwards with growth, expected numbers are.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from ..bridges.bridge import Bridge

__all__ = ["ancestor_weights", "descendant_weights", "expected_at_end", "expected_at_start"]


def expected_at_end(bridge: Bridge, values: np.ndarray, start: int, end: int) -> np.ndarray:
    """Mean of values (n_end, p) over the descendants at snapshot `end` of each particle of `start`; (n_start, p).

    With growth a descendant on the way counts by the descendants that it leaves itself: numbers are carried, and divided
    at the end.
    """
    if bridge.gap_weights is None:
        for gap in range(end - 1, start - 1, -1):
            values = bridge.coupling(gap).expectation(values)
        return values
    numbers = np.column_stack([values, np.ones(len(values))])
    for gap in range(end - 1, start - 1, -1):
        numbers = bridge.coupling(gap).expectation(numbers)
        if gap > start:  # the first factor is common to a row
            numbers = numbers * _growth_factor(bridge, gap)[:, None]
            numbers = numbers / numbers[:, -1].max()
    return numbers[:, :-1] / numbers[:, -1:]


def descendant_weights(bridge: Bridge, start: int, end: int) -> np.ndarray:
    """Share (n_start,) of the particles of snapshot `start` in the population of `end`; sum 1."""
    later = bridge.gaps[end - 1].weights[1]
    return ancestor_weights(bridge, later[:, None], start, end)[0][:, 0]


def _growth_factor(bridge: Bridge, gap: int) -> np.ndarray:
    """Relative number of descendants (n,) that each particle before a gap leaves after it."""
    before, after = bridge.series.weights[gap], bridge.gaps[gap].weights[0]
    return np.divide(after, before, out=np.zeros_like(after), where=before > 0)


def expected_at_start(bridge: Bridge, values: np.ndarray, start: int, end: int) -> np.ndarray:
    """E[values at snapshot `start` | particle of snapshot `end`]: values (n_start, p), result (n_end, p)."""
    for gap in range(start, end):
        values = bridge.coupling(gap).expectation_of_sources(values)
    return values


def ancestor_weights(bridge: Bridge, weights: np.ndarray, start: int, end: int) -> list[np.ndarray]:
    """Weights of the ancestors, at every snapshot from `start` to `end`, of particles of `end` weighted by (n_end, p).

    w_k(i) = Σ_j w_(k+1)(j) π_ij / Σ_i π_ij; columns keep their sum 1.
    """
    found = [weights / weights.sum(axis=0)]
    for gap in range(end - 1, start - 1, -1):
        before, after = bridge.gaps[gap].weights
        share = np.divide(found[0], after[:, None], out=np.zeros_like(found[0]), where=after[:, None] > 0)
        earlier = before[:, None] * bridge.coupling(gap).expectation(share)
        found.insert(0, earlier / earlier.sum(axis=0))
    return found
