"""Real data: which snapshots are predicted, which noise level they support, and what beats the bridge.

scripts/holdout prints the tables and draws the pictures; tests/test_holdout_study.py runs small versions.
"""

from __future__ import annotations

import argparse
import time
from pathlib import Path

import numpy as np
import pandas as pd

import ensembles
from ensembles.assessment.hold_out import HoldOut
from ensembles.assessment.noise import NoiseProfile

DATA = Path(__file__).resolve().parents[1] / "data"
DIFFUSION = 0.205  # Å²/ps, from the mean squared displacement of the same run: see data/README.md
LAST = 200.0  # ps
SLAB = 0.27  # share of the box edge
SHOWN = ("energy_distance", "wasserstein_2", "mean_error", "covariance_error", "log_density")


def argon_slab(frames: int, *, axis: int = 0, across: bool = False, seed: int = 0) -> ensembles.SnapshotSeries:
    """The atoms of a slab selected at time 0, at `frames` times over 0 to 200 ps, rows in unrelated orders.

    `across` keeps the coordinate across the slab only; the other two are at rest from the beginning.
    """
    with np.load(DATA / "argon_diffusion.npz", allow_pickle=False) as archive:
        positions, box, times = (archive[name] for name in ("unwrapped_A", "box_A", "time_ps"))
    fraction = positions[0, :, axis] / box[0, axis]
    inside = np.abs(fraction - 0.5) <= SLAB / 2
    # The nearest frames there are, 10 ps apart.
    rows = np.rint(np.linspace(0.0, LAST, frames) / (times[1] - times[0])).astype(int)
    rng = np.random.default_rng(seed)
    clouds = [rng.permutation(positions[row, inside]) for row in rows]
    if across:
        clouds = [cloud[:, [axis]] for cloud in clouds]
    return ensembles.SnapshotSeries.from_arrays(times[rows], clouds, units={"time": "ps", "length": "Å"})


def score_table(found: HoldOut) -> pd.DataFrame:
    """Value ± standard error, one row a time and prediction."""
    from ensembles.assess import held_out_table

    return held_out_table(found)


def floors_above(found: HoldOut) -> pd.DataFrame:
    """How many standard deviations of the floor the energy distance of the bridge lies above it, one row a time."""
    rows = []
    for time_ in found.times:
        bridge, floor = (found.value(time_.time, name, "energy_distance") for name in ("bridge", "floor"))
        rows.append({"time": time_.time, "energy distance": bridge.value, "floor": floor.value,
                     "floor s.d.": floor.standard_error,
                     "above": (bridge.value - floor.value) / floor.standard_error})  # fmt: skip
    return pd.DataFrame(rows)


def argon_hold_out(frames: int, factor: float, *, across: bool = True, repeats: int = 200) -> HoldOut:
    """Hold out each interior frame under `factor` times the physical diffusion coefficient."""
    series = argon_slab(frames, across=across)
    return ensembles.hold_out(series, ensembles.Brownian(factor * DIFFUSION), repeats=repeats)


def argon_levels() -> np.ndarray:
    """0.205 Å²/ps times powers of √2 from 1/16 to 8."""
    return DIFFUSION * 2.0 ** np.arange(-4.0, 3.5, 0.5)


def argon_profile(frames: int, *, across: bool = True, repeats: int = 60) -> NoiseProfile:
    """Profile the diffusion coefficient over the frames."""
    return ensembles.choose_noise(
        argon_slab(frames, across=across), ensembles.Brownian(1.0), argon_levels(), repeats=repeats
    )


def myoblasts(components: int) -> ensembles.SnapshotSeries:
    """The cells at 0, 24, 48 and 72 h in their first principal components."""
    names = [f"PC{k}" for k in range(1, components + 1)]
    return ensembles.read_snapshots(DATA / "hsmm_timecourse.csv", time="hours", position=names, units={"time": "h"})


def myoblast_levels(series: ensembles.SnapshotSeries) -> np.ndarray:
    """Levels around the diffusion at which the prior's spread is the spread of the cells, per day and axis."""
    variance = np.mean([cloud.var(axis=0).mean() for cloud in series.clouds])
    return float(f"{variance / (2 * 24):.2g}") * 2.0 ** np.arange(-5.0, 1.5, 0.5)


def myoblast_study(components: int, repeats: int) -> tuple[NoiseProfile, HoldOut]:
    """Choose the noise level, and hold out 24 and 48 h under it.

    The level is chosen on the same left-out cells, which favours the bridge: a verdict against it stands all the more.
    """
    series = myoblasts(components)
    noise = ensembles.choose_noise(series, ensembles.Brownian(1.0), myoblast_levels(series), repeats=repeats)
    held = ensembles.hold_out(series, ensembles.Brownian(noise.best["diffusion"]), repeats=repeats)
    return noise, held


def _pictures(
    folder: Path, name: str, series: ensembles.SnapshotSeries, held: HoldOut | None, noise: NoiseProfile | None
) -> None:
    from ensembles.report.figures.assessment import save_assessment_figures

    place = folder / name
    place.mkdir(parents=True, exist_ok=True)
    save_assessment_figures(place, series, hold_out=held, noise=noise)


def _profile_text(noise: NoiseProfile) -> str:
    frame = noise.to_frame().drop(columns=["best", "smallest_within_error"]).round(4)
    return f"{frame.to_string(index=False)}\nestimate {noise.estimate['diffusion']:.3g}; {noise}"


def print_argon(out: Path, repeats: int) -> None:
    """Print the argon study."""
    for across in (True, False):
        what = "coordinate across the slab" if across else "all three coordinates"
        for frames in (3, 5, 9):
            series = argon_slab(frames, across=across)
            print(f"== argon, {frames} frames over 0 to {LAST:g} ps, {what} ==")
            for factor in (1.0, 10.0):
                held = argon_hold_out(frames, factor, across=across, repeats=repeats)
                print(f"-- D = {factor * DIFFUSION:.3g} Å²/ps ({factor:g} times the physical one)")
                print(floors_above(held).round(3).to_string(index=False))
                print(held)
                if across:
                    _pictures(out, f"argon_{frames}_frames_{factor:g}D", series, held, None)
            noise = argon_profile(frames, across=across, repeats=repeats)
            print("-- profile over D; physical value 0.205 Å²/ps")
            print(_profile_text(noise), end="\n\n", flush=True)
            _pictures(out, f"argon_{frames}_frames_{'across' if across else 'space'}", series, None, noise)


def print_myoblasts(out: Path, repeats: int) -> None:
    """Print the study of cells."""
    for components in (2, 5, 10):
        print(f"== myoblasts, {components} principal components, 24 and 48 h left out in turn ==")
        noise, held = myoblast_study(components, repeats)
        print(_profile_text(noise))
        print(f"-- under D = {noise.best['diffusion']:.3g} per h, value ± standard error")
        print(score_table(held).to_string(index=False))
        print(held, *held.dropped, sep="\n", end="\n\n", flush=True)
        _pictures(out, f"myoblasts_{components}_components", myoblasts(components), held, noise)


def main() -> None:
    """Print what is asked for; both by default."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("data", nargs="*", metavar="data", help="argon, cells")
    parser.add_argument("--out", type=Path, default=Path("demo_output/holdout"))
    parser.add_argument("--repeats", type=int, default=60)
    chosen = parser.parse_args()
    studies = {"argon": print_argon, "cells": print_myoblasts}
    if unknown := set(chosen.data) - set(studies):
        parser.error(f"no such data: {', '.join(sorted(unknown))}; use argon or cells")
    for name in chosen.data or studies:
        started = time.time()
        studies[name](chosen.out, chosen.repeats)
        print(f"({name}: {time.time() - started:.0f} s, {chosen.repeats} bootstrap repeats)\n", flush=True)


if __name__ == "__main__":
    main()
