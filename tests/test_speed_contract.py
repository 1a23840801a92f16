"""What speed must not change: answers, memory, warm starts, interruption, caches. Seconds are in scripts/benchmark."""

import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

import ensembles
from ensembles.bridges import fit
from ensembles.kernels import choose
from ensembles.kernels.cached import CachedKernel
from ensembles.kernels.streamed import StreamedKernel
from ensembles.kernels.tiles import make_tiles
from ensembles.kernels.truncated import TruncatedKernel
from ensembles.schrodinger import coarse
from ensembles.schrodinger.iteration import Strategy, solver_states
from ensembles.schrodinger.solve import solve


def clouds(n, m, dimension=2, seed=0):
    """A Gaussian cloud and one of two lumps."""
    rng = np.random.default_rng(seed)
    x, y = rng.normal(size=(n, dimension)), rng.normal(size=(m, dimension))
    y[: m // 2] += 2.0
    return x, 0.4 * y


def series_of(n, m, dimension=2):
    return ensembles.SnapshotSeries.from_arrays([0.0, 1.0], clouds(n, m, dimension))


def coupling_of(bridge):
    return bridge.coupling(0).matrix()


def test_a_problem_over_the_memory_limit_is_streamed_from_a_coarse_start_to_the_same_answer(monkeypatch):
    monkeypatch.setattr(coarse, "_SMALLEST", 60)
    series, prior = series_of(400, 350), ensembles.Brownian(0.05)
    stored = ensembles.fit_bridge(series, prior, tolerance=1e-10)
    seen = []
    real = fit.gaussian_kernel
    monkeypatch.setattr(fit, "gaussian_kernel", lambda *given, **named: seen.append(real(*given, **named)) or seen[-1])
    options = ensembles.SolverOptions(memory=10_000)
    streamed = ensembles.fit_bridge(series, prior, tolerance=1e-10, options=options)
    assert {type(kernel) for kernel in seen if kernel.shape == (400, 350)} == {StreamedKernel}
    assert_allclose(coupling_of(streamed), coupling_of(stored), atol=1e-11)


def test_a_coarse_start_begins_closer_than_the_closed_form_for_gaussians(monkeypatch):
    monkeypatch.setattr(coarse, "_SMALLEST", 500)
    x, y = (cloud / np.sqrt(0.1) for cloud in clouds(4000, 3000))
    weights = (np.full(4000, 1 / 4000), np.full(3000, 1 / 3000))
    (f, g), factor = coarse.coarse_potentials((x, y), weights, 1e-6, choose.gaussian_kernel, Strategy())
    assert 1.0 <= factor < 2.0
    kernel = StreamedKernel(x, y)
    closed = coarse.gaussian_start((x, y), weights)(1.0)
    first = [
        next(solver_states(kernel, weights, 1e-9, lambda scale, pair=pair: pair, Strategy().without_ladder())).error
        for pair in ((f, g), closed)
    ]
    assert first[0] < 0.2 * first[1]


def test_a_truncated_kernel_solves_and_certifies_within_its_bound():
    x, y = (30.0 * cloud for cloud in clouds(3000, 2500))
    weights = (np.full(3000, 1 / 3000), np.full(2500, 1 / 2500))
    kernel = TruncatedKernel(x, y)
    start = coarse.gaussian_start((x, y), weights)
    solution = solve(kernel, weights, tolerance=1e-6, start=start)
    assert solution.outcome.value == "converged"
    assert solution.certificate.marginal_error >= TruncatedKernel.left_out
    exact = StreamedKernel(x, y)
    sweep = exact.sweep(solution.log_f, np.log(weights[1]) + solution.log_g, np.log(weights[0]), 0.0)
    row_error = weights[0] @ np.abs(np.expm1(sweep.row_excess))
    column_error = weights[1] @ np.abs(np.expm1(solution.log_g + sweep.column_log_sums))
    assert max(row_error, column_error) <= solution.certificate.marginal_error + 1e-12
    assert kernel._forward._layout.entries < 0.7 * 3000 * 2500  # it does leave something out


def test_tiles_hold_every_point_once_and_within_their_boxes():
    points = np.random.default_rng(0).normal(size=(1234, 3))
    tiles = make_tiles(points, 100)
    assert_array_equal(np.sort(tiles.order), np.arange(1234))
    assert (np.diff(tiles.bounds, axis=1) <= 100).all()
    for (first, last), low, high in zip(tiles.bounds, tiles.low, tiles.high, strict=True):
        inside = points[tiles.order[first:last]]
        assert_array_equal(inside.min(axis=0), low)
        assert_array_equal(inside.max(axis=0), high)


def test_single_precision_alone_reaches_1e_7_and_the_final_word_is_exact():
    """Measured floors are printed by `scripts/benchmark --only precision`."""
    u, v = (cloud / np.sqrt(0.1) for cloud in clouds(500, 450))
    weights = (np.full(500, 1 / 500), np.full(450, 1 / 450))
    start = coarse.gaussian_start((u, v), weights)
    kernel = CachedKernel(StreamedKernel(u, v))
    for state in solver_states(kernel, weights, 1e-15, start, Strategy(newton=False)):
        if state.error <= 2e-7 or state.sweep > 200:
            break
    exact = kernel.exact.sweep(state.log_f, np.log(weights[1]) + state.log_g, np.log(weights[0]), 0.0)
    assert weights[0] @ np.abs(np.expm1(exact.row_excess)) < 1e-6
    assert solve(kernel, weights, tolerance=1e-12, start=start).certificate.marginal_error <= 1e-12


@pytest.mark.parametrize("factor", [0.9, 1.0, 1.1])
def test_a_warm_start_gives_the_same_answer_in_fewer_sweeps(factor):
    series = series_of(600, 500)
    cold = ensembles.fit_bridge(series, ensembles.Brownian(0.02 * factor), tolerance=1e-9)
    near = ensembles.fit_bridge(series, ensembles.Brownian(0.02), tolerance=1e-9)
    warm = ensembles.fit_bridge(series, ensembles.Brownian(0.02 * factor), tolerance=1e-9, start=near)
    assert_allclose(coupling_of(warm), coupling_of(cold), atol=1e-10)
    assert warm.solutions[0].iterations < cold.solutions[0].iterations


def test_one_thread_and_two_give_the_same_bits(tmp_path):
    program = (
        "import numpy as np, ensembles\n"
        "rng = np.random.default_rng(0)\n"
        "series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=(900, 2)), rng.normal(size=(800, 2)) + 1])\n"
        "bridge = ensembles.fit_bridge(series, ensembles.Brownian(0.05))\n"
        "paths = bridge.sample_paths(5000, [0.2, 0.7])\n"
        "np.savez({!r}, f=bridge.solutions[0].log_f, g=bridge.solutions[0].log_g, p=paths.positions)\n"
    )
    found = []
    for threads in ("1", "2"):
        file = str(tmp_path / f"{threads}.npz")
        subprocess.run(
            [sys.executable, "-c", program.format(file)], check=True, env=os.environ | {"ENSEMBLES_THREADS": threads}
        )
        found.append(np.load(file))
    for name in ("f", "g", "p"):
        assert_array_equal(found[0][name], found[1][name])


SMALL_FIT = (
    "import numpy as np, ensembles\n"
    "rng = np.random.default_rng(0)\n"
    "series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=(8, 2)), rng.normal(size=(7, 2))])\n"
    "print(ensembles.fit_bridge(series, ensembles.Brownian(0.5)).solutions[0].outcome.value)\n"
)


def test_without_a_cache_folder_it_compiles_in_memory_and_says_so():
    nowhere = "import numba.core.caching as caching\ncaching.CacheImpl._locator_classes = []\n"
    run = subprocess.run([sys.executable, "-c", nowhere + SMALL_FIT], capture_output=True, text=True)
    assert run.returncode == 0, run.stderr
    assert run.stdout.strip() == "converged"
    assert "compiling the loops for this machine" in run.stderr


def test_a_cache_folder_that_cannot_be_made_is_passed_over(tmp_path):
    blocked = tmp_path / "file"
    blocked.write_text("a file where a folder is wanted")
    environment = os.environ | {"NUMBA_CACHE_DIR": str(blocked / "cache")}
    run = subprocess.run([sys.executable, "-c", SMALL_FIT], capture_output=True, text=True, env=environment)
    assert run.stdout.strip() == "converged", run.stderr


def test_a_new_cache_is_announced_once(tmp_path):
    environment = os.environ | {"NUMBA_CACHE_DIR": str(tmp_path)}
    first, second = (
        subprocess.run([sys.executable, "-c", SMALL_FIT], capture_output=True, text=True, env=environment, check=True)
        for _ in range(2)
    )
    assert "compiling the loops for this machine: once after installation" in first.stderr
    assert "compiling" not in second.stderr


def test_compiled_code_is_not_kept_when_a_function_that_it_calls_changed(tmp_path):
    # A copy of the loops, of which a sweep is cached; then a file is changed that holds only what the sweep calls.
    folder = tmp_path / "ensembles"
    shutil.copytree(Path(ensembles.__file__).parent, folder, ignore=shutil.ignore_patterns("__pycache__"))
    command = (
        "import numpy as np; from ensembles.kernels.streamed import StreamedKernel; "
        "kernel = StreamedKernel(np.ones((40, 5)), np.zeros((3, 5))); "
        "print(float(kernel.sweep(np.zeros(40), np.zeros(3), np.zeros(40), 1.0).row_excess[0]))"
    )

    def excess():
        environment = {**os.environ, "PYTHONPATH": str(tmp_path), "NUMBA_CACHE_DIR": str(tmp_path / "cache")}
        run = subprocess.run(
            [sys.executable, "-c", command], capture_output=True, text=True, env=environment, cwd=tmp_path, check=True
        )
        return float(run.stdout)

    assert_allclose(excess(), np.log(3.0) - 2.5, rtol=1e-12)
    file = folder / "kernels" / "compiled_tiles.py"
    source = file.read_text()
    changed = source.replace("tile[j] = (p + a) + ", "tile[j] = (p + a) + 1.0 + ")
    assert changed != source
    file.write_text(changed)
    assert_allclose(excess(), np.log(3.0) - 1.5, rtol=1e-12)


def test_interruption_returns_control_and_leaves_no_thread():
    program = (
        "import signal, threading, numpy as np, ensembles\n"
        "signal.signal(signal.SIGINT, signal.default_int_handler)\n"  # a shell in the background passes it on ignored
        "rng = np.random.default_rng(0)\n"
        "series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=(6000, 2)), rng.normal(size=(6000, 2)) + 3])\n"
        "options = ensembles.SolverOptions(memory=1000, observe=lambda gap, state: print('sweep', flush=True))\n"
        "try:\n"
        "    ensembles.fit_bridge(series, ensembles.Brownian(1e-4), tolerance=1e-13, options=options)\n"
        "except KeyboardInterrupt:\n"
        "    print('interrupted', threading.active_count(), flush=True)\n"
    )
    process = subprocess.Popen([sys.executable, "-c", program], stdout=subprocess.PIPE, text=True)
    try:
        assert process.stdout.readline() == "sweep\n"
        time.sleep(0.3)
        process.send_signal(signal.SIGINT)
        rest, _ = process.communicate(timeout=120)
    finally:
        process.kill()
    assert rest.splitlines()[-1] == "interrupted 1"
