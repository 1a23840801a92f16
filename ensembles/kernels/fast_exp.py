"""A branch-free exponential that the compiler turns into vector instructions.

exp(x) = 2^n exp(r) with n = round(x / log 2) and |r| ≤ ½ log 2; exp(r) by its Taylor polynomial of degree 13, whose
remainder is below 1e-17; the power of two is added to the exponent bits. Exactly 0 below x = -700, where the true value
(1e-304) no longer matters to a sum that is kept near 1. The library's exp is a call per number and costs several
times more.
"""

from __future__ import annotations

import logging
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba
from numba import types
from numba.extending import intrinsic

__all__ = ["FAST", "announce_compilation", "compiled", "exponential"]

# Sums may be reordered into vector lanes and products fused; infinities keep their meaning.
FAST = {"contract", "reassoc", "nsz", "arcp"}


_dispatchers: list[Any] = []
_log = logging.getLogger("ensembles")


def compiled(function: Callable[..., Any]) -> Callable[..., Any]:
    """Compile without the interpreter lock, cached on disk where a cache folder can be written, else in memory."""
    try:
        dispatcher = numba.njit(nogil=True, fastmath=FAST, cache=True)(function)
    except (RuntimeError, OSError):  # numba found no folder for its cache
        dispatcher = numba.njit(nogil=True, fastmath=FAST)(function)
    _dispatchers.append(dispatcher)
    return dispatcher


def announce_compilation() -> None:
    """Say, once a process, that the loops are being compiled, unless an earlier process left them on disk."""
    if not _dispatchers:
        return
    caches = [getattr(dispatcher, "_cache", None) for dispatcher in _dispatchers]
    _dispatchers.clear()
    folders = {cache.cache_path for cache in caches if getattr(cache, "cache_path", None)}
    if not any(next(Path(folder).glob("*.nbi"), None) for folder in folders):
        _log.warning("compiling the loops for this machine: once after installation, some seconds")


if numba.config.DISABLE_JIT:  # pragma: no cover - run by a test in another process

    def exponential(x: float) -> float:
        """exp(x), 0 below -700; interpreted."""
        return math.exp(min(x, 709.0)) if x > -700.0 else 0.0

else:
    from llvmlite import ir

    @intrinsic
    def _round(typing_context: Any, x: Any) -> Any:
        def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            return builder.call(builder.module.declare_intrinsic("llvm.rint", [ir.DoubleType()]), arguments)

        return types.float64(types.float64), build

    @intrinsic
    def _times_power_of_two(typing_context: Any, x: Any, power: Any) -> Any:
        def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            wide, narrow = ir.IntType(64), ir.IntType(32)
            exponent = builder.sext(builder.fptosi(arguments[1], narrow), wide)
            shifted = builder.shl(exponent, ir.Constant(wide, 52))
            return builder.bitcast(builder.add(builder.bitcast(arguments[0], wide), shifted), ir.DoubleType())

        return types.float64(types.float64, types.float64), build

    @numba.njit(inline="always")
    def exponential(x: float) -> float:
        """exp(x), 0 below -700; relative error of a few units in the last place for x < 700."""
        y = min(max(x, -700.0), 709.0)
        n = _round(y * 1.4426950408889634)
        r = (y - n * 6.93147180369123816490e-01) - n * 1.90821492927058770002e-10
        p = r * (1.0 / 6227020800.0) + (1.0 / 479001600.0)
        p = p * r + (1.0 / 39916800.0)
        p = p * r + (1.0 / 3628800.0)
        p = p * r + (1.0 / 362880.0)
        p = p * r + (1.0 / 40320.0)
        p = p * r + (1.0 / 5040.0)
        p = p * r + (1.0 / 720.0)
        p = p * r + (1.0 / 120.0)
        p = p * r + (1.0 / 24.0)
        p = p * r + (1.0 / 6.0)
        p = p * r + 0.5
        p = p * r + 1.0
        p = p * r + 1.0
        value = _times_power_of_two(p, n)
        return value if x > -700.0 else 0.0
