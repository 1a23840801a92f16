"""How surprising the snapshots are: relative entropy against closed forms, simulated p-values, what is refused."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

import ensembles
from ensembles import InputError
from ensembles.assessment.surprise import _Case

PRIOR = ensembles.Brownian(diffusion=0.5)


def pair(n: int = 100, d: int = 2, shift: float = 0.0, widening: float = 1.0, seed: int = 0):
    """N(0, 1) and the prior's N(0, 2) after one unit of time, widened and shifted along the first axis."""
    rng = np.random.default_rng(seed)
    end = widening * np.sqrt(2.0) * rng.normal(size=(n, d))
    end[:, 0] += shift
    return ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [rng.normal(size=(n, d)), end])


def test_closed_form_against_quadrature():
    # KL(π | μ₀ ⊗ p) for N(0, 1) → N(1, 1.5) and noise variance 1, by its definition on a fine grid.
    bridge = ensembles.gaussian_bridge(0.0, 1.0, 1.0, 1.5, PRIOR, 1.0)
    cross = bridge.cross_covariance[0, 0]
    x = np.linspace(-9, 9, 1201)
    joint = np.array([[1.0, cross], [cross, 1.5]])
    inverse = np.linalg.inv(joint)
    u, v = np.meshgrid(x, x, indexing="ij")
    w = v - 1.0
    log_joint = -0.5 * (inverse[0, 0] * u**2 + 2 * inverse[0, 1] * u * w + inverse[1, 1] * w**2)
    log_joint -= np.log(2 * np.pi) + 0.5 * np.log(np.linalg.det(joint))
    log_prior = -0.5 * u**2 - 0.5 * (v - u) ** 2 - np.log(2 * np.pi)
    step = (x[1] - x[0]) ** 2
    expected = np.sum(np.exp(log_joint) * (log_joint - log_prior)) * step
    found = ensembles.relative_entropy(bridge)
    assert_allclose(found.value, expected, rtol=1e-6)
    assert_allclose(found.gaps[0].mean_shift, 0.5)
    assert found.gaps[0].shape == 0.0


def test_the_prior_itself_costs_nothing():
    # N(0, 1) under OU of rate κ, after T: mean e^{-κT} m, variance e^{-2κT} + D (1 - e^{-2κT}) / κ.
    prior = ensembles.OrnsteinUhlenbeck(rate=0.7, centre=1.0, diffusion=0.4)
    decay = np.exp(-0.7 * 2.0)
    mean, variance = 1.0 + decay * (3.0 - 1.0), decay**2 + 0.4 * (1 - decay**2) / 0.7
    found = ensembles.relative_entropy(ensembles.gaussian_bridge(3.0, 1.0, mean, variance, prior, 2.0))
    assert_allclose(found.value, 0.0, atol=1e-12)
    assert ensembles.relative_entropy(ensembles.gaussian_bridge(3.0, 1.0, 0.0, variance, prior, 2.0)).value > 0.1


@pytest.mark.parametrize("d", [1, 2, 5])
def test_atoms_against_the_closed_form(d):
    shift, n, repeats = 1.0 / np.sqrt(d), 1000, 6
    zeros, unit = np.zeros(d), np.eye(d)
    exact = ensembles.relative_entropy(ensembles.gaussian_bridge(zeros, unit, zeros + shift, unit, PRIOR, 1.0)).gaps[0]
    found = []
    for seed in range(repeats):
        rng = np.random.default_rng(seed)
        clouds = [rng.normal(size=(n, d)), shift + rng.normal(size=(n, d))]
        series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], clouds)
        found.append(ensembles.relative_entropy(ensembles.fit_bridge(series, PRIOR)).gaps[0])
    for part in ("value", "mean_shift", "spread", "shape"):
        name = "error" if part == "value" else f"{part}_error"
        errors = np.array([getattr(gap, name) for gap in found])
        differences = np.array([getattr(gap, part) for gap in found]) - getattr(exact, part)
        # Honest errors: the mean of six within four of its own, and no single one beyond four.
        assert abs(differences.mean()) < 4 * errors.mean() / np.sqrt(repeats)
        assert (np.abs(differences) < 4 * errors).all()
    assert_allclose([gap.value for gap in found], [g.mean_shift + g.spread + g.shape for g in found], rtol=1e-12)
    # The whole calibration prints the bias at 100 repeats; it is below 5 %.
    assert all(gap.error < 0.15 * exact.value for gap in found)


def test_shape_is_what_means_and_covariances_do_not_see():
    # Two points far apart, symmetric, against a normal of the same variance: only the shape is surprising.
    rng = np.random.default_rng(3)
    n = 800
    end = np.where(rng.random(n) < 0.5, -1.0, 1.0) * np.sqrt(2.0 - 0.09) + 0.3 * rng.normal(size=n)
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=n), end])
    gap = ensembles.relative_entropy(ensembles.fit_bridge(series, PRIOR)).gaps[0]
    assert gap.shape > 6 * gap.shape_error
    assert abs(gap.mean_shift) < 4 * gap.mean_shift_error + 0.02
    assert abs(gap.spread) < 4 * gap.spread_error + 0.02


def test_gaps_add_up_and_the_probability_is_that_of_large_deviations():
    rng = np.random.default_rng(4)
    clouds = [rng.normal(size=(60, 1)), rng.normal(2.0, 1.0, (50, 1)), rng.normal(2.0, 2.0, (40, 1))]
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], clouds)
    bridge = ensembles.fit_bridge(series, PRIOR)
    found = ensembles.relative_entropy(bridge)
    assert len(found.gaps) == 2
    assert_allclose(found.value, sum(gap.value for gap in found.gaps))
    assert [gap.particles for gap in found.gaps] == [50, 40]
    assert_allclose(found.gaps[0].log10_probability, -50 * found.gaps[0].value / np.log(10))
    assert ensembles.relative_entropy(bridge, particles=7).gaps[1].particles == 7
    assert list(found.to_frame()["particles"]) == [50, 40]


def test_a_shift_and_a_widening_are_found_and_the_prior_is_not_accused():
    same, shifted, wider = (
        ensembles.prior_check(pair(**change), PRIOR, simulations=59).gaps[0]
        for change in ({}, {"shift": 1.5}, {"widening": 1.8})
    )
    # Three p-values of one draw each; the law of many is in test_calibration.py.
    assert min(same.energy_p_value, same.entropy_p_value) > 0.05
    assert shifted.energy_p_value == wider.energy_p_value == 1 / 60
    assert shifted.entropy_p_value == wider.entropy_p_value == 1 / 60
    assert shifted.entropy.mean_shift > 4 * shifted.entropy.mean_shift_error
    assert wider.entropy.spread > 3 * wider.entropy.spread_error
    assert shifted.log10_probability < -5
    # What finite clouds of the prior itself cost is not counted as surprise.
    assert same.log10_probability > -10


def test_the_verdict_and_the_table():
    found = ensembles.prior_check(pair(shift=2.0, n=60), PRIOR, simulations=99)
    assert "the prior alone does not produce the end cloud (p = 0.01" in found.verdict[0]
    frame = found.to_frame()
    assert frame["energy_p_value"].item() == 0.01
    gap = found.gaps[0]
    assert_allclose(frame["relative_entropy"].item(), gap.entropy.value)
    assert_allclose(frame["excess"].item(), gap.entropy.value - gap.simulated_entropy.mean())
    rerun = ensembles.prior_check(pair(shift=2.0, n=60), PRIOR, simulations=99, workers=2)
    assert_allclose(rerun.gaps[0].simulated_entropy, gap.simulated_entropy, rtol=0)


def test_simulated_clouds_have_the_spread_of_the_population_and_the_weights_of_the_data():
    rng = np.random.default_rng(8)
    weights = [rng.gamma(0.5, size=6), np.r_[0.0, rng.gamma(0.5, size=8)]]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=(6, 1)), rng.normal(size=(9, 1))], weights)
    case = _Case(series, PRIOR, 0, False, rng)
    draws = [case.simulate(stream) for stream in rng.spawn(6000)]
    start, a = series.clouds[0][:, 0], series.weights[0]
    centre = a @ start
    unbiased = a @ (start - centre) ** 2 / (1 - a @ a)
    for first, given, last in draws:
        assert_allclose(given, a, rtol=0)
        assert first.shape == (6, 1)
        assert last.shape == (9, 1)
    firsts, lasts = (np.array([draw[i][..., 0] for draw in draws]) for i in (0, 2))
    # Variance of a position: that of the population, and 2 · 0.5 · 1 more after the step; 36,000 and 54,000 positions,
    # whose variance is known to (κ - 1)^½ of their number^-½, with a kurtosis κ of no more than 6 atoms can have.
    for positions, expected in ((firsts, unbiased), (lasts, unbiased + 1.0)):
        assert_allclose(positions.var(), expected, rtol=6 * np.sqrt(5 / positions.size))
    # A weighted mean scatters as its weights say, not as n equal ones would.
    assert_allclose((firsts @ a).var(), unbiased * (a @ a), rtol=6 * np.sqrt(3 / 6000))
    assert abs(a @ a * 6 - 1) > 0.3
    alone = ensembles.SnapshotSeries.from_arrays([0, 1], [[2.0], [1.0, 3.0]])
    assert_allclose(_Case(alone, PRIOR, 0, False, rng).simulate(rng)[0], [[2.0]])


def test_the_same_particles_are_simulated_one_by_one():
    found = ensembles.prior_check(pair(n=50), PRIOR, simulations=39, same_particles=True, with_entropy=False)
    assert found.gaps[0].entropy is None
    assert np.isnan(found.gaps[0].entropy_p_value)
    assert found.gaps[0].energy_p_value > 0.05
    with pytest.raises(InputError, match=r"same_particles needs equal numbers; .* hold 2 and 3"):
        series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [1.0, 2.0, 3.0]])
        ensembles.prior_check(series, PRIOR, same_particles=True)


def test_growth_moves_the_predicted_cloud_and_excludes_the_same_particles():
    # Two starts at ±3, of which the right one divides: at the end 95 % are there. Without the growth that is a surprise.
    rng = np.random.default_rng(9)
    start = np.repeat([-3.0, 3.0], 50) + 0.1 * rng.normal(size=100)
    end = np.repeat([-3.0, 3.0], [5, 95]) + rng.normal(size=100)
    rates = [np.where(start > 0, np.log(19.0), 0.0), np.zeros(100)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [start, end], features={"rate": rates})
    growing = series.with_growth(ensembles.Growth("rate"))
    ignoring, heeding = (
        ensembles.prior_check(s, PRIOR, simulations=39, with_entropy=False).gaps[0] for s in (series, growing)
    )
    assert ignoring.energy_p_value == 1 / 40
    assert heeding.energy_p_value > 0.05
    with pytest.raises(InputError, match=r"same_particles means that none divides or dies; the series has Growth"):
        ensembles.prior_check(growing, PRIOR, same_particles=True)


def test_what_cannot_be_computed_is_named():
    few = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [1.0, 2.0]])
    found = ensembles.prior_check(few, PRIOR, simulations=19)
    assert found.gaps[0].entropy is None
    assert "the relative entropy from 0 to 1 was dropped" in found.dropped[0]
    assert "needs more particles; it has 2" in found.dropped[0]
    weighted = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], np.arange(9.0)], [None, np.arange(1.0, 10.0)])
    found = ensembles.prior_check(weighted, PRIOR, simulations=19)
    assert "the weights of the end snapshot are not equal" in found.dropped[0]
    with pytest.raises(InputError, match=r"needs equal weights at the end of a gap; those of snapshot t = 1"):
        ensembles.relative_entropy(ensembles.fit_bridge(weighted, PRIOR))


def test_bad_input_is_refused():
    with pytest.raises(InputError, match=r"simulations must be a whole number of at least 19; it is 5"):
        ensembles.prior_check(pair(), PRIOR, simulations=5)
    with pytest.raises(InputError, match=r"prior must be a prior of this package; it is str"):
        ensembles.prior_check(pair(), "brownian")
    with pytest.raises(InputError, match=r"bridge must be a fitted bridge; it is int"):
        ensembles.relative_entropy(3)
    with pytest.raises(InputError, match=r"particles must be a whole number of at least 1; it is 0"):
        ensembles.relative_entropy(ensembles.fit_bridge(pair(n=20), PRIOR), particles=0)


def test_smooth_ends_need_no_entropy_estimate():
    rng = np.random.default_rng(6)
    n = 600
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=(n, 2)), 1.0 + rng.normal(size=(n, 2))])
    smooth = ensembles.relative_entropy(ensembles.fit_bridge(series, PRIOR, ends="mixture", components=1)).gaps[0]
    exact = ensembles.relative_entropy(
        ensembles.gaussian_bridge(np.zeros(2), np.eye(2), np.ones(2), np.eye(2), PRIOR, 1.0)
    )
    assert abs(smooth.value - exact.value) < 4 * smooth.error
    # One Gaussian component has no shape beyond mean and covariance.
    assert abs(smooth.shape) < 0.01
    assert 0.02 < smooth.error < 0.2


def test_walls_and_smooth_ends_are_refused_where_they_are_not_served():
    rng = np.random.default_rng(7)
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], [rng.uniform(0.1, 0.9, size=(30, 1)) for _ in range(3)])
    boxed = ensembles.Brownian(0.1, box=ensembles.Box(0.0, 1.0))
    with pytest.raises(InputError, match=r"the prior check is not available in a box"):
        ensembles.prior_check(series, boxed)
    fitted = ensembles.fit_bridge(series, boxed)
    with pytest.raises(InputError, match=r"the relative entropy is not available in a box"):
        ensembles.relative_entropy(fitted)
    with pytest.raises(InputError, match=r"the effective number of particles is not available in a box"):
        ensembles.effective_sizes(fitted)
    found = ensembles.hold_out(series, boxed, repeats=5)
    assert "the predictions independent, prior were dropped" in found.dropped[0]
    assert sum("predictions" in sentence for sentence in found.dropped) == 1
    assert set(found.to_frame()["prediction"]) == {"bridge", "earlier", "later", "straight", "floor"}
    smooth = ensembles.fit_bridge(series, ensembles.Brownian(0.1), ends="mixture", components=1)
    with pytest.raises(InputError, match=r"belong to atoms; the bridge has mixture ends"):
        ensembles.effective_sizes(smooth)
    with pytest.raises(InputError, match=r"error bars are those of bridges between atoms"):
        ensembles.bootstrap(smooth, ensembles.Moments([0.5]))
