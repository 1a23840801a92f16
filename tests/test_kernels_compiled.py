"""The compiled loops: exponential, soft means, draws, the same bits on one thread and two, and without a compiler."""

import os
import subprocess
import sys

import numba
import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy.special import logsumexp
from scipy.stats import chi2

from ensembles.kernels.fast_exp import exponential
from ensembles.kernels.streamed import StreamedKernel, pick_targets
from ensembles.kernels.threads import block_bounds, run_blocks, thread_count


@numba.njit
def exponentials(values, out):
    """exponential of each of the values."""
    for i in range(values.size):
        out[i] = exponential(values[i])


def test_fast_exponential():
    x = np.concatenate(
        [np.linspace(-699.999, 700.0, 200_001), [0.0, 1e-300, -1e-17, np.log(2) / 2, -np.log(2) / 2, 709.0]]
    )
    out = np.empty_like(x)
    exponentials(x, out)
    assert_allclose(out, np.exp(x), rtol=1e-13)
    below = np.array([-700.0001, -745.0, -1e6, -1e300, -np.inf])
    exponentials(below, out[:5])
    assert_array_equal(out[:5], 0.0)
    exponentials(np.array([709.5, 1e5, np.inf]), out[:3])  # held at exp(709), so that sums stay finite
    assert_allclose(out[:3], np.exp(709.0), rtol=1e-13)


@pytest.mark.parametrize("dimension", [1, 2, 3, 6, 10])
def test_log_sum_and_soft_mean(dimension):
    rng = np.random.default_rng(dimension)
    x, y = rng.normal(size=(31, dimension)), 2 * rng.normal(size=(300, dimension))
    log_weights = rng.normal(size=300)
    log_weights[::7] = -np.inf
    exponents = log_weights - 0.5 * ((x[:, None] - y[None]) ** 2).sum(axis=-1)
    log_sum, mean = StreamedKernel(x, y).log_sum_and_mean(log_weights)
    expected = logsumexp(exponents, axis=1)
    assert_allclose(log_sum, expected, rtol=1e-13, atol=1e-13)
    assert_allclose(mean, np.exp(exponents - expected[:, None]) @ y, rtol=1e-12, atol=1e-13)


@pytest.mark.parametrize("dimension", [3, 4, 5, 7, 8, 11])
@pytest.mark.parametrize(
    "width", [2.0, 300.0]
)  # by products from four dimensions on; by differences where they are wide
def test_distances_do_not_depend_on_where_the_clouds_lie(dimension, width):
    rng = np.random.default_rng(dimension)
    x = rng.normal(size=(30, dimension)) * width  # 30 rows: groups of four, and two left over
    y = x[rng.integers(0, 30, 300)] + rng.normal(size=(300, dimension))
    q = rng.normal(size=300)
    exponents = q - 0.5 * ((x[:, None] - y[None]) ** 2).sum(axis=-1)
    log_sums = logsumexp(exponents, axis=1)
    zeros, moved = np.zeros(30), 1024.0  # a power of two: the shifted coordinates lose few digits
    for offset, accuracy in ((0.0, 2e-12), (moved, 1e-8)):
        kernel = StreamedKernel(x + offset, y + offset)
        sweep = kernel.sweep(-log_sums, q, zeros, 1.0)
        assert_allclose(sweep.row_excess, 0.0, atol=accuracy)
        assert_allclose(sweep.column_log_sums, logsumexp(exponents - log_sums[:, None], axis=0) - q, atol=accuracy)
        assert_allclose(kernel.log_sum_targets(q), log_sums, atol=accuracy)
        mean = np.exp(exponents - log_sums[:, None]) @ y + offset
        assert_allclose(kernel.log_sum_and_mean(q)[1], mean, atol=max(accuracy * width, 1e-10))
    # What the choice guards against: products about the far origin, which lose the digits asked for above.
    far_x, far_y = x + 1e6, y + 1e6
    products = far_x @ far_y.T - 0.5 * (far_x**2).sum(axis=1)[:, None] - 0.5 * (far_y**2).sum(axis=1)
    assert np.abs(products - (exponents - q)).max() > 1e-8


def test_soft_mean_far_away_is_the_nearest_target():
    y = np.array([[0.0, 0.0], [1.0, 0.0]])
    log_sum, mean = StreamedKernel(np.array([[-1e4, 3.0]]), y).log_sum_and_mean(np.zeros(2))
    assert_allclose(mean, [[0.0, 0.0]], atol=1e-300)
    assert_allclose(log_sum, [-0.5 * (1e8 + 9)], rtol=1e-15)


def test_top_targets():
    rng = np.random.default_rng(5)
    x, y, log_weights = rng.normal(size=(20, 3)), rng.normal(size=(50, 3)), rng.normal(size=50)
    exponents = log_weights - 0.5 * ((x[:, None] - y[None]) ** 2).sum(axis=-1)
    probability = np.exp(exponents - logsumexp(exponents, axis=1, keepdims=True))
    order = np.argsort(-probability, axis=1)[:, :4]
    targets, values = StreamedKernel(x, y).top_targets(log_weights, 4)
    assert_array_equal(targets, order)
    assert_allclose(values, np.take_along_axis(probability, order, axis=1), rtol=1e-12)
    targets, values = StreamedKernel(x, y[:3]).top_targets(np.array([0.0, -np.inf, 0.0]), 9)
    assert targets.shape == (20, 3)
    assert_array_equal(np.sort(targets, axis=1), np.tile([-1, 0, 2], (20, 1)))
    assert_array_equal(values[targets == -1], 0.0)


def test_picked_targets_follow_their_probabilities():
    rng = np.random.default_rng(6)
    x, y = rng.normal(size=(4, 2)), rng.normal(size=(8, 2))
    log_weights = rng.normal(size=8)
    log_weights[3] = -np.inf
    counts = np.array([20_000, 0, 5_000, 30_000])
    picked = pick_targets(x, y, log_weights, counts, rng.random(counts.sum()))
    exponents = log_weights - 0.5 * ((x[:, None] - y[None]) ** 2).sum(axis=-1)
    probability = np.exp(exponents - logsumexp(exponents, axis=1, keepdims=True))

    def statistic(expected):
        """Chi-square of all rows' counts over the targets that can be drawn."""
        total, begin = 0.0, 0
        for row, count in zip(expected, counts):
            seen = np.bincount(picked[begin : begin + count], minlength=8)
            begin += count
            assert seen[3] == 0
            kept = row * count > 0
            total += np.sum((seen[kept] - row[kept] * count) ** 2 / (row[kept] * count))
        return total

    limit = chi2.isf(1e-5, df=3 * 6)
    assert statistic(probability) < limit
    swapped = probability[:, [1, 0, 2, 3, 4, 5, 6, 7]]
    assert statistic(swapped) > limit  # negative control


def test_a_pick_inverts_the_cumulative_sum():
    y = np.zeros((4, 1))
    uniforms = np.array([0.0, 0.2499, 0.2501, 0.74, 0.76, 1 - 2**-53])
    picked = pick_targets(np.zeros((1, 1)), y, np.zeros(4), np.array([6]), uniforms)
    assert_array_equal(picked, [0, 0, 1, 2, 3, 3])
    # A target of weight 0 is never drawn, not even at the ends of the interval.
    weights = np.array([-np.inf, 0.0, 0.0, -np.inf])
    picked = pick_targets(np.zeros((1, 1)), y, weights, np.array([2]), np.array([0.0, 1 - 2**-53]))
    assert_array_equal(picked, [1, 2])


def results_with(threads, monkeypatch):
    """Everything a kernel computes, on so many threads."""
    monkeypatch.setenv("ENSEMBLES_THREADS", str(threads))
    assert thread_count() == threads
    rng = np.random.default_rng(8)
    x, y = rng.normal(size=(700, 3)), rng.normal(size=(600, 3))
    log_f, q, log_a = rng.normal(size=700), rng.normal(size=600), np.full(700, -np.log(700))
    kernel = StreamedKernel(x, y)
    sweep = kernel.sweep(log_f, q, log_a, 1.2)
    sparse = kernel.entries(log_a - 3, q, 1e-4, 10**6)
    picked = pick_targets(x, y, q, np.full(700, 3), rng.random(2100))
    return [
        sweep.log_f, sweep.row_excess, sweep.column_log_sums, *kernel.log_sum_and_mean(q), kernel.log_sum_sources(log_f),
        *kernel.top_targets(q, 3), kernel.nearest_costs(), sparse.data, sparse.indices, picked,
    ]  # fmt: skip


def test_same_bits_on_one_thread_and_on_two(monkeypatch):
    for one, other in zip(results_with(1, monkeypatch), results_with(2, monkeypatch), strict=True):
        assert_array_equal(one, other)


def test_blocks_cover_the_rows_once():
    for rows in (1, 5, 8, 9, 1000):
        bounds = block_bounds(rows, 8)
        assert [i for start, stop in bounds for i in range(start, stop)] == list(range(rows))


def test_a_failure_in_a_thread_is_passed_on(monkeypatch):
    monkeypatch.setenv("ENSEMBLES_THREADS", "2")

    def task(block, start, stop):
        if block == 3:
            raise KeyboardInterrupt("stop")

    with pytest.raises(KeyboardInterrupt, match="stop"):
        run_blocks(task, block_bounds(100, 8), 1e9)


SCRIPT = """
import sys, numpy as np, ensembles
rng = np.random.default_rng(9)
x, y = rng.normal(size=(12, 2)), rng.normal(size=(9, 2))
series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [x, y])
bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.02), tolerance=1e-12)
np.savez(sys.argv[1], matrix=bridge.coupling().matrix(), drift=bridge.drift(0.4, x),
         paths=bridge.sample_paths(5, [0.3, 1.0], rng=1).positions)
"""


def test_the_interpreted_loops_agree(tmp_path):
    results = []
    for flag in ("0", "1"):
        path = tmp_path / f"{flag}.npz"
        environment = {**os.environ, "NUMBA_DISABLE_JIT": flag}
        run = subprocess.run(
            [sys.executable, "-W", "error", "-c", SCRIPT, str(path)], env=environment, capture_output=True, text=True
        )
        assert run.returncode == 0, run.stderr
        with np.load(path) as archive:
            results.append({name: archive[name] for name in archive.files})
    assert set(results[0]) == {"matrix", "drift", "paths"}
    for name, values in results[0].items():
        assert_allclose(results[1][name], values, rtol=1e-9, atol=1e-14)
