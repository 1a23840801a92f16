"""Pairs of clouds whose bridge is known: a Gaussian start and a mixture potential give the end and every conditional law.

Construction of Gushchin, Kolesov, Korotin, Vetrov and Burnaev 2023 (from memory; tests/test_smooth_ends.py derives the
conditional law again by quadrature), with parameters of our own: start N(0, I); five components, means on the sphere of
radius 4, variances log-uniform in [0.2, 1] along each axis, weights so that each takes part with a share near 1/5.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

import ensembles
from ensembles.endpoints.conditional import ConditionalEnd
from ensembles.endpoints.mixture import MixturePotential, gaussian_mixture_potential
from ensembles.priors.base import Transition

COMPONENTS = 5
RADIUS = 4.0


@dataclass(frozen=True)
class ExactPair:
    """A pair over the duration 1 under Brownian motion of variance ε."""

    dimension: int
    epsilon: float
    potential: MixturePotential
    prior: ensembles.Brownian
    transition: Transition

    def starts(self, count: int, rng: np.random.Generator) -> np.ndarray:
        return rng.standard_normal((count, self.dimension))

    def ends(self, starts: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        return self.potential.given(self.transition, starts).sample(rng)

    def series(self, count: int, rng: np.random.Generator) -> ensembles.SnapshotSeries:
        """`count` starts and, from other starts, `count` ends: unpaired."""
        return ensembles.SnapshotSeries.from_arrays(
            [0.0, 1.0], [self.starts(count, rng), self.ends(self.starts(count, rng), rng)]
        )


def exact_pair(dimension: int, epsilon: float, seed: int, covariance: str = "diagonal") -> ExactPair:
    """The pair of one cell; `covariance` of the truth: "diagonal" or "full" (rotated)."""
    rng = np.random.default_rng([dimension, seed])
    means = rng.standard_normal((COMPONENTS, dimension))
    means *= RADIUS / np.linalg.norm(means, axis=1, keepdims=True)
    variances = np.exp(rng.uniform(np.log(0.2), 0.0, (COMPONENTS, dimension)))
    covariances = variances
    if covariance == "full":
        turns = np.linalg.qr(rng.standard_normal((COMPONENTS, dimension, dimension)))[0]
        covariances = turns * variances[:, None] @ turns.swapaxes(1, 2)
    prior = ensembles.Brownian(diffusion=epsilon / 2.0)
    transition = prior.transition(1.0, dimension)
    shares = rng.dirichlet(np.full(COMPONENTS, 8.0))
    starts = rng.standard_normal((20_000, dimension))
    log_weights = np.zeros(COMPONENTS)
    for _ in range(100):
        weights = np.exp(log_weights - log_weights.max())
        potential = gaussian_mixture_potential(weights, means, covariances, transition)
        log_weights += np.log(shares) - np.log(potential.given(transition, starts).weights.mean(axis=0))
    return ExactPair(dimension, epsilon, potential, prior, transition)


def bures_wasserstein(first: tuple[np.ndarray, np.ndarray], second: tuple[np.ndarray, np.ndarray]) -> np.ndarray:
    """½|m1 - m2|² + ½ tr S1 + ½ tr S2 - tr (S1^½ S2 S1^½)^½ for means (n, d) and covariances (n, d, d)."""
    (m1, s1), (m2, s2) = first, second
    values, vectors = np.linalg.eigh(s1)
    root = (vectors * np.sqrt(np.clip(values, 0.0, None))[:, None]) @ vectors.swapaxes(1, 2)
    cross = np.sqrt(np.clip(np.linalg.eigvalsh(root @ s2 @ root), 0.0, None)).sum(axis=1)
    traces = np.trace(s1, axis1=1, axis2=2) + np.trace(s2, axis1=1, axis2=2)
    return 0.5 * ((m1 - m2) ** 2).sum(axis=1) + 0.5 * traces - cross


def cbw_uvp(law: ConditionalEnd, truth: ConditionalEnd, variance: float) -> float:
    """100 · mean of BW² / (½ Var Y), in percent, from exact conditional moments."""
    return 100.0 * float(
        bures_wasserstein((law.mean(), law.covariance()), (truth.mean(), truth.covariance())).mean() / (0.5 * variance)
    )


def floor_of(truth: ConditionalEnd, variance: float, draws: int, rng: np.random.Generator) -> float:
    """The score of the exact sampler itself, from the moments of `draws` draws a start; its mean over 100 starts."""
    count = min(100, truth.shape[0])
    means, covariances = [], []
    for i in range(count):
        one = ConditionalEnd(
            np.repeat(truth.weights[i : i + 1], draws, axis=0),
            np.repeat(truth.at[i : i + 1], draws, axis=0),
            truth.components,
            truth.centre,
            truth.basis,
        )
        drawn = one.sample(rng)
        means.append(drawn.mean(axis=0))
        covariances.append(np.cov(drawn.T, ddof=0).reshape(truth.shape[2], truth.shape[2]))
    exact = truth.mean()[:count], truth.covariance()[:count]
    return 100.0 * float(bures_wasserstein((np.array(means), np.array(covariances)), exact).mean() / (0.5 * variance))


def mean_predictor(truth: ConditionalEnd, mean: np.ndarray, variance: float) -> float:
    """The score of predicting the mean of all ends, whatever the start; about 100."""
    traces = np.trace(truth.covariance(), axis1=1, axis2=2)
    squares = ((truth.mean() - mean) ** 2).sum(axis=1)
    return 100.0 * float((0.5 * (squares + traces)).mean() / (0.5 * variance))
