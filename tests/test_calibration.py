"""Small versions of the calibration study; scripts/calibration prints the whole. Each has a negative control."""

import numpy as np
import pytest
from calibration_p_values import Trial, power_table, uniformity
from calibration_repeats import repeat
from calibration_study import draw_rate, drift_rate, entropy_table, noise_table, one_coverage


@pytest.mark.parametrize(("prior", "d", "n"), [("Brownian", 1, 100), ("Ornstein-Uhlenbeck", 2, 100)])
def test_bands_cover_at_their_rate(prior, d, n):
    repeats = 60
    found = repeat(one_coverage, repeats, prior, d, n, 40, seed=11, workers=1)
    share = found[:, 0].mean(axis=(0, 2))
    # Ninety per cent of 60 has a standard error of 3.9 %; three of them around 85 to 95 %.
    assert (share > 0.85 - 3 * 0.039).all()
    estimates, errors = found[:, 1], found[:, 2]
    scatter = estimates.std(axis=0, ddof=1)  # (3, d): mean, variance and drift by coordinate
    # The standard error is the scatter of the estimates: a standard deviation of 60 is known to 9 %.
    assert (np.abs(errors.mean(axis=0) / scatter - 1) < 4 * 0.09).all()
    # Negative control: bands half as wide would cover the 59 % of 0.82 standard deviations, not 90.
    centre = estimates.mean(axis=0)
    narrow = (np.abs(estimates - centre) < 0.82 * errors).mean(axis=(0, 2))
    assert (narrow < 0.85 - 2 * 0.039).all()


def test_the_interval_of_the_noise_covers():
    table = noise_table([("Brownian", 1, 100, 3, 16, 20)], workers=1, seed=12)
    # Ninety per cent of 16: at least 11 in 99.7 % of all cases (binomial).
    assert table["coverage"].item() >= 11 / 16
    # Negative control: the interval is no excuse; it leaves out levels that are eight times off.
    assert table["median lower"].item() > 0.5 / 8
    assert table["median upper"].item() < 0.5 * 8


def test_p_values_are_uniform_under_the_prior_and_small_without_it():
    trial = Trial(1, 40, 19)
    _, uniform = uniformity(trial, 60, workers=1, seed=13)
    assert min(uniform) > 0.001
    power = power_table(trial, 12, workers=1, seed=14).set_index(["shift", "widening"])
    # With 19 simulations 0.05 is the smallest p-value. Sixty repeats gave a power of 0.75 by relative entropy and 0.95 by
    # energy distance; three standard errors of twelve are 0.375. A test without power would stay below 0.05 + 0.19.
    assert power.loc[(1.0, 1.0)].min() > 0.75 - 0.375
    assert power.loc[(0.0, 1.6)].max() > 0.5
    assert power.loc[(0.0, 1.0)].max() < 0.5


@pytest.mark.parametrize("weighted", [False, True])
def test_p_values_by_energy_distance_are_uniform_in_small_and_in_weighted_clouds(weighted):
    trial = Trial(2, 20, 19, with_entropy=False, weighted=weighted)
    found, uniform = uniformity(trial, 100, workers=1, seed=17)
    assert uniform[0] > 0.001
    assert abs(found[:, 0].mean() - 0.5) < 4 / np.sqrt(12 * 100)
    # Negative control: the same test sees a shift by less than one standard deviation of the start cloud.
    assert uniformity(trial, 100, shift=0.8, workers=1, seed=17)[1][0] < 0.001


def test_relative_entropy_is_unbiased_within_its_noise():
    table = entropy_table((1, 2), 400, 12, workers=1, seed=15)
    assert (table["bias %"].abs() < 5 + 3 * table["± (1 s.e.) %"]).all()
    # A standard deviation of 12 values is known to 21 %.
    assert ((table["mean s.e."] / table["s.d."]).between(1 - 3 * 0.21, 1 + 5 * 0.21)).all()


def test_the_drift_converges_like_the_root_of_n(tmp_path):
    rate = drift_rate((100, 400, 1600), (40, 20, 8), workers=1, seed=16)
    assert abs(rate.slope + 0.5) < 3 * rate.slope_error + 0.05
    assert rate.slope_error < 0.1
    # Negative control: it is neither 0 (bias) nor -1.
    assert rate.slope < -0.25
    assert rate.slope > -0.75
    draw_rate({"d = 1": rate}, tmp_path / "rates.png")
    assert (tmp_path / "rates.png").stat().st_size > 10_000
