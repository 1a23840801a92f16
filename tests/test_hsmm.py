"""Real cells: the myoblasts of data/README.md at 0, 24, 48 and 72 h, as a chain of three bridges in five components."""

from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.spatial.distance import cdist

import ensembles

DATA = Path(__file__).resolve().parents[1] / "data" / "hsmm_timecourse.csv"
COMPONENTS = [f"PC{k}" for k in range(1, 6)]
NOISE_SHARE = 0.1
INSIDE = (6.0, 12.0, 23.0, 36.0, 60.0, 71.0)  # h


def chosen_diffusion(series: ensembles.SnapshotSeries, share: float = NOISE_SHARE) -> float:
    """D for which the noise 2 D τ d is `share` of the mean squared distance across a gap, averaged over gaps."""
    rates = [
        cdist(series.clouds[k], series.clouds[k + 1], "sqeuclidean").mean() / (2 * duration * series.dimension)
        for k, duration in enumerate(series.durations)
    ]
    return float(share * np.mean(rates))


@pytest.fixture(scope="module")
def series():
    return ensembles.read_snapshots(DATA, time="hours", position=COMPONENTS, label="media", units={"time": "h"})


@pytest.fixture(scope="module")
def bridge(series):
    fitted = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=chosen_diffusion(series)))
    print(fitted)
    for gap, solution in enumerate(fitted.solutions):
        print(f"gap {gap}: {solution.certificate}")
    return fitted


def test_the_series_is_the_data(series):
    # Counts of data/README.md, from the source's table of cells.
    assert series.counts.tolist() == [69, 74, 79, 49]
    assert series.times.tolist() == [0, 24, 48, 72]
    assert series.dimension == 5


def test_every_gap_is_certified(bridge):
    assert bridge.converged
    assert len(bridge.solutions) == 3
    for gap, solution in enumerate(bridge.solutions):
        certificate = solution.certificate
        # Recomputed here from the dense coupling.
        coupling = bridge.coupling(gap).matrix()
        errors = [np.abs(coupling.sum(axis=1 - side) - bridge.series.weights[gap + side]).sum() for side in (0, 1)]
        assert max(errors) <= 1e-6
        assert_allclose(max(errors), certificate.marginal_error, rtol=1e-3, atol=1e-13)
        assert np.isfinite([certificate.hilbert_step, certificate.potential_error_estimate]).all()
        assert 0 <= certificate.contraction_observed < 1
    assert repr(bridge).count("converged") == 3


def test_every_method_is_finite(bridge):
    points = np.vstack(bridge.series.clouds)
    for t in INSIDE:
        assert np.isfinite(bridge.log_density(t, points)).all()
        for field in (bridge.drift, bridge.backward_drift, bridge.current_velocity):
            assert np.isfinite(field(t, points)).all()
        mean, covariance = bridge.moments(t)
        assert np.isfinite(mean).all()
        assert np.linalg.eigvalsh(covariance)[0] > 0


def test_samples_have_the_moments_of_the_bridge(bridge):
    count = 20_000
    for t in INSIDE:
        mean, covariance = bridge.moments(t)
        drawn = bridge.sample(t, count, rng=3)
        # Six standard errors of each mean.
        assert (np.abs(drawn.mean(axis=0) - mean) < 6 * np.sqrt(np.diag(covariance) / count)).all()


def test_paths_run_through_all_snapshots(bridge, series):
    times = np.sort(np.concatenate([series.times, INSIDE]))
    count = 4000
    paths = bridge.sample_paths(count, times, rng=5)
    assert paths.positions.shape == (count, times.size, 5)
    assert np.isfinite(paths.positions).all()
    for k, t in enumerate(series.times):
        members = paths.members[:, k]
        assert_allclose(paths.positions[:, times == t][:, 0], series.clouds[k][members], rtol=0)
        # Every cell is met at its weight 1/n: chi-square of mean n - 1 and variance 2 (n - 1), six standard deviations.
        n = series.counts[k]
        seen = np.bincount(members, minlength=n)
        assert np.sum((seen - count / n) ** 2) / (count / n) < n - 1 + 6 * np.sqrt(2 * (n - 1))
    fresh = bridge.sample_paths_from(series.clouds[1][:3] + 0.5, 24.0, [24.0, 48.0, 60.0, 72.0], rng=6)
    assert np.isfinite(fresh.positions).all()
    assert (fresh.members[:, 0] == -1).all()
    assert (fresh.members[:, 2:] >= 0).all()


def test_less_noise_means_surer_links(series):
    spread = []
    for share in (0.05, 0.1, 0.5):
        bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=chosen_diffusion(series, share)))
        rows = bridge.coupling(0).matrix() * series.counts[0]
        spread.append(np.exp(-np.sum(rows * np.log(np.maximum(rows, 1e-300)), axis=1)).mean())
    print("mean number of likely descendants at 24 h for noise shares 0.05, 0.1, 0.5:", np.round(spread, 1))
    assert 1 <= spread[0] < spread[1] < spread[2] <= series.counts[1]
