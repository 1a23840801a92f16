"""Repeats of a simulation, for the calibration study."""

from collections.abc import Callable, Sequence

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


def print_last(rows: Sequence[dict[str, object]], count: int) -> None:
    """The last rows of a table that grows, in columns; its header with the first ones."""
    widths = {name: max(len(str(name)), 18 if isinstance(rows[0][name], str) else 6) for name in rows[0]}
    if len(rows) == count:
        print("  ".join(str(name).rjust(width) for name, width in widths.items()))
    for row in rows[-count:]:
        cells = [f"{value:.3f}" if isinstance(value, float) else str(value) for value in row.values()]
        print("  ".join(cell.rjust(width) for cell, width in zip(cells, widths.values())), flush=True)
