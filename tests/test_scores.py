"""Scores against independent values, and their laws on every listed score."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.testing import assert_allclose
from scipy import stats
from scipy.spatial.distance import cdist

import ensembles.assessment.scores as scores_module
from ensembles import InputError
from ensembles.assessment.resampling import resampled_scores, resampling_error, resampling_floor
from ensembles.assessment.scores import (
    SCORES,
    covariance_error,
    energy_distance,
    kernel_discrepancy,
    mean_error,
    pooled_bandwidth,
    wasserstein_1,
    wasserstein_2,
)

each_score = pytest.mark.parametrize("score", SCORES.values(), ids=SCORES.keys())
seeds = st.integers(min_value=0, max_value=2**32 - 1)


def clouds(seed: int, n: int = 30, m: int = 40, d: int = 3) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng.normal(size=(n, d)), rng.normal(1.0, 2.0, size=(m, d)), rng.uniform(size=n), rng.uniform(size=m)


@given(
    x=arrays(float, st.integers(1, 12), elements=st.floats(-100, 100)),
    y=arrays(float, st.integers(1, 12), elements=st.floats(-100, 100)),
    seed=seeds,
)
def test_on_a_line_it_is_the_square_of_the_one_in_scipy(x, y, seed):
    # scipy.stats.energy_distance is sqrt(2 E|X-Y| - E|X-X'| - E|Y-Y'|), from distribution functions, not from pairs.
    rng = np.random.default_rng(seed)
    a, b = rng.uniform(0.1, 1.0, x.size), rng.uniform(0.1, 1.0, y.size)
    expected = stats.energy_distance(x, y, a, b) ** 2
    assert_allclose(energy_distance(x, y, weights=(a, b)), expected, rtol=1e-9, atol=1e-11)


def test_value_in_the_plane_by_hand():
    # From (0, 0) to (3, 4) and to (0, 0): mean 2.5; within the second cloud (0 + 5 + 5 + 0) / 4 = 2.5.
    x, y = [[0.0, 0.0]], [[3.0, 4.0], [0.0, 0.0]]
    assert energy_distance(x, y) == 2 * 2.5 - 0 - 2.5


def test_gaussians_on_a_line_against_the_closed_form():
    # For N(0,1) and N(μ,1): E|X-X'| = 2/√π, and X-Y ~ N(-μ, 2) is folded normal (integral of the definition).
    shift, n = 1.0, 4000
    grid = (np.arange(n) + 0.5) / n
    x, y = stats.norm.ppf(grid), stats.norm.ppf(grid, loc=shift)
    crossed = 2 / np.sqrt(np.pi) * np.exp(-(shift**2) / 4) + shift * (1 - 2 * stats.norm.cdf(-shift / np.sqrt(2)))
    # Midpoint quantiles carry an error of order 1/n in the tails.
    assert_allclose(energy_distance(x, y), 2 * crossed - 4 / np.sqrt(np.pi), rtol=5 / n)


@pytest.mark.parametrize("unbiased", [False, True])
def test_tiles_do_not_change_it(monkeypatch, unbiased):
    x, y, a, b = clouds(0, 50, 70)
    whole = energy_distance(x, y, weights=(a, b), unbiased=unbiased)
    a, b = a / a.sum(), b / b.sum()
    within_x, within_y = a @ cdist(x, x) @ a, b @ cdist(y, y) @ b
    if unbiased:
        within_x, within_y = within_x / (1 - a @ a), within_y / (1 - b @ b)
    assert_allclose(whole, 2 * a @ cdist(x, y) @ b - within_x - within_y, rtol=1e-12)
    monkeypatch.setattr(scores_module, "_TILE_ROWS", 7)
    monkeypatch.setattr(scores_module, "_TILE_COLUMNS", 11)
    assert_allclose(energy_distance(x, y, weights=(a, b), unbiased=unbiased), whole, rtol=1e-12)


def test_unbiased_has_mean_zero_for_equal_laws_and_the_plain_one_its_known_mean():
    rng = np.random.default_rng(3)
    n, m, repeats = 5, 20, 4000
    plain, unbiased = np.empty((2, repeats))
    for r in range(repeats):
        x, y = rng.normal(size=n), rng.normal(size=m)
        plain[r], unbiased[r] = energy_distance(x, y), energy_distance(x, y, unbiased=True)
    error = unbiased.std(ddof=1) / np.sqrt(repeats)
    assert abs(unbiased.mean()) < 5 * error
    # E|X-X'| = 2/√π for standard normals; the mean of the V-statistic is (1/n + 1/m) E|X-X'|.
    assert abs(plain.mean() - (1 / n + 1 / m) * 2 / np.sqrt(np.pi)) < 5 * plain.std(ddof=1) / np.sqrt(repeats)
    assert plain.mean() > 50 * error  # so the first line could have failed


@each_score
@given(seed=seeds)
def test_symmetric_and_zero_for_equal_clouds(score, seed):
    x, y, a, b = clouds(seed)
    assert_allclose(score(x, y, weights=(a, b)), score(y, x, weights=(b, a)), rtol=1e-10)
    assert score(x, y, weights=(a, b)) > 0
    assert_allclose(score(x, x, weights=(a, a)), 0.0, atol=1e-12)
    order = np.random.default_rng(seed).permutation(len(x))
    assert_allclose(score(x, x[order], weights=(a, a[order])), 0.0, atol=1e-12)


@each_score
@given(seed=seeds, scale=st.floats(1e-3, 1e3))
def test_rigid_motion_and_change_of_unit(score, seed, scale):
    x, y, a, b = clouds(seed)
    rotation = stats.special_ortho_group.rvs(3, random_state=np.random.default_rng(seed))
    value, moved = score(x, y, weights=(a, b)), score(x @ rotation + 5.0, y @ rotation + 5.0, weights=(a, b))
    assert_allclose(moved, value, rtol=1e-7)
    power = {"covariance_error": 2, "kernel_discrepancy": 0}.get(score.__name__, 1)  # of the unit of length
    assert_allclose(score(scale * x, scale * y, weights=(a, b)), scale**power * value, rtol=1e-9)
    assert_allclose(score(x, y, weights=(scale * a, b)), value, rtol=1e-9)


@each_score
@given(seed=seeds)
def test_weights_are_repeated_points_and_weight_zero_is_absence(score, seed):
    x, y, *_ = clouds(seed)
    counts = np.random.default_rng(seed).integers(0, 4, size=len(x))
    counts[0] = 1
    assert_allclose(score(x, y, weights=(counts, None)), score(np.repeat(x, counts, axis=0), y), rtol=1e-9)


def test_mean_and_covariance_errors_are_those_of_numpy():
    x, y, a, b = clouds(4)
    assert_allclose(
        mean_error(x, y, weights=(a, b)),
        np.linalg.norm(np.average(x, axis=0, weights=a) - np.average(y, axis=0, weights=b)),
    )
    first, second = (np.cov(c, rowvar=False, aweights=w, ddof=0) for c, w in ((x, a), (y, b)))
    assert_allclose(covariance_error(x, y, weights=(a, b)), np.linalg.norm(first - second))


def test_resampling_error_of_the_mean_is_that_of_theory():
    n, repeats = 200, 2000
    y = np.random.default_rng(5).normal(size=n)
    error = resampling_error([50.0], y, score=mean_error, repeats=repeats, rng=1)
    # Far away the mean error is linear in the mean: its bootstrap variance is exactly Σ(y - ȳ)²/n², and a standard
    # deviation from B draws has relative error 1/sqrt(2B).
    assert_allclose(error, y.std() / np.sqrt(n), rtol=5 / np.sqrt(2 * repeats))


def test_resampling_error_of_a_weighted_mean_is_that_of_theory():
    n, repeats = 300, 2000
    rng = np.random.default_rng(6)
    y, b = rng.normal(size=n), rng.uniform(0.5, 1.5, size=n)
    b[:50] = 0.0
    error = resampling_error([50.0], y, score=mean_error, weights=(None, b), repeats=repeats, rng=1)
    share = b / b.sum()
    # Ratio estimator, by the delta method: Var = Σ w_i² (y_i - ȳ_w)², next order 1/n.
    expected = np.sqrt(np.sum(share**2 * (y - share @ y) ** 2))
    assert_allclose(error, expected, rtol=5 / np.sqrt(2 * repeats) + 2 / 250)


def test_resampling_error_of_the_energy_distance_is_that_of_fresh_samples():
    n, repeats = 100, 400
    rng = np.random.default_rng(7)
    draw = lambda: (rng.normal(size=(n, 2)), rng.normal(1.5, 1.0, size=(n, 2)))  # noqa: E731
    fresh = np.std([energy_distance(*draw()) for _ in range(repeats)], ddof=1)
    found = np.array([resampling_error(*draw(), repeats=100, rng=k) for k in range(20)])
    # The true spread has relative error 1/sqrt(2·400); the mean of 20 bootstrap errors its own.
    allowed = 4 * np.hypot(fresh / np.sqrt(2 * repeats), found.std(ddof=1) / np.sqrt(20))
    assert abs(found.mean() - fresh) < allowed
    assert allowed < 0.3 * fresh


def test_one_seed_resamples_the_observed_cloud_alike_for_every_prediction():
    x, y, *_ = clouds(8)
    draws = [resampled_scores(x + shift, y, score=mean_error, resampled="observed", rng=2) for shift in (50.0, 60.0)]
    # All coordinates shift by 10, far from the observed cloud, so each pair of draws differs by nearly 10 sqrt(3).
    assert_allclose(draws[1] - draws[0], 10 * np.sqrt(3), rtol=1e-3)
    assert draws[0].std() > 100 * (draws[1] - draws[0]).std()


@pytest.mark.parametrize("resampled", ["predicted", "observed"])
def test_the_other_cloud_is_taken_as_exact(resampled):
    cloud = np.random.default_rng(9).normal(size=(50, 2))
    lone = {"predicted": ([[9.0, 9.0]], cloud), "observed": (cloud, [[9.0, 9.0]])}[resampled]
    assert resampled_scores(*lone, resampled=resampled, repeats=5).std() < 1e-14
    assert resampled_scores(*lone[::-1], resampled=resampled, repeats=5).std() > 1e-3


def test_floor_is_what_fresh_samples_of_one_law_score():
    rng = np.random.default_rng(10)
    n, count = 400, 100
    cloud = rng.normal(size=n)
    floor = resampling_floor(cloud, count=count, repeats=400, rng=3)
    fresh = np.array([energy_distance(rng.normal(size=count), rng.normal(size=n)) for _ in range(400)])
    error = np.hypot(floor.std(ddof=1), fresh.std(ddof=1)) / np.sqrt(400)
    # The cloud stands for the law: its E|X-X'| is that of the law to 1/sqrt(n) relative (delta method, sd below 1).
    assert abs(floor.mean() - fresh.mean()) < 5 * error + 3 * fresh.mean() / np.sqrt(n)
    assert stats.ks_2samp(floor, fresh).pvalue > 1e-4
    shifted = [energy_distance(rng.normal(0.5, 1.0, size=count), rng.normal(size=n)) for _ in range(100)]
    assert stats.ks_2samp(floor, shifted).pvalue < 1e-10


def test_floor_draws_by_weight():
    floor = resampling_floor([[0.0], [1.0], [7.0]], weights=[0, 0, 2.0], repeats=20)
    assert_allclose(floor, 0.0, atol=1e-14)
    assert resampling_floor([[0.0], [1.0], [7.0]], weights=[1, 0, 2.0], repeats=20).max() > 0.1


def test_one_seed_one_result():
    x, y, *_ = clouds(11)
    assert_allclose(resampled_scores(x, y, rng=4), resampled_scores(x, y, rng=np.random.default_rng(4)), rtol=0)
    assert_allclose(resampling_floor(y, rng=4), resampling_floor(y, rng=4), rtol=0)
    assert not np.array_equal(resampled_scores(x, y, rng=4), resampled_scores(x, y, rng=5))


@each_score
@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (([[0.0]], [[0.0, 1.0]], (None, None)), r"observed has the wrong dimension; it has 2 .* 1 are expected"),
        (([[0.0]], [[np.nan]], (None, None)), r"observed must be finite; observed\[0, 0\] = nan"),
        (([[0.0]], [[1.0], [2.0]], (None, [1.0, -2.0])), r"non-negative; weights\[1\]\[1\] = -2"),
        (([[0.0]], [[1.0], [2.0]], ([0.0], None)), r"must not all be zero; .* weights\[0\]"),
        (([[0.0]], [[1.0], [2.0]], [1.0]), r"weights must be a pair.*list"),
        (([], [[1.0]], (None, None)), r"predicted is empty"),
    ],
)
def test_bad_clouds_are_refused(score, arguments, message):
    predicted, observed, weights = arguments
    with pytest.raises(InputError, match=message):
        score(predicted, observed, weights=weights)


def test_bad_resampling_is_refused():
    with pytest.raises(InputError, match=r"repeats must be a whole number of at least 2; it is 1"):
        resampling_error([0.0], [1.0], repeats=1)
    with pytest.raises(InputError, match=r"repeats must be a whole number of at least 2; it is 0"):
        resampling_floor([0.0], repeats=0)
    with pytest.raises(InputError, match=r"count must be a whole number of at least 1; it is 0"):
        resampling_floor([0.0], count=0)
    with pytest.raises(InputError, match=r"'observe' \(did you mean 'observed'\?\)"):
        resampling_error([0.0], [1.0], resampled="observe")
    with pytest.raises(InputError, match=r"the observed one has 1 of positive weight"):
        energy_distance([0.0, 1.0], [1.0, 2.0], weights=(None, [1.0, 0.0]), unbiased=True)


@settings(max_examples=20)
@given(seed=seeds)
def test_nothing_changes_its_input(seed):
    x, y, a, b = clouds(seed)
    copies = [array.copy() for array in (x, y, a, b)]
    energy_distance(x, y, weights=(a, b))
    resampling_error(x, y, weights=(a, b), repeats=2)
    for array, copy in zip((x, y, a, b), copies):
        assert_allclose(array, copy, rtol=0)


@given(seed=seeds)
def test_wasserstein_on_a_line_is_that_of_scipy_and_of_pot(seed):
    import ot

    rng = np.random.default_rng(seed)
    x, y, a, b = rng.normal(size=20), rng.normal(1.0, 2.0, size=30), rng.uniform(size=20), rng.uniform(size=30)
    expected = stats.wasserstein_distance(x, y, a, b)
    assert_allclose(wasserstein_1(x, y, weights=(a, b)), expected, rtol=1e-9)
    cost = cdist(x[:, None], y[:, None])
    assert_allclose(wasserstein_1(x, y, weights=(a, b)), ot.emd2(a / a.sum(), b / b.sum(), cost), rtol=1e-9)
    squared = ot.emd2(a / a.sum(), b / b.sum(), cost**2)
    assert_allclose(wasserstein_2(x, y, weights=(a, b)), np.sqrt(squared), rtol=1e-7)


def test_wasserstein_in_space_is_that_of_an_assignment():
    from scipy.optimize import linear_sum_assignment

    rng = np.random.default_rng(8)
    x, y = rng.normal(size=(40, 3)), rng.normal(1.0, 2.0, size=(40, 3))
    for score, power in ((wasserstein_1, 1), (wasserstein_2, 2)):
        cost = cdist(x, y) ** power
        rows, columns = linear_sum_assignment(cost)
        assert_allclose(score(x, y), cost[rows, columns].mean() ** (1 / power), rtol=1e-9)


def test_large_clouds_give_wasserstein_with_an_error(monkeypatch):
    from ensembles.assessment import transport

    rng = np.random.default_rng(9)
    x, y = rng.normal(size=(400, 2)), rng.normal(size=(400, 2)) + 2.0
    exact = wasserstein_1(x, y)
    monkeypatch.setattr(transport, "EXACT_LIMIT", 300)
    monkeypatch.setattr(transport, "_PART_SIZE", 150)
    w = np.full(400, 1 / 400)
    found = transport.wasserstein(x, y, w, w, order=1)
    assert not found.exact
    assert found.error > 0
    # Subsamples of 150 lie above the whole on average, by far less than the shift of 2√2.
    assert abs(found.value - exact) < 6 * found.error + 0.2
    assert transport.wasserstein(x, y, w, w, order=1) == found


@given(seed=seeds)
def test_kernel_discrepancy_is_that_of_scikit_learns_kernel(seed):
    from sklearn.metrics.pairwise import rbf_kernel

    x, y, a, b = clouds(seed)
    a, b, h = a / a.sum(), b / b.sum(), 1.7
    gamma = 0.5 / h**2  # scikit-learn's rbf_kernel is exp(-γ|x - y|²)
    kxx, kyy, kxy = rbf_kernel(x, gamma=gamma), rbf_kernel(y, gamma=gamma), rbf_kernel(x, y, gamma=gamma)
    expected = a @ kxx @ a + b @ kyy @ b - 2 * a @ kxy @ b
    assert_allclose(kernel_discrepancy(x, y, weights=(a, b), bandwidth=h), expected, rtol=1e-8, atol=1e-14)
    for kernel in (kxx, kyy):
        np.fill_diagonal(kernel, 0.0)
    unbiased = a @ kxx @ a / (1 - a @ a) + b @ kyy @ b / (1 - b @ b) - 2 * a @ kxy @ b
    found = kernel_discrepancy(x, y, weights=(a, b), bandwidth=h, unbiased=True)
    assert_allclose(found, unbiased, rtol=1e-8, atol=1e-14)


def test_the_bandwidth_is_the_root_mean_square_spread():
    x, y, a, b = clouds(10)
    traces = [np.trace(np.cov(c, rowvar=False, aweights=w, ddof=0)) for c, w in ((x, a), (y, b))]
    assert_allclose(pooled_bandwidth(x, y, weights=(a, b)), np.sqrt(np.mean(traces)))
    with pytest.raises(InputError, match=r"needs a bandwidth; each cloud is a single place"):
        kernel_discrepancy([0.0, 0.0], [1.0])
    with pytest.raises(InputError, match=r"bandwidth must be positive and finite; it is -1"):
        kernel_discrepancy([0.0, 2.0], [1.0], bandwidth=-1)
