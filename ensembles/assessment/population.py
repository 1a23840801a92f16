"""The population behind a cloud, from which new clouds are drawn: a smoothed bootstrap that keeps mean and covariance.

Clouds drawn from the atoms themselves meet the same places again and again. In several dimensions, where the prior moves n
atoms to n separate lumps rather than to a smooth cloud, statistics that see density (the relative entropy) notice that.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial.distance import cdist
from scipy.special import logsumexp

__all__ = ["Population", "population_behind"]

_BANDS = 2.0 ** np.arange(0.5, -6.5, -0.5)  # tried bandwidths, times the spread of the cloud in every direction
_PARTICLES = 1000  # by which the bandwidth is chosen
_FLAT = 1e-12


@dataclass(frozen=True, eq=False)
class Population:
    """x̄ + s (x_I - x̄ + h B ε): atoms I with probability `weights`, ε normal, B Bᵀ their covariance.

    s² = 1 / ((1 - Σ a_i²)(1 + h²)) makes the covariance the unbiased estimate of the population's (B. W. Silverman and
    G. A. Young, Biometrika 74, 469 (1987), from memory, without the unbiasing).
    """

    cloud: np.ndarray
    weights: np.ndarray
    root: np.ndarray
    bandwidth: float

    def sample(self, count: int, rng: np.random.Generator) -> np.ndarray:
        """Independent positions (count, d)."""
        mean = self.weights @ self.cloud
        rows = rng.choice(len(self.cloud), count, p=self.weights)
        noise = rng.standard_normal((count, self.root.shape[1])) @ self.root.T
        missing = 1.0 - float(np.sum(self.weights**2))
        scale = 1.0 / np.sqrt((missing if missing > 0.0 else 1.0) * (1.0 + self.bandwidth**2))
        return mean + scale * (self.cloud[rows] - mean + self.bandwidth * noise)


def population_behind(cloud: np.ndarray, weights: np.ndarray, rng: np.random.Generator) -> Population:
    """The population of a weighted cloud (n, d); its bandwidth h has the largest likelihood of each particle given the others.

    A cloud with duplicates, of which the likelihood of atoms is infinite, gets the smallest bandwidth.
    """
    centred = cloud - weights @ cloud
    values, vectors = np.linalg.eigh((centred.T * weights) @ centred)
    kept = values > _FLAT * max(values[-1], 0.0)
    root = vectors[:, kept] * np.sqrt(values[kept])
    present = np.flatnonzero(weights)
    if present.size < 2 or not kept.any():
        return Population(cloud, weights, root, 0.0)
    chosen = present if present.size <= _PARTICLES else rng.choice(present, _PARTICLES, replace=False)
    white = centred[chosen] @ vectors[:, kept] / np.sqrt(values[kept])
    band = _likeliest_band(white, weights[chosen] / weights[chosen].sum())
    # The best bandwidth falls as n^(-1/(d + 4)).
    return Population(cloud, weights, root, band * (chosen.size / present.size) ** (1.0 / (white.shape[1] + 4)))


def _likeliest_band(white: np.ndarray, weights: np.ndarray) -> float:
    """The band of largest Σ_i a_i log Σ_{j≠i} a_j N(z_i | z_j, h²)."""
    squares = cdist(white, white, "sqeuclidean")
    np.fill_diagonal(squares, np.inf)
    others = np.log(weights)
    scores = [
        weights @ logsumexp(others - 0.5 * squares / band**2, axis=1) - white.shape[1] * np.log(band) for band in _BANDS
    ]
    return float(_BANDS[int(np.argmax(scores))])
