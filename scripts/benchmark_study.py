"""Time the solver beside POT's on the same inputs and to the same accuracy, and against the machine's own limits.

Conventions. Cost ½|x - y|², noise variance ε = fraction * median |x - y|² / 2, which is POT's `reg` = fraction * median on
the cost |x - y|². The goal is an L1 error of 1e-6 on both marginals, recomputed for every solver by `marginal_error` below.

POT is given the distance matrix it asks for, and the time `ot.dist` took is added to its own: ours starts from the clouds, too.
Apart from that it gets its best case: the number of plain sweeps that reach the goal from zero potentials is found beforehand
with a fast kernel, POT is asked for just that many, and its convergence checks are switched off. Where a run would take longer
than the limit, its time is set-up plus sweeps at its own measured cost a sweep, marked "~", and ">" where the number of sweeps
is only known to be larger. Beyond 5,000 particles the log-domain solver's cost a sweep is measured in the first cell of a size
and taken for its other cells: it does the same work whatever the noise and the dimension.
"""

from __future__ import annotations

import argparse
import json
import os
import platform
import time
import tracemalloc
import warnings
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import ot

import ensembles
from ensembles.kernels.cached import CachedKernel
from ensembles.kernels.streamed import StreamedKernel
from ensembles.schrodinger.iteration import Strategy, sweep_states
from ensembles.schrodinger.relaxation import RelaxationControl
from ensembles.schrodinger.solution import State

FRACTIONS = (0.5, 0.1, 0.02, 0.005)
DIMENSIONS = (2, 10, 30)
GOAL = 1e-6
MOST_SWEEPS = {1000: 20_000, 2000: 20_000, 5000: 4_000, 10_000: 1_000, 20_000: 250}
LIMIT = 4.0  # seconds that one POT run may take before it is extrapolated
SLOW = ("POT sinkhorn_log", "POT sinkhorn_stabilized")
SLOW_MATRICES = 8  # that these hold at once, about; left out where the machine has not the memory
MACHINE = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
# Of the log-domain solver on large clouds, by size: set-up and seconds a sweep.
_measured: dict[tuple[str, int], tuple[float, float]] = {}


def clouds(n: int, d: int, seed: int = 0) -> tuple[np.ndarray, np.ndarray]:
    """A Gaussian cloud, and a ring beside two lumps in the first two coordinates: no Gaussian start is exact for these."""
    rng = np.random.default_rng(seed)
    x, y = rng.normal(size=(n, d)), 0.5 * rng.normal(size=(n, d))
    kind, angle = rng.integers(0, 3, n), rng.uniform(0, 2 * np.pi, n)
    ring = 2.0 * np.stack([np.cos(angle), np.sin(angle)], axis=1) + 0.15 * rng.normal(size=(n, 2))
    y[kind == 0, :2] = ring[kind == 0]
    y[kind == 1, :2] += [2.5, 0.5]
    return x, y


def noise_variance(x: np.ndarray, y: np.ndarray, fraction: float) -> float:
    """ε from the median squared distance of a thousand points of each cloud."""
    return fraction * float(np.median(((x[:1000, None] - y[None, :1000]) ** 2).sum(axis=-1))) / 2.0


def marginal_error(u: np.ndarray, v: np.ndarray, log_p: np.ndarray, log_q: np.ndarray) -> float:
    """Larger L1 error of the marginals of exp(log_p_i + log_q_j - ½|u_i - v_j|²) against 1/n and 1/m, in float64 numpy."""
    n, m = len(u), len(v)
    rows, columns = np.zeros(n), np.zeros(m)
    for first in range(0, n, max(1, 4_000_000 // m)):
        part = slice(first, first + max(1, 4_000_000 // m))
        exponent = u[part] @ v.T - 0.5 * (u[part] ** 2).sum(axis=1)[:, None] - 0.5 * (v**2).sum(axis=1)
        entries = np.exp(exponent + log_p[part, None] + log_q)
        rows[part] = entries.sum(axis=1)
        columns += entries.sum(axis=0)
    return max(float(np.abs(rows - 1 / n).sum()), float(np.abs(columns - 1 / m).sum()))


@dataclass(frozen=True)
class Timed:
    """One line of the table."""

    solver: str
    seconds: float
    sweeps: int
    error: float
    megabytes: float
    extrapolated: bool = False


def timed(run: Callable[[], object]) -> tuple[float, float, object]:
    """Seconds (best of up to three short runs), peak megabytes of a further run, and the result."""
    best, result, spent = np.inf, None, 0.0
    for _ in range(3):
        begun = time.perf_counter()
        result = run()
        taken = time.perf_counter() - begun
        best, spent = min(best, taken), spent + taken
        if spent > 2.0:
            break
    if best > 2.0:
        return best, float("nan"), result
    tracemalloc.start()
    run()
    peak = tracemalloc.get_traced_memory()[1] / 2**20
    tracemalloc.stop()
    return best, peak, result


def ours(x: np.ndarray, y: np.ndarray, epsilon: float, **strategy: object) -> Timed:
    """A whole fit through the public interface, certificate included."""
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [x, y])
    prior = ensembles.Brownian(epsilon / 2.0)
    options = ensembles.SolverOptions(strategy=Strategy(**strategy), allow_unconverged=True, memory=MEMORY)  # type: ignore[arg-type]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        seconds, peak, bridge = timed(lambda: ensembles.fit_bridge(series, prior, tolerance=GOAL, options=options))
    gap = bridge.gaps[0]  # type: ignore[attr-defined]
    root = np.sqrt(epsilon)
    error = marginal_error(x / root, y / root, gap.log_p, gap.log_q)
    return Timed("ensembles", seconds, gap.solution.iterations, error, peak)


def plain_sweeps(x: np.ndarray, y: np.ndarray, epsilon: float) -> int | None:
    """Plain sweeps from zero potentials to the goal, or None beyond the most that are counted."""
    n = len(x)
    root = np.sqrt(epsilon)
    exact = StreamedKernel(x / root, y / root)
    kernel = CachedKernel(exact) if n * n * 4 < 2 * 2**30 else exact
    log_a = np.full(n, -np.log(n))
    state = State(0, "start", 1.0, np.zeros(n), np.zeros(n), np.inf, np.inf, np.inf, 1.0)
    most = MOST_SWEEPS[min(MOST_SWEEPS, key=lambda size: abs(size - n))]
    for swept in sweep_states(kernel, log_a, log_a, state, RelaxationControl(), False):
        if swept.error <= GOAL:
            return swept.sweep
        if swept.sweep >= most:
            return None
    raise AssertionError("sweeps do not end")


def pot_runs(cost: np.ndarray, regularisation: float) -> dict[str, Callable[[int], tuple[np.ndarray, np.ndarray]]]:
    """POT's variants: each takes a number of sweeps and gives the logs of its two scalings."""
    n, m = cost.shape
    a, b = np.full(n, 1 / n), np.full(m, 1 / m)
    quiet = {"stopThr": 0.0, "warn": False, "log": True}

    def plain(sweeps: int) -> tuple[np.ndarray, np.ndarray]:
        log = ot.bregman.sinkhorn_knopp(a, b, cost, regularisation, numItermax=sweeps, **quiet)[1]
        return np.log(log["u"]), np.log(log["v"])

    def in_logarithms(sweeps: int) -> tuple[np.ndarray, np.ndarray]:
        log = ot.bregman.sinkhorn_log(a, b, cost, regularisation, numItermax=sweeps, **quiet)[1]
        return log["log_u"], log["log_v"]

    def stabilised(sweeps: int) -> tuple[np.ndarray, np.ndarray]:
        plan = ot.bregman.sinkhorn_stabilized(a, b, cost, regularisation, numItermax=sweeps, stopThr=0.0, warn=False)
        # Its scalings are not returned in one convention: the marginals of its plan are what counts.
        return plan.sum(axis=1), plan.sum(axis=0)

    return {"POT sinkhorn": plain, "POT sinkhorn_log": in_logarithms, "POT sinkhorn_stabilized": stabilised}


def lazy_run(x: np.ndarray, y: np.ndarray, regularisation: float) -> Callable[[int], tuple[np.ndarray, np.ndarray]]:
    """POT's variant that never holds the matrix."""

    def lazy(sweeps: int) -> tuple[np.ndarray, np.ndarray]:
        f, g = ot.bregman.empirical_sinkhorn(
            x, y, regularisation, numIterMax=sweeps, stopThr=0.0, isLazy=True, batchSize=500, warn=False
        )
        return f, g

    return lazy


def run_pot(name: str, run: Callable[[int], tuple[np.ndarray, np.ndarray]], sweeps: int | None, most: int,
            whitened: tuple[np.ndarray, np.ndarray]) -> Timed:  # fmt: skip
    """Time one POT variant for the number of sweeps it needs; failures are reported as such."""
    n = len(whitened[0])
    few, more = 10, 30
    if name in ("POT sinkhorn_log", "POT lazy"):
        few, more = (1, 2) if n > 10_000 else (2, 4)
    wanted = sweeps if sweeps is not None else most
    if (name, n) in _measured:
        set_up, per_sweep = _measured[name, n]
        return Timed(name, set_up + wanted * per_sweep, wanted, float("nan"), float("nan"), extrapolated=True)
    with warnings.catch_warnings(), np.errstate(all="ignore"):
        warnings.simplefilter("ignore")
        times = []
        for count in (few, more):
            begun = time.perf_counter()
            log_u, log_v = run(count)
            times.append(time.perf_counter() - begun)
        # A few sweeps differ by less than the clock's noise where set-up is long: never below half the plain average.
        per_sweep = max((times[1] - times[0]) / (more - few), 0.5 * times[1] / more)
        set_up = max(times[0] - few * per_sweep, 0.0)
        if n > 5000 and name == "POT sinkhorn_log":  # the same work a sweep whatever the noise
            _measured[name, n] = set_up, per_sweep
        if not (np.isfinite(log_u).all() and np.isfinite(log_v).all()):
            return Timed(name, float("nan"), 0, float("nan"), float("nan"))
        expected = set_up + wanted * per_sweep
        if sweeps is None or expected > LIMIT:
            return Timed(name, expected, wanted, float("nan"), float("nan"), extrapolated=True)
        seconds, peak, result = timed(lambda: run(wanted))
    log_u, log_v = result  # type: ignore[misc]
    if name == "POT sinkhorn_stabilized":
        n, m = log_u.size, log_v.size
        error = max(float(np.abs(log_u - 1 / n).sum()), float(np.abs(log_v - 1 / m).sum()))
        return Timed(name, seconds, wanted, error, peak)
    if not (np.isfinite(log_u).all() and np.isfinite(log_v).all()):
        return Timed(name, float("nan"), wanted, float("nan"), peak)
    return Timed(name, seconds, wanted, marginal_error(*whitened, log_u, log_v), peak)


def grid(sizes: list[int], say: Callable[[str], None], out: Path) -> list[dict[str, object]]:
    """The table: every solver on every size, dimension and noise; written to grid.json after every cell."""
    lines: list[dict[str, object]] = []
    for n in sizes:
        for d in DIMENSIONS:
            x, y = clouds(n, d)
            begun = time.perf_counter()
            cost = ot.dist(x, y)
            distances = time.perf_counter() - begun
            for fraction in FRACTIONS:
                epsilon = noise_variance(x, y, fraction)
                whitened = (x / np.sqrt(epsilon), y / np.sqrt(epsilon))
                mine = ours(x, y, epsilon)
                sweeps = plain_sweeps(x, y, epsilon)
                most = MOST_SWEEPS[n]
                found = [mine]
                for name, run in pot_runs(cost, 2.0 * epsilon).items():
                    if name in SLOW and SLOW_MATRICES * cost.nbytes > MACHINE:
                        continue
                    line = run_pot(name, run, sweeps, most, whitened)
                    found.append(replace(line, seconds=line.seconds + distances))
                if n <= 5000:
                    found.append(run_pot("POT lazy", lazy_run(x, y, 2.0 * epsilon), sweeps, most, whitened))
                say(f"\nn = {n}, d = {d}, noise {fraction} of the median squared distance; plain sweeps to {GOAL:g}: "
                    f"{sweeps if sweeps is not None else f'more than {most}'}")  # fmt: skip
                for line in found:
                    mark = "~" if line.extrapolated else " "
                    bound = ">" if line.extrapolated and sweeps is None else mark
                    say(f"  {line.solver:24s} {bound}{line.seconds:10.3f} s  {line.sweeps:6d} sweeps  error {line.error:8.1e}  "
                        f"peak {line.megabytes:7.0f} MB  ratio {line.seconds / mine.seconds:9.1f}")  # fmt: skip
                    lines.append({"n": n, "d": d, "noise": fraction, "plain_sweeps": sweeps, **line.__dict__})
                (out / "grid.json").write_text(json.dumps(lines, indent=1))
    return lines


def summarise(lines: list[dict[str, object]], say: Callable[[str], None]) -> None:
    """The ratios that matter, in the median and at worst."""
    cells = sorted({(line["n"], line["d"], line["noise"]) for line in lines})  # type: ignore[type-var]
    by_log, by_fastest = {}, {}
    missed = []
    for cell in cells:
        here = {str(line["solver"]): line for line in lines if (line["n"], line["d"], line["noise"]) == cell}
        mine = here["ensembles"]
        if not float(mine["error"]) <= GOAL:  # type: ignore[arg-type]
            missed.append((cell, mine["error"]))
        seconds = float(mine["seconds"])  # type: ignore[arg-type]
        others = {name: line for name, line in here.items() if name != "ensembles"}
        if "POT sinkhorn_log" in others:
            by_log[cell] = float(others["POT sinkhorn_log"]["seconds"]) / seconds  # type: ignore[arg-type]
        reached = [
            float(line["seconds"])  # type: ignore[arg-type]
            for line in others.values()
            if line["extrapolated"] or float(line["error"]) <= 1.01 * GOAL  # type: ignore[arg-type]
        ]
        by_fastest[cell] = min(reached) / seconds if reached else float("inf")
    say(f"\ncells: {len(cells)}; cells where the goal was missed: {missed or 'none'}")
    if by_log:
        ratios = list(by_log.values())
        say(f"POT's log-domain solver / ours: median {np.median(ratios):.0f}, smallest {min(ratios):.1f}")
    say(f"fastest POT variant / ours: median {np.median(list(by_fastest.values())):.1f}, smallest {min(by_fastest.values()):.2f} "
        f"at {min(by_fastest, key=by_fastest.__getitem__)}")  # fmt: skip
    large = [ratio for (n, _, _), ratio in by_fastest.items() if int(n) >= 5000]  # type: ignore[call-overload]
    if large:
        say(f"  n >= 5000: median {np.median(large):.1f}, smallest {min(large):.2f}")
    fine = [ratio for (_, _, noise), ratio in by_fastest.items() if noise == 0.005]
    say(f"  noise 0.005: median {np.median(fine):.1f}, smallest {min(fine):.2f}")


MEMORY = 512 * 2**20


def main() -> None:
    """Run the sections asked for; print, and write what was printed into the output folder."""
    from . import benchmark_sections as sections

    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--out", type=Path, default=Path("benchmark_output"))
    parser.add_argument("--large", action="store_true")
    parser.add_argument("--huge", action="store_true")
    parser.add_argument("--only", default="")
    parser.add_argument("--sizes", default="", help="particles of the grid, such as 1000,5000")
    asked = parser.parse_args()
    asked.out.mkdir(exist_ok=True)
    chosen = [name for name in asked.only.split(",") if name]
    printed: list[str] = []

    def say(text: str) -> None:
        print(text, flush=True)
        printed.append(text)
        (asked.out / "benchmark.txt").write_text("\n".join(printed) + "\n")

    say(f"{platform.processor() or platform.machine()}, {sections.processor_name()}, {sections.threads()} thread(s), "
        f"numpy {np.__version__}, POT {ot.__version__}")  # fmt: skip
    warm = ensembles.SnapshotSeries.from_arrays(
        [0.0, 1.0], [np.random.default_rng(0).normal(size=(300, 2)) + k for k in (0, 1)]
    )
    ensembles.fit_bridge(warm, ensembles.Brownian(0.001))
    for name, section in sections.SECTIONS.items():
        if (chosen and name not in chosen) or (name == "huge" and not (asked.huge or "huge" in chosen)):
            continue
        say(f"\n== {name}: {section.__doc__}")
        section(say)
    if not chosen or "grid" in chosen:
        say("\n== grid: seconds to an L1 error of 1e-6 on both marginals")
        sizes = [int(size) for size in asked.sizes.split(",") if size]
        lines = grid(sizes or [1000, 2000, 5000] + ([10_000, 20_000] if asked.large else []), say, asked.out)
        summarise(lines, say)
        sections.picture(lines, asked.out / "time_against_n.png")
    say(f"\nWritten to {asked.out}/")


if __name__ == "__main__":
    main()
