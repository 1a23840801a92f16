"""Fit kernel ends to one gap: centres among the particles, bandwidth by held-out likelihood, weights by monotone updates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..endpoints.expansion import ascend_density_weights, ascend_weights
from ..endpoints.mixture import MixturePotential
from ..endpoints.quadratic import QuadraticMixture, as_diagonal
from ..logspace import log_sum_exp
from ..priors.base import Transition
from .mixture_fit import split_folds
from .start_fit import normalised

__all__ = ["KernelFit", "fit_kernel", "kernel_start"]

CENTRES = 300  # by default, or as many as there are particles
_ROWS = 5_000  # particles of either cloud that a weight fit looks at
_BANDS = 2.0 ** np.arange(1.0, -6.5, -0.5)  # tried bandwidths, times the cloud's mean standard deviation
_SMALL = 50_000  # particles times centres up to which the last weights are solved for, not only as far as the data tell
_EXACT = 1e-8
_FINE = 0.02


@dataclass(frozen=True)
class KernelFit:
    """A potential of kernels, J or the start's log-likelihood at every step, what was tried, and the bandwidth."""

    potential: MixturePotential
    history: np.ndarray
    chosen: np.ndarray
    bandwidth: float


def fit_kernel(
    clouds: tuple[np.ndarray, np.ndarray],
    weights: tuple[np.ndarray, np.ndarray],
    transition: Transition,
    centres: np.ndarray,
    bandwidth: float | None,
    seed: int,
) -> KernelFit:
    """The terminal potential Σ_k w_k N(y | centres_k, bandwidth²)."""
    rows, columns = (_some(len(cloud), seed) for cloud in clouds)
    x, y = clouds[0][rows], clouds[1][columns]
    a, b = weights[0][rows] / weights[0][rows].sum(), weights[1][columns] / weights[1][columns].sum()
    resolution = _FINE * len(centres) / (2.0 * len(y))

    def logs(h: float) -> tuple[np.ndarray, np.ndarray]:
        potential = _kernels(centres, h, np.zeros(len(centres)), transition.cholesky)
        ahead = potential.backed_up(transition, np.zeros(x.shape[1]), np.eye(x.shape[1]))
        return potential.mixture.log_components(potential.frame(y)), ahead.log_components(x)

    chosen = np.empty((0, 3))
    if bandwidth is None:
        (fit_rows, fit_columns), (rest_rows, rest_columns) = split_folds(len(x), len(y), seed)[0]

        def held_out(h: float) -> tuple[float, float]:
            log_a, log_b = logs(h)
            log_w, _ = ascend_weights(
                log_a[fit_columns], _share(b[fit_columns]), log_b[fit_rows], _share(a[fit_rows]), resolution
            )
            ahead = log_sum_exp(log_a[rest_columns] + log_w, axis=1)
            behind = log_sum_exp(log_b[rest_rows] + log_w, axis=1)
            value = _share(b[rest_columns]) @ ahead - _share(a[rest_rows]) @ behind
            return float(value), float(np.hypot(ahead.std() / np.sqrt(ahead.size), behind.std() / np.sqrt(behind.size)))

        bandwidth, chosen = _best_band(held_out, y, b)
    log_a, log_b = logs(bandwidth)
    if len(y) * len(centres) <= _SMALL:
        resolution = _EXACT
    log_w, history = ascend_weights(log_a, b, log_b, a, resolution)
    return KernelFit(_kernels(centres, bandwidth, log_w, transition.cholesky), history, chosen, bandwidth)


def kernel_start(
    cloud: np.ndarray,
    weights: np.ndarray,
    terminal: MixturePotential,
    transition: Transition,
    bandwidth: float | None,
    seed: int,
) -> KernelFit:
    """The initial potential Σ_j w_j N(x | x_j, bandwidth²) over particles of the start cloud, divided by the mass."""
    rows = _some(len(cloud), seed)
    x, a = cloud[rows], _share(weights[rows])
    centres = x[_some(len(x), seed, CENTRES)]
    basis = np.diag(np.sqrt(np.maximum(weights @ (cloud - weights @ cloud) ** 2, 1e-300)))
    ahead, _ = terminal.carried_back(transition, x)
    resolution = _FINE * len(centres) / (2.0 * len(x))

    def densities(h: float) -> np.ndarray:
        potential = _kernels(centres, h, np.zeros(len(centres)), basis)
        # The mass of each kernel times φ_0: the average of φ_0 over it.
        small = Transition(np.eye(x.shape[1]), np.zeros(x.shape[1]), h * h * np.eye(x.shape[1]))
        front = terminal.backed_up(transition, np.zeros(x.shape[1]), np.eye(x.shape[1]))
        masses, _ = MixturePotential(np.zeros(x.shape[1]), np.eye(x.shape[1]), front).carried_back(small, centres)
        return potential.mixture.log_components(potential.frame(x)) + ahead[:, None] - masses

    chosen = np.empty((0, 3))
    if bandwidth is None:
        (fit, _), (rest, _) = split_folds(len(x), len(x), seed)[0]

        def held_out(h: float) -> tuple[float, float]:
            logs = densities(h)
            log_w, _ = ascend_density_weights(logs[fit], _share(a[fit]), resolution)
            log_w = log_w - log_sum_exp(log_w, axis=0)
            values = log_sum_exp(logs[rest] + log_w, axis=1)
            return float(_share(a[rest]) @ values), float(values.std() / np.sqrt(values.size))

        bandwidth, chosen = _best_band(held_out, x, a)
    log_w, history = ascend_density_weights(densities(bandwidth), a, resolution)
    front = terminal.backed_up(transition, np.zeros(x.shape[1]), np.eye(x.shape[1]))
    small = Transition(np.eye(x.shape[1]), np.zeros(x.shape[1]), bandwidth**2 * np.eye(x.shape[1]))
    masses, _ = MixturePotential(np.zeros(x.shape[1]), np.eye(x.shape[1]), front).carried_back(small, centres)
    initial = _kernels(centres, bandwidth, log_w - masses, basis)
    return KernelFit(normalised(initial, terminal, transition), history, chosen, bandwidth)


def _kernels(centres: np.ndarray, bandwidth: float, log_w: np.ndarray, basis: np.ndarray) -> MixturePotential:
    """Σ_k w_k N(y | centres_k, bandwidth²): one precision for all components."""
    middle = centres.mean(axis=0)
    shared = as_diagonal(basis.T @ basis / bandwidth**2)
    potential = MixturePotential(middle, basis, QuadraticMixture(log_w, centres, shared[None]))
    z = potential.frame(centres)
    linear = z * shared if shared.ndim == 1 else z @ shared
    log_weights = log_w - 0.5 * (linear * z).sum(axis=1) - 0.5 * middle.size * np.log(2.0 * np.pi * bandwidth**2)
    return MixturePotential(middle, basis, QuadraticMixture(log_weights, linear, shared[None]))


def _best_band(held_out, points: np.ndarray, weights: np.ndarray) -> tuple[float, np.ndarray]:  # type: ignore[no-untyped-def]
    scale = float(np.sqrt(np.mean(weights @ (points - weights @ points) ** 2)))
    table: list[tuple[float, float, float]] = []
    best, worse = -np.inf, 0
    for band in _BANDS * scale:
        value, error = held_out(float(band))
        table.append((float(band), value, error))
        worse = 0 if value > best else worse + 1
        best = max(best, value)
        if worse >= 2:
            break
    tried = np.array(table)
    return float(tried[np.argmax(tried[:, 1]), 0]), tried


def _some(count: int, seed: int, most: int = _ROWS) -> np.ndarray:
    if count <= most:
        return np.arange(count)
    return np.sort(np.random.default_rng(seed).choice(count, most, replace=False))


def _share(weights: np.ndarray) -> np.ndarray:
    return weights / weights.sum()
