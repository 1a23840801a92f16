"""Maxima and first passages of sampled paths against closed forms for the Brownian bridge."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.integrate import quad
from scipy.stats import kstwobign

import ensembles


def pinned_paths(start, end, count, steps, rng, duration=1.0, sigma=1.0):
    """Sampled paths between one particle and one particle: the pinned prior."""
    # The second coordinate is independent and only keeps the two clouds apart.
    series = ensembles.SnapshotSeries.from_arrays([0.0, duration], [[[start, 0.0]], [[end, 1.0]]])
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5 * sigma**2))
    return bridge.sample_paths(count, np.linspace(0.0, duration, steps + 1), rng=rng).positions[:, :, 0]


def passage(paths, level, step, sigma=1.0):
    """P(the continuous path crosses `level` | its points): 1 - Π (1 - exp(-2 (m - x_k)(m - x_{k+1}) / (σ² Δ)))."""
    below = np.clip(level - paths, 0.0, None)
    survival = 1.0 - np.exp(-2.0 * below[:, :-1] * below[:, 1:] / (sigma**2 * step))
    return survival


@pytest.mark.parametrize(("start", "end", "level", "expected"), [(0, 0, 1, 0.1353352832), (0, 1, 1.5, 0.2231301601)])
def test_the_maximum_of_a_bridge(start, end, level, expected):
    # Borodin and Salminen, Handbook of Brownian Motion, 1.1.4: P(max > m) = exp(-2 (m - x)(m - y) / (σ² T)).
    paths = pinned_paths(start, end, 20_000, 16, 1)
    crossed = 1.0 - passage(paths, level, 1 / 16).prod(axis=1)
    assert abs(crossed.mean() - expected) < 6 * crossed.std() / np.sqrt(crossed.size)
    # Negative control: the points alone miss crossings between them, by many errors.
    assert (paths.max(axis=1) > level).mean() < expected - 6 * crossed.std() / np.sqrt(crossed.size)


def test_the_mean_maximum():
    # E max of the bridge from 0 to 0 over [0, 1] is √(π/8); each step's maximum is drawn exactly by inversion of 1.1.4.
    paths = pinned_paths(0.0, 0.0, 20_000, 8, 2)
    uniform = np.random.default_rng(0).random((20_000, 8))
    x, y = paths[:, :-1], paths[:, 1:]
    maxima = (0.5 * (x + y + np.sqrt((x - y) ** 2 - 2.0 / 8 * np.log(uniform)))).max(axis=1)
    assert abs(maxima.mean() - np.sqrt(np.pi / 8)) < 6 * maxima.std() / np.sqrt(20_000)


def test_the_largest_distance_is_kolmogorovs():
    # sup |B| has Kolmogorov's law: scipy.stats.kstwobign; P(sup |B| > 1) = 0.2699996717.
    assert_allclose(kstwobign.sf(1.0), 0.2699996717, rtol=1e-9)
    paths = pinned_paths(0.0, 0.0, 4_000, 400, 3)
    # Two walls: the chance to touch both within one short step is negligible (below e^-700).
    survival = passage(paths, 1.0, 1 / 400) * passage(-paths, 1.0, 1 / 400)
    crossed = 1.0 - survival.prod(axis=1)
    assert abs(crossed.mean() - 0.2699996717) < 6 * crossed.std() / np.sqrt(4_000)


@pytest.mark.parametrize("until", [0.25, 0.6])
def test_the_first_passage_time_of_a_bridge(until):
    # Density of the first passage of m at s of the bridge from 0 to y over T = 1 (Borodin and Salminen 2.0.2, pinned):
    # f(s) = m / sqrt(2π s³) exp(-m²/(2s)) p(1 - s, m, y) / p(1, 0, y).
    level, end = 0.8, 0.3

    def normal(t, z):
        return np.exp(-z * z / (2 * t)) / np.sqrt(2 * np.pi * t)

    def density(s):
        first = level / np.sqrt(2 * np.pi * s**3) * np.exp(-(level**2) / (2 * s))
        return first * normal(1 - s, level - end) / normal(1.0, end)

    expected = quad(density, 0.0, until)[0]
    total = quad(density, 0.0, 1.0)[0]
    assert_allclose(total, np.exp(-2 * level * (level - end)), rtol=1e-6)  # agrees with 1.1.4
    paths = pinned_paths(0.0, end, 20_000, 20, 4)
    last = round(until * 20)
    crossed = 1.0 - passage(paths[:, : last + 1], level, 1 / 20).prod(axis=1)
    assert abs(crossed.mean() - expected) < 6 * crossed.std() / np.sqrt(20_000)
