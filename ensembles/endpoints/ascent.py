"""Maximise a likelihood as far as the data can tell, and no further: L-BFGS with statistical stopping rules."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize

from ..checks import ComputationError

__all__ = ["Ascent", "ascend"]

_EVERY = 5  # iterations between two looks
_IDLE = 2  # looks without a gain that end an ascent
_MEMORY = 30  # pairs of L-BFGS
_LIMIT = 20_000  # iterations; a stop for the impossible, far beyond what the rules below allow


@dataclass(frozen=True)
class Ascent:
    """Parameters reached, their value, the iterations taken, why it ended, and (iterations, value) at every look."""

    theta: np.ndarray
    value: float
    iterations: int
    reason: str
    history: np.ndarray


class _Watch:
    """What the looks at an ascent have shown so far."""

    def __init__(self, theta: np.ndarray) -> None:
        self.iterations, self.idle = 0, 0
        self.best, self.best_theta = -np.inf, theta
        self.looks: list[tuple[int, float]] = []

    def idles(self, theta: np.ndarray, value: float, resolution: float) -> bool:
        """Note a value; whether it has stood still for `_IDLE` looks."""
        self.looks.append((self.iterations, value))
        self.idle = 0 if value > self.best + resolution else self.idle + 1
        if value > self.best:
            self.best, self.best_theta = value, theta.copy()
        return self.idle >= _IDLE


def ascend(
    objective: Callable[[np.ndarray], tuple[float, np.ndarray]],
    theta: np.ndarray,
    scale: np.ndarray,
    *,
    resolution: float,
    held_out: Callable[[np.ndarray], float] | None = None,
) -> Ascent:
    """Maximise objective(theta) -> (value, gradient) from `theta`, in parameters divided by `scale`.

    It stops where `_EVERY` iterations no longer raise the held-out value (or without one, the value itself) by more than
    `resolution`, twice in a row; or at a stationary point. Of the held-out looks the best is returned.

    Raises
    ------
    ComputationError
        If the start itself has no finite value.
    """
    first, _ = objective(theta)
    if not np.isfinite(first):
        raise ComputationError(
            f"the likelihood is not finite where the fit starts; it is {first}; rescale the coordinates or use more noise"
        )
    watch = _Watch(theta)

    def negative(x: np.ndarray) -> tuple[float, np.ndarray]:
        with np.errstate(all="ignore"):
            try:
                value, gradient = objective(x * scale)
            except np.linalg.LinAlgError:
                return 1e300, np.zeros_like(x)
        if not (np.isfinite(value) and np.isfinite(gradient).all()):
            return 1e300, np.zeros_like(x)  # a step too far; the line search shortens it
        return -value, -gradient * scale

    def look(intermediate_result) -> None:  # type: ignore[no-untyped-def]
        watch.iterations += 1
        if watch.iterations % _EVERY == 0:
            here = intermediate_result.x * scale
            shown = held_out(here) if held_out is not None else -float(intermediate_result.fun)
            if watch.idles(here, shown, resolution):
                raise StopIteration

    result = minimize(
        negative, theta / scale, jac=True, method="L-BFGS-B", callback=look,
        options={"maxiter": _LIMIT, "maxfun": 2 * _LIMIT, "maxcor": _MEMORY, "ftol": 1e-15, "gtol": 1e-9},
    )  # fmt: skip
    final = result.x * scale
    if held_out is not None and watch.looks and held_out(final) < watch.best:
        final = watch.best_theta
    stopped = (
        "likelihood rises by less than the data can tell" if held_out is None else "held-out likelihood stands still"
    )
    value, _ = objective(final)
    reason = stopped if watch.idle >= _IDLE else "stationary point"
    return Ascent(final, float(value), watch.iterations, reason, np.array(watch.looks).reshape(-1, 2))
