"""Fitting smooth ends: the Gaussian closed form, exact pairs, monotone weights, the choices and their reasons."""

import numpy as np
import pytest
from exact_pairs import bures_wasserstein, cbw_uvp, exact_pair, floor_of, mean_predictor
from generators import GAUSSIAN_ROWS, hermite_atoms
from numpy.testing import assert_allclose
from scipy.integrate import quad
from scipy.stats import norm

import ensembles
from ensembles.bridges.choose_ends import effective_ends
from ensembles.bridges.mixture_fit import candidates, choose_count, split_folds
from ensembles.endpoints.ascent import ascend
from ensembles.endpoints.covariance import parametrisation
from ensembles.endpoints.expansion import ascend_density_weights, ascend_weights
from ensembles.endpoints.likelihood import Likelihood, Tilted, WhitenedClouds
from ensembles.endpoints.quadratic import QuadraticMixture
from ensembles.endpoints.start_density import StartLikelihood, upper_bound

ONE_FULL = ensembles.MixtureEnds(covariance="full")
PRIORS = {
    "Brownian": ensembles.Brownian(diffusion=0.4),
    "anisotropic": ensembles.Brownian(diffusion=[[0.4, 0.15], [0.15, 0.3]], drift=[0.5, -0.2]),
    "rotating": ensembles.OrnsteinUhlenbeck(rate=[[0.4, 0.5], [-0.3, 0.2]], centre=[0.5, 0.0], diffusion=0.3),
}


@pytest.mark.parametrize("row", GAUSSIAN_ROWS, ids=lambda row: f"{row.a:g}-{row.b:g}-{row.epsilon:g}")
def test_one_component_meets_the_published_gaussian_values(row):
    """The rows of generators.py, with their sources; ends wider than the prior reaches are among them (1, 4, 3)."""
    (x, a), (y, b) = hermite_atoms(row.a, 20), hermite_atoms(row.b, 20)
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [x, y], [a, b])
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=row.epsilon / 2), ends="mixture", components=1)
    line = bridge.conditional_end([[0.0], [1.0]]).mean()[:, 0]
    assert_allclose(line, [0.0, row.cross / row.a], atol=1e-8)
    assert_allclose(bridge.moments(0.5)[1], [[row.middle]], rtol=1e-8)


@pytest.mark.parametrize("prior", PRIORS)
@pytest.mark.parametrize("spread", [0.3, 1.0, 3.0])
def test_one_full_component_is_the_gaussian_bridge(prior, spread):
    rng = np.random.default_rng(0)
    start = rng.standard_normal((80, 2)) @ [[1.0, 0.3], [0.0, 0.7]]
    end = spread * rng.standard_normal((90, 2)) @ [[1.0, -0.6], [0.0, 0.5]] + [1.0, 2.0]
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.5], [start, end])
    ends = ensembles.MixtureEnds(covariance="full", most=1)
    bridge = ensembles.fit_bridge(series, PRIORS[prior], ends=ends, components=1)
    moments = [moment for cloud in (start, end) for moment in (cloud.mean(axis=0), np.cov(cloud.T, ddof=0))]
    exact = ensembles.gaussian_bridge(*moments, PRIORS[prior], 1.5)
    points = rng.standard_normal((7, 2))
    for t in (0.0, 0.4, 1.2, 1.5):
        assert_allclose(bridge.log_density(t, points), exact.log_density(t, points), rtol=1e-8, atol=1e-8)
        assert_allclose(bridge.drift(t, points), exact.drift(t, points), rtol=1e-7, atol=1e-7)
        assert_allclose(bridge.backward_drift(t, points), exact.backward_drift(t, points), rtol=1e-6, atol=1e-6)
        for mine, theirs in zip(bridge.moments(t), exact.moments(t)):
            assert_allclose(mine, theirs, rtol=1e-8, atol=1e-8)
    # Relative entropy of two joint Gaussians, from their covariances: the bridge, and the prior from the same start.
    step = PRIORS[prior].transition(1.5, 2)
    _, a, n, b = moments
    cross = exact.cross_covariance
    joint = np.block([[a, cross], [cross.T, b]])
    free = np.block([[a, a @ step.matrix.T], [step.matrix @ a, step.matrix @ a @ step.matrix.T + step.covariance]])
    shift = np.concatenate([[0.0, 0.0], n - step.mean(moments[0][None])[0]])
    divergence = 0.5 * (
        np.trace(np.linalg.solve(free, joint)) - 4 + shift @ np.linalg.solve(free, shift)
        + np.linalg.slogdet(free)[1] - np.linalg.slogdet(joint)[1]
    )  # fmt: skip
    assert_allclose(bridge.relative_entropy(), divergence, rtol=1e-8)


def test_the_exact_pair_is_exact():
    """The formulas of exact_pairs.py against quadrature in one dimension, and the drift against its closed form."""
    pair = exact_pair(1, 0.7, 0)
    mixture = pair.potential
    means, variances, weights = _gaussians(mixture)

    def phi(y):
        return float(np.sum(weights * norm.pdf(y, means, np.sqrt(variances))))

    for x in (-1.5, 0.3):
        mass = quad(lambda y, x=x: norm.pdf(y, x, np.sqrt(0.7)) * phi(y), -15, 15, limit=300)[0]
        mean = quad(lambda y, x=x: y * norm.pdf(y, x, np.sqrt(0.7)) * phi(y), -15, 15, limit=300)[0] / mass
        law = mixture.given(pair.transition, np.array([[x]]))
        assert_allclose(law.mean(), [[mean]], atol=1e-8)
        # ε ∇ log Σ_k w_k N(x | μ_k, Σ_k + ε (1 - t)) at t = 0.4, from the source named in exact_pairs.py
        parts = weights * norm.pdf(x, means, np.sqrt(variances + 0.7 * 0.6))
        drift = 0.7 * np.sum(parts * (means - x) / (variances + 0.7 * 0.6)) / parts.sum()
        gradient = mixture.carried_back(pair.prior.transition(0.6, 1), np.array([[x]]))[1]
        assert_allclose(0.7 * gradient, [[drift]], rtol=1e-10)


def _gaussians(potential):
    """Means, variances and weights of a one-dimensional Gaussian mixture potential."""
    mixture, scale = potential.mixture, potential.basis[0, 0]
    variances = 1.0 / mixture.precision[:, 0]
    centres = mixture.linear[:, 0] * variances
    log_weights = mixture.log_weights + 0.5 * mixture.linear[:, 0] * centres + 0.5 * np.log(2 * np.pi * variances)
    weights = np.exp(log_weights) * scale
    return centres * scale + potential.centre[0], variances * scale**2, weights


def test_the_score_is_0_for_the_truth_100_for_the_mean_and_small_for_the_exact_sampler():
    pair = exact_pair(3, 1.0, 1)
    rng = np.random.default_rng(0)
    starts = pair.starts(4000, rng)
    ends = pair.ends(starts, rng)
    truth = pair.potential.given(pair.transition, starts)
    variance = float(ends.var(axis=0).sum())
    assert_allclose(cbw_uvp(truth, truth, variance), 0.0, atol=1e-5)
    # By the law of total variance; 4000 ends.
    assert_allclose(mean_predictor(truth, ends.mean(axis=0), variance), 100.0, atol=4.0)
    few, many = (floor_of(truth, variance, draws, rng) for draws in (100, 1000))
    assert_allclose(few / many, 10.0, rtol=0.2)
    one = bures_wasserstein((np.zeros((1, 1)), np.array([[[4.0]]])), (np.ones((1, 1)), np.array([[[9.0]]])))
    assert_allclose(one, [0.5 * (1.0 + (3.0 - 2.0) ** 2)])


@pytest.mark.parametrize("kind", ["diagonal", "full", "low-rank"])
def test_gradients_are_exact(kind):
    rng = np.random.default_rng(1)
    n, d, count = 40, 3, 3
    a, b = rng.random(n), rng.random(n)
    clouds = WhitenedClouds(rng.standard_normal((n, d)), a / a.sum(), 2 * rng.standard_normal((n, d)), b / b.sum())
    shape = parametrisation(kind, count, d, 2)
    ahead = QuadraticMixture(np.zeros(2), rng.standard_normal((2, d)), rng.random((2, d)) - 0.4)
    for model in (
        Likelihood(clouds, shape, np.full(d, 0.05), 0.1),
        StartLikelihood(clouds.v, clouds.b, ahead, shape, np.full(d, 0.05), 0.1),
    ):
        theta = 0.3 * rng.standard_normal(model.size)
        _, gradient = model.value_and_gradient(theta)
        steps = 1e-6 * np.eye(model.size)
        numeric = [
            (model.value_and_gradient(theta + s)[0] - model.value_and_gradient(theta - s)[0]) / 2e-6 for s in steps
        ]
        assert_allclose(gradient, numeric, atol=1e-7)
        again = model.pack(model.unpack(theta))
        assert_allclose(model.value_and_gradient(again)[0], model.value_and_gradient(theta)[0], rtol=0.2)


def test_packing_is_undone_by_unpacking():
    rng = np.random.default_rng(2)
    root = rng.standard_normal((2, 3, 3))
    full = root @ root.swapaxes(1, 2) + 0.1 * np.eye(3)
    shape = parametrisation("full", 2, 3)
    assert_allclose(shape.unpack(shape.pack(full)), full, atol=1e-12)
    flat = parametrisation("diagonal", 2, 3)
    assert_allclose(flat.unpack(flat.pack(full)), np.diagonal(full, axis1=1, axis2=2))
    spike = np.eye(3) + 5.0 * np.outer([1, 2, 0], [1, 2, 0])
    thin = parametrisation("low-rank", 1, 3, 1)
    assert_allclose(thin.unpack(thin.pack(spike[None]))[0], spike, atol=1e-10)


def test_the_upper_bound_is_above_all_and_exact_for_one():
    rng = np.random.default_rng(3)
    root = rng.standard_normal((4, 3, 3))
    matrices = root + root.swapaxes(1, 2)
    bound = upper_bound(matrices)
    assert min(np.linalg.eigvalsh(bound - m)[0] for m in matrices) > -1e-12
    assert_allclose(upper_bound(matrices[:1]), matrices[0])


def test_kernel_weights_rise_to_a_fixed_point_whatever_the_start():
    rng = np.random.default_rng(4)
    log_a, log_b = (-0.5 * (rng.standard_normal((60, 1)) - np.linspace(-2, 2, 9)) ** 2 * s for s in (3.0, 1.0))
    even = np.full(60, 1 / 60)
    log_w, history = ascend_weights(log_a, even, log_b, even, 1e-12)
    assert (np.diff(history) > -1e-12).all()
    w = np.exp(log_w)
    wanted = w * ((even / (np.exp(log_a) @ w)) @ np.exp(log_a))
    given = w * ((even / (np.exp(log_b) @ w)) @ np.exp(log_b))
    # Stationary: both clouds agree on every weight that has not gone to 0.
    assert_allclose(wanted, given, atol=1e-4)
    dense, rise = ascend_density_weights(log_a, even, 1e-12)
    assert (np.diff(rise) > -1e-12).all()
    shares = np.exp(dense - dense.max())
    shares /= shares.sum()
    # Concave: at the maximum no density's mean ratio exceeds 1.
    assert ((even / (np.exp(log_a) @ shares)) @ np.exp(log_a)).max() < 1 + 1e-3


def test_an_ascent_stops_where_held_out_data_no_longer_gain():
    target = np.array([3.0, -1.0])

    def objective(theta):
        return -float(((theta - target) ** 4).sum()), -4 * (theta - target) ** 3

    exact = ascend(objective, np.zeros(2), np.ones(2), resolution=0.0)
    assert_allclose(exact.theta, target, atol=0.1)
    judged = ascend(objective, np.zeros(2), np.ones(2), resolution=0.5, held_out=lambda theta: -float((theta**2).sum()))
    assert "held-out" in judged.reason
    assert judged.iterations < exact.iterations
    with pytest.raises(ensembles.ComputationError, match="not finite where the fit starts"):
        ascend(lambda theta: (np.nan, theta), np.zeros(2), np.ones(2), resolution=0.1)


def test_the_smallest_count_within_one_standard_error_is_chosen():
    rng = np.random.default_rng(5)
    noise = rng.standard_normal(400) / 400
    # Gains fall off: 3 and more components differ by less than the noise of their difference.
    gains = {1: 0.0, 2: 0.5, 3: 0.8}
    count, table = choose_count(
        lambda k: [np.full(400, gains.get(k, 0.8 + 1e-4 * (k == 4)) / 400) + noise * (1 + 0.1 * (k > 2) * k)], 30
    )
    assert count == 3
    assert table[:, 0].tolist()[:4] == [1, 2, 3, 4]
    assert list(candidates(12)) == [1, 2, 3, 4, 5, 6, 8, 11]
    for n in (7, 5000):
        for (rows, _), (rest, _) in split_folds(n, n, 0):
            assert not set(rows) & set(rest)


def test_a_fit_is_repeated_exactly_and_starts_warm():
    rng = np.random.default_rng(6)
    end = (
        rng.standard_normal((200, 2)) * 0.5
        + np.array([[2.0, 0.0], [-2.0, 1.0], [0.0, -2.0]])[rng.integers(3, size=200)]
    )
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.standard_normal((200, 2)), end])
    fits = [
        ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.3), ends="mixture", components=3) for _ in (0, 1)
    ]
    assert_allclose(fits[0].relative_entropy(), fits[1].relative_entropy(), rtol=0)
    warm = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.33), ends="mixture", start=fits[0])
    cold = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.33), ends="mixture", components=3)
    assert warm.solutions[0].components[1] == 3
    assert warm.relative_entropy() > cold.relative_entropy() - 0.05


def test_a_component_on_one_point_is_held_by_the_prior_and_reported():
    rng = np.random.default_rng(7)
    end = np.concatenate([rng.standard_normal((60, 2)), [[9.0, 9.0]]])
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.standard_normal((60, 2)), end])
    bridge = ensembles.fit_bridge(
        series, ensembles.Brownian(diffusion=0.5), ends=ensembles.MixtureEnds(begin="clusters"), components=2
    )
    assert any("rests on about 1 particle(s)" in note and "stated prior" in note for note in bridge.notes)
    points = np.concatenate([end, rng.standard_normal((20, 2))])
    assert np.isfinite(bridge.log_density(1.0, points)).all()
    assert np.isfinite(bridge.drift(1.0, points)).all()


def test_a_series_is_a_chain_with_smooth_ends():
    rng = np.random.default_rng(8)
    clouds = [rng.standard_normal((150, 2)) + [k, 0] for k in range(3)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 3], clouds)
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.3), ends=ONE_FULL, components=1)
    assert len(bridge.solutions) == 2
    paths = bridge.sample_paths(4000, [0, 0.5, 1, 2, 3], rng=1)
    for k, t in enumerate((0, 0.5, 1, 2, 3)):
        mean, covariance = bridge.moments(t)
        # One component meets both moments of every cloud, so that the chain has no seam; six standard errors.
        assert (np.abs(paths.positions[:, k].mean(axis=0) - mean) < 6 * np.sqrt(np.diag(covariance) / 4000)).all()
    for k in range(3):
        assert_allclose(bridge.moments(series.times[k])[0], clouds[k].mean(axis=0), atol=0.05)
    assert "gap 1" in repr(bridge)
    assert "gap 1" in bridge._repr_html_()


def test_the_automatic_choice_says_why():
    rng = np.random.default_rng(9)

    def bridge(dimension, count, diffusion):
        clouds = [rng.standard_normal((count, dimension)) + shift for shift in (0.0, 0.5)]
        series = ensembles.SnapshotSeries.from_arrays([0, 1], clouds)
        return ensembles.fit_bridge(series, ensembles.Brownian(diffusion=diffusion), ends="auto"), series

    plenty, series = bridge(1, 500, 0.5)
    assert plenty.ends == "atoms"
    assert plenty.notes[0].startswith("ends: atoms, since 500 particles at t = 1 in 1 dimension(s) leave about")
    assert effective_ends(series, plenty.prior, 0) > 100
    sparse, series = bridge(8, 400, 0.02)
    assert sparse.ends == "mixture"
    assert effective_ends(series, sparse.prior, 0) < 100
    assert sparse.notes[0].startswith("ends: mixture, since 400 particles at t = 1 in 8 dimension(s)")
    poor, _ = bridge(8, 40, 0.02)
    assert poor.ends == "atoms"
    assert "do not carry the 17 parameters" in poor.notes[0]
    assert "note: ends: atoms, although" in repr(poor)


def test_the_tilted_family_holds_gaussian_mixtures():
    """C = (S⁻¹ + I)⁻¹, r = C S⁻¹ μ: log φ and log φ carried back against the Gaussian mixture itself, in one dimension."""
    mu, s, w = np.array([-1.0, 2.0]), np.array([0.5, 1.5]), np.array([0.3, 0.7])
    c = 1.0 / (1.0 / s + 1.0)
    r = c * mu / s
    # w N(v | μ, S) = α N(v | r, C) exp(½ v²), compared at v = 0
    log_alpha = np.log(w) + norm.logpdf(0.0, mu, np.sqrt(s)) - norm.logpdf(0.0, r, np.sqrt(c))
    points = np.linspace(-3, 3, 7)[:, None]
    clouds = WhitenedClouds(points, np.full(7, 1 / 7), points, np.full(7, 1 / 7))
    model = Likelihood(clouds, parametrisation("diagonal", 2, 1), np.ones(1), 0.0)
    ends, starts = model.terms(np.concatenate([log_alpha, r, np.log(c)]))
    assert isinstance(model.unpack(np.zeros(model.size)), Tilted)
    end = np.log((w * norm.pdf(points, mu, np.sqrt(s))).sum(axis=1))
    start = np.log((w * norm.pdf(points, mu, np.sqrt(s + 1.0))).sum(axis=1))
    assert_allclose(ends + 0.5 * points[:, 0] ** 2, end, atol=1e-12)
    assert_allclose(starts - 0.5 * points[:, 0] ** 2 - 0.5 * np.log(2 * np.pi), start, atol=1e-12)


@pytest.mark.parametrize("ends", ["mixture", "kernel"])
def test_particles_without_weight_do_not_count(ends):
    rng = np.random.default_rng(10)
    clouds = [rng.standard_normal((50, 2)), rng.standard_normal((50, 2)) + 2]
    prior = ensembles.Brownian(diffusion=0.3)
    plain = ensembles.fit_bridge(ensembles.SnapshotSeries.from_arrays([0, 1], clouds), prior, ends=ends, components=2)
    padded = [np.concatenate([cloud, [[50.0, -50.0]] * 70]) for cloud in clouds]
    weights = [np.concatenate([np.ones(50), np.zeros(70)])] * 2
    series = ensembles.SnapshotSeries.from_arrays([0, 1], padded, weights)
    bridge = ensembles.fit_bridge(series, prior, ends=ends, components=2)
    points = rng.standard_normal((5, 2))
    assert_allclose(bridge.log_density(0.5, points), plain.log_density(0.5, points), rtol=1e-10)
