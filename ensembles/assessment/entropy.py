"""Differential entropy of a cloud from the distances to nearest neighbours."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.spatial import cKDTree
from scipy.special import digamma, gammaln

from ..checks import InputError

__all__ = ["CloudEntropy", "neighbour_entropy"]


@dataclass(frozen=True, eq=False)
class CloudEntropy:
    """Entropy -∫ρ log ρ of the population behind a cloud.

    Attributes
    ----------
    value, error : in nats (of positions in their unit of length), and its standard error.
    log_density : (n,) estimated log ρ at every particle, unbiased one by one; value = -Σ w_i log_density_i.
    """

    value: float
    error: float
    log_density: np.ndarray


def neighbour_entropy(cloud: np.ndarray, weights: np.ndarray | None = None, *, neighbours: int = 3) -> CloudEntropy:
    """Kozachenko-Leonenko estimate Σ_i w_i [log(n - 1) - ψ(k) + log V_d + d log r_k(i)] with the distance r_k to neighbour k.

    From four dimensions on, estimates with several k are combined with weights that cancel the leading bias (T. B.
    Berrett, R. J. Samworth and M. Yuan, Annals of Statistics 47, 288 (2019), from memory): Σ_j c_j = 1 and
    Σ_j c_j Γ(k_j + 2l/d)/Γ(k_j) = 0 for l = 1 .. d/4. The cloud is whitened first, which changes the entropy by the log
    determinant exactly and makes the balls fit the cloud. The bias that is left, and the noise of the distances (which
    neighbouring particles share), are measured on standard Gaussian clouds of the same size, where ρ is known: the mean
    is subtracted, the variance is part of the error. On other populations a bias of that order remains.

    Parameters
    ----------
    cloud : (n, d) positions.
    weights : (n,) of sum 1; equal if None. Particles of weight 0 are left out, others are averaged with their weights;
        the density itself is that of the unweighted particles, so unequal weights are refused by `prior_check`.
    neighbours : k in up to three dimensions; the sets above are multiples of it.

    Raises
    ------
    InputError
        With too few particles, or so many duplicates that a distance to a neighbour is 0.

    Examples
    --------
    >>> import numpy as np
    >>> cloud = np.random.default_rng(0).normal(size=(4000, 1))
    >>> found = neighbour_entropy(cloud)  # ½ log(2πe) = 1.4189
    >>> abs(found.value - 1.4189) < 3 * found.error < 0.06
    True
    """
    n, d = cloud.shape
    w = np.full(n, 1.0 / n) if weights is None else weights
    orders, _ = _orders(d, neighbours)
    if n <= max(orders[-1], d + 1):
        raise InputError(
            f"the entropy of a cloud needs more particles; it has {n} in {d} dimension(s) where more than "
            f"{max(orders[-1], d + 1)} are needed; leave the relative entropy out for this snapshot"
        )
    values = np.linalg.eigvalsh(np.atleast_2d(np.cov(cloud, rowvar=False)))
    if values[0] <= 1e-12 * values[-1]:
        raise InputError(
            f"the entropy of a cloud needs a spread in every direction; the smallest variance is {values[0]:.3g} beside "
            f"{values[-1]:.3g}; drop the coordinate that does not vary"
        )
    log_density = _log_density(cloud, neighbours)
    bias, noise, point_noise = _on_gaussian_clouds(n, d, neighbours)
    log_density = log_density + bias
    value = float(-(w @ log_density))
    spread = max(float(w @ (log_density + value) ** 2) - point_noise, 0.0)
    return CloudEntropy(value, float(np.sqrt(spread * np.sum(w**2) + noise)), log_density)


@lru_cache(maxsize=64)
def _on_gaussian_clouds(n: int, d: int, neighbours: int) -> tuple[float, float, float]:
    """Of the estimate's error on Gaussian clouds: its mean, its variance, and the variance at one particle."""
    rng = np.random.default_rng(0)
    errors, point_noise = [], []
    for _ in range(int(np.clip(60_000 // n, 10, 60))):
        cloud = rng.standard_normal((n, d))
        estimate = _log_density(cloud, neighbours)
        exact = -0.5 * (cloud**2).sum(axis=1) - 0.5 * d * np.log(2.0 * np.pi)
        errors.append(float(np.mean(exact - estimate)))
        point_noise.append(float(np.var(exact - estimate)))
    return float(np.mean(errors)), float(np.var(errors, ddof=1)), float(np.mean(point_noise))


def _log_density(cloud: np.ndarray, neighbours: int) -> np.ndarray:
    """The estimate of log ρ at every particle, before its bias is taken off."""
    n, d = cloud.shape
    orders, shares = _orders(d, neighbours)
    values, vectors = np.linalg.eigh(np.atleast_2d(np.cov(cloud, rowvar=False)))
    white = (cloud - cloud.mean(axis=0)) @ vectors / np.sqrt(values)
    distances = cKDTree(white).query(white, k=orders[-1] + 1)[0][:, orders]
    if (distances <= 0.0).any():
        i = int(np.argwhere(distances <= 0.0)[0, 0])
        raise InputError(
            f"the entropy of a cloud needs distinct positions; particle {i} has {orders[0]} or more duplicates; "
            "measure positions more finely, or leave the relative entropy out for this snapshot"
        )
    log_ball = 0.5 * d * np.log(np.pi) - gammaln(0.5 * d + 1.0)
    terms = np.log(n - 1) - digamma(orders) + log_ball + d * np.log(distances)
    return -(terms @ shares) - 0.5 * np.log(values).sum()


def _orders(d: int, k: int) -> tuple[np.ndarray, np.ndarray]:
    """Numbers of neighbours, and the share of each."""
    constraints = d // 4
    if constraints == 0:
        return np.array([k]), np.array([1.0])
    orders = k * np.arange(1, 2 * (constraints + 1) + 1)
    rows = [np.ones(orders.size)]
    rows += [np.exp(gammaln(orders + 2.0 * level / d) - gammaln(orders)) for level in range(1, constraints + 1)]
    matrix = np.array(rows)
    target = np.zeros(constraints + 1)
    target[0] = 1.0
    # The shares of least square sum among those that fulfil the conditions.
    return orders, np.linalg.lstsq(matrix, target, rcond=None)[0]
