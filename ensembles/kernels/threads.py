"""Run independent blocks of rows on both cores; an interruption ends every thread before it is passed on."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable
from itertools import pairwise

from .fast_exp import announce_compilation

__all__ = ["block_bounds", "run_blocks", "thread_count"]

_SMALL = 200_000  # kernel entries below which a second thread costs more than it saves


def thread_count() -> int:
    """Threads to use: ENSEMBLES_THREADS where set, else the processors this process may use."""
    asked = os.environ.get("ENSEMBLES_THREADS", "")
    if asked.isdigit() and int(asked) > 0:
        return int(asked)
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def block_bounds(rows: int, blocks: int) -> list[tuple[int, int]]:
    """Split rows into at most `blocks` ranges whose edges depend on `rows` alone, never on the thread count."""
    blocks = max(1, min(blocks, rows))
    edges = [rows * k // blocks for k in range(blocks + 1)]
    return list(pairwise(edges))


def run_blocks(task: Callable[[int, int, int], None], bounds: list[tuple[int, int]], entries: float) -> None:
    """Call task(block, start, stop) for every block; `entries` is the total work in kernel entries.

    Which thread runs which block is left open, so a task writes only to places that belong to its block.
    """
    announce_compilation()
    workers = min(thread_count(), len(bounds)) if entries > _SMALL else 1
    lock = threading.Lock()
    pending = list(enumerate(bounds))[::-1]
    failures: list[BaseException] = []

    def work() -> None:
        while True:
            with lock:
                if failures or not pending:
                    return
                block, (start, stop) = pending.pop()
            try:
                task(block, start, stop)
            except BaseException as failure:
                failures.append(failure)
                return

    threads = [threading.Thread(target=work, daemon=True) for _ in range(workers - 1)]
    for thread in threads:
        thread.start()
    try:
        work()
    except BaseException as failure:  # an interruption between two blocks
        failures.append(failure)
    finally:
        with lock:
            if failures:
                pending.clear()
        for thread in threads:
            thread.join()
    if failures:
        raise failures[0]
