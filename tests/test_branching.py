"""Descendants of cells that divide, die and commit, against the true ones: calibrated with growth, biased without."""

import branching
import numpy as np
import pytest

import ensembles


@pytest.fixture(scope="module", params=[0, 1])
def truth(request):
    return branching.simulate(2000, request.param)


@pytest.fixture(scope="module")
def predicted(truth):
    return branching.predictions(truth)


def largest_miss(prediction, truth):
    said, seen, counted = branching.reliability(prediction, truth)
    assert (counted > 20).all()
    return np.abs(said - seen).max()


def test_known_growth_is_calibrated(truth, predicted):
    # The bound of the task: within 0.05 of the diagonal in every bin.
    assert largest_miss(predicted["known"], truth) < 0.05


def test_unknown_growth_is_calibrated_too(truth, predicted):
    assert largest_miss(predicted["unknown, smooth"], truth) < 0.05


def test_ignored_growth_is_taken_for_movement(truth, predicted):
    # The negative control: ignored, the growth of the right is taken for cells that go there.
    assert largest_miss(predicted["ignored"], truth) > 0.2
    assert np.average(predicted["ignored"] - truth.chance, weights=truth.expected) > 0.08


def test_a_penalty_on_every_cell_shrinks_growth(truth, predicted):
    # Why the rates are estimated as one function: a penalty that counts for each cell leaves a bias, less the looser it is.
    bias = [
        np.average(predicted[name] - truth.chance, weights=truth.expected)
        for name in ("unknown, each cell ± 8", "unknown, each cell ± 2", "ignored")
    ]
    assert 0 < bias[0] < bias[1] < bias[2]
    assert abs(np.average(predicted["unknown, smooth"] - truth.chance, weights=truth.expected)) < bias[1]


def test_brier_scores(truth, predicted):
    best = branching.brier(truth.chance, truth)
    nearest = branching.brier(branching.nearest_neighbours(truth.series), truth)
    scores = {name: branching.brier(values, truth) for name, values in predicted.items()}
    # Six standard errors of the mean difference of two predictions that are 0.08 apart (about 0.001 each).
    assert scores["known"] < best + 0.006
    assert scores["known"] < scores["ignored"] < nearest
    assert scores["unknown, smooth"] < best + 0.006
    assert scores["unknown, each cell ± 2"] < scores["ignored"]


def test_implied_growth_goes_with_the_true_rate(truth):
    bridge = ensembles.fit_bridge(
        truth.series.with_growth(ensembles.Growth(uncertainty=2.0)), ensembles.Brownian(diffusion=branching.DIFFUSION)
    )
    implied = ensembles.implied_growth(bridge)
    for k, gap in implied.groupby("gap"):
        true = branching.net_rate(truth.series.clouds[int(k)])
        assert np.corrcoef(gap["implied"], true)[0, 1] > 0.6


def test_the_truth_is_what_it_says():
    # Far right every cell divides at 0.9 and dies at 0: e^(0.9) in the mean over a time of 1, and nothing crosses.
    rng = np.random.default_rng(0)
    ends, founder = branching.live(np.full((4000, 2), 20.0), 1.0, rng)
    numbers = np.bincount(founder, minlength=4000)
    # Geometric numbers of a pure birth process: variance m² - m. Steps of 0.02 lower the mean by 0.8 %.
    mean = (1 + 0.9 * 0.02) ** 50
    assert abs(numbers.mean() - mean) < 6 * np.sqrt((mean**2 - mean) / 4000)
    assert abs(ends[:, 0].var() - 0.5) < 6 * 0.5 * np.sqrt(2 / 4000)
