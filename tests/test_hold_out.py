"""Held-out snapshots: predictions, scores, floors, verdicts, and what is refused or dropped."""

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose
from scipy import stats

import ensembles
from ensembles import InputError
from ensembles.assessment.entropy import neighbour_entropy
from ensembles.assessment.floors import replicate_floor, snapshot_floor
from ensembles.assessment.hold_out import HELD_OUT_SCORES, HoldOut
from ensembles.assessment.pairwise import Comparison, multinomial_weights
from ensembles.assessment.predictions import PREDICTIONS, neighbours_of, population_bridge
from ensembles.assessment.profile import Profile
from ensembles.assessment.scores import SCORES, energy_distance, kernel_discrepancy

PRIOR = ensembles.Brownian(diffusion=1.0)


def spreading(n: int = 150, d: int = 1, frames: int = 3, seed: int = 0, **extra) -> ensembles.SnapshotSeries:
    """Particles of X_0 ~ N(0, 1) under the prior, drawn anew for every frame."""
    rng = np.random.default_rng(seed)
    times = np.linspace(0.0, 2.0, frames)
    clouds = [rng.normal(0.0, np.sqrt(1 + 2 * t), size=(n, d)) for t in times]
    return ensembles.SnapshotSeries.from_arrays(times, clouds, **extra)


@pytest.fixture(scope="module")
def held() -> HoldOut:
    return ensembles.hold_out(spreading(d=2), PRIOR, repeats=100)


def test_the_table_has_every_prediction_and_score(held):
    frame = held.to_frame()
    assert list(frame.columns[:5]) == ["time", "prediction", "score", "value", "standard_error"]
    assert set(frame["prediction"]) == {*PREDICTIONS, "floor"}
    assert set(frame["score"]) == set(HELD_OUT_SCORES) == {*SCORES, "log_density"}
    assert np.isfinite(frame[["value", "standard_error"]].to_numpy()).all()
    # Clouds of atoms have no density, everything else has every score.
    without = frame[frame["score"] == "log_density"]["prediction"]
    assert set(without) == {"bridge", "independent", "prior", "floor"}
    assert len(frame) == 7 * 7 - 3


def test_values_are_those_of_the_listed_scores(held):
    series = spreading(d=2)
    for name, cloud in (("earlier", series.clouds[0]), ("later", series.clouds[2])):
        value = held.value(1.0, name, "energy_distance").value
        assert_allclose(value, energy_distance(cloud, series.clouds[1], unbiased=True), rtol=1e-10)
        centred = series.clouds[1] - series.clouds[1].mean(axis=0)
        h = np.sqrt((centred**2).sum(axis=1).mean())
        value = held.value(1.0, name, "kernel_discrepancy").value
        expected = kernel_discrepancy(cloud, series.clouds[1], bandwidth=h, unbiased=True)
        assert_allclose(value, expected, rtol=1e-8, atol=1e-14)
        for score in ("mean_error", "covariance_error", "wasserstein_1", "wasserstein_2"):
            assert_allclose(held.value(1.0, name, score).value, SCORES[score](cloud, series.clouds[1]), rtol=1e-8)
    bridge = ensembles.fit_bridge(series.subset([0, 2]), PRIOR)
    assert_allclose(
        held.value(1.0, "bridge", "log_density").value, bridge.log_density(1.0, series.clouds[1]).mean(), rtol=1e-6
    )


def test_the_bridge_reaches_the_floor_under_the_true_prior_and_not_under_a_wrong_one(held):
    bridge, floor = (held.value(1.0, name, "energy_distance") for name in ("bridge", "floor"))
    assert bridge.value < floor.value + 3 * floor.standard_error
    assert "at the floor" in held.verdict[0]
    wrong = ensembles.hold_out(spreading(d=2), ensembles.Brownian(20.0), repeats=50)
    bridge, floor = (wrong.value(1.0, name, "energy_distance") for name in ("bridge", "floor"))
    assert bridge.value > floor.value + 6 * floor.standard_error
    assert "above the floor" in wrong.verdict[0]


def test_the_verdict_says_when_the_bridge_is_no_better_than_the_earlier_snapshot():
    rng = np.random.default_rng(1)
    still = ensembles.SnapshotSeries.from_arrays([0, 1, 2, 3], [rng.normal(size=(80, 2)) for _ in range(4)])
    found = ensembles.hold_out(still, ensembles.Brownian(0.01), repeats=50)
    assert len(found.verdict) == 3
    assert all("no better than the earlier snapshot" in sentence for sentence in found.verdict)
    assert "Nothing beats the baselines here" in found.verdict[-1]


def test_densities_of_the_baselines_integrate_to_one():
    near = neighbours_of(spreading(n=40), ensembles.OrnsteinUhlenbeck(0.3, 0.0, 1.0), 1)
    x = np.linspace(-25, 25, 4001)[:, None]
    rng = np.random.default_rng(0)
    for name in ("bridge", "independent", "prior"):
        made = PREDICTIONS[name](near, 4000, rng)
        density = np.exp(made.log_density(x))
        assert_allclose(density.sum() * (x[1, 0] - x[0, 0]), 1.0, rtol=1e-6)
        # The cloud is drawn from that density: six standard errors of its mean, three values of the variance.
        mean = (density * x[:, 0]).sum() * (x[1, 0] - x[0, 0])
        assert abs(made.cloud.mean() - mean) < 6 * made.cloud.std() / np.sqrt(4000)


def test_straight_lines_are_the_zero_noise_coupling():
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 4], [[0.0, 10.0], [3.0], [4.0, 20.0]])
    near = neighbours_of(series, PRIOR, 1)
    made = PREDICTIONS["straight"](near, 5, np.random.default_rng(0))
    # 0 -> 4 and 10 -> 20, a quarter of the way.
    assert_allclose(np.sort(made.cloud[:, 0]), [1.0, 12.5])


def test_bootstrap_errors_of_a_comparison_are_those_of_resampled_clouds():
    rng = np.random.default_rng(2)
    x, y = rng.normal(size=(40, 2)), rng.normal(0.7, 1.0, size=(60, 2))
    a, b = np.full(40, 1 / 40), np.full(60, 1 / 60)
    weights = multinomial_weights(a, 3, rng), multinomial_weights(b, 3, rng)
    found = Comparison(x, y, a, b, *weights, 1.0)
    for r in range(3):
        one, other = (
            np.repeat(c, np.rint(w[r] * len(c)).astype(int), axis=0) for c, w in ((x, weights[0]), (y, weights[1]))
        )
        assert_allclose(found.mean_error()[1 + r], SCORES["mean_error"](one, other), rtol=1e-9)
        assert_allclose(found.covariance_error()[1 + r], SCORES["covariance_error"](one, other), rtol=1e-9)
        values = energy_distance(x, y, weights=(weights[0][r], weights[1][r]), unbiased=True)
        assert_allclose(found.energy_distance()[1 + r], values, rtol=1e-9)


def test_wasserstein_error_is_the_scatter_between_samples():
    # Between N(0,1) and N(2,1) on a line W1 = 2 and its error over samples is √(2/n).
    n, rng = 100, np.random.default_rng(3)
    values, errors = [], []
    for _ in range(60):
        x, y, w = rng.normal(size=(n, 1)), rng.normal(2.0, 1.0, size=(n, 1)), np.full(n, 1 / n)
        value, error = Comparison(x, y, w, w, w[None], w[None], 1.0).wasserstein(1, n, rng)
        values.append(value)
        errors.append(error)
    assert_allclose(np.mean(errors), np.sqrt(2 / n), rtol=0.15)
    # A standard deviation of 60 values is known to 9 %.
    assert_allclose(np.mean(errors), np.std(values, ddof=1), rtol=4 * 0.09)


def test_the_floor_is_that_of_a_second_snapshot():
    rng = np.random.default_rng(4)
    n, repeats = 60, 300
    second = [energy_distance(rng.normal(size=n), rng.normal(size=n), unbiased=True) for _ in range(repeats)]
    cloud = stats.norm.ppf((np.arange(n) + 0.5) / n)[:, None]
    names = ("energy_distance", "mean_error", "wasserstein_1")
    found = snapshot_floor(cloud, np.full(n, 1 / n), names, size=n, bandwidth=1.0, repeats=repeats, rng=rng)
    assert abs(found["energy_distance"][0]) < 5 * np.std(second) / np.sqrt(repeats)
    assert_allclose(found["energy_distance"][1], np.std(second, ddof=1), rtol=0.35)
    # |mean - mean'| of two samples is √(2/n) times a half-normal of mean √(2/π).
    assert_allclose(found["mean_error"][0], np.sqrt(2 / n) * np.sqrt(2 / np.pi), rtol=0.2)


def test_replicates_give_the_floor():
    rng = np.random.default_rng(5)
    clouds = [rng.normal(0.0, np.sqrt(1 + 2 * t), size=(60, 1)) for t in (0.0, 1.0, 2.0)]
    plates = [np.repeat(["a", "b", "c"], 20) for _ in clouds]
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], clouds, features={"plate": plates})
    found = ensembles.hold_out(series, PRIOR, replicates="plate", repeats=20)
    floor = found.value(1.0, "floor", "energy_distance")
    groups = [
        energy_distance(clouds[1][plates[1] == name], clouds[1][plates[1] != name], unbiased=True) for name in "abc"
    ]
    assert_allclose([floor.value, floor.standard_error], [np.mean(groups), np.std(groups, ddof=1)], rtol=1e-9)
    assert replicate_floor(clouds[1], np.full(60, 1 / 60), np.repeat("a", 60), ("mean_error",), 1.0) == {}


@pytest.mark.parametrize("d", [1, 2, 5])
def test_nearest_neighbour_entropy(d):
    # ½ log(2πe σ²) for a normal, log of the volume for a box, 1 + log 2 for a Laplace coordinate.
    rng = np.random.default_rng(6)
    for draw, exact in (
        (lambda n: rng.normal(0.0, 3.0, size=(n, d)), d * 0.5 * np.log(2 * np.pi * np.e * 9.0)),
        (lambda n: rng.laplace(size=(n, d)), d * (1 + np.log(2))),
    ):
        found = neighbour_entropy(draw(2000))
        assert abs(found.value - exact) < 4 * found.error
        assert found.error < 0.03 * np.sqrt(d) + 0.02 * d
    wide, narrow = neighbour_entropy(rng.normal(size=(2000, d))), neighbour_entropy(0.5 * rng.normal(size=(2000, d)))
    assert wide.value - narrow.value > 6 * wide.error or d == 1


def test_one_seed_one_result_and_nothing_changes_its_input():
    series = spreading(n=40)
    before = series.fingerprint()
    frames = [ensembles.hold_out(series, PRIOR, repeats=5, rng=seed).to_frame() for seed in (3, 3, 4)]
    pd.testing.assert_frame_equal(frames[0], frames[1])
    assert not frames[0].equals(frames[2])
    assert series.fingerprint() == before


def test_large_clouds_are_cut_and_still_scored(monkeypatch):
    monkeypatch.setattr("ensembles.assessment.hold_out.MATRIX_LIMIT", 50)
    found = ensembles.hold_out(spreading(n=120), PRIOR, repeats=10, draws=200)
    assert len(found.times[0].observed) == 50
    assert np.isfinite(found.value(1.0, "bridge", "energy_distance").value)


def test_small_snapshots_drop_scores_and_say_which():
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], [[0.0, 1.0], [0.4], [1.0, 2.0]])
    found = ensembles.hold_out(series, PRIOR, repeats=5)
    scores, floor = found.dropped[:-1], found.dropped[-1]
    assert {sentence.split()[0] for sentence in scores} == {"energy_distance", "kernel_discrepancy", "covariance_error"}
    assert all("time = 1: it needs 2 particles and there is 1" in sentence for sentence in scores)
    assert "the floor of log_density at time = 1 was dropped: the entropy of a cloud needs more particles" in floor
    assert set(found.to_frame()["score"]) == {"wasserstein_1", "wasserstein_2", "mean_error", "log_density"}
    same = ensembles.SnapshotSeries.from_arrays([0, 1, 2], [[0.0, 1.0], [0.4, 0.4], [1.0, 2.0]])
    assert "all its particles are at one place" in ensembles.hold_out(same, PRIOR, repeats=5).dropped[0]
    rng = np.random.default_rng(0)
    clouds = [rng.normal(size=20) for _ in range(3)]
    weighted = ensembles.SnapshotSeries.from_arrays([0, 1, 2], clouds, [None, np.arange(1.0, 21.0), None])
    found = ensembles.hold_out(weighted, PRIOR, repeats=5)
    assert [s for s in found.dropped if "the weights are not equal, and nearest neighbours do not see weights" in s]
    assert "log_density" not in set(found.to_frame().query("prediction == 'floor'")["score"])
    # Particles of weight 0 are not there: equal weights beside them leave the floor of the rest.
    half = ensembles.SnapshotSeries.from_arrays([0, 1, 2], clouds, [None, np.repeat([1.0, 0.0], 10), None])
    alone = ensembles.SnapshotSeries.from_arrays([0, 1, 2], [clouds[0], clouds[1][:10], clouds[2]])
    floors = [ensembles.hold_out(s, PRIOR, repeats=5).value(1.0, "floor", "log_density").value for s in (half, alone)]
    assert_allclose(floors[0], floors[1], rtol=1e-12)


def test_bad_input_is_refused():
    two = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [1.0, 2.0]])
    with pytest.raises(
        InputError, match=r"holding out needs three snapshots; the series has 2, at 0 and 1.*prior_check"
    ):
        ensembles.hold_out(two, PRIOR)
    three = spreading(n=10)
    with pytest.raises(InputError, match=r"'energy' \(did you mean 'energy_distance'\?\)"):
        ensembles.hold_out(three, PRIOR, scores=["energy"])
    for scores in ("energy_distance", []):
        with pytest.raises(InputError, match=r"scores must be a list of names; it is"):
            ensembles.hold_out(three, PRIOR, scores=scores)
    with pytest.raises(InputError, match=r"repeats must be a whole number of at least 2; it is 1"):
        ensembles.hold_out(three, PRIOR, repeats=1)
    with pytest.raises(InputError, match=r"draws must be a whole number of at least 2; it is 0"):
        ensembles.hold_out(three, PRIOR, draws=0)
    with pytest.raises(InputError, match=r"unknown feature of the series; 'plate'"):
        ensembles.hold_out(three, PRIOR, replicates="plate")
    with pytest.raises(InputError, match=r"prior must be a prior of this package; it is float"):
        ensembles.hold_out(three, 0.5)
    found = ensembles.hold_out(three, PRIOR, scores=["mean_error"], repeats=5)
    with pytest.raises(InputError, match=r"no such score; time 1, prediction 'bridge', score 'log_density'"):
        found.value(1.0, "bridge", "log_density")
    with pytest.raises(InputError, match=r"needs more particles; it has 3"):
        neighbour_entropy(np.zeros((3, 1)))
    with pytest.raises(InputError, match=r"needs a spread in every direction"):
        neighbour_entropy(np.zeros((30, 2)))
    with pytest.raises(InputError, match=r"needs distinct positions; particle 0 has 3 or more duplicates"):
        neighbour_entropy(np.repeat(np.arange(10.0), 4)[:, None])


def test_growth_up_to_the_left_out_time_counts_and_later_growth_does_not():
    # Two far groups of 200; one of them quadruples over a time of 1: at its middle it is twice the other.
    rng = np.random.default_rng(0)
    group = lambda n, at: rng.normal(at, 1.0, n)  # noqa: E731
    clouds = [np.concatenate([group(n, -20), group(m, 20)]) for n, m in ((200, 200), (100, 200), (80, 320))]
    rates = [np.where(cloud > 0, np.log(4.0), 0.0) for cloud in clouds]
    series = ensembles.SnapshotSeries.from_arrays([0.0, 0.5, 1.0], clouds, features={"r": rates})
    grown = series.with_growth(ensembles.Growth("r"))
    prior = ensembles.Brownian(diffusion=0.1)
    near = neighbours_of(grown, prior, 1)
    drawn = near.bridge.sample(0.5, 20_000, rng=1)
    # Six standard errors of a share of 20,000 draws.
    assert abs((drawn > 0).mean() - 2 / 3) < 6 * np.sqrt(2 / 9 / 20_000)
    x = np.linspace(-30, 30, 6001)
    density = np.exp(near.bridge.log_density(0.5, x))
    assert_allclose([density.sum() * 0.01, density[x > 0].sum() * 0.01], [1.0, 2 / 3], rtol=1e-5)
    # Negative control: the histories that reach the last snapshot are 4/5 of the growing group.
    histories = ensembles.fit_bridge(grown.subset([0, 2]), prior)
    assert abs(np.exp(histories.log_density(0.5, x[x > 0])).sum() * 0.01 - 0.8) < 1e-5
    # Without growth nothing is changed, and the profile of the noise sees the same population.
    plain = ensembles.fit_bridge(series.subset([0, 2]), prior)
    assert population_bridge(plain, 0.5) is plain
    profile = Profile(grown, prior, {"diffusion": np.array([0.1])}, tolerance=1e-6)
    assert_allclose(profile.log_densities((0,), 1), near.bridge.log_density(0.5, clouds[1]), rtol=1e-9)
