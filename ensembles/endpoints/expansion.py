"""The weights of a kernel expansion with given centres and bandwidth, by updates that never lower the likelihood.

With A_jk = N(y_j | c_k, h²) at the end points and B_ik = the same carried back to the start points,

    J(w) = Σ_j b_j log (A w)_j - Σ_i a_i log (B w)_i.

At any w the concave function Σ_k N_k log w_k - M_k w_k with N_k = w_k Σ_j b_j A_jk / (A w)_j and
M_k = Σ_i a_i B_ik / (B w)_i lies below J up to a constant and touches it; its maximum is the update w_k <- N_k / M_k, which
therefore raises J. With h = 0 and the end points as centres this is Sinkhorn's iteration. The weights of a start density
Σ_k w_k D_k with given densities D_k are the same problem with M = 1, and there J is concave in w.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

__all__ = ["ascend_density_weights", "ascend_weights"]

_SMALLEST = 1e-300
_LONGEST = 1e4  # plain updates that one extrapolation may stand for


def ascend_weights(
    log_a: np.ndarray, end_weights: np.ndarray, log_b: np.ndarray, start_weights: np.ndarray, resolution: float
) -> tuple[np.ndarray, np.ndarray]:
    """Maximise J from log A (m, K) and log B (n, K); stops where a step gains less than `resolution` / 10.

    Returns
    -------
    log_w : (K,), shifted so that its largest entry is 0.
    history : (steps,) J, which never falls.
    """
    a, a_top = _scaled(log_a)
    b, b_top = _scaled(log_b)
    constant = float(end_weights @ a_top - start_weights @ b_top)

    def update(log_w: np.ndarray) -> tuple[float, np.ndarray]:
        w = np.exp(log_w)
        ends, starts = np.maximum(a @ w, _SMALLEST), np.maximum(b @ w, _SMALLEST)
        value = float(end_weights @ np.log(ends) - start_weights @ np.log(starts)) + constant
        with np.errstate(divide="ignore"):
            step = np.log((end_weights / ends) @ a) - np.log(np.maximum((start_weights / starts) @ b, _SMALLEST))
        return value, log_w + np.maximum(step, -50.0)

    return _accelerated(update, np.zeros(a.shape[1]), resolution)


def ascend_density_weights(
    log_densities: np.ndarray, weights: np.ndarray, resolution: float
) -> tuple[np.ndarray, np.ndarray]:
    """Maximise Σ_i weights_i log Σ_k w_k D_ik over weights of sum 1; concave; (log_w, history) as `ascend_weights`."""
    d, top = _scaled(log_densities)

    def update(log_w: np.ndarray) -> tuple[float, np.ndarray]:
        w = np.exp(log_w - log_w.max())
        w /= w.sum()
        sums = np.maximum(d @ w, _SMALLEST)
        with np.errstate(divide="ignore"):
            step = np.log((weights / sums) @ d)
        return float(weights @ (np.log(sums) + top)), np.log(np.maximum(w, _SMALLEST)) + np.maximum(step, -50.0)

    return _accelerated(update, np.zeros(d.shape[1]), resolution)


def _accelerated(
    update: Callable[[np.ndarray], tuple[float, np.ndarray]], log_w: np.ndarray, resolution: float
) -> tuple[np.ndarray, np.ndarray]:
    """Plain updates with a squared extrapolation between them, kept only where it raises the value.

    Source of the extrapolation: Varadhan and Roland 2008 (from memory); any step is safe since it is checked.
    """
    value, first = update(log_w)
    history = [value]
    while True:
        _, second = update(first)
        r, v = first - log_w, second - 2.0 * first + log_w
        length = min(max(1.0, float(np.sqrt(r @ r) / max(np.sqrt(v @ v), 1e-300))), _LONGEST)
        trial = np.clip(log_w + 2.0 * length * r + length**2 * v, -690.0, 690.0)
        trial_value, after = update(trial)
        second_value, plain_after = update(second)
        if trial_value >= second_value and np.isfinite(after).all():
            log_w, first, value = trial, after, trial_value
        else:
            log_w, first, value = second, plain_after, second_value
        log_w, first = log_w - log_w.max(), first - log_w.max()
        history.append(value)
        if history[-1] - history[-2] < 0.1 * resolution:
            return log_w, np.array(history)


def _scaled(logs: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    top = logs.max(axis=1)
    return np.exp(logs - top[:, None]), top
