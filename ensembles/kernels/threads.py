"""Run independent blocks of rows on both cores; an interruption ends every thread before it is passed on."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, ExitStack, contextmanager
from functools import cache
from itertools import pairwise
from typing import Any

from .fast_exp import announce_compilation

__all__ = ["block_bounds", "one_blas_thread", "run_blocks", "thread_count"]

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


_depth = 0
_limit = ExitStack()
_guard = threading.Lock()


@contextmanager
def one_blas_thread() -> Iterator[None]:
    """Keep the linear algebra library to one thread meanwhile; may be entered again, and by several threads at once.

    The matrices of a fit are small: a second thread there only waits, and takes a core from the loops over the kernel.
    """
    global _depth
    with _guard:
        if _depth == 0:
            _limit.enter_context(_blas_limit())
        _depth += 1
    try:
        yield
    finally:
        with _guard:
            _depth -= 1
            if _depth == 0:
                _limit.close()


def _blas_limit() -> AbstractContextManager[Any]:
    return _blas_controller().limit(limits=1, user_api="blas")


@cache
def _blas_controller() -> Any:
    """Looks through the libraries that the process has loaded, which takes some milliseconds: once."""
    import scipy.linalg  # noqa: F401 - has a linear algebra library of its own, which must be there to be found
    from threadpoolctl import ThreadpoolController

    return ThreadpoolController()
