"""The population behind a cloud: what a smoothed bootstrap keeps, and how wide it smooths."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

from ensembles.assessment.population import population_behind


def equal(n: int) -> np.ndarray:
    return np.full(n, 1.0 / n)


@pytest.mark.parametrize("d", [1, 3])
def test_mean_and_unbiased_covariance_are_kept(d):
    rng = np.random.default_rng(d)
    cloud = rng.normal(size=(12, d)) @ np.diag(np.arange(1.0, d + 1)) + 5.0
    weights = rng.dirichlet(np.ones(12))
    population = population_behind(cloud, weights, rng)
    assert population.bandwidth > 0
    drawn = population.sample(200_000, rng)
    mean = weights @ cloud
    unbiased = (cloud - mean).T * weights @ (cloud - mean) / (1 - weights @ weights)
    scale = np.sqrt(np.diag(unbiased))
    # A mean of 200,000 is known to 0.0022 standard deviations, a covariance to about 0.0055 (kurtosis up to 6).
    assert_allclose((drawn.mean(axis=0) - mean) / scale, 0.0, atol=6 * 0.0023)
    assert_allclose(np.atleast_2d(np.cov(drawn, rowvar=False)) / np.outer(scale, scale),
                    unbiased / np.outer(scale, scale), atol=6 * 0.0055)  # fmt: skip


def test_the_bandwidth_is_the_likeliest_of_each_particle_given_the_others():
    rng = np.random.default_rng(2)
    cloud = rng.normal(size=(40, 1))
    found = population_behind(cloud, equal(40), rng).bandwidth

    def likelihood(band: float) -> float:
        total = 0.0
        for i in range(40):
            others = np.delete(cloud[:, 0], i)
            total += np.log(stats.norm.pdf(cloud[i, 0], others, band * cloud.std()).mean())
        return total

    assert likelihood(found) > max(likelihood(found * 2**0.5), likelihood(found / 2**0.5))


def test_clusters_stay_apart_and_a_smooth_cloud_is_smoothed():
    rng = np.random.default_rng(3)
    clusters = np.repeat([-1.0, 1.0], 100)[:, None] + 0.05 * rng.normal(size=(200, 1))
    drawn = population_behind(clusters, equal(200), rng).sample(4000, rng)
    assert (np.abs(drawn) > 0.7).all()
    smooth = rng.normal(size=(200, 5))
    population = population_behind(smooth, equal(200), rng)
    assert population.bandwidth > 0.3
    assert np.unique(population.sample(1000, rng)[:, 0]).size == 1000


def test_degenerate_clouds():
    rng = np.random.default_rng(4)
    assert_allclose(population_behind(np.array([[2.0, 3.0]]), np.ones(1), rng).sample(4, rng), [[2.0, 3.0]] * 4)
    assert_allclose(population_behind(np.full((5, 1), 2.0), equal(5), rng).sample(4, rng), 2.0)
    # A direction without spread gets none.
    flat = np.stack([rng.normal(size=30), np.full(30, 7.0)], axis=1)
    assert_allclose(population_behind(flat, equal(30), rng).sample(50, rng)[:, 1], 7.0)
    # Duplicates are atoms.
    twice = np.repeat(rng.normal(size=(10, 1)), 2, axis=0)
    assert population_behind(twice, equal(20), rng).bandwidth < 0.02
    # Particles of weight 0 are not there.
    weights = np.r_[equal(30), 0.0]
    cloud = np.vstack([flat[:, :1], [[1e6]]])
    found = population_behind(cloud, weights, rng)
    assert_allclose(found.bandwidth, population_behind(flat[:, :1], equal(30), rng).bandwidth)
    assert np.abs(found.sample(500, rng)).max() < 20


def test_many_particles_choose_the_bandwidth_by_some_of_them():
    rng = np.random.default_rng(5)
    cloud = rng.normal(size=(4000, 1))
    few = population_behind(cloud[:1000], equal(1000), rng).bandwidth
    # n^(-1/5) of four times as many, give or take a step of the tried bandwidths.
    assert_allclose(population_behind(cloud, equal(4000), rng).bandwidth, few * 4**-0.2, rtol=0.5)
