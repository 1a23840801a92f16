"""Smooth ends where the truth is no mixture potential: shapes in the plane, a branching tree, real cells held out."""

from __future__ import annotations

import warnings
from collections.abc import Callable
from pathlib import Path

import matplotlib.pyplot as plt
import numpy as np
import ot

import ensembles
from ensembles.assessment.scores import energy_distance
from ensembles.endpoints.mixture import MixturePotential
from ensembles.endpoints.quadratic import QuadraticMixture, as_full

DATA = Path(__file__).resolve().parents[1] / "data" / "hsmm_timecourse.csv"
REPEATS = 3
KINDS = ("atoms", "kernel", "mixture", "one Gaussian")


def moons(count: int, rng: np.random.Generator) -> np.ndarray:
    """Two half circles of radius 2, one turned into the other, with a spread of 0.15."""
    angle, side = np.pi * rng.random(count), rng.integers(2, size=count)
    arcs = np.column_stack([2 * np.cos(angle), 2 * np.sin(angle)]) * np.where(side, -1, 1)[:, None]
    return arcs + np.where(side, 1, -1)[:, None] * [1.0, -0.5] + 0.15 * rng.standard_normal((count, 2))


def ring(count: int, rng: np.random.Generator) -> np.ndarray:
    """A circle of radius 2.5 with a spread of 0.15."""
    angle, radius = 2 * np.pi * rng.random(count), 2.5 + 0.15 * rng.standard_normal(count)
    return np.column_stack([radius * np.cos(angle), radius * np.sin(angle)])


def swirl(count: int, rng: np.random.Generator) -> np.ndarray:
    """A spiral of one and a half turns, with a spread of 0.12."""
    turn = 3 * np.pi * np.sqrt(rng.random(count))
    spiral = (0.3 + 0.33 * turn)[:, None] * np.column_stack([np.cos(turn), np.sin(turn)])
    return spiral + 0.12 * rng.standard_normal((count, 2))


def tree(count: int, rng: np.random.Generator) -> np.ndarray:
    """In 20 dimensions, a trunk along one axis that forks into two branches, each of which forks again."""
    progress, first, second = 3 * rng.random(count), rng.integers(2, size=count), rng.integers(2, size=count)
    points = 0.25 * rng.standard_normal((count, 20))
    points[:, 0] += 2 * np.minimum(progress, 1)
    points[np.arange(count), 1 + first] += 2 * np.clip(progress - 1, 0, 1)
    points[np.arange(count), 3 + 2 * first + second] += 2 * np.clip(progress - 2, 0, 1)
    return points


def start_of(
    points: Callable[[int, np.random.Generator], np.ndarray], count: int, rng: np.random.Generator
) -> np.ndarray:
    """A round cloud at the origin, in the dimension of the shape."""
    return 0.7 * rng.standard_normal((count, points(1, rng).shape[1]))


def fitted(series: ensembles.SnapshotSeries, prior: ensembles.Brownian, kind: str) -> ensembles.bridges.bridge.Bridge:
    if kind == "one Gaussian":
        return ensembles.fit_bridge(series, prior, ends=ensembles.MixtureEnds(covariance="full", most=1), components=1)
    return ensembles.fit_bridge(series, prior, ends=kind)


def score_shape(
    shape: Callable[[int, np.random.Generator], np.ndarray], count: int, epsilon: float, seed: int = 0
) -> tuple[dict[str, list[float]], dict[str, ensembles.bridges.bridge.Bridge]]:
    """Per kind: held-out log-density half-way and at the end, energy distances half-way and at the end.

    What happens half-way in truth is drawn from a bridge with atoms through clouds of their own.
    """
    rng = np.random.default_rng(seed)
    prior = ensembles.Brownian(diffusion=epsilon / 2)

    def series(size: int) -> ensembles.SnapshotSeries:
        return ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start_of(shape, size, rng), shape(size, rng)])

    seen = series(count)
    reference = ensembles.fit_bridge(series(3000), prior, tolerance=1e-4)
    middle, end = reference.sample(0.5, 3000, rng=1), shape(3000, rng)
    scores, bridges = {}, {}
    for kind in KINDS:
        bridge = bridges[kind] = fitted(seen, prior, kind)
        at_end = -np.inf if kind == "atoms" else float(bridge.log_density(1.0, end).mean())
        scores[kind] = [
            float(bridge.log_density(0.5, middle).mean()),
            at_end,
            energy_distance(bridge.sample(0.5, 3000, rng=2), middle, unbiased=True),
            energy_distance(bridge.sample(1.0, 3000, rng=3), end, unbiased=True),
        ]
    return scores, bridges


SHAPES = {
    "moons": (moons, 1000, 0.3),
    "ring": (ring, 1000, 0.3),
    "swirl": (swirl, 1000, 0.3),
    "tree": (tree, 1000, 0.3),
}


def show_shapes(out: Path) -> None:
    print(
        "\nTruths that are no mixture potential: 1000 points in either cloud, ε = 0.3, scores against 3000 held-out points;\n"
        f"means of {REPEATS} data sets. log-density in nats (atoms have none at the end); energy distance,\n"
        "unbiased, of 3000 draws (0: equal)."
    )
    print(
        f"{'shape':<8}{'ends':<14}{'log ρ at ½':>12}{'log ρ at 1':>12}{'energy at ½':>14}{'energy at 1':>14}   components"
    )
    planar = {}
    for name, (shape, count, epsilon) in SHAPES.items():
        runs = [score_shape(shape, count, epsilon, seed) for seed in range(REPEATS)]
        bridges = runs[0][1]
        for kind in KINDS:
            half, at_end, energy_half, energy_end = np.mean([run[0][kind] for run in runs], axis=0)
            parts = "" if kind == "atoms" else f"{bridges[kind].solutions[0].components}"
            print(
                f"{name:<8}{kind:<14}{half:>12.3f}{at_end:>12.3f}{energy_half:>14.4f}{energy_end:>14.4f}   {parts}",
                flush=True,
            )
        if name != "tree":
            planar[name] = bridges
    draw_shapes(planar, out / "shapes.png")


def draw_shapes(planar: dict[str, dict[str, ensembles.bridges.bridge.Bridge]], path: Path) -> None:
    """The density at the end, and half-way, of mixture and kernel; the cloud beside it."""
    figure, axes = plt.subplots(
        len(planar), 5, figsize=(13, 2.7 * len(planar)), layout="constrained", sharex=True, sharey=True
    )
    side = np.linspace(-4.2, 4.2, 160)
    grid = np.stack(np.meshgrid(side, side), axis=-1).reshape(-1, 2)
    for row, (name, bridges) in zip(axes, planar.items()):
        cloud = bridges["atoms"].series.clouds[1]
        row[0].plot(*cloud.T, ".", ms=1.5, color="0.2")
        row[0].set_title(f"{name}: the end cloud", fontsize=9)
        for ax, (kind, t) in zip(row[1:], [("mixture", 1.0), ("kernel", 1.0), ("mixture", 0.5), ("atoms", 0.5)]):
            density = np.exp(bridges[kind].log_density(t, grid)).reshape(side.size, side.size)
            ax.pcolormesh(side, side, density, cmap="Blues", rasterized=True, vmax=np.quantile(density, 0.99))
            ax.set_title(f"{kind}, t = {t:g}", fontsize=9)
        for ax in row:
            ax.set_aspect("equal")
    figure.savefig(path, dpi=120)
    plt.close(figure)


def many_components(
    potential: MixturePotential, count: int, covariance: str, rng: np.random.Generator
) -> MixturePotential:
    """A potential with `count` components near those given, for timing."""
    old = potential.mixture
    d = old.linear.shape[1]
    precision = np.repeat(old.precision[:1], count, axis=0)
    if covariance == "full":
        turn = 0.01 * rng.standard_normal((count, d, d))
        precision = as_full(precision) + turn @ turn.swapaxes(1, 2)
    linear = old.linear[0] + 0.3 * rng.standard_normal((count, d))
    return MixturePotential(potential.centre, potential.basis, QuadraticMixture(np.zeros(count), linear, precision))


def chosen_diffusion(series: ensembles.SnapshotSeries, share: float) -> float:
    """D at which the noise of a gap is `share` of the mean squared distance across it, averaged over gaps."""
    rates = []
    for k, duration in enumerate(series.durations):
        squares = ((series.clouds[k][:, None] - series.clouds[k + 1][None]) ** 2).sum(axis=2)
        rates.append(squares.mean() / (2 * duration * series.dimension))
    return float(share * np.mean(rates))


def held_out_cells(components: int, share: float, draws: int = 500) -> dict[str, list[float]]:
    """Energy distance and W1 of the myoblasts at 24 and 48 h, left out one at a time; per kind of end, and of two others."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        series = ensembles.read_snapshots(DATA, time="hours", position=[f"PC{k}" for k in range(1, components + 1)])
    out: dict[str, list[float]] = {}
    for left_out in (1, 2):
        pair = series.subset([left_out - 1, left_out + 1])
        truth, t = series.clouds[left_out], float(series.times[left_out])
        prior = ensembles.Brownian(diffusion=chosen_diffusion(pair, share))
        predictions = {"earlier cloud": pair.clouds[0], "later cloud": pair.clouds[1]}
        for kind in (*KINDS, "auto"):
            bridge = fitted(pair, prior, kind)
            name = f"auto: {bridge.ends}" if kind == "auto" else kind
            predictions[name] = bridge.sample(t, draws, rng=4)
        for name, cloud in predictions.items():
            cost = ot.dist(cloud, truth, metric="euclidean")
            w1 = ot.emd2(np.full(len(cloud), 1 / len(cloud)), np.full(len(truth), 1 / len(truth)), cost)
            out.setdefault(name, []).extend([energy_distance(cloud, truth, unbiased=True), float(w1)])
    return out


def show_cells() -> None:
    print(
        "\nMyoblasts (69, 74, 79, 49 cells), 24 h and 48 h left out one at a time; Brownian prior whose noise over the gap is a\n"
        "tenth of the squared distances across it; distances in the units of the components"
    )
    print(
        f"{'PCs':<5}{'prediction':<16}{'energy 24 h':>13}{'W1 24 h':>10}{'energy 48 h':>13}{'W1 48 h':>10}{'mean W1':>10}"
    )
    for components in (5, 10, 30):
        for name, values in held_out_cells(components, 0.1).items():
            if len(values) == 4:
                first, second = values[:2], values[2:]
                print(
                    f"{components:<5}{name:<16}{first[0]:>13.2f}{first[1]:>10.2f}{second[0]:>13.2f}{second[1]:>10.2f}"
                    f"{(first[1] + second[1]) / 2:>10.2f}",
                    flush=True,
                )
