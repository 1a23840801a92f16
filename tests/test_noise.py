"""The noise level that the data support: profile, choice, interval, warnings, and what is refused."""

from itertools import product

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose

import ensembles
from ensembles import InputError
from ensembles.assessment.interval import largest_loss, profile_interval
from ensembles.assessment.noise import NoiseProfile
from ensembles.assessment.parameters import with_parameters
from ensembles.assessment.profile import climb, quadratic_around

DIFFUSION = 0.5
LEVELS = DIFFUSION * 2.0 ** np.arange(-4, 5)


def two_blobs(n: int = 120, frames: int = 3, seed: int = 0, prior=None, d: int = 1) -> ensembles.SnapshotSeries:
    """Two groups that spread under the prior with D = 0.5, drawn anew for every frame."""
    rng = np.random.default_rng(seed)
    prior = prior or ensembles.Brownian(DIFFUSION)
    times = np.linspace(0.0, 2.0, frames)
    clouds = []
    for t in times:
        start = np.where(rng.random((n, 1)) < 0.5, -1.0, 1.0) + 0.4 * rng.normal(size=(n, d))
        clouds.append(start if t == 0 else prior.transition(t, d).sample(start, rng))
    return ensembles.SnapshotSeries.from_arrays(times, clouds)


@pytest.fixture(scope="module")
def profile() -> NoiseProfile:
    return ensembles.choose_noise(two_blobs(), ensembles.Brownian(9.0), LEVELS, repeats=30)


def test_the_true_level_is_found_and_wrong_ones_are_refused(profile):
    # Within a factor of two, the step of the grid; the profile is a broad one for a single left-out snapshot.
    assert 0.5 <= profile.best["diffusion"] / DIFFUSION <= 2
    low, high = profile.interval["diffusion"]
    assert low < DIFFUSION < high
    assert LEVELS[0] < low < profile.estimate["diffusion"] < high < LEVELS[-1]
    # Negative control: levels sixteen times off are worse beyond their noise.
    for level in (profile.levels[0], profile.levels[-1]):
        assert level.deficit > 2 * level.deficit_error
    assert not any("flat" in sentence for sentence in profile.warnings)
    assert any("one left-out snapshot only" in sentence for sentence in profile.warnings)


def test_the_table_holds_the_scores(profile):
    frame = profile.to_frame()
    assert_allclose(frame["diffusion"], LEVELS)
    series = two_blobs()
    for level in profile.levels:
        bridge = ensembles.fit_bridge(series.subset([0, 2]), ensembles.Brownian(level.values["diffusion"]))
        assert_allclose(level.log_score, bridge.log_density(1.0, series.clouds[1]).mean(), rtol=1e-4)
    assert frame["best"].sum() == frame["smallest_within_error"].sum() == 1
    assert frame.loc[frame["best"], "deficit"].item() == 0
    # The rule, again: the smallest level whose deficit is within its error.
    within = frame[frame["deficit"] <= frame["deficit_error"]]
    assert profile.smallest_within_error["diffusion"] == within["diffusion"].min()
    assert (frame["energy_distance"].iloc[-1] - frame["energy_distance"].iloc[4]) > 3 * frame[
        "energy_distance_error"
    ].iloc[-1]


def test_errors_of_the_log_score_are_those_of_a_mean(profile):
    series = two_blobs()
    bridge = ensembles.fit_bridge(series.subset([0, 2]), ensembles.Brownian(DIFFUSION))
    logs = bridge.log_density(1.0, series.clouds[1])
    # A standard deviation of 30 resamples is known to 13 %.
    assert_allclose(profile.levels[4].log_score_error, logs.std() / np.sqrt(len(logs)), rtol=4 * 0.13)


def test_the_rate_and_the_diffusion_of_a_trap_jointly():
    truth = ensembles.OrnsteinUhlenbeck(1.0, 0.0, DIFFUSION)
    series = two_blobs(n=150, frames=4, prior=truth)
    levels = {"rate": [0.25, 1.0, 4.0], "diffusion": [0.125, 0.5, 2.0]}
    found = ensembles.choose_noise(series, ensembles.OrnsteinUhlenbeck(3.0, 0.0, 3.0), levels, repeats=10)
    assert found.best == {"rate": 1.0, "diffusion": 0.5}
    assert len(found.levels) == 9
    assert set(found.interval) == {"rate", "diffusion"}
    assert found.resampled.shape == (10, 2)
    apart = abs(np.corrcoef(np.log(found.resampled).T)[0, 1]) <= 0.8
    assert apart != any("told together rather than apart" in sentence for sentence in found.warnings)
    assert not any("one left-out snapshot" in sentence for sentence in found.warnings)


def test_coarse_levels_are_said_to_be_coarse():
    found = ensembles.choose_noise(two_blobs(n=400, frames=4), ensembles.Brownian(1.0), [0.01, 0.5, 25.0], repeats=5)
    assert any("too coarse for its interval" in sentence for sentence in found.warnings)


def test_a_flat_profile_is_said_to_be_flat():
    rng = np.random.default_rng(0)
    # Starts and ends sit on two far places each; what happened at half time hardly depends on a tiny D.
    clouds = [rng.normal(size=(12, 1)) for _ in range(3)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], clouds)
    found = ensembles.choose_noise(series, ensembles.Brownian(1.0), [0.4, 0.45, 0.5, 0.55], repeats=20)
    assert any(sentence.startswith("flat profile") for sentence in found.warnings)
    assert any("the data do not bound diffusion from" in sentence for sentence in found.warnings)


def test_the_result_depends_on_the_seed_alone():
    series = two_blobs(n=60)
    frames = []
    for seed, workers in ((1, 1), (1, 2), (2, 1)):
        found = ensembles.choose_noise(series, ensembles.Brownian(1.0), LEVELS, repeats=4, workers=workers, rng=seed)
        frames.append((found.to_frame(), found.resampled))
    pd.testing.assert_frame_equal(frames[0][0], frames[1][0])
    assert_allclose(frames[0][1], frames[1][1], rtol=0)
    assert not np.array_equal(frames[0][1], frames[2][1])


def test_a_quadratic_is_found_exactly():
    axes = [np.array([0.0, 1.0, 2.5, 3.0, 4.0]), np.array([-1.0, 0.0, 2.0, 3.0])]
    hessian = np.array([[-2.0, 0.7], [0.7, -1.5]])
    centre = np.array([2.2, 0.4])

    def score(cell):
        z = np.array([axis[i] for axis, i in zip(axes, cell)]) - centre
        return 5.0 + 0.5 * z @ hessian @ z

    cells = list(product(range(5), range(4)))
    for start in ((0, 0), (4, 3), (0, 3)):
        assert climb(score, start, (5, 4)) == max(cells, key=score) == (2, 1)
    top = quadratic_around(score, (2, 1), axes)
    assert_allclose(top.maximum(), centre, atol=1e-10)
    assert_allclose(top.at(centre), 5.0, atol=1e-10)
    # At an edge there is nothing to interpolate across.
    assert quadratic_around(score, (4, 1), axes).maximum()[0] == 4.0


def test_the_interval_is_where_the_profile_loses_less_than_allowed():
    axis = np.linspace(-3.0, 3.0, 25)
    # A loss of ½ z² is 0.5 at ±1; values on a plain scale, since some levels are negative.
    found = profile_interval({"centre": axis}, np.array([0.0]), 0.0, -0.5 * axis**2, 0.5)
    assert_allclose(found["centre"], (-1.0, 1.0), atol=1e-12)
    assert profile_interval({"centre": axis}, np.array([0.0]), 0.0, -0.5 * axis**2, 50.0)["centre"] == (-3.0, 3.0)


@pytest.mark.parametrize("repeats", [10, 30, 100])
def test_one_more_resample_stays_below_the_largest_loss_at_its_rate(repeats):
    # The chance that a new uniform number lies below an order statistic is that statistic itself.
    draws = np.random.default_rng(repeats).random((4000, repeats))
    chances = [largest_loss(row) for row in draws]
    assert_allclose(np.mean(chances), 0.9, atol=4 * np.std(chances) / np.sqrt(4000))


def test_parameters_are_replaced_or_scaled():
    assert with_parameters(ensembles.Brownian(1.0), {"diffusion": 3.0}).diffusion == 3.0
    matrix = with_parameters(ensembles.Brownian([[1.0, 0.2], [0.2, 3.0]]), {"diffusion": 1.0})
    assert_allclose(matrix.diffusion, [[0.5, 0.1], [0.1, 1.5]])
    with pytest.raises(InputError, match=r"drift cannot be scaled; its mean over the axes is 0"):
        with_parameters(ensembles.Brownian(1.0, drift=[1.0, -1.0]), {"drift": 2.0})


@pytest.mark.parametrize(
    ("levels", "options", "message"),
    [
        (
            [0.1, 0.2, 0.4],
            {"parameter": "rate"},
            r"unknown parameter of the prior 'brownian'; 'rate'.*diffusion, drift",
        ),
        ({"difusion": [1, 2, 3]}, {}, r"'difusion' \(did you mean 'diffusion'\?\)"),
        ([-0.1, 0.2, 0.4], {}, r"levels of diffusion must be positive; levels\[0\] = -0.1"),
        ([0.0, 0.2, 0.4], {}, r"levels of diffusion must be positive; levels\[0\] = 0"),
        ([0.4, 0.2, 0.1], {}, r"must increase; levels\[0\] = 0.4 is followed by 0.2"),
        ([0.4, 0.5], {}, r"at least three numbers; their shape is \(2,\)"),
        ([0.4, np.nan, 1.0], {}, r"must be finite; levels of diffusion\[1\] = nan"),
        ({}, {}, r"for one or two parameters; they are for 0 \(none\)"),
        ([0.1, 0.2, 0.4], {"repeats": 1}, r"repeats must be a whole number of at least 2; it is 1"),
        ([0.1, 0.2, 0.4], {"workers": 0, "repeats": 2}, r"workers must be a whole number of at least 1; it is 0"),
    ],
)
def test_bad_input_is_refused(levels, options, message):
    with pytest.raises(InputError, match=message):
        ensembles.choose_noise(two_blobs(n=20), ensembles.Brownian(1.0), levels, **options)


def test_two_snapshots_do_not_tell_the_noise():
    two = two_blobs(n=20).subset([0, 2])
    message = (
        r"choosing the noise level needs three snapshots; the series has 2, at 0 and 2, which every bridge fits exactly"
    )
    with pytest.raises(InputError, match=message):
        ensembles.choose_noise(two, ensembles.Brownian(1.0), LEVELS)
