"""Growth as a function of state, estimated from snapshots: exact cases, the gradient, nulls, contaminants, refusals."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.optimize import approx_fprime

import ensembles
from ensembles import Growth
from ensembles.kernels.dense import DenseKernel
from ensembles.lineage import growth_process
from ensembles.schrodinger.unbalanced import solve_unbalanced

DIFFUSION, SLOPE = 0.25, 0.5
PRIOR = ensembles.Brownian(diffusion=DIFFUSION)


def tilted(count, seed, slope=SLOPE, **more):
    """Three snapshots of a population that diffuses from N(0, 1) and grows at the rate slope x.

    ∂ρ = D ρ'' + slope x ρ keeps it Gaussian with v' = 2 D and m' = slope v, so m = slope (t + D t²); a particle at x has
    exp(slope x τ) descendants up to a factor that is the same for all: the rate to be found is slope x.
    """
    rng = np.random.default_rng(seed)
    times = np.arange(3.0)
    clouds = [rng.normal(slope * (t + DIFFUSION * t**2), np.sqrt(1 + 2 * DIFFUSION * t), count) for t in times]
    return ensembles.SnapshotSeries.from_arrays(times, clouds, **more)


def scores(found, slope=SLOPE):
    """(estimate - truth) / error of every particle before a gap; both have mean 0 over these."""
    truth = [slope * cloud[:, 0] for cloud in found.series.clouds]
    centre = np.concatenate(truth[:-1]).mean()
    return np.concatenate([(r - t + centre) / e for r, t, e in zip(found.rates[:-1], truth, found.errors)])


def slope_of(values, series):
    return np.polyfit(np.concatenate(series.clouds[:-1])[:, 0], values, 1)[0]


@pytest.mark.parametrize("seed", range(3))
def test_linear_growth_is_found_within_its_errors(seed):
    series = tilted(600, seed)
    found = ensembles.estimate_growth(series, PRIOR)
    assert found.evidence > 10
    # Neighbouring particles share their errors, so that this mean square has few degrees of freedom: about 3, and 6 standard
    # errors of their mean square would be 6.
    assert 0.1 < np.mean(scores(found) ** 2) < 6
    assert abs(slope_of(np.concatenate(found.rates[:-1]), series) - SLOPE) < 0.12
    # Negative control: twice the slope is far outside the errors.
    assert np.mean(scores(found, 2 * SLOPE) ** 2) > 9
    # And a penalty on every particle shrinks it (schrodinger/unbalanced.py).
    loose = ensembles.implied_growth(ensembles.fit_bridge(series.with_growth(Growth(uncertainty=1.0)), PRIOR))
    assert slope_of(loose["implied"], series) < 0.36


def test_the_factor_by_which_a_penalty_shrinks_growth():
    # Gaussian clouds on a fine grid: exact.
    x, y = np.linspace(-7, 7, 281), np.linspace(-9, 9, 361)
    slope, noise = 0.4, 0.5
    a, b = np.exp(-0.5 * x**2), np.exp(-0.5 * (y - slope) ** 2 / (1 + noise))
    kernel = DenseKernel(-0.5 * (x[:, None] - y) ** 2 / noise)
    share = 1 / (1 + noise)
    for strength in (0.01, 1.0, 50.0):
        found = solve_unbalanced(kernel, (a / a.sum(), b / b.sum()), (strength, np.inf), tolerance=1e-9)
        implied = np.polyfit(x, -found.log_f / strength, 1, w=np.sqrt(a))[0]
        assert_allclose(implied, slope * share / (1 + strength * (1 - share)), rtol=1e-6)


def process_of(series):
    made = growth_process.Problem(series, PRIOR, 1000, np.random.default_rng(0))
    return growth_process.Process(made, made.typical_distance)


def test_the_gradient():
    rates = [0.3 * np.sin(cloud[:, 0]) for cloud in tilted(40, 1).clouds]
    series = tilted(40, 1, features={"r": rates}).with_growth(Growth("r"))
    process = process_of(series)
    c = np.random.default_rng(2).normal(size=process.root.shape[1])
    _, gradient = process.loss(c, 0.8)
    assert_allclose(gradient, approx_fprime(c, lambda c: process.loss(c, 0.8)[0], 1e-6), rtol=1e-4, atol=1e-4)


def test_the_density_has_mass_one():
    # Z from two draws and their mirror images of each of 400 particles, against a fine grid of later places.
    series = tilted(400, 1)
    process = process_of(series)
    piece, (start, _, ahead) = process.problem.pieces[0], process.halves[0]
    c = np.random.default_rng(0).normal(size=start.shape[1])
    w = np.exp(piece.log_a + start @ c)
    grid = np.linspace(-9, 9, 3601)
    noise = 2 * DIFFUSION
    kernel = np.exp(-0.5 * (series.clouds[0] - grid) ** 2 / noise) / np.sqrt(2 * np.pi * noise)
    places = process.problem.whole.whiten_targets(grid[:, None])
    exact = (w @ kernel * np.exp(0.5 * process.at(places) @ c)).sum() * (grid[1] - grid[0])
    drawn = w @ np.exp(ahead @ c).mean(axis=0)
    spread = np.std(np.exp(ahead @ c), axis=0) * w
    # Six standard errors, the four draws of a particle counted as two for their mirror images.
    assert abs(drawn / exact - 1) < 6 * np.sqrt((spread**2).sum() / 2) / exact
    assert abs(w.sum() / exact - 1) > 0.01  # the growth after the start is a part of it


def test_the_gradient_compares_with_the_free_unbalanced_bridge():
    # w Σ_j b_j k_ij / Σ_i' w_i' k_i'j are the earlier weights of the bridge whose earlier marginal is free: strength nearly 0.
    series = tilted(50, 4)
    piece = process_of(series).problem.pieces[0]
    w = np.exp(piece.log_a + 0.3 * series.clouds[0][:, 0])
    w /= w.sum()
    found = w * (piece.kernel @ (piece.b / (w @ piece.kernel)))
    u, v = (cloud / np.sqrt(2 * DIFFUSION) for cloud in series.clouds[:2])
    free = solve_unbalanced(DenseKernel.between(u, v), (w, piece.b), (1e-7, np.inf), tolerance=1e-9)
    assert_allclose(found, free.source_marginal, rtol=1e-5)


def test_no_growth_is_not_found():
    # Three snapshots of one growing Gaussian, many times: evidence of 3 nats (20 to 1) for growth at most once in ten.
    found = [ensembles.estimate_growth(tilted(150, seed, slope=0.0), PRIOR) for seed in range(10)]
    assert sum(each.evidence > 3 for each in found) <= 1
    none = [each for each in found if each.uncertainty == 0]
    assert none
    assert "do not ask for growth" in repr(none[0])
    assert (np.concatenate(none[0].rates) == 0).all()
    # Negative control: the same sizes with growth.
    assert all(ensembles.estimate_growth(tilted(150, seed), PRIOR).evidence > 3 for seed in range(3))


def test_given_rates_are_where_it_starts():
    clouds = tilted(300, 7).clouds
    right, wrong = ([sign * SLOPE * cloud[:, 0] for cloud in clouds] for sign in (1, -1))
    series = tilted(300, 7, features={"right": right, "wrong": wrong})
    well, badly = (ensembles.estimate_growth(series.with_growth(Growth(name)), PRIOR) for name in ("right", "wrong"))
    assert well.evidence < 3 < 30 < badly.evidence
    assert abs(slope_of(np.concatenate(badly.rates[:-1]), series) - SLOPE) < 0.2
    assert well.series.growth == Growth("estimated_rate")


def test_a_drift_that_the_prior_lacks_is_taken_for_growth_and_said():
    rng = np.random.default_rng(3)
    clouds = [rng.normal(1.5 * k, np.sqrt(1 + 0.5 * k), 300) for k in range(3)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], clouds).with_growth(Growth(later=0.5))
    found = ensembles.estimate_growth(series, PRIOR)
    assert len(found.warnings) == 1 and "movement that the prior lacks (a drift, more noise)" in repr(found)
    assert found.series.growth == Growth("estimated_rate", later=0.5)
    # Negative control: with the drift in the prior nothing is left to explain.
    mended = ensembles.estimate_growth(series, ensembles.Brownian(diffusion=DIFFUSION, drift=1.5))
    assert mended.evidence < 3 and not mended.warnings


def test_it_is_a_function_of_the_seed_and_of_state():
    series = tilted(400, 2)
    again = [ensembles.estimate_growth(series, PRIOR, particles=200, rng=5) for _ in range(2)]
    assert_allclose(again[0].rates[1], again[1].rates[1], rtol=0)
    # Drawn particles or all: the same function, within the errors of the smaller draw.
    whole = ensembles.estimate_growth(series, PRIOR)
    gap = np.concatenate(again[0].rates[:-1]) - np.concatenate(whole.rates[:-1])
    assert np.mean((gap / np.concatenate(again[0].errors[:-1])) ** 2) < 6
    frame = whole.to_frame()
    assert list(frame.columns) == ["time", "particle", "rate", "standard_error"] and len(frame) == 1200
    # In other units of length and time the rates are those of the other unit.
    other = ensembles.SnapshotSeries.from_arrays(series.times * 24, [10 * cloud for cloud in series.clouds])
    scaled = ensembles.estimate_growth(other, ensembles.Brownian(diffusion=DIFFUSION * 100 / 24))
    assert_allclose(np.concatenate(scaled.rates) * 24, np.concatenate(whole.rates), atol=1e-3)


def test_weights_of_zero_and_refusals():
    series = tilted(60, 0)
    weights = [np.where(np.arange(60) < 50, 1.0, 0.0)] * 3
    series = ensembles.SnapshotSeries.from_arrays(series.times, series.clouds, weights)
    found = ensembles.estimate_growth(series, PRIOR)
    assert np.isfinite(np.concatenate(found.rates)).all() and found.rates[0].shape == (60,)
    with pytest.raises(ensembles.InputError, match="uncertainty must be positive"):
        ensembles.estimate_growth(series, PRIOR, uncertainty=0.0)
    box = ensembles.Box([-9], [9], "reflecting")
    with pytest.raises(ensembles.InputError, match="growth cannot be estimated in a box; the prior has walls"):
        ensembles.estimate_growth(series, ensembles.Brownian(diffusion=0.2, box=box))
