"""Overlapping Gaussian clusters of a weighted cloud, found by likelihood; their number by the Bayesian criterion."""

from __future__ import annotations

import numpy as np
from scipy.special import logsumexp

__all__ = ["log_gaussians", "memberships"]

_MOST = 10  # clusters
_PARTICLES = 500  # by which clusters are found
_TRIES, _FIRST_STEPS = 6, 6  # starts, and the steps after which the best of them goes on alone
_STEPS = 100
_GAIN = 1e-3  # nats, of the whole cloud, below which the likelihood has stopped to rise
_FLAT = 1e-9  # of a cluster's variance beside the whole cloud's, per direction


def memberships(white: np.ndarray, weights: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Probability (n, K) that each particle belongs to each cluster.

    K Gaussian clusters of covariances of their own are fitted by likelihood maximisation (expectation and maximisation
    in turn). The K of least -2 N log-likelihood + log N × parameters is kept, N = 1 / Σ a² the effective number; the
    search ends where two more clusters in a row do not pay. Clusters of fewer than d + 2 particles or without a spread
    in some direction are not accepted. Large clouds are judged by some of their particles.

    Parameters
    ----------
    white : (n, d) positions of mean 0 and covariance 1.
    weights : (n,) positive, of sum 1.
    rng : for the starts.
    """
    n = len(white)
    if n <= _PARTICLES:
        return _likeliest(white, weights, rng)
    rows = rng.choice(n, _PARTICLES, replace=False)
    z, a = white[rows], weights[rows] / weights[rows].sum()
    clusters = _clusters(z, a, _likeliest(z, a, rng))
    return np.ones((n, 1)) if clusters is None else _belonging(white, *clusters)[0]


def _likeliest(white: np.ndarray, weights: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """Memberships (n, K) with the K of the smallest criterion."""
    n, d = white.shape
    effective = 1.0 / float(np.sum(weights**2))
    found, least, failures = np.ones((n, 1)), np.inf, 0
    for count in range(1, max(1, min(_MOST, int(effective / (d + 2)))) + 1):
        log_likelihood, members = _best_fit(white, weights, count, rng)
        parameters = count - 1 + count * (d + d * (d + 1) // 2)
        criterion = -2.0 * effective * log_likelihood + parameters * np.log(effective)
        if criterion < least:
            found, least, failures = members, criterion, 0
        else:
            failures += 1
            if failures == 2:
                break
    return found


def _best_fit(white: np.ndarray, weights: np.ndarray, count: int, rng: np.random.Generator) -> tuple[float, np.ndarray]:
    """Mean log-likelihood and memberships from the best of several starts; -inf if none is accepted."""
    if count == 1:
        return _fit(white, weights, np.ones((len(white), 1)), _STEPS)
    best = -np.inf, np.ones((len(white), 1))
    for _ in range(_TRIES):
        fitted = _fit(white, weights, _seeds(white, weights, count, rng), _FIRST_STEPS)
        if fitted[0] > best[0]:
            best = fitted
    return _fit(white, weights, best[1], _STEPS) if np.isfinite(best[0]) else best


def _seeds(white: np.ndarray, weights: np.ndarray, count: int, rng: np.random.Generator) -> np.ndarray:
    """Memberships by the nearest of `count` particles, drawn far from one another: by squared distance to those drawn."""
    squares = np.full((len(white), count), np.inf)
    chance = weights
    for k in range(count):
        centre = white[rng.choice(len(white), p=chance / chance.sum())]
        squares[:, k] = ((white - centre) ** 2).sum(axis=1)
        chance = weights * squares.min(axis=1)
        if not chance.any():  # fewer places than clusters
            break
    return np.asarray(np.eye(count)[squares.argmin(axis=1)])


def _fit(white: np.ndarray, weights: np.ndarray, members: np.ndarray, steps: int) -> tuple[float, np.ndarray]:
    """Mean log-likelihood and memberships after some steps, fewer where it no longer rises; -inf if not accepted."""
    last, least_gain = -np.inf, _GAIN * float(np.sum(weights**2))
    for _ in range(steps):
        found = _clusters(white, weights, members)
        if found is None:
            return -np.inf, members
        members, log_density = _belonging(white, *found)
        now = float(weights @ log_density)
        if now - last < least_gain:
            break
        last = now
    return now, members


def _clusters(
    white: np.ndarray, weights: np.ndarray, members: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray] | None:
    """Shares, centres and covariances of the clusters, or None if one of them is too small or flat."""
    d, count = white.shape[1], members.shape[1]
    shares, effective = weights @ members, 1.0 / float(np.sum(weights**2))
    if count > 1 and shares.min() * effective < d + 2:
        return None
    parts = (members * weights[:, None] / shares).T
    centres = parts @ white
    moved = white - centres[:, None]
    covariances = np.swapaxes(moved * parts[..., None], 1, 2) @ moved
    if count == 1:
        covariances = covariances + _FLAT * np.eye(d)  # some particles of a large cloud may be flat where it is not
    else:
        if np.linalg.eigvalsh(covariances)[:, 0].min() < _FLAT:
            return None
        # One particle's worth of a round cluster: without it the likelihood has no bound.
        numbers = (effective * shares)[:, None, None]
        covariances = (numbers * covariances + np.eye(d) * count ** (-2.0 / d)) / (numbers + 1.0)
    return shares, centres, covariances


def _belonging(
    points: np.ndarray, shares: np.ndarray, centres: np.ndarray, covariances: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Memberships (n, K), and the log density of the clusters together (n,)."""
    logs = np.log(shares) + log_gaussians(points, centres, covariances).T
    totals = logsumexp(logs, axis=1)
    return np.exp(logs - totals[:, None]), totals


def log_gaussians(points: np.ndarray, centres: np.ndarray, covariances: np.ndarray) -> np.ndarray:
    """log N(x | centre, covariance) of points (n, d) for K centres (K, d): (K, n)."""
    roots = np.linalg.cholesky(covariances)
    scaled = np.linalg.solve(roots, np.swapaxes(points - centres[:, None], 1, 2))
    log_root = np.log(np.diagonal(roots, axis1=1, axis2=2)).sum(axis=1)
    return np.asarray(-0.5 * (scaled**2).sum(axis=1) - log_root[:, None] - 0.5 * points.shape[1] * np.log(2.0 * np.pi))
