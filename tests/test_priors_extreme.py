"""Priors at very short and very long durations against mpmath, and the extremes of Brownian bridges."""

import mpmath
import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.stats import kstwobign

import ensembles
from ensembles.priors.pinned import pin, pinned_steps

DURATIONS = [10.0**k for k in range(-8, 4)]


def exact_scalar(rate, duration, variance):
    """F, Q and the pinned law half-way of a scalar Ornstein-Uhlenbeck process, to 50 digits."""
    with mpmath.workdps(50):
        k, t, v = mpmath.mpf(rate), mpmath.mpf(duration), mpmath.mpf(variance)
        if k == 0:
            return 1.0, float(v * t), 0.5, float(v * t / 4)
        half = mpmath.sinh(k * t / 2) / mpmath.sinh(k * t)
        middle = v * mpmath.sinh(k * t / 2) ** 2 / (k * mpmath.sinh(k * t))
        return float(mpmath.exp(-k * t)), float(v * (1 - mpmath.exp(-2 * k * t)) / (2 * k)), float(half), float(middle)


@pytest.mark.parametrize("duration", DURATIONS)
@pytest.mark.parametrize("rate", [1.0, -0.05, 0.0, 1e-9])
def test_scalar_rates_from_short_to_long(rate, duration):
    prior = ensembles.OrnsteinUhlenbeck(rate=rate, centre=2.0, diffusion=0.35)
    matrix, covariance, weight, middle = exact_scalar(rate, duration, 0.7)
    step = prior.transition(duration, 1)
    assert_allclose(step.matrix[0, 0], matrix, rtol=1e-12)
    assert_allclose(step.covariance[0, 0], covariance, rtol=1e-12)
    with mpmath.workdps(50):
        shift = 2.0 * float(-mpmath.expm1(-mpmath.mpf(rate) * duration))
    assert_allclose(step.shift[0], shift, rtol=1e-12)
    law = pin(prior.transition(duration / 2, 1), prior.transition(duration / 2, 1))
    # Both ends keep their relative accuracy even where they hardly matter any more.
    assert_allclose([law.start_matrix[0, 0], law.end_matrix[0, 0]], [weight, weight], rtol=1e-11, atol=1e-300)
    assert_allclose(law.covariance[0, 0], middle, rtol=1e-12)


def exact_matrix(rate, centre, noise, duration):
    """F, c, Q by Van Loan's block exponential in mpmath, with digits to spare for its cancellation."""
    d = len(centre)
    # The blocks hold expm(+K t) and expm(-K t): their product loses 2 |K| t / log 10 digits.
    digits = 60 + int(2 * np.linalg.norm(rate, 2) * duration / np.log(10))
    with mpmath.workdps(digits):
        k, n = mpmath.matrix(rate.tolist()), mpmath.matrix(noise.tolist())
        t = mpmath.mpf(duration)
        block = mpmath.zeros(2 * d)
        for i in range(d):
            for j in range(d):
                block[i, j], block[i, d + j], block[d + i, d + j] = k[i, j] * t, n[i, j] * t, -k[j, i] * t
        exponential = mpmath.expm(block, method="pade" if duration < 1 else "taylor")
        matrix = exponential[d:, d:].T
        covariance = matrix * exponential[:d, d:]
        target = mpmath.matrix(centre.tolist())
        shift = target - matrix * target
        to_array = lambda m: np.array([[float(m[i, j]) for j in range(m.cols)] for i in range(m.rows)])  # noqa: E731
        return to_array(matrix), to_array(shift)[:, 0], to_array(covariance)


NON_NORMAL = {
    "shear": np.array([[1.0, 30.0], [0.0, 1.3]]),
    "rotation with decay": np.array([[0.4, 5.0], [-5.0, 0.4]]),
    "three coordinates": np.array([[1.0, 3.0, 0.0], [-0.2, 2.0, 1.0], [0.0, 0.0, 0.5]]),
}


@pytest.mark.parametrize("duration", [1e-8, 1e-4, 1e-1, 1.0, 10.0, 100.0])
@pytest.mark.parametrize("name", NON_NORMAL)
def test_matrix_rates_from_short_to_long(name, duration):
    rate = NON_NORMAL[name] / np.linalg.norm(NON_NORMAL[name], 2)
    d = len(rate)
    diffusion = np.diag([0.5, 1.0, 0.7][:d]) + 0.1
    centre = np.array([1.0, -2.0, 0.5])[:d]
    step = ensembles.OrnsteinUhlenbeck(rate=rate, centre=centre, diffusion=diffusion).transition(duration, d)
    matrix, shift, covariance = exact_matrix(rate, centre, 2 * diffusion, duration)
    assert_allclose(step.matrix, matrix, rtol=1e-10, atol=1e-10 * np.abs(matrix).max())
    assert_allclose(step.shift, shift, rtol=1e-10, atol=1e-10 * np.abs(shift).max())
    assert_allclose(step.covariance, covariance, rtol=1e-10)


def test_matrix_rate_at_rest_solves_the_lyapunov_equation():
    # κτ = 1e3: K Q + Q Kᵀ = 2D, whatever the start.
    rate = NON_NORMAL["three coordinates"]
    diffusion = np.diag([0.5, 1.0, 0.7])
    step = ensembles.OrnsteinUhlenbeck(rate=rate, centre=[1.0, 2.0, 3.0], diffusion=diffusion).transition(1e3, 3)
    assert_allclose(rate @ step.covariance + step.covariance @ rate.T, 2 * diffusion, atol=1e-12)
    assert_allclose(step.matrix, np.zeros((3, 3)), atol=1e-100)
    assert_allclose(step.shift, [1.0, 2.0, 3.0], rtol=1e-12)


@pytest.mark.parametrize(("scale", "duration"), [(1e-14, 1e6), (1e-12, 1e3), (1e-3, 1e-9)])
def test_slow_matrix_rates_over_long_times(scale, duration):
    # Nearly Brownian: to first order Q = 2D t - (K D + D Kᵀ) t², with an error of (|K| t)².
    rate = NON_NORMAL["three coordinates"] * scale
    step = ensembles.OrnsteinUhlenbeck(rate=rate, centre=1.0, diffusion=np.eye(3)).transition(duration, 3)
    expected = 2 * duration * np.eye(3) - (rate + rate.T) * duration**2
    assert_allclose(step.covariance, expected, rtol=1e-12, atol=2 * duration * (10 * scale * duration) ** 2)
    assert_allclose(step.shift, rate @ np.ones(3) * duration, rtol=1e-6, atol=1e-20)


# P(max > m) = exp(-2 (m - x)(m - y) / (σ² T)): Borodin, Salminen, Handbook of Brownian Motion, 1.1.4.
@pytest.mark.parametrize(
    ("x", "y", "level", "expected"), [(0.0, 0.0, 1.0, 0.1353352832), (0.0, 1.0, 1.5, 0.2231301601)]
)
def test_maximum_of_a_brownian_bridge(x, y, level, expected):
    count, steps = 20_000, 8
    times = np.arange(1, steps) / steps
    rng = np.random.default_rng(5)
    path = np.full((count, steps + 1, 1), x)
    path[:, -1] = y
    for k, law in enumerate(pinned_steps(ensembles.Brownian(diffusion=0.5), 0.0, 1.0, times, 1)):
        path[:, k + 1] = law.sample(path[:, k], path[:, -1], rng)
    gap = np.maximum(level - path[:, :, 0], 0.0)
    # Given the path on the grid, each step survives below the level with 1 - exp(-2 (m - x_k)(m - x_(k+1)) / Δ).
    crossed = 1.0 - np.prod(-np.expm1(-2.0 * gap[:, :-1] * gap[:, 1:] * steps), axis=1)
    error = crossed.std() / np.sqrt(count)
    assert abs(crossed.mean() - expected) < 5.0 * error
    assert abs(crossed.mean() - 1.1 * expected) > 5.0 * error  # negative control


def test_largest_deviation_of_a_brownian_bridge_follows_kolmogorov():
    # P(sup|B| > 1) = 0.2699996717 (scipy.stats.kstwobign, Kolmogorov 1933); E max B = √(π/8).
    assert_allclose(kstwobign.sf(1.0), 0.2699996717, atol=5e-11)
    count, steps = 20_000, 64
    times = np.arange(1, steps) / steps
    rng = np.random.default_rng(6)
    path = np.zeros((count, steps + 1, 1))
    for k, law in enumerate(pinned_steps(ensembles.Brownian(diffusion=0.5), 0.0, 1.0, times, 1)):
        path[:, k + 1] = law.sample(path[:, k], path[:, -1], rng)
    path = path[:, :, 0]

    def stays_below(one, other):
        return -np.expm1(-2.0 * np.maximum(1.0 - one, 0.0) * np.maximum(1.0 - other, 0.0) * steps)

    # Leaving a band through both sides within one step of 1/64 has probability below exp(-256): the sides add up.
    inside = np.prod(
        np.maximum(stays_below(path[:, :-1], path[:, 1:]) + stays_below(-path[:, :-1], -path[:, 1:]) - 1.0, 0.0), axis=1
    )
    error = inside.std() / np.sqrt(count)
    assert abs(1.0 - inside.mean() - kstwobign.sf(1.0)) < 5.0 * error
    assert abs(1.0 - inside.mean() - kstwobign.sf(1.05)) > 5.0 * error  # negative control
    # The maximum of each step given its ends: ½ (x + y + sqrt((y - x)² - 2 Δ log U)).
    left, right = path[:, :-1], path[:, 1:]
    peaks = 0.5 * (left + right + np.sqrt((right - left) ** 2 - 2.0 / steps * np.log(1.0 - rng.random(left.shape))))
    highest = peaks.max(axis=1)
    assert abs(highest.mean() - np.sqrt(np.pi / 8)) < 5.0 * highest.std() / np.sqrt(count)
