"""The score that the best possible prediction would get: another snapshot of the same population."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from .pairwise import Comparison

__all__ = ["replicate_floor", "snapshot_floor"]

_PLANS = 20  # resampled pairs for which an optimal plan is computed


def snapshot_floor(
    cloud: np.ndarray,
    weights: np.ndarray,
    names: Sequence[str],
    *,
    size: int,
    bandwidth: float,
    repeats: int,
    rng: np.random.Generator,
) -> dict[str, tuple[float, float]]:
    """Mean and standard deviation of each score between two independent resamples of a cloud, each of its own size.

    `size` is the number of points to which predictions are reduced for Wasserstein distances.
    """
    n = len(cloud)
    first, second, plans = rng.spawn(3)
    counts = [stream.multinomial(n, weights, size=repeats) / n for stream in (first, second)]
    pairs = Comparison(cloud, cloud, weights, weights, counts[0], counts[1], bandwidth)
    found = {}
    for name in names:
        if name.startswith("wasserstein"):
            continue
        if name in ("energy_distance", "kernel_discrepancy"):
            values = _between_resamples(pairs, name, counts)
        elif name in ("mean_error", "covariance_error"):
            values = getattr(pairs, name)()[1:]
        else:
            continue
        found[name] = (float(values.mean()), float(values.std(ddof=1)))
    for order in (1, 2):
        if f"wasserstein_{order}" in names:
            values = np.array([_plan_cost(cloud, weights, order, size, plans) for _ in range(_PLANS)])
            found[f"wasserstein_{order}"] = (float(values.mean()), float(values.std(ddof=1)))
    return found


def _between_resamples(pairs: Comparison, name: str, counts: list[np.ndarray]) -> np.ndarray:
    """The unbiased score between two sets of draws, whose duplicates count as particles of their own."""
    n = pairs.x.shape[0]
    matrix = pairs.distances[2]
    diagonal = 0.0
    if name == "kernel_discrepancy":
        matrix, diagonal = np.exp(-0.5 * (matrix / pairs.bandwidth) ** 2), 1.0
    a, b = counts
    crossed = np.einsum("ri,ri->r", a @ matrix, b)
    within = [(np.einsum("ri,ri->r", w @ matrix, w) - diagonal / n) * n / (n - 1) for w in (a, b)]
    sign = 1.0 if name == "energy_distance" else -1.0
    return sign * (2.0 * crossed - within[0] - within[1])


def _plan_cost(cloud: np.ndarray, weights: np.ndarray, order: int, size: int, rng: np.random.Generator) -> float:
    from .transport import EXACT_LIMIT, optimal_plan

    # Two halves, so that no particle meets itself; the distance of two clouds of one population shrinks with their
    # number like n^(-1/d), and n^(-1/2) in fewer than two dimensions (Fournier and Guillin 2015, from memory).
    n = min(len(cloud), 2 * EXACT_LIMIT)
    order_of_rows = rng.permutation(len(cloud))[:n]
    i, j = order_of_rows[: max(1, min(size, n) // 2)], order_of_rows[n // 2 :]
    shares = [weights[rows] / weights[rows].sum() if weights[rows].any() else None for rows in (i, j)]
    if shares[0] is None or shares[1] is None:
        return 0.0
    cost = optimal_plan(cloud[i], cloud[j], shares[0], shares[1], order=order)[0]
    return max(cost, 0.0) ** (1.0 / order) * 2.0 ** (-1.0 / max(2, cloud.shape[1]))


def replicate_floor(
    cloud: np.ndarray, weights: np.ndarray, groups: np.ndarray, names: Sequence[str], bandwidth: float
) -> dict[str, tuple[float, float]]:
    """Mean of each score between one replicate and all the others, and the standard deviation over replicates.

    Replicates of fewer than two particles are left out; nothing is returned for fewer than two replicates.
    """
    rng = np.random.default_rng(0)
    kept = [name for name in np.unique(groups) if np.count_nonzero(weights[groups == name]) >= 2]
    if len(kept) < 2:
        return {}
    values: dict[str, list[float]] = {name: [] for name in names if name != "log_density"}
    for group in kept:
        inside, outside = groups == group, np.isin(groups, kept) & (groups != group)
        a, b = weights[inside] / weights[inside].sum(), weights[outside] / weights[outside].sum()
        none = [np.empty((0, w.size)) for w in (a, b)]
        pair = Comparison(cloud[inside], cloud[outside], a, b, none[0], none[1], bandwidth)
        for name in values:
            if name.startswith("wasserstein"):
                values[name].append(pair.wasserstein(int(name[-1]), int(inside.sum()), rng)[0])
            else:
                values[name].append(float(getattr(pair, name)()[0]))
    return {name: (float(np.mean(each)), float(np.std(each, ddof=1))) for name, each in values.items()}
