"""Random weights of the weighted bootstrap, and tasks run on several workers with the same result on one."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..kernels.threads import one_blas_thread

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["bootstrap_weights", "run_repeats"]

_SMALLEST = 1e-300


def bootstrap_weights(
    series: SnapshotSeries, rng: np.random.Generator, groups: Sequence[np.ndarray] | None = None
) -> tuple[np.ndarray, ...]:
    """New weights of every snapshot: the old ones times independent gamma variates, divided by their sum.

    The shape α = 1 - 2/n of the variates (n particles of positive weight) makes the variance of a weighted mean equal to
    the unbiased s²/n; α = 1 is the Bayesian bootstrap of Rubin (1981), which falls short of it by (n - 1)/(n + 1). With
    `groups` (one array of names a snapshot) all particles of a replicate share one variate, and n counts replicates.
    """
    found = []
    for k, weights in enumerate(series.weights):
        if groups is None:
            present = int(np.count_nonzero(weights))
            factors = rng.gamma(_shape(present), size=weights.size) if present > 1 else np.ones(weights.size)
        else:
            names, member = np.unique(groups[k], return_inverse=True)
            shared = rng.gamma(_shape(names.size), size=names.size) if names.size > 1 else np.ones(1)
            factors = shared[member.ravel()]
        product = weights * np.maximum(factors, _SMALLEST)
        found.append(product / product.sum())
    return tuple(found)


def _shape(count: int) -> float:
    return max(1.0 - 2.0 / count, 0.25)


def run_repeats(
    task: Callable[[np.random.Generator], Any], repeats: int, rng: np.random.Generator, workers: int
) -> list[Any]:
    """Run task(generator) `repeats` times on `workers` threads, each with a generator of its own.

    The generators are spawned before anything runs, so the results do not depend on the number of workers.
    """
    workers = checks.whole_number(workers, "workers")
    streams = rng.spawn(repeats)
    # The solves of a repeat are small: threads inside each would only wait for one another.
    with one_blas_thread():
        if workers == 1:
            return [task(stream) for stream in streams]
        from joblib import Parallel, delayed

        return list(Parallel(n_jobs=workers, prefer="threads")(delayed(task)(stream) for stream in streams))
