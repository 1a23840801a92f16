"""A branch-free exponential that the compiler turns into vector instructions.

exp(x) = 2^n exp(r) with n = round(x / log 2) and |r| ≤ ½ log 2; exp(r) = 1 + r + r² q(r), where q of degree 9 agrees with
(exp(r) - 1 - r) / r² at the ten Chebyshev points (relative error of exp(r) below 2e-17, computed with 60 digits); the power
of two is added to the exponent bits. Exactly 0 below x = -700, where the true value (1e-304) no longer matters to a sum that
is kept near 1. The library's exp is a call per number and costs several times more.

Where the processor has vectors of eight doubles, compilers still choose four unless asked, on the grounds of clock rates that
no longer fall; `wide_vectors` asks, for the function that calls it. It saves a third of the time of a pass.
"""

from __future__ import annotations

import logging
import math
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

import numba
from numba import types
from numba.extending import intrinsic

__all__ = ["FAST", "announce_compilation", "compiled", "exponential", "larger", "wide_vectors"]

# Sums may be reordered into vector lanes and products fused; infinities keep their meaning.
FAST = {"contract", "reassoc", "nsz", "arcp"}


_dispatchers: list[Any] = []
_log = logging.getLogger("ensembles")


def compiled(function: Callable[..., Any]) -> Callable[..., Any]:
    """Compile without the interpreter lock, cached on disk where a cache folder can be written, else in memory."""
    try:
        dispatcher = numba.njit(nogil=True, fastmath=FAST, cache=True)(function)
        _depend_on_all_sources(dispatcher)
    except (RuntimeError, OSError):  # numba found no folder for its cache
        dispatcher = numba.njit(nogil=True, fastmath=FAST)(function)
    _dispatchers.append(dispatcher)
    return dispatcher


def _depend_on_all_sources(dispatcher: Any) -> None:
    """Compile again when any file of this folder changed: numba looks at the file of the function alone, and would keep code
    into which older versions of the functions that it calls were compiled."""
    file = getattr(getattr(dispatcher, "_cache", None), "_cache_file", None)
    if hasattr(file, "_source_stamp"):
        file._source_stamp = (file._source_stamp, _sources())


@cache
def _sources() -> tuple[tuple[str, float, int], ...]:
    """Name, time and size of every source file beside this one."""
    found = [(path.name, path.stat()) for path in sorted(Path(__file__).parent.glob("*.py"))]
    return tuple((name, stat.st_mtime, stat.st_size) for name, stat in found)


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

    def wide_vectors() -> None:
        """Nothing to ask of an interpreter."""

    def larger(x: float, y: float) -> float:
        """The larger of two numbers."""
        return max(x, y)

    def exponential(x: float) -> float:
        """exp(x), 0 below -700; interpreted."""
        return math.exp(min(x, 709.0)) if x > -700.0 else 0.0

else:
    from llvmlite import ir

    @intrinsic
    def wide_vectors(typing_context: Any) -> Any:
        """Ask for the widest vectors in the function that calls this; where there are none, nothing changes."""

        def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            # The set that llvmlite keeps admits known names only; this one is LLVM's, given as a string.
            set.add(builder.function.attributes, '"prefer-vector-width"="512"')
            return context.get_dummy_value()

        return types.none(), build

    @intrinsic
    def larger(typing_context: Any, x: Any, y: Any) -> Any:
        """max(x, y) of numbers that are not NaN: with that promise a maximum over many is taken in vectors."""

        def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            double = ir.DoubleType()
            kind = ir.FunctionType(double, [double, double])
            function = builder.module.declare_intrinsic("llvm.maximum", [double], kind)
            return builder.call(function, arguments, fastmath=("nnan", "nsz"))

        return types.float64(types.float64, types.float64), build

    @intrinsic
    def _round(typing_context: Any, x: Any) -> Any:
        def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            return builder.call(builder.module.declare_intrinsic("llvm.rint", [ir.DoubleType()]), arguments)

        return types.float64(types.float64), build

    @intrinsic
    def _times_power_of_two(typing_context: Any, x: Any, power: Any) -> Any:
        def build(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            wide = ir.IntType(64)
            # In 1.5 * 2^52 + n the lowest bits are those of the whole number n.
            shifted = builder.fadd(arguments[1], ir.Constant(ir.DoubleType(), 1.5 * 2.0**52))
            exponent = builder.shl(builder.bitcast(shifted, wide), ir.Constant(wide, 52))
            return builder.bitcast(builder.add(builder.bitcast(arguments[0], wide), exponent), ir.DoubleType())

        return types.float64(types.float64, types.float64), build

    @numba.njit(inline="always")
    def exponential(x: float) -> float:
        """exp(x), 0 below -700; relative error of a few units in the last place for x < 700."""
        y = min(max(x, -700.0), 709.0)
        n = _round(y * 1.4426950408889634)
        r = (y - n * 6.93147180369123816490e-01) - n * 1.90821492927058770002e-10
        p = r * 2.5100375924709717e-08 + 2.762007599981065e-07
        p = p * r + 2.7557268480116333e-06
        p = p * r + 2.4801521322116825e-05
        p = p * r + 0.0001984126986304067
        p = p * r + 0.0013888888917196881
        p = p * r + 0.008333333333330065
        p = p * r + 0.041666666666624164
        p = p * r + 0.16666666666666669
        p = p * r + 0.5
        p = p * r + 1.0
        p = p * r + 1.0
        value = _times_power_of_two(p, n)
        return value if x > -700.0 else 0.0
