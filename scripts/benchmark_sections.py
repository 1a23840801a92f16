"""The sections of the benchmark beside the grid: limits of the machine, exponents, ablation, sweeps of noise, paths, size."""

from __future__ import annotations

import resource
import time
from collections.abc import Callable
from pathlib import Path

import numba
import numpy as np

import ensembles
from ensembles.kernels.cached import CachedKernel
from ensembles.kernels.choose import gaussian_kernel
from ensembles.kernels.fast_exp import exponential
from ensembles.kernels.streamed import StreamedKernel
from ensembles.kernels.threads import block_bounds, run_blocks, thread_count
from ensembles.kernels.truncated import TruncatedKernel

from . import benchmark_study as study

Say = Callable[[str], None]


def processor_name() -> str:
    """The processor's own name, where the system tells it."""
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
        return next(line.split(":")[1].strip() for line in lines if line.startswith("model name"))
    except (OSError, StopIteration):
        return "unknown processor"


def threads() -> int:
    """Threads that the kernels use."""
    return thread_count()


def best_of(run: Callable[[], object], repeats: int = 5) -> float:
    """Shortest of a few runs, in seconds."""
    times = []
    for _ in range(repeats):
        begun = time.perf_counter()
        run()
        times.append(time.perf_counter() - begun)
    return min(times)


@numba.njit(nogil=True, fastmath=True)
def _read(values, start, stop):  # type: ignore[no-untyped-def]
    part = values[start:stop]
    total = np.float32(0.0)
    for k in range(part.size):
        total += part[k]
    return total


@numba.njit(nogil=True, fastmath={"contract", "reassoc", "nsz", "arcp"})
def _exponentials(values, start, stop, repeats):  # type: ignore[no-untyped-def]
    part = values[start:stop]
    total = 0.0
    for _ in range(repeats):
        for k in range(part.size):
            total += exponential(part[k])
    return total


def read_bandwidth() -> float:
    """Bytes a second of a sum over a gigabyte, on all threads."""
    values = np.ones(2**28, dtype=np.float32)
    bounds = block_bounds(values.size, 8)
    _read(values, 0, 10)
    return values.nbytes / best_of(
        lambda: run_blocks(lambda block, start, stop: _read(values, start, stop), bounds, 1e9)
    )


def limits(say: Say) -> None:
    """cached sweeps against memory bandwidth, streamed sweeps against exponentials"""
    bandwidth = read_bandwidth()
    say(f"  reading float32 with all threads: {bandwidth / 1e9:.1f} GB/s")
    arguments = -20.0 * np.random.default_rng(0).random(8192)
    _exponentials(arguments, 0, 10, 1)
    repeats, blocks = 2000, block_bounds(8, 8)
    seconds = best_of(
        lambda: run_blocks(lambda block, start, stop: _exponentials(arguments, 0, arguments.size, repeats), blocks, 1e9)
    )
    throughput = 8 * repeats * arguments.size / seconds
    say(f"  exponentials in cache with all threads: {throughput / 1e9:.2f} per ns")
    rng = np.random.default_rng(0)
    for d in (2, 10, 30):
        n = 10_000
        u, v = (rng.normal(size=(n, d)) * 2 / np.sqrt(d) for _ in range(2))
        streamed = StreamedKernel(u, v)
        cached = CachedKernel(streamed)
        log_a, q = np.full(n, -np.log(n)), np.full(n, -np.log(n))
        f = streamed.sweep(np.zeros(n), q, log_a, 1.0).log_f
        for _ in range(4):
            cached.sweep(f, q, log_a, 1.0)
        per_cached = best_of(lambda: cached.sweep(f, q, log_a, 1.0), 9)  # noqa: B023
        per_streamed = best_of(lambda: streamed.sweep(f, q, log_a, 1.0))  # noqa: B023
        out = np.empty((64, n))  # a part that stays in cache
        per_products = best_of(lambda: np.matmul(u[:64], v.T, out=out), 20) * (n / 64)  # noqa: B023
        both = n * n / throughput + per_products
        say(f"  d = {d:2d}: cached sweep {per_cached / n / n * 1e9:.3f} ns an entry, "
            f"{4 * n * n / per_cached / bandwidth:.0%} of bandwidth; streamed {per_streamed / n / n * 1e9:.3f} ns, "
            f"{n * n / per_streamed / throughput:.0%} of the exponentials, {both / per_streamed:.0%} of exponentials and "
            f"scalar products at the speed of BLAS ({per_products / n / n * 1e9:.3f} ns)")  # fmt: skip


def exponents(say: Say) -> None:
    """exponent of the time of a sweep against n for each kernel"""
    rng = np.random.default_rng(0)
    for name, make, sizes, width in (
        ("cached", lambda u, v: CachedKernel(StreamedKernel(u, v)), (1000, 2000, 4000, 8000), 2.0),
        ("streamed", StreamedKernel, (1000, 2000, 4000, 8000, 16_000), 2.0),
        ("truncated", TruncatedKernel, (20_000, 40_000, 80_000), 60.0),
    ):
        times = []
        for n in sizes:
            u, v = (width * rng.uniform(size=(n, 2)) for _ in range(2))
            kernel = make(u, v)
            log_a, q = np.full(n, -np.log(n)), np.full(n, -np.log(n))
            f = np.zeros(n)
            for _ in range(5):
                f = kernel.sweep(f, q, log_a, 1.0).log_f
            times.append(best_of(lambda: kernel.sweep(f, q, log_a, 1.0)))  # noqa: B023
        slope = np.polyfit(np.log(sizes), np.log(times), 1)[0]
        say(
            f"  {name:10s} n = {sizes[0]} to {sizes[-1]}: time grows as n^{slope:.2f}; {times[-1]:.3f} s at n = {sizes[-1]}"
        )


def ablation(say: Say) -> None:
    """what each part of the iteration is worth: seconds (sweeps) without it"""
    for n, d, fraction in ((2000, 2, 0.02), (2000, 2, 0.005), (2000, 10, 0.005), (2000, 30, 0.005)):
        x, y = study.clouds(n, d)
        epsilon = study.noise_variance(x, y, fraction)
        line = []
        for name, strategy in (
            ("all", {}),
            ("no over-relaxation", {"relaxation": False}),
            ("no second order", {"newton": False}),
            ("no ladder", {"ladder_top": np.inf}),
            ("plain sweeps", {"relaxation": False, "newton": False, "ladder_top": np.inf}),
        ):
            found = study.ours(x, y, epsilon, **strategy)
            failed = "" if found.error <= study.GOAL else f" error {found.error:.0e}"
            line.append(f"{name} {found.seconds:.3f} s ({found.sweeps}){failed}")
        say(f"  n = {n}, d = {d:2d}, noise {fraction}: " + "; ".join(line))
    x, y = study.clouds(15_000, 2)
    epsilon = study.noise_variance(x, y, 0.02)
    found = study.ours(x, y, epsilon)
    root = np.sqrt(epsilon)
    from ensembles.schrodinger.coarse import gaussian_start
    from ensembles.schrodinger.solve import solve

    weights = (np.full(15_000, 1 / 15_000),) * 2
    begun = time.perf_counter()
    cold = solve(gaussian_kernel(x / root, y / root), weights, tolerance=study.GOAL,
                 start=gaussian_start((x / root, y / root), weights))  # fmt: skip
    say(f"  n = 15000, d =  2, noise 0.02: coarse start {found.seconds:.2f} s ({found.sweeps}); "
        f"without {time.perf_counter() - begun:.2f} s ({cold.iterations})")  # fmt: skip


def precision(say: Say) -> None:
    """how far single precision alone goes: exact error of potentials solved on the stored kernel only"""
    from ensembles.schrodinger.coarse import gaussian_start
    from ensembles.schrodinger.iteration import Strategy, solver_states

    for d, fraction in ((2, 0.1), (2, 0.01), (30, 0.1), (30, 0.01)):
        x, y = study.clouds(2000, d)
        root = np.sqrt(study.noise_variance(x, y, fraction))
        u, v = x / root, y / root
        weights = (np.full(2000, 1 / 2000),) * 2
        kernel = CachedKernel(StreamedKernel(u, v))
        kernel.floor = 0.0  # type: ignore[misc]
        best = np.inf
        for state in solver_states(kernel, weights, 1e-15, gaussian_start((u, v), weights), Strategy()):
            if state.scale == 1.0:
                best = min(best, state.error)
            if state.sweep > 400:
                break
        exact = study.marginal_error(u, v, np.log(weights[0]) + state.log_f, np.log(weights[1]) + state.log_g)
        say(f"  d = {d:2d}, noise {fraction}: by its own sums {best:.1e}, exactly {exact:.1e}")


def noise_sweep(say: Say) -> None:
    """20 noise levels from 0.5 to 0.005 on 5000 x 5000 in the plane, warm-started, against single cold solves"""
    x, y = study.clouds(5000, 2)
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [x, y])
    levels = [study.noise_variance(x, y, fraction) / 2.0 for fraction in np.geomspace(0.5, 0.005, 20)]
    cold = []
    for level in levels:
        begun = time.perf_counter()
        ensembles.fit_bridge(series, ensembles.Brownian(level))
        cold.append(time.perf_counter() - begun)
    begun = time.perf_counter()
    bridge, sweeps = None, []
    for level in levels:
        bridge = ensembles.fit_bridge(series, ensembles.Brownian(level), start=bridge)
        sweeps.append(bridge.solutions[0].iterations)
    warm = time.perf_counter() - begun
    say(f"  warm sweep {warm:.2f} s ({sweeps} passes); cold solves: sum {sum(cold):.2f} s, mean {np.mean(cold):.3f} s, "
        f"at the smallest noise {cold[-1]:.3f} s")  # fmt: skip
    say(
        f"  the warm sweep costs {warm / np.mean(cold):.1f} mean cold solves, {warm / max(cold):.1f} of the dearest one"
    )


def paths(say: Say) -> None:
    """one million paths of 100 steps in the plane against their normal numbers"""
    x, y = study.clouds(2000, 2)
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [x, y])
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(0.3))
    times = np.linspace(0.0, 1.0, 102)[1:-1]
    bridge.sample_paths(1000, times)
    drawn = best_of(lambda: bridge.sample_paths(1_000_000, times), 3)
    normals = best_of(lambda: np.random.default_rng(0).standard_normal((1_000_000, 100, 2)), 3)
    say(f"  paths {drawn:.2f} s, normal numbers {normals:.2f} s, ratio {drawn / normals:.2f}")


def huge(say: Say) -> None:
    """large clouds, to an L1 error of 1e-3; memory is the process's largest so far"""
    for n, d, fraction, width, goal in (
        (50_000, 30, 0.1, None, 1e-3),
        (100_000, 2, 0.01, None, 1e-3),
        (1_000_000, 2, None, 100.0, 1e-3),
    ):
        x, y = study.clouds(n, d)
        epsilon = study.noise_variance(x, y, fraction) if fraction else (4.0 / width) ** 2  # type: ignore[operator]
        series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [x, y])
        begun = time.perf_counter()
        bridge = ensembles.fit_bridge(series, ensembles.Brownian(epsilon / 2.0), tolerance=goal)
        taken = time.perf_counter() - begun
        memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        solution = bridge.solutions[0]
        say(f"  n = {n}, d = {d}, " + (f"noise {fraction}" if fraction else f"width {width:g} noise lengths")
            + f": {taken:.1f} s, {solution.iterations} sweeps at full size, error {solution.certificate.marginal_error:.1e}, "
            f"{memory:.2f} GiB")  # fmt: skip


SECTIONS: dict[str, Callable[[Say], None]] = {
    "limits": limits,
    "exponents": exponents,
    "ablation": ablation,
    "precision": precision,
    "noise_sweep": noise_sweep,
    "paths": paths,
    "huge": huge,
}


def picture(lines: list[dict[str, object]], path: Path) -> None:
    """Time against n, one line a solver, for noise 0.02 in each dimension."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9.0, 3.5), layout="constrained")
    axes = figure.subplots(1, len(study.DIMENSIONS), sharey=True)
    styles = {
        "ensembles": ("-", "o", "black"),
        "POT sinkhorn": ("--", "s", "#0072b2"),
        "POT sinkhorn_stabilized": (":", "^", "#d55e00"),
        "POT sinkhorn_log": ("-.", "v", "#009e73"),
        "POT lazy": ("--", "x", "#7f7f7f"),
    }
    for ax, d in zip(axes, study.DIMENSIONS, strict=True):
        for solver, (line, marker, colour) in styles.items():
            found = sorted((int(e["n"]), float(e["seconds"])) for e in lines  # type: ignore[call-overload, arg-type]
                           if e["solver"] == solver and e["d"] == d and e["noise"] == 0.02)  # fmt: skip
            if found:
                ax.loglog(
                    *zip(*found, strict=True), linestyle=line, marker=marker, color=colour, label=solver, markersize=4
                )
        ax.set_xlabel("particles in each cloud")
        ax.set_title(f"{d} dimensions", fontsize=9)
    axes[0].set_ylabel("seconds to 1e-6")
    handles, labels = axes[0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside lower center", ncols=len(labels), frameon=False, fontsize=8)
    figure.savefig(path, dpi=200)
