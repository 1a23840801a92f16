"""Sums over all one-to-one assignments of a few particles, exactly: the reference that belief propagation is held to.

Dynamic programming over the subsets S of columns used by the first rows, in log domain:

    F_0(∅) = 1,   F_{i+1}(S) = u_i F_i(S) + Σ_{j ∈ S} w_ij F_i(S \\ j),   Z = Σ_S F_n(S) Π_{j ∉ S} v_j,

and the same from the last row backwards gives every link probability. The cost is n m 2^m.
"""

from __future__ import annotations

import numpy as np

from ..checks import InputError
from ..logspace import log_sum_exp

__all__ = ["EXACT_LIMIT", "exact_assignment"]

EXACT_LIMIT = 12


def exact_assignment(
    log_weights: np.ndarray, log_alone: tuple[np.ndarray, np.ndarray] | None = None
) -> tuple[float, np.ndarray, np.ndarray, np.ndarray]:
    """log Z, the link probabilities (n, m), and the probabilities of staying alone, rows (n,) and columns (m,).

    Parameters
    ----------
    log_weights : (n, m), -inf where a link is impossible; n and m at most 12.
    log_alone : log-weights of a row (n,) and of a column (m,) that stays alone; impossible by default.

    Raises
    ------
    InputError
        Above 12 rows or columns, or if no assignment is possible at all.

    Examples
    --------
    >>> import numpy as np
    >>> log_permanent, links, _, _ = exact_assignment(np.log([[3.0, 1.0], [1.0, 2.0]]))
    >>> round(float(np.exp(log_permanent)), 6), links.round(3).tolist()
    (7.0, [[0.857, 0.143], [0.143, 0.857]])
    """
    n, m = log_weights.shape
    if max(n, m) > EXACT_LIMIT:
        raise InputError(
            f"too many particles to enumerate; {n} x {m} where {EXACT_LIMIT} are possible; use belief propagation"
        )
    u, v = (np.full(n, -np.inf), np.full(m, -np.inf)) if log_alone is None else log_alone
    subsets = np.arange(2**m)
    member = (subsets[:, None] >> np.arange(m)) & 1 == 1
    forward = np.full((n + 1, subsets.size), -np.inf)
    forward[0, 0] = 0.0
    for i in range(n):
        terms = [forward[i] + u[i]]
        for j in range(m):
            term = np.full(subsets.size, -np.inf)
            term[member[:, j]] = forward[i, subsets[member[:, j]] ^ (1 << j)] + log_weights[i, j]
            terms.append(term)
        forward[i + 1] = log_sum_exp(np.stack(terms), axis=0)
    backward = np.full((n + 1, subsets.size), -np.inf)
    # A column outside S stays alone; -inf times False is not -inf, so that case is kept apart.
    backward[n] = np.where(member, 0.0, v).sum(axis=1)
    log_total = float(log_sum_exp(forward[n] + backward[n]))
    if not np.isfinite(log_total):
        raise InputError(
            "no one-to-one assignment is possible; every one has weight 0; allow missed or new particles, or more noise"
        )
    links = np.zeros((n, m))
    alone_rows = np.zeros(n)
    for i in reversed(range(n)):
        terms = [backward[i + 1] + u[i]]
        alone_rows[i] = np.exp(log_sum_exp(forward[i] + terms[0]) - log_total)
        for j in range(m):
            term = np.full(subsets.size, -np.inf)
            free = ~member[:, j]
            term[free] = backward[i + 1, subsets[free] | (1 << j)] + log_weights[i, j]
            terms.append(term)
            links[i, j] = np.exp(log_sum_exp(forward[i] + term) - log_total)
        backward[i] = log_sum_exp(np.stack(terms), axis=0)
    return log_total, links, alone_rows, 1.0 - links.sum(axis=0)
