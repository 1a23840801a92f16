"""Laws of every prior: composition, sampling, density, whitening, and the pinned path."""

import json
from importlib import import_module
from pkgutil import walk_packages

import numpy as np
import pytest
from generators import pinned_covariance
from numpy.testing import assert_allclose
from prior_cases import PRIOR_CASES, start_points
from scipy.integrate import quad_vec
from scipy.linalg import expm
from scipy.stats import multivariate_normal

import ensembles
from ensembles.priors.base import LinearGaussianPrior
from ensembles.priors.pinned import pin, pinned_steps, square_root
from ensembles.priors.registry import PRIORS, build_prior

every_prior = pytest.mark.parametrize(("prior", "dimension"), PRIOR_CASES.values(), ids=PRIOR_CASES.keys())


def test_every_prior_is_registered_and_tried():
    package = import_module("ensembles.priors")
    for module in walk_packages(package.__path__, "ensembles.priors."):
        import_module(module.name)
    pending, found = [LinearGaussianPrior], set()
    while pending:
        children = pending.pop().__subclasses__()
        found.update(child for child in children if child.__module__.startswith("ensembles."))
        pending += children
    assert found == set(PRIORS.values())
    assert {type(prior) for prior, _ in PRIOR_CASES.values()} == found
    assert all(kind == prior.kind for kind, prior in PRIORS.items())


@every_prior
@pytest.mark.parametrize("split", [0.001, 0.4, 0.93])
def test_two_durations_compose(prior, dimension, split):
    # Chapman-Kolmogorov: F = F2 F1, c = F2 c1 + c2, Q = F2 Q1 F2ᵀ + Q2.
    total = 1.7
    whole = prior.transition(total, dimension)
    first, second = prior.transition(split * total, dimension), prior.transition(total - split * total, dimension)
    assert_allclose(second.matrix @ first.matrix, whole.matrix, rtol=1e-12, atol=1e-14)
    assert_allclose(second.matrix @ first.shift + second.shift, whole.shift, rtol=1e-12, atol=1e-14)
    composed = second.matrix @ first.covariance @ second.matrix.T + second.covariance
    assert_allclose(composed, whole.covariance, rtol=1e-12, atol=1e-14)


@every_prior
def test_transition_is_the_integral_it_claims_to_be(prior, dimension):
    duration = 0.9
    matrix, constant = prior.linear_drift(dimension)
    noise = 2.0 * prior.diffusion_matrix(dimension)
    shift, _ = quad_vec(lambda s: expm(matrix * s) @ constant, 0.0, duration, epsabs=1e-13, epsrel=1e-12)
    covariance, _ = quad_vec(
        lambda s: expm(matrix * s) @ noise @ expm(matrix * s).T, 0.0, duration, epsabs=1e-13, epsrel=1e-12
    )
    step = prior.transition(duration, dimension)
    assert_allclose(step.matrix, expm(matrix * duration), rtol=1e-11, atol=1e-13)
    assert_allclose(step.shift, shift, rtol=1e-10, atol=1e-12)
    assert_allclose(step.covariance, covariance, rtol=1e-10, atol=1e-12)


@every_prior
def test_drift_is_the_velocity_of_the_mean(prior, dimension):
    x = start_points(5, dimension)
    h = 1e-6
    assert_allclose((prior.transition(h, dimension).mean(x) - x) / h, prior.drift(x), rtol=1e-5, atol=1e-5)


@every_prior
def test_samples_have_the_exact_moments(prior, dimension):
    count = 40_000
    step = prior.transition(1.1, dimension)
    start = start_points(1, dimension)
    samples = step.sample(np.repeat(start, count, axis=0), 17)

    def worst(mean, covariance):
        """Largest deviation of the sample's mean and covariance from these, in their standard errors."""
        spread = np.sqrt(np.diag(covariance))
        by_mean = (samples.mean(axis=0) - mean) / (spread / np.sqrt(count))
        # Var of a sample covariance of Gaussians: (C_ii C_jj + C_ij²) / N.
        error = np.sqrt((np.outer(spread**2, spread**2) + covariance**2) / count)
        return max(
            np.abs(by_mean).max(), np.abs((np.cov(samples.T).reshape(covariance.shape) - covariance) / error).max()
        )

    exact = step.mean(start)[0]
    assert worst(exact, step.covariance) < 5.0
    # Negative control: the same numbers fail a mean off by 5 % of the spread, and a variance off by 10 %.
    assert worst(exact + 0.05 * np.sqrt(np.diag(step.covariance)), step.covariance) > 5.0
    assert worst(exact, 1.1 * step.covariance) > 5.0


@every_prior
def test_log_density_is_scipys_and_whitening_gives_it_again(prior, dimension):
    step = prior.transition(0.8, dimension)
    x, y = start_points(6, dimension), start_points(7, dimension)[1:] + 0.3
    expected = [
        multivariate_normal(step.matrix @ one + step.shift, step.covariance).logpdf(other) for one, other in zip(x, y)
    ]
    assert_allclose(step.log_density(x, y), expected, rtol=1e-11)
    u, v = step.whiten_sources(x), step.whiten_targets(y)
    _, log_det = np.linalg.slogdet(2.0 * np.pi * step.covariance)
    assert_allclose(-0.5 * ((u - v) ** 2).sum(axis=1) - 0.5 * log_det, expected, rtol=1e-11)
    assert_allclose(step.log_density(x[:1], y), step.log_density(np.repeat(x[:1], 6, axis=0), y), rtol=1e-14)


@every_prior
def test_parameters_build_the_same_prior(prior, dimension):
    again = build_prior(prior.kind, json.loads(json.dumps(prior.parameters())))
    assert repr(again) == repr(prior)
    for one, other in zip(again.linear_drift(dimension), prior.linear_drift(dimension)):
        assert_allclose(one, other, rtol=0, atol=0)
    assert_allclose(again.diffusion_matrix(dimension), prior.diffusion_matrix(dimension), rtol=0, atol=0)


@every_prior
def test_pinned_law_is_the_conditional_of_the_joint(prior, dimension):
    # By Bayes: p(z | x, y) = p(z | x) p(y | z) / p(y | x) at every z.
    before, after, whole = (prior.transition(s, dimension) for s in (0.7, 0.5, 1.2))
    law = pin(before, after)
    x, y, z = (start_points(9, dimension)[k::3] for k in range(3))
    mean = law.mean(x, y)
    pinned = [multivariate_normal(m, law.covariance).logpdf(point) for m, point in zip(mean, z)]
    bayes = before.log_density(x, z) + after.log_density(z, y) - whole.log_density(x, y)
    assert_allclose(pinned, bayes, rtol=1e-10, atol=1e-10)


@every_prior
def test_pinned_steps_have_the_joint_law_of_the_pinned_path(prior, dimension):
    times, end = np.array([0.2, 0.5, 0.9]), 1.3
    laws = pinned_steps(prior, 0.0, end, times, dimension)
    x, y = start_points(1, dimension), start_points(2, dimension)[1:]
    current, noise = x, np.zeros((dimension, dimension))
    for time, law in zip(times, laws):
        current = law.mean(current, y)
        noise = law.start_matrix @ noise @ law.start_matrix.T + law.covariance
        at_once = pin(prior.transition(time, dimension), prior.transition(end - time, dimension))
        assert_allclose(current, at_once.mean(x, y), rtol=1e-10, atol=1e-12)
        assert_allclose(noise, at_once.covariance, rtol=1e-10, atol=1e-12)


def test_square_root_serves_singular_matrices():
    matrix = np.array([[4.0, 2.0], [2.0, 1.0]])
    root = square_root(matrix)
    assert_allclose(root @ root.T, matrix, atol=1e-14)


def test_ornstein_uhlenbeck_transition_and_pinned_values():
    # Own derivation: θ + e^{-κt}(x - θ) and σ²(1 - e^{-2κt})/(2κ), at κ = 1, σ² = 2, x = 3, θ = 0, t = ½.
    prior = ensembles.OrnsteinUhlenbeck(rate=1.0, centre=0.0, diffusion=1.0)
    step = prior.transition(0.5, 1)
    assert_allclose(step.mean(np.array([[3.0]])), [[1.8195919791]], atol=5e-11)
    assert_allclose(step.covariance, [[0.6321205588]], atol=5e-11)
    # Pinned from 1 to 2 over T = 1 at ½: [x sinh κ(T-t) + y sinh κt] / sinh κT, σ² sinh κt sinh κ(T-t) / (κ sinh κT).
    law = pin(prior.transition(0.5, 1), prior.transition(0.5, 1))
    assert_allclose(law.mean(np.array([[1.0]]), np.array([[2.0]])), [[1.3302283260]], atol=5e-11)
    assert_allclose(law.covariance, [[0.4621171573]], atol=5e-11)


def test_brownian_bridge_mean_and_covariance_at_many_times():
    # x + (y - x)t/T and σ² s (T - t)/T for s ≤ t (Borodin, Salminen, Handbook of Brownian Motion).
    variance, end = 0.86, 2.5
    times = np.array([0.1, 0.4, 1.1, 1.9, 2.4])
    laws = pinned_steps(ensembles.Brownian(diffusion=variance / 2), 0.0, end, times, 1)
    mean, covariance = pinned_covariance(laws, 1.0, -2.0)
    earlier, later = np.minimum.outer(times, times), np.maximum.outer(times, times)
    assert_allclose(mean, 1.0 - 3.0 * times / end, rtol=1e-13)
    assert_allclose(covariance, variance * earlier * (end - later) / end, rtol=1e-12)
