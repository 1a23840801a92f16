"""Are the p-values of the prior check right? Their law under the prior, and their power; a part of calibration_study.py."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from calibration_repeats import print_last, repeat
from scipy import stats

import ensembles


@dataclass(frozen=True)
class Trial:
    """Clouds of n particles in d dimensions, judged by so many simulations; unequal weights if `weighted`.

    The start population is one of `POPULATIONS`.
    """

    dimension: int
    n: int
    simulations: int
    with_entropy: bool = True
    weighted: bool = False
    population: str = "normal"


def _blobs(size: tuple[int, int], rng: np.random.Generator) -> np.ndarray:
    """Two groups, 15 of their standard deviations apart, of random numbers of particles."""
    cloud = 0.4 * rng.normal(size=size)
    cloud[:, 0] += np.where(rng.random(size[0]) < 0.5, -3.0, 3.0)
    return cloud


def _ring(size: tuple[int, int], rng: np.random.Generator) -> np.ndarray:
    """A ring of radius 3 and width 0.2."""
    cloud, angle = 0.2 * rng.normal(size=size), 2.0 * np.pi * rng.random(size[0])
    cloud[:, :2] += 3.0 * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    return cloud


def _heavy_tails(size: tuple[int, int], rng: np.random.Generator) -> np.ndarray:
    """Student's distribution with three degrees of freedom."""
    return np.asarray(rng.normal(size=size) / np.sqrt(rng.chisquare(3.0, size=(size[0], 1)) / 3.0))


POPULATIONS: dict[str, Callable[[tuple[int, int], np.random.Generator], np.ndarray]] = {
    "normal": lambda size, rng: rng.normal(size=size),
    "two blobs": _blobs,
    "ring": _ring,
    "heavy tails": _heavy_tails,
}


def one_p_value(trial: Trial, shift: float, widening: float, seed: Sequence[int]) -> np.ndarray:
    """p-values by energy distance and relative entropy; the end is the prior's, shifted and widened (standard deviation)."""
    data, simulating = np.random.default_rng(list(seed)).spawn(2)
    prior = ensembles.Brownian(0.5)
    size = (trial.n, trial.dimension)
    step = prior.transition(1.0, trial.dimension)
    draw = POPULATIONS[trial.population]
    start = draw(size, data)
    end = widening * step.sample(draw(size, data), data)
    end[:, 0] += shift
    # Gamma variates of shape 1/2: the clouds weigh as much as a third of their particles would, of equal weights.
    weights = data.gamma(0.5, size=(2, trial.n)) + 1e-9 if trial.weighted else None
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, end], weights)
    found = ensembles.prior_check(
        series, prior, simulations=trial.simulations, with_entropy=trial.with_entropy, rng=simulating
    )
    return np.array([found.gaps[0].energy_p_value, found.gaps[0].entropy_p_value])


def uniformity(
    trial: Trial, repeats: int, *, shift: float = 0.0, workers: int = 2, seed: int = 3
) -> tuple[np.ndarray, list[float]]:
    """p-values (repeats, 2) under the prior, and the Kolmogorov-Smirnov p-values of their uniformity.

    The values lie on a grid of 1 / (1 + simulations); uniform numbers inside the steps make their law continuous.
    """
    found = repeat(one_p_value, repeats, trial, shift, 1.0, seed=seed, workers=workers)
    spread = found - np.random.default_rng(0).random(found.shape) / (1 + trial.simulations)
    return spread, [float(stats.kstest(column, "uniform").pvalue) for column in spread.T]


def uniformity_table(cases: Sequence[tuple[Trial, int]], *, workers: int = 2, seed: int = 3) -> pd.DataFrame:
    """One row a case (trial, repeats) and statistic; mean and shares of the p-values made continuous: ½, 0.05 and 0.1."""
    rows = []
    for number, (trial, repeats) in enumerate(cases):
        found, uniform = uniformity(trial, repeats, workers=workers, seed=seed + 1000 * number)
        for column, by in enumerate(("energy distance", "relative entropy")[: 1 + trial.with_entropy]):
            p = found[:, column]
            rows.append({
                "population": trial.population, "d": trial.dimension, "n": trial.n,
                "weights": "unequal" if trial.weighted else "equal", "by": by,
                "repeats": repeats, "simulations": trial.simulations, "Kolmogorov-Smirnov p": uniform[column],
                "mean p": p.mean(), "± (1 s.e.)": np.sqrt(1 / 12 / repeats),
                "share below 0.05": (p < 0.05).mean(), "share below 0.1": (p < 0.1).mean(),
            })  # fmt: skip
            print_last(rows, 1)
    return pd.DataFrame(rows)


CHANGES = ((0.0, 1.0), (0.25, 1.0), (0.5, 1.0), (1.0, 1.0), (0.0, 1.15), (0.0, 1.3), (0.0, 1.6))


def power_table(trial: Trial, repeats: int, *, workers: int = 2, seed: int = 4) -> pd.DataFrame:
    """Share of p-values at or below 0.05, for shifted and widened truths."""
    rows = []
    for shift, widening in CHANGES:
        found = repeat(one_p_value, repeats, trial, shift, widening, seed=seed, workers=workers)
        power = (found <= 0.05).mean(axis=0)
        rows.append(
            {"shift": shift, "widening": widening, "by energy distance": power[0], "by relative entropy": power[1]}
        )
    return pd.DataFrame(rows)


P_VALUES = [
    *((Trial(d, 100, 19), 400 if d == 5 else 200) for d in (1, 2, 5)),
    *((Trial(d, 100, 19, population=name), 200) for d, name in ((2, "two blobs"), (5, "two blobs"), (2, "ring"))),
    (Trial(2, 100, 19, population="heavy tails"), 200),  # by relative entropy not uniform: see `prior_check`
    *((Trial(d, 20, 19, with_entropy=False), 500) for d in (1, 2, 5)),
    *((Trial(d, 100, 19, with_entropy=False), 500) for d in (1, 2, 5)),
    *((Trial(d, 400, 19, with_entropy=False), 200) for d in (1, 2, 5)),
    (Trial(2, 100, 19, with_entropy=False, weighted=True), 300),
]
POWER = Trial(2, 100, 39), 40
