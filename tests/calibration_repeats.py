"""Repeats of a simulation, for the calibration study."""

from collections.abc import Callable

import numpy as np
from joblib import Parallel, delayed


def repeat(
    task: Callable[..., object], repeats: int, *arguments: object, seed: int = 0, workers: int = 2
) -> np.ndarray:
    """task(*arguments, (seed, r)) for every r, in processes; the result does not depend on their number."""
    if workers == 1:
        return np.array([task(*arguments, (seed, r)) for r in range(repeats)])
    jobs = (delayed(task)(*arguments, (seed, r)) for r in range(repeats))
    return np.array(Parallel(n_jobs=workers)(jobs))
