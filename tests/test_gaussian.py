"""The closed-form bridge between Gaussians: published values, and the same numbers derived here by other ways."""

import numpy as np
import pytest
from generators import GAUSSIAN_PLANE, GAUSSIAN_ROWS, hermite_atoms
from numpy.testing import assert_allclose
from scipy.optimize import brentq

import ensembles

rows = pytest.mark.parametrize("row", GAUSSIAN_ROWS, ids=lambda row: f"{row.a:g} to {row.b:g} at {row.epsilon:g}")


def one_dimensional(row, duration=1.0, shift=0.0):
    """A row of the table as a bridge over `duration` at the same ε = 2 D T."""
    prior = ensembles.Brownian(diffusion=0.5 * row.epsilon / duration)
    return ensembles.gaussian_bridge(0.0, row.a, shift, row.b, prior, duration)


def joint_and_cost(cov_a, cov_b, cross, epsilon):
    """KL(π | μ⊗ν) and OT_ε = E ½|x - y|² + ε KL of a Gaussian coupling at equal means, from its covariance alone."""
    joint = np.block([[cov_a, cross], [cross.T, cov_b]])
    kl = -0.5 * (np.linalg.slogdet(joint)[1] - np.linalg.slogdet(cov_a)[1] - np.linalg.slogdet(cov_b)[1])
    distance = 0.5 * np.trace(cov_a + cov_b - cross - cross.T)
    return kl, distance + epsilon * kl


@rows
def test_published_row(row):
    bridge = one_dimensional(row)
    assert_allclose(bridge.cross_covariance[0, 0], row.cross, atol=6e-11)
    assert_allclose(bridge.moments(0.5)[1][0, 0], row.middle, atol=6e-9)
    kl, cost = joint_and_cost(bridge.cov_start, bridge.cov_end, bridge.cross_covariance, row.epsilon)
    assert_allclose([kl, cost], [row.information, row.cost], atol=6e-11)


@rows
def test_published_row_derived_as_a_root(row):
    # The coupling's precision has off-diagonal -1/ε (k is all that mixes x and y): c / (ab - c²) = 1/ε, c² + εc = ab.
    c = brentq(lambda c: c * row.epsilon - (row.a * row.b - c * c), 0.0, np.sqrt(row.a * row.b), xtol=1e-15)
    assert_allclose(row.cross, c, atol=6e-11)
    assert_allclose(row.middle, 0.25 * (row.a + row.b + 2 * c + row.epsilon), atol=6e-9)


def test_published_plane():
    case = GAUSSIAN_PLANE
    prior = ensembles.Brownian(diffusion=0.5 * case["epsilon"])
    bridge = ensembles.gaussian_bridge([0.0, 0.0], case["a"], [1.0, 2.0], case["b"], prior, 1.0)
    assert_allclose(bridge.cross_covariance, case["cross"], atol=6e-11)
    assert_allclose(bridge.moments(0.5)[1], case["middle"], atol=6e-11)
    assert_allclose(bridge.moments(0.5)[0], [0.5, 1.0], atol=1e-14)
    _, cost = joint_and_cost(case["a"], case["b"], bridge.cross_covariance, case["epsilon"])
    assert_allclose(cost, case["cost"], atol=6e-12)
    # And from the closed form OT_ε = ½[tr A + tr B - tr D + dε(1 - log 2ε) + ε log det(D + εI)], D² = 4 A^½ B A^½ + ε².
    values, vectors = np.linalg.eigh(case["a"])
    root = vectors * np.sqrt(values) @ vectors.T
    eps = case["epsilon"]
    d = np.sqrt(4 * np.linalg.eigvalsh(root @ case["b"] @ root) + eps**2)
    closed = np.trace(case["a"] + case["b"]) - d.sum() + 2 * eps * (1 - np.log(2 * eps)) + eps * np.log(d + eps).sum()
    assert_allclose(0.5 * closed, case["cost"], atol=6e-12)


def precision_cross(cov_a, cov_b, transition):
    """Cov(X0, XT) without the closed form: sweeps on the blocks of the joint precision [[first, -link'], [-link, last]].

    A marginal precision is a Schur complement, so setting it to that of A (or B) is one half of a sweep.
    """
    link = np.linalg.solve(transition.covariance, transition.matrix)
    last = np.linalg.inv(transition.covariance)
    for _ in range(3000):
        first = np.linalg.inv(cov_a) + link.T @ np.linalg.inv(last) @ link
        last = np.linalg.inv(cov_b) + link @ np.linalg.inv(first) @ link.T
    return np.linalg.inv(np.block([[first, -link.T], [-link, last]]))[: len(cov_a), len(cov_a) :]


LINEAR_PRIORS = {
    "brownian": ensembles.Brownian(diffusion=[[0.6, 0.2], [0.2, 0.4]], drift=[0.5, -1.0]),
    "ou": ensembles.OrnsteinUhlenbeck(rate=0.7, centre=[1.0, 0.0], diffusion=0.4),
    "ou rotation": ensembles.OrnsteinUhlenbeck(rate=[[0.5, 1.2], [-1.2, 0.3]], centre=[0.5, 0.0], diffusion=[0.3, 0.8]),
    "ou unstable": ensembles.OrnsteinUhlenbeck(rate=[[-0.4, 0.3], [0.0, 0.6]], centre=0.0, diffusion=0.5),
}


def plane_bridge(name):
    """A bridge in the plane between unequal Gaussians under one of the priors, over T = 1.3."""
    return ensembles.gaussian_bridge(
        [0.3, -0.2], GAUSSIAN_PLANE["a"], [1.0, 2.0], GAUSSIAN_PLANE["b"], LINEAR_PRIORS[name], 1.3
    )


@pytest.mark.parametrize("name", LINEAR_PRIORS)
def test_coupling_is_the_fixed_point_of_the_sweeps(name):
    bridge = plane_bridge(name)
    expected = precision_cross(bridge.cov_start, bridge.cov_end, bridge.transition)
    assert_allclose(bridge.cross_covariance, expected, rtol=1e-9, atol=1e-11)


@pytest.mark.parametrize("name", LINEAR_PRIORS)
def test_moments_obey_their_differential_equations(name):
    # d mean/dt = drift at the mean;  dΣ/dt = K Σ + Σ Kᵀ + 2D with K the drift's slope.
    bridge, h = plane_bridge(name), 1e-5
    for t in (0.1, 0.65, 1.2):
        mean, covariance = bridge.moments(t)
        slope = (bridge.drift(t, mean + np.eye(2)) - bridge.drift(t, mean[None])).T
        later, earlier = bridge.moments(t + h), bridge.moments(t - h)
        assert_allclose((later[0] - earlier[0]) / (2 * h), bridge.drift(t, mean[None])[0], rtol=1e-7, atol=1e-7)
        growth = slope @ covariance + covariance @ slope.T + 2 * bridge.prior.diffusion_matrix(2)
        assert_allclose((later[1] - earlier[1]) / (2 * h), growth, rtol=1e-7, atol=1e-7)
        back = (bridge.backward_drift(t, mean + np.eye(2)) - bridge.backward_drift(t, mean[None])).T
        shrink = back @ covariance + covariance @ back.T - 2 * bridge.prior.diffusion_matrix(2)
        assert_allclose((later[1] - earlier[1]) / (2 * h), shrink, rtol=1e-7, atol=1e-7)


@pytest.mark.parametrize("name", LINEAR_PRIORS)
def test_forward_minus_backward_drift_is_the_score(name):
    bridge, x, h = plane_bridge(name), np.array([[0.4, 0.1], [2.0, -1.0]]), 1e-5
    for t in (0.2, 1.0):
        score = np.stack(
            [(bridge.log_density(t, x + h * e) - bridge.log_density(t, x - h * e)) / (2 * h) for e in np.eye(2)]
        )
        difference = bridge.drift(t, x) - bridge.backward_drift(t, x)
        assert_allclose(difference, 2 * score.T @ bridge.prior.diffusion_matrix(2), rtol=1e-6, atol=1e-7)
        assert_allclose(2 * bridge.current_velocity(t, x), bridge.drift(t, x) + bridge.backward_drift(t, x), rtol=1e-12)


@rows
@pytest.mark.parametrize("duration", [1.0, 4.0])
def test_drift_slope_is_the_published_formula(row, duration):
    # K = (1/T) [((1-s) c + s b - Σ_s)/(1-s)] / Σ_s (Bunne et al. 2023, from memory; the ODE test derives it again).
    bridge = one_dimensional(row, duration, shift=2.0)
    for s in (0.0, 0.25, 0.5, 0.9):
        variance = (1 - s) ** 2 * row.a + s**2 * row.b + s * (1 - s) * (2 * row.cross + row.epsilon)
        expected = ((1 - s) * row.cross + s * row.b - variance) / ((1 - s) * variance * duration)
        at = bridge.drift(s * duration, np.array([[2.0 * s], [2.0 * s + 1.0]]))
        assert_allclose(at[0, 0], 2.0 / duration, rtol=1e-8)
        # Table values of c carry ten digits, the noise of row (1, 1, 0.01) divides them by 0.01.
        assert_allclose(at[1, 0] - at[0, 0], expected, rtol=1e-7, atol=1e-7)


def test_drift_slope_values():
    bridge = one_dimensional(GAUSSIAN_ROWS[0])  # check values: K(¼) = -4/7, K(½) = -2/3 at (1, 1, 1.5)
    assert_allclose(bridge.drift(0.25, np.ones((1, 1))), [[-4 / 7]], rtol=1e-12)
    assert_allclose(bridge.drift(0.5, np.ones((1, 1))), [[-2 / 3]], rtol=1e-12)


@pytest.mark.parametrize("row", GAUSSIAN_ROWS[1:3], ids=["b = 4", "b = 9"])
def test_no_added_drift_where_the_prior_arrives_by_itself(row):
    assert row.b == row.a + row.epsilon
    for t in (0.0, 0.3, 0.8, 1.0):
        assert_allclose(one_dimensional(row).drift(t, np.array([[-3.0], [0.5], [4.0]])), np.zeros((3, 1)), atol=1e-13)


def test_ornstein_uhlenbeck_values():
    # Own derivation: the coupling at ε_eff = σ² sinh(κT)/κ; κ = σ² = T = a = b = 1.
    bridge = ensembles.gaussian_bridge(0, 1, 0, 1, ensembles.OrnsteinUhlenbeck(rate=1.0, diffusion=0.5), 1.0)
    effective = np.sinh(1.0)
    assert_allclose(effective, 1.1752011936, atol=5e-11)
    assert_allclose(bridge.cross_covariance, [[0.5722590763]], atol=6e-11)
    assert_allclose(0.5 * (np.sqrt(effective**2 + 4) - effective), 0.5722590763, atol=6e-11)
    assert_allclose(bridge.moments(0.5)[1], [[0.8493083717]], atol=6e-11)


def test_stationary_ornstein_uhlenbeck_is_left_alone():
    prior = ensembles.OrnsteinUhlenbeck(rate=1.0, diffusion=1.0)
    bridge = ensembles.gaussian_bridge(0, 1, 0, 1, prior, 1.0)
    assert_allclose(bridge.cross_covariance, [[np.exp(-1.0)]], rtol=1e-12)
    x = np.array([[-2.0], [0.3], [1.7]])
    for t in (0.0, 0.2, 0.9, 1.0):
        assert_allclose(bridge.moments(t)[1], [[1.0]], rtol=1e-12)
        assert_allclose(bridge.drift(t, x), prior.drift(x), atol=1e-12)


@pytest.mark.parametrize("name", LINEAR_PRIORS)
def test_sampled_paths_have_the_moments(name):
    bridge, count = plane_bridge(name), 20_000
    times = np.array([0.0, 0.4, 0.9, 1.3])
    positions = bridge.sample_paths(count, times, rng=4).positions
    for k, t in enumerate(times):
        mean, covariance = bridge.moments(t)
        spread = np.sqrt(np.diag(covariance))
        error = np.sqrt((np.outer(spread**2, spread**2) + covariance**2) / count)
        for sample in (positions[:, k], bridge.sample(t, count, rng=8)):
            assert np.abs((sample.mean(axis=0) - mean) / spread).max() < 5.0 / np.sqrt(count)
            assert np.abs((np.cov(sample.T) - covariance) / error).max() < 5.0
            assert np.abs((np.cov(sample.T) - 1.15 * covariance) / error).max() > 5.0  # negative control
    # The two ends move together as the coupling says.
    cross = bridge.cross_covariance
    seen = (positions[:, 0] - bridge.mean_start).T @ (positions[:, -1] - bridge.mean_end) / count
    scale = np.sqrt((np.outer(np.diag(bridge.cov_start), np.diag(bridge.cov_end)) + cross**2) / count)
    assert np.abs((seen - cross) / scale).max() < 5.0


def test_log_density_has_mass_one():
    bridge = one_dimensional(GAUSSIAN_ROWS[0])
    nodes, weights = hermite_atoms(2.0, 60)
    # ∫ρ dx = E[ρ(X)/q(X)] for X ~ q = N(0, 2).
    log_q = -0.25 * nodes**2 - 0.5 * np.log(4 * np.pi)
    assert_allclose(weights @ np.exp(bridge.log_density(0.5, nodes) - log_q), 1.0, rtol=1e-12)
