"""Inertia: exact transitions, Fürth's formula, cubic splines, and the bridge of two snapshots in position."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad

import ensembles
from ensembles.priors.kinetic import Kinetic
from ensembles.priors.pinned import pin
from ensembles.priors.van_loan import linear_transition

# dx = v dt, dv = dW: no friction, σ = 1. Covariance over T: [[T³/3, T²/2], [T²/2, T]] (check page, "Inertia").
SHIFT = np.array([[0.0, 1.0], [0.0, 0.0]])


def free_step(duration):
    from ensembles.priors.base import Transition

    return Transition(*linear_transition(SHIFT, np.zeros(2), np.diag([0.0, 1.0]), duration))


def test_without_friction_the_covariance_is_the_integrated_random_walk():
    for t in (0.3, 1.0, 7.0):
        step = free_step(t)
        assert_allclose(step.covariance, [[t**3 / 3, t**2 / 2], [t**2 / 2, t]], rtol=1e-12)
        assert_allclose(step.matrix, [[1.0, t], [0.0, 1.0]], rtol=1e-14)
    # Friction to 0 at fixed σ² = 2 γ² D = 1 gives the same.
    gamma = 1e-6
    nearly = Kinetic(gamma, 1.0 / (2.0 * gamma**2)).phase_transition(1.0)
    assert_allclose(nearly.covariance, [[1 / 3, 1 / 2], [1 / 2, 1]], rtol=2e-6)


def test_pinned_in_phase_space_variance_and_spline():
    law = pin(free_step(0.5), free_step(0.5))
    assert_allclose(law.covariance[0, 0], 1 / 192, rtol=1e-12)  # check page: both ends pinned in (x, v), T = 1
    # The mean is the cubic Hermite spline: at the middle x = (x0 + x1)/2 + (v0 - v1)/8.
    start, end = np.array([[0.3, -1.0]]), np.array([[2.0, 0.7]])
    assert_allclose(law.mean(start, end)[0, 0], (0.3 + 2.0) / 2 + (-1.0 - 0.7) / 8, rtol=1e-12)


def test_positions_pinned_with_flat_velocities():
    # Check page: 1/48. Flat velocities: Maxwell's variance D γ grows as γ falls at σ² = 2 γ² D = 1.
    gamma = 1e-4
    prior = Kinetic(gamma, 1.0 / (2.0 * gamma**2))
    assert_allclose(prior.pin_positions(0.5, 1.0).covariance[0, 0], 1 / 48, rtol=5e-4)
    # And again from the phase-space pin: average over velocities at both ends given the positions, exact for flat ones.
    before, after = free_step(0.5), free_step(0.5)
    # Unknowns (v0, x, v, v1) with x0 = x1 = 0: precision of the two steps, then the variance of x.
    precision = np.zeros((4, 4))
    for step, rows in ((before, np.array([[1, 0], [0, 0]])), (after, np.array([[0, 0], [0, 1]]))):
        inverse = np.linalg.inv(step.covariance)
        first = rows[0, 0] == 1
        design = np.zeros((2, 4))
        if first:  # (x, v) - F (0, v0)
            design[0, 1], design[1, 2] = 1.0, 1.0
            design[:, 0] -= step.matrix[:, 1]
        else:  # (0, v1) - F (x, v)
            design[1, 3] = 1.0
            design[:, 1:3] -= step.matrix
        precision += design.T @ inverse @ design
    assert_allclose(np.linalg.inv(precision)[1, 1], 1 / 48, rtol=1e-10)


@pytest.mark.parametrize("time", [1e-3, 0.4, 3.0, 200.0])
def test_fuerth(time):
    prior = Kinetic(friction=1.7, diffusion=0.6)
    tau = 1 / 1.7
    # The formula, and the velocity autocorrelation ⟨v(0) v(s)⟩ = D γ e^{-γ s} integrated twice.
    formula = 2 * 0.6 * (time + tau * np.expm1(-time / tau))
    integral = quad(
        lambda s: 2 * (time - s) * 0.6 * 1.7 * np.exp(-1.7 * s), 0, time, epsabs=0, epsrel=1e-12, limit=500
    )[0]
    assert_allclose(prior.displacement_variance(time), integral, rtol=1e-9)
    assert_allclose(formula, integral, rtol=1e-8)


def test_phase_space_composes():
    prior = Kinetic(2.0, 0.3)
    first, second, whole = (prior.phase_transition(t) for t in (0.4, 1.1, 1.5))
    assert_allclose(second.matrix @ first.matrix, whole.matrix, rtol=1e-12, atol=1e-15)
    composed = second.matrix @ first.covariance @ second.matrix.T + second.covariance
    assert_allclose(composed, whole.covariance, rtol=1e-12)


def test_sampled_pinned_paths_have_the_pinned_law():
    prior = Kinetic(3.0, 0.5)
    count = 40_000
    start, end = np.zeros((count, 1)), np.full((count, 1), 0.8)
    positions, velocities = prior.sample_pinned(start, end, np.array([0.2, 0.5]), 1.0, 0)
    for k, t in enumerate((0.2, 0.5)):
        law = prior.pin_positions(t, 1.0)
        mean = law.mean(np.array([[0.0, 0.8]]))[0]
        drawn = np.column_stack([positions[:, k, 0], velocities[:, k, 0]])
        errors = np.sqrt(np.diag(law.covariance) / count)
        assert (np.abs(drawn.mean(axis=0) - mean) < 6 * errors).all()
        scale = np.sqrt(np.outer(np.diag(law.covariance), np.diag(law.covariance)))
        assert_allclose(np.cov(drawn.T) / scale, law.covariance / scale, atol=6 * np.sqrt(2 / count))


def test_strong_friction_is_brownian():
    rng = np.random.default_rng(0)
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=(30, 2)), rng.normal(size=(30, 2)) + 1])
    inertial = ensembles.fit_kinetic_bridge(series, ensembles.Kinetic(friction=1e7, diffusion=0.4), tolerance=1e-9)
    plain = ensembles.fit_bridge(series, ensembles.Brownian(0.4), tolerance=1e-9)
    assert_allclose(inertial.coupling().matrix(), plain.coupling(0).matrix(), atol=1e-6)
    for found, expected in zip(inertial.moments(0.3), plain.moments(0.3)):
        assert_allclose(found, expected, atol=1e-5)


def test_sampled_paths_have_the_moments():
    rng = np.random.default_rng(1)
    series = ensembles.SnapshotSeries.from_arrays([2, 3], [rng.normal(size=(20, 1)), rng.normal(size=(25, 1)) * 2])
    bridge = ensembles.fit_kinetic_bridge(series, ensembles.Kinetic(friction=1.5, diffusion=1.0))
    paths, velocities = bridge.sample_paths(30_000, [2.4], rng=0)
    mean, covariance = bridge.moments(2.4)
    drawn = paths.positions[:, 0]
    assert abs(drawn.mean() - mean[0]) < 6 * np.sqrt(covariance[0, 0] / 30_000)
    assert_allclose(drawn.var(), covariance[0, 0], rtol=6 * np.sqrt(2 / 30_000) * 1.5)
    assert velocities.shape == (30_000, 1, 1)


def test_chains_and_other_priors_are_refused():
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], [[0.0, 1.0]] * 3)
    with pytest.raises(
        ensembles.InputError, match="joins two snapshots; there are 3; positions do not show the velocity"
    ):
        ensembles.fit_kinetic_bridge(series, ensembles.Kinetic(1.0, 1.0))
    with pytest.raises(ensembles.InputError, match="prior must be Kinetic; it is Brownian"):
        ensembles.fit_kinetic_bridge(series.subset([0, 1]), ensembles.Brownian(1.0))
    with pytest.raises(ensembles.InputError, match="prior must be a prior of this package; it is Kinetic"):
        ensembles.fit_bridge(series, ensembles.Kinetic(1.0, 1.0))
    with pytest.raises(ensembles.InputError, match="friction must be positive"):
        ensembles.Kinetic(0.0, 1.0)
    with pytest.raises(ensembles.InputError, match="between the snapshots"):
        ensembles.fit_kinetic_bridge(series.subset([0, 1]), ensembles.Kinetic(1.0, 1.0)).moments(5.0)
