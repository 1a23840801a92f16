"""Cells that diffuse, divide, die and commit, with their true descendants; only snapshots of other cells are kept.

Each cell wanders as dX = sqrt(2 D) dW in two coordinates, divides at the rate 0.9 where x > 0 and dies at the rate 0.5 where
x < 0 (both rates rise over a width of 0.5). At the end it is called by its side: "right" or "left". A snapshot takes cells of
founders of its own, so no cell and no clone is measured twice, as when every sample is destroyed. The cells of the first
snapshot are let live on, unseen, for the truth.
"""

from dataclasses import dataclass

import numpy as np

import ensembles

DIFFUSION = 0.25
TIMES = (0.0, 0.5, 1.0, 1.5, 2.0)
_STEP = 0.02


def net_rate(x):
    """Net growth rate at positions (n, 2)."""
    side = 1.0 / (1.0 + np.exp(-2.0 * x[:, 0]))
    return 0.9 * side - 0.5 * (1.0 - side)


@dataclass(frozen=True)
class Branching:
    """The series, and of every cell of the first snapshot: how many descendants it had and the share that went right; of
    many clones of it, the mean number of descendants and the share of them that went right, its true chance."""

    series: ensembles.SnapshotSeries
    descendants: np.ndarray
    share: np.ndarray
    expected: np.ndarray
    chance: np.ndarray


def live(x, duration, rng):
    """Positions at the end and the founder of each living cell, of cells that start at x (n, 2)."""
    founder = np.arange(len(x))
    for _ in range(round(duration / _STEP)):
        x = x + np.sqrt(2.0 * DIFFUSION * _STEP) * rng.normal(size=x.shape)
        side = 1.0 / (1.0 + np.exp(-2.0 * x[:, 0]))
        event = rng.random(len(x))
        copies = 1 + (event < 0.9 * side * _STEP).astype(int) - (event > 1.0 - 0.5 * (1.0 - side) * _STEP)
        x, founder = np.repeat(x, copies, axis=0), np.repeat(founder, copies)
    return x, founder


def simulate(count=1200, seed=0, clones=60):
    """Snapshots of about `count` cells at three times, and the truth about the first of them."""
    rng = np.random.default_rng(seed)
    begin = lambda n: rng.normal(0.0, [1.0, 0.6], (n, 2))  # noqa: E731
    first = begin(count)
    clouds = [first]
    for t in TIMES[1:]:
        seen, _ = live(begin(3 * count), t, rng)
        clouds.append(seen[rng.choice(len(seen), count, replace=False)])
    labels = [np.where(cloud[:, 0] > 0, "right", "left") for cloud in clouds]
    series = ensembles.SnapshotSeries.from_arrays(
        TIMES, clouds, labels=labels, features={"net": [net_rate(cloud) for cloud in clouds]}
    )
    ends, founder = live(first, TIMES[-1], rng)
    total = np.bincount(founder, minlength=count)
    right = np.bincount(founder, weights=ends[:, 0] > 0, minlength=count)
    ends, founder = live(np.repeat(first, clones, axis=0), TIMES[-1], rng)
    founder //= clones
    many, many_right = np.bincount(founder, minlength=count), np.bincount(founder, ends[:, 0] > 0, minlength=count)
    chance = many_right / np.maximum(many, 1)
    return Branching(series, total, right / np.maximum(total, 1), many / clones, chance)


def reliability(predicted, truth, bins=5):
    """Predicted and true share that goes right, of all clones' descendants, and cells counted, in bins of the prediction."""
    rows = np.minimum((predicted * bins).astype(int), bins - 1)
    counted = np.bincount(rows, minlength=bins)
    total = np.bincount(rows, truth.expected, minlength=bins)
    with np.errstate(invalid="ignore"):
        said = np.bincount(rows, truth.expected * predicted, minlength=bins) / total
        seen = np.bincount(rows, truth.expected * truth.chance, minlength=bins) / total
    return said, seen, counted


def brier(predicted, truth):
    """Mean squared error of the prediction for every descendant."""
    errors = (1.0 - predicted) ** 2 * truth.share + predicted**2 * (1.0 - truth.share)
    return float(np.average(errors, weights=truth.descendants))


def nearest_neighbours(series):
    """The baseline: each cell becomes the nearest of the next snapshot."""
    from scipy.spatial import cKDTree

    rows = np.arange(len(series.clouds[0]))
    for early, late in zip(series.clouds[:-1], series.clouds[1:]):
        rows = cKDTree(late).query(early[rows])[1]
    return (series.labels[-1][rows] == "right").astype(float)


def bin_errors(predicted, truth, bins=5):
    """Standard errors of `said` and of `seen` in each bin: that of means over its cells, and for `seen` also of its clones."""
    rows = np.minimum((predicted * bins).astype(int), bins - 1)
    found = np.full((bins, 2), np.nan)
    said, seen, counted = reliability(predicted, truth, bins)
    for k in np.flatnonzero(counted):
        w = truth.expected[rows == k] / truth.expected[rows == k].sum()
        for side, values, mean in ((0, predicted, said[k]), (1, truth.chance, seen[k])):
            found[k, side] = np.sqrt(np.sum((w * (values[rows == k] - mean)) ** 2))
    return found[:, 0], found[:, 1]


def growth_cases(truth):
    """The series with growth known, unknown (a smooth function of state; or free for each cell) and ignored."""
    prior = ensembles.Brownian(diffusion=DIFFUSION)
    series = truth.series
    return {
        "known": series.with_growth(ensembles.Growth("net")),
        "unknown, smooth": ensembles.estimate_growth(series, prior).series,
        "unknown, each cell ± 2": series.with_growth(ensembles.Growth(uncertainty=2.0)),
        "unknown, each cell ± 8": series.with_growth(ensembles.Growth(uncertainty=8.0)),
        "ignored": series,
    }


def predictions(truth):
    """Probability of going right in each of `growth_cases`."""
    prior = ensembles.Brownian(diffusion=DIFFUSION)
    return {
        name: ensembles.descendants(ensembles.fit_bridge(series, prior))["right"].to_numpy()
        for name, series in growth_cases(truth).items()
    }
