"""Error bars: weighted bootstrap, influence, effective sizes; their laws and what is refused."""

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose

import ensembles
from ensembles import InputError
from ensembles.assessment.quantities import QUANTITIES
from ensembles.assessment.resampled_weights import bootstrap_weights

PRIOR = ensembles.Brownian(diffusion=0.75)


def pair(n: int = 80, d: int = 1, seed: int = 0, **extra) -> ensembles.SnapshotSeries:
    rng = np.random.default_rng(seed)
    clouds = [rng.normal(size=(n, d)), rng.normal(0.5, 1.3, size=(n, d))]
    return ensembles.SnapshotSeries.from_arrays([0.0, 1.0], clouds, **extra)


@pytest.fixture(scope="module")
def bridge():
    return ensembles.fit_bridge(pair(), PRIOR)


EXAMPLES = [
    ensembles.Moments([0.0, 0.5]),
    ensembles.DensityAt(0.5, np.array([[0.0], [1.0]])),
    ensembles.DriftAt(0.5, np.array([[0.0], [1.0]])),
    ensembles.LinkProbabilities([(0, 1), (3, [4, 5, 6])]),
    ensembles.PathQuantiles([0.25, 1.0], (0.1, 0.9), count=50),
]


def test_every_quantity_is_tried():
    assert {type(example) for example in EXAMPLES} == set(QUANTITIES)


@pytest.mark.parametrize("quantity", EXAMPLES, ids=lambda q: type(q).__name__)
def test_laws_of_a_quantity(bridge, quantity):
    values, labels = quantity.evaluate(bridge), quantity.labels(bridge)
    assert values.shape == (len(labels),)
    assert len({frozenset(label) for label in labels}) == 1
    assert len({tuple(label.items()) for label in labels}) == len(labels)
    assert_allclose(quantity.evaluate(bridge), values, rtol=0)
    bands = ensembles.bootstrap(bridge, quantity, repeats=30)
    assert (bands.lower < bands.upper).all()
    assert (bands.standard_error > 0).all()
    if quantity.scales == ("logit",):
        assert (bands.lower > 0).all() and (bands.upper < 1).all()
    frame = bands.to_frame()
    assert list(frame.columns[-5:]) == ["estimate", "standard_error", "bias", "lower", "upper"]
    assert len(frame) == len(labels)


def test_quantities_are_those_of_the_bridge(bridge):
    mean, covariance = bridge.moments(0.5)
    assert_allclose(EXAMPLES[0].evaluate(bridge)[2:], [mean[0], covariance[0, 0]])
    assert_allclose(EXAMPLES[1].evaluate(bridge), np.exp(bridge.log_density(0.5, [[0.0], [1.0]])))
    matrix = bridge.coupling(0).matrix()
    rows = matrix / matrix.sum(axis=1, keepdims=True)
    assert_allclose(EXAMPLES[3].evaluate(bridge), [rows[0, 1], rows[3, 4:7].sum()])


def test_the_standard_error_of_a_mean_is_that_of_theory(bridge):
    repeats = 400
    bands = ensembles.bootstrap(bridge, ensembles.Moments([0.0, 1.0]), repeats=repeats)
    for row, cloud in ((0, bridge.series.clouds[0]), (2, bridge.series.clouds[1])):
        # s / √n; a standard deviation of B values is known to 1/√(2B), 3.5 %.
        assert_allclose(
            bands.standard_error[row], cloud.std(ddof=1) / np.sqrt(len(cloud)), rtol=4 / np.sqrt(2 * repeats)
        )


def test_weights_of_a_resample():
    rng = np.random.default_rng(0)
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0, 2.0], [5.0]], weights=[[1, 0, 3], None])
    drawn = np.array([bootstrap_weights(series, rng)[0] for _ in range(4000)])
    assert_allclose(drawn.sum(axis=1), 1.0)
    assert (drawn[:, 1] == 0).all()
    assert bootstrap_weights(series, rng)[1].tolist() == [1.0]
    flat = ensembles.SnapshotSeries.from_arrays([0, 1], [np.arange(20.0), [0.0, 1.0]])
    means = np.array([bootstrap_weights(flat, rng)[0] @ np.arange(20.0) for _ in range(6000)])
    # Variance of the mean of 20 particles: s²/20 with the unbiased s² = 35; known to √(2/6000).
    assert_allclose(means.var(), 35.0 / 20.0, rtol=6 * np.sqrt(2 / 6000))
    assert abs(means.mean() - 9.5) < 6 * np.sqrt(35.0 / 20.0 / 6000)


def test_whole_replicates_are_re_weighted():
    rng = np.random.default_rng(1)
    plates = [np.repeat([f"p{k}" for k in range(8)], 10) for _ in range(2)]
    effects = rng.normal(size=8)
    clouds = [np.repeat(effects, 10)[:, None] + 0.1 * rng.normal(size=(80, 1)) for _ in range(2)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], clouds, features={"plate": plates})
    shared = bootstrap_weights(series, rng, plates)[0].reshape(8, 10)
    assert_allclose(shared, np.broadcast_to(shared[:, :1], (8, 10)))
    fitted = ensembles.fit_bridge(series, PRIOR)
    by_plate = ensembles.bootstrap(fitted, ensembles.Moments([0.0]), repeats=200, replicates="plate")
    by_cell = ensembles.bootstrap(fitted, ensembles.Moments([0.0]), repeats=200)
    means = clouds[0].reshape(8, 10).mean(axis=1)
    assert_allclose(by_plate.standard_error[0], means.std(ddof=1) / np.sqrt(8), rtol=0.25)
    # Ten particles of one plate are not ten measurements.
    assert by_plate.standard_error[0] > 2.5 * by_cell.standard_error[0]


def test_results_do_not_depend_on_the_number_of_workers(bridge):
    frames = [ensembles.bootstrap(bridge, EXAMPLES, repeats=6, workers=w, rng=4).to_frame() for w in (1, 2, 3)]
    pd.testing.assert_frame_equal(frames[0], frames[1])
    pd.testing.assert_frame_equal(frames[0], frames[2])
    other = ensembles.bootstrap(bridge, EXAMPLES, repeats=6, rng=5).to_frame()
    assert not other.equals(frames[0])


def test_a_warm_start_changes_nothing_but_the_time(bridge):
    from dataclasses import replace

    weights = bootstrap_weights(bridge.series, np.random.default_rng(3))
    series = replace(bridge.series, weights=weights)
    cold, warm = (ensembles.fit_bridge(series, PRIOR, tolerance=1e-9, start=start) for start in (None, bridge))
    assert_allclose(warm.drift(0.5, [[0.3]]), cold.drift(0.5, [[0.3]]), rtol=1e-6)


def test_influence_is_what_leaving_out_does(bridge):
    found = ensembles.influence(bridge, ensembles.Moments([0.5]), snapshots=[1])
    assert found.particle.tolist() == list(range(80))
    clouds = list(bridge.series.clouds)
    smaller = ensembles.SnapshotSeries.from_arrays([0, 1], [clouds[0], np.delete(clouds[1], 7, axis=0)])
    again = ensembles.fit_bridge(smaller, PRIOR, tolerance=1e-8)
    assert_allclose(found.change[7], again.moments(0.5)[0][0] - bridge.moments(0.5)[0][0], atol=1e-5)
    # The jackknife's standard error of that mean, over the particles of one snapshot, is near the bootstrap's share.
    n = 80
    jackknife = np.sqrt((n - 1) / n * np.sum((found.change - found.change.mean()) ** 2))
    exact = 0.5 * clouds[1].std(ddof=1) / np.sqrt(n)  # the mean at half time is the mean of both ends
    assert_allclose(jackknife, exact, rtol=1e-3)
    frame = found.to_frame()
    assert frame["change"].abs().is_monotonic_decreasing


def test_effective_sizes_are_those_of_the_coupling(bridge):
    found = ensembles.effective_sizes(bridge, times=[0.5], count=20)
    gap = bridge.gaps[0]
    x = found.points[0]
    for sizes, cloud, logs in ((found.starts, 0, gap.log_p), (found.ends, 1, gap.log_q)):
        # Brownian over half a unit of time: variance 2 D t = 0.75 around every particle.
        p = np.exp(logs - 0.5 * (x - gap.clouds[cloud].T) ** 2 / 0.75)
        assert_allclose(sizes[0], p.sum(axis=1) ** 2 / (p**2).sum(axis=1), rtol=1e-8)
    assert len(found.warnings) == 0
    assert found.to_frame()["median starts"].between(1, 80).all()


def test_a_handful_is_warned_of():
    tight = ensembles.fit_bridge(pair(n=30, d=3), ensembles.Brownian(0.02))
    found = ensembles.effective_sizes(tight)
    assert len(found.times) == 3
    assert any("rests on fewer than 5 starts" in sentence for sentence in found.warnings)
    assert any("rests on fewer than 5 ends" in sentence for sentence in found.warnings)
    few = ensembles.bootstrap(tight, ensembles.Moments([0.5]), repeats=2)
    assert any("2 repeats" in sentence for sentence in few.warnings)
    four = ensembles.fit_bridge(pair(n=4), PRIOR)
    bands = ensembles.bootstrap(four, ensembles.Moments([0.5]), repeats=60)
    assert any("a snapshot has 4 particles" in sentence for sentence in bands.warnings)


def test_bad_input_is_refused(bridge):
    moments = ensembles.Moments([0.5])
    with pytest.raises(InputError, match=r"a bootstrap of one says nothing; repeats is 1; use at least 2"):
        ensembles.bootstrap(bridge, moments, repeats=1)
    with pytest.raises(InputError, match=r"repeats must be a whole number of at least 2; it is 0"):
        ensembles.bootstrap(bridge, moments, repeats=0)
    with pytest.raises(InputError, match=r"chance must lie between 0 and 1; it is 90"):
        ensembles.bootstrap(bridge, moments, chance=90)
    with pytest.raises(InputError, match=r"unknown feature of the series; 'plate'"):
        ensembles.bootstrap(bridge, moments, replicates="plate")
    with pytest.raises(InputError, match=r"workers must be a whole number of at least 1"):
        ensembles.bootstrap(bridge, moments, repeats=2, workers=0)
    with pytest.raises(InputError, match=r"the time lies outside the series; t = 2"):
        ensembles.bootstrap(bridge, ensembles.Moments([2.0]), repeats=2)
    with pytest.raises(InputError, match=r"no such target; pair \(0, 80\)"):
        ensembles.bootstrap(bridge, ensembles.LinkProbabilities([(0, 80)]), repeats=2)
    with pytest.raises(InputError, match=r"no such number; number = 2 of a quantity with 2"):
        ensembles.influence(bridge, moments, number=2)
    with pytest.raises(InputError, match=r"no such snapshot; number 5 of 2"):
        ensembles.influence(bridge, moments, snapshots=[5])
    with pytest.raises(InputError, match=r"the density does not exist at a snapshot; t = 1"):
        ensembles.effective_sizes(bridge, times=[1.0])
