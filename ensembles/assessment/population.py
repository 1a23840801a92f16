"""The population behind a cloud, from which new clouds are drawn: a smoothed bootstrap that keeps mean and covariance.

Clouds drawn from the atoms themselves meet the same places again and again, and so, a little less, do clouds drawn from
small bumps around the atoms: a start cloud and an end cloud of one such population are nearer to one another than two
clouds of the population itself, which statistics that see density (the relative entropy) notice from a few dimensions on.
Where several groups of particles stand apart, one bandwidth for all makes the groups wider than they are. So the bumps
have the shape of the cluster they belong to, and each cluster is contracted to its own mean as it is smoothed: as the
bandwidth grows the population goes to a mixture of Gaussians, and how far it goes is chosen by the likelihood.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.special import logsumexp

from .clusters import memberships

__all__ = ["Cluster", "Population", "left_out_log_density", "population_behind"]

_BANDS = 2.0 ** np.arange(-6.0, 4.25, 0.5)  # tried bandwidths, times the spread of a cluster in every direction
_PARTICLES = 500  # by which the bandwidth is chosen
_FLAT = 1e-12


@dataclass(frozen=True, eq=False)
class Cluster:
    """One cluster in whitened coordinates: m + s (z_I - m + h B ε), atoms I with probability `weights`, ε normal.

    Attributes
    ----------
    share : probability of the cluster.
    weights : (n,) of the particles in it, of sum 1.
    centre, root : m and B, with B Bᵀ the covariance of the atoms.
    """

    share: float
    weights: np.ndarray
    centre: np.ndarray
    root: np.ndarray


@dataclass(frozen=True, eq=False)
class Population:
    """Clusters of a cloud, each a smoothed bootstrap with bandwidth h.

    s² = 1 / ((1 - Σ w_i²)(1 + h²)) makes the covariance of a cluster the unbiased estimate of its population's (B. W.
    Silverman and G. A. Young, Biometrika 74, 469 (1987), from memory, without the unbiasing).

    Attributes
    ----------
    mean, root : (d,), (d, p): x = mean + root z.
    white : (n, p) whitened particles; p < d where the cloud is flat.
    bandwidth : h.
    """

    mean: np.ndarray
    root: np.ndarray
    white: np.ndarray
    clusters: tuple[Cluster, ...]
    bandwidth: float

    def sample(self, count: int, rng: np.random.Generator) -> np.ndarray:
        """Independent positions (count, d)."""
        chosen = rng.choice(len(self.clusters), count, p=[cluster.share for cluster in self.clusters])
        drawn = np.empty((count, self.white.shape[1]))
        for k, cluster in enumerate(self.clusters):
            places = np.flatnonzero(chosen == k)
            rows = rng.choice(len(self.white), places.size, p=cluster.weights)
            noise = rng.standard_normal((places.size, self.white.shape[1])) @ cluster.root.T
            scale = 1.0 / np.sqrt(_missing(cluster.weights) * (1.0 + self.bandwidth**2))
            drawn[places] = cluster.centre + scale * (self.white[rows] - cluster.centre + self.bandwidth * noise)
        return np.asarray(self.mean + drawn @ self.root.T)


def population_behind(cloud: np.ndarray, weights: np.ndarray, rng: np.random.Generator) -> Population:
    """The population of a weighted cloud (n, d).

    Its clusters are those of `memberships`. Its bandwidth h has the largest likelihood of each particle under the
    population of the others: contracted, unbiased and with the mean and covariances of the others, as it is drawn from.
    A cloud with duplicates, of which the likelihood of atoms is infinite, gets the smallest bandwidth; one of no more
    particles than d + 1, which cannot tell, the largest.
    """
    present = np.flatnonzero(weights)
    a = weights[present] / weights[present].sum()
    mean = a @ cloud[present]
    centred = cloud[present] - mean
    values, vectors = np.linalg.eigh((centred.T * a) @ centred)
    kept = values > _FLAT * max(values[-1], 0.0)
    white = centred @ vectors[:, kept] / np.sqrt(values[kept])
    root = vectors[:, kept] * np.sqrt(values[kept])
    if not kept.any():
        return Population(mean, root, white, (Cluster(1.0, a, np.zeros(0), np.zeros((0, 0))),), 0.0)
    members = memberships(white, a, rng) if present.size > white.shape[1] + 1 else np.ones((present.size, 1))
    clusters = tuple(_cluster(white, a, column) for column in members.T)
    return Population(mean, root, white, clusters, _likeliest_band(white, a, members, rng))


def _cluster(white: np.ndarray, weights: np.ndarray, members: np.ndarray) -> Cluster:
    share = float(weights @ members)
    inside = weights * members / share
    inside /= inside.sum()
    centre = inside @ white
    moved = white - centre
    values, vectors = np.linalg.eigh((moved.T * inside) @ moved)
    return Cluster(share, inside, centre, vectors * np.sqrt(np.maximum(values, 0.0)))


def _missing(weights: np.ndarray) -> float:
    """1 - Σ w²: what the covariance of atoms lacks; 1 for a single atom, which has none."""
    missing = 1.0 - float(np.sum(weights**2))
    return missing if missing > 0.0 else 1.0


def _likeliest_band(white: np.ndarray, weights: np.ndarray, members: np.ndarray, rng: np.random.Generator) -> float:
    """The band of largest Σ_i a_i log p_{-i}(z_i), p_{-i} the population of the particles other than i."""
    n, p = white.shape
    if n <= p + 1:
        return float(_BANDS[-1])
    rows = np.arange(n) if n <= _PARTICLES else rng.choice(n, _PARTICLES, replace=False)
    a, z = weights[rows] / weights[rows].sum(), white[rows]
    logs = np.full((_BANDS.size, rows.size), -np.inf)
    for column in members[rows].T:
        share = float(a @ column)
        inside = a * column / max(share, np.finfo(float).tiny)
        if np.sum(inside**2) * (p + 2) > 1.0 and members.shape[1] > 1:  # too few of this cluster among the chosen
            continue
        others = np.maximum(share - a * column, np.finfo(float).tiny) / (1.0 - a)
        logs = np.logaddexp(logs, np.log(others) + left_out_log_density(z, inside, _BANDS))
    band = float(_BANDS[int(np.argmax(logs @ a))])
    # The best bandwidth falls as n^(-1/(d + 4)).
    return band * float((rows.size / n) ** (1.0 / (p + 4)))


def left_out_log_density(points: np.ndarray, weights: np.ndarray, bands: np.ndarray) -> np.ndarray:
    """log density (bands, n) at every particle of the cluster that the others make.

    With particles z of mean 0 and covariance 1 and q = w/(1 - w), the others have mean -q z_i and covariance
    (1 - q z_i z_iᵀ)/(1 - w_i), whose inverse and determinant are closed forms; so nothing is fitted anew.
    """
    moved = points - weights @ points
    # The few of a large cloud by which the bandwidth is chosen may be flat where the cloud is not.
    root = np.linalg.cholesky((moved.T * weights) @ moved + _FLAT * np.eye(points.shape[1]))
    z = np.linalg.solve(root, moved.T).T
    d, left = z.shape[1], 1.0 - weights
    gram, q = z @ z.T, weights / left
    squares = np.diag(gram)
    determinant = np.maximum(1.0 - q * squares, _FLAT)
    missing = np.maximum(1.0 - (np.sum(weights**2) - weights**2) / left**2, _FLAT)
    with np.errstate(divide="ignore"):
        log_weights = np.log(weights) - np.log(left)[:, None]
    np.fill_diagonal(log_weights, -np.inf)
    constant = -0.5 * (np.log(determinant) + d * np.log(2.0 * np.pi)) + 0.5 * d * np.log(left)
    constant -= np.log(np.diag(root)).sum()
    found = []
    for band in bands:
        s = 1.0 / np.sqrt(missing * (1.0 + band**2))
        # z_i less the contracted place of j is α z_i - s z_j; its square in the metric of the others' covariance:
        alpha = 1.0 + q - s * q
        plain = (alpha**2 * squares)[:, None] - 2.0 * (alpha * s)[:, None] * gram + (s**2)[:, None] * squares
        along = (alpha * squares)[:, None] - s[:, None] * gram
        metric = left[:, None] * (plain + (q / determinant)[:, None] * along**2)
        exponents = log_weights - 0.5 * metric / ((s * band) ** 2)[:, None]
        found.append(logsumexp(exponents, axis=1) - d * np.log(s * band) + constant)
    return np.array(found)
