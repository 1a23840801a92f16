"""The population between the snapshots, at five times."""

from __future__ import annotations

import numpy as np
from matplotlib.colors import PowerNorm
from matplotlib.figure import Figure

from ..wording import density_unit, time_text
from .scene import Scene
from .style import DENSITY, INK, MARKERS, TIME, WIDTH, panel_grid, plain, set_title

__all__ = ["density_on_grid", "draw_density"]

_LOWEST = 0.01  # of the largest density; below it nothing is drawn
_WORK = 40_000_000  # pairs of grid point and particle a picture may cost
_DRAWS = 4000
_DASHES = ("-", (0, (6, 1.5)), (0, (4, 1.2, 1, 1.2)), (0, (2, 1.2)), (0, (1, 1)))


def draw_density(figure: Figure, scene: Scene, rng: np.random.Generator) -> str:
    """Draw the density at five times: curves on a line, filled contours in a plane, binned draws above."""
    dimension = scene.bridge.series.dimension
    times = ", ".join(f"{t:.4g}" for t in scene.times)
    if dimension == 1:
        _draw_curves(figure, scene, rng)
        how = "Curves: exact density; marks below: the snapshots."
    elif dimension == 2:
        _draw_contours(figure, scene)
        how = (
            f"Exact density, one colour scale for all panels, white below {100 * _LOWEST:g} % of the largest value."
            f"{scene.projection_sentence}"
        )
    else:
        _draw_bins(figure, scene, rng)
        how = f"Share of {_DRAWS} exact draws in each cell, over its area; one colour scale.{scene.projection_sentence}"
    unit = f" {scene.bridge.series.time_unit}" if scene.bridge.series.time_unit else ""
    return f"Density of the population at {len(scene.times)} times between the snapshots ({times}{unit}). {how}"


def density_on_grid(scene: Scene, t: float, finest: int = 120) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Density at t on a grid over the window of a plane: x (p,), y (q,), values (q, p)."""
    particles = sum(len(cloud) for cloud in scene.bridge.series.clouds) / len(scene.bridge.series)
    steps = int(np.clip(np.sqrt(_WORK / (10.0 * particles)), 40, finest))
    cells = np.maximum(np.round(steps * scene.sides / scene.sides.max()), 25).astype(int)
    x, y = (scene.ticks(axis, int(cells[axis])) for axis in (0, 1))
    points = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    return x, y, np.exp(scene.bridge.log_density(t, points)).reshape(y.size, x.size)


def _when(scene: Scene, t: float) -> str:
    return time_text(scene.bridge.series, float(f"{t:.4g}"))


def _label(scene: Scene, dimension: int) -> str:
    unit = density_unit(scene.bridge.series, dimension)
    return plain(f"density ({unit})" if unit else "density")


def _draw_curves(figure: Figure, scene: Scene, rng: np.random.Generator) -> None:
    series = scene.bridge.series
    figure.set_size_inches(WIDTH * 0.8, 3.4)
    ax, rug = figure.subplots(2, 1, sharex=True, height_ratios=[1, 0.06 + 0.05 * min(len(series), 8)])
    x = scene.ticks(0, 500)
    span = series.times[-1] - series.times[0]
    for t, dashes in zip(scene.times, _DASHES):
        density = np.exp(scene.bridge.log_density(t, x[:, None]))
        ax.plot(x, density, color=TIME((t - series.times[0]) / span), ls=dashes, lw=1.6, label=plain(_when(scene, t)))
    ax.set_ylim(bottom=0)
    ax.set_ylabel(_label(scene, 1))
    ax.legend()
    for k, (t, cloud, weights) in enumerate(zip(series.times, series.clouds, series.weights)):
        rows = scene.some(cloud, weights, rng)
        rug.plot(cloud[rows, 0], np.full(rows.size, k), MARKERS[k % len(MARKERS)], ms=3, alpha=0.5,
                 color=TIME((t - series.times[0]) / span), mew=0, rasterized=True)  # fmt: skip
    step = -(-len(series) // 8)  # more names than that would lie over one another
    rug.set_yticks(range(0, len(series), step), [plain(time_text(series, t)) for t in series.times[::step]])
    rug.set_ylim(len(series) - 0.4, -0.6)
    rug.set_xlabel(scene.plane.names[0])


def _draw_contours(figure: Figure, scene: Scene) -> None:
    grids = [density_on_grid(scene, t) for t in scene.times]
    largest = max(values.max() for _, _, values in grids)
    # Even steps of the square root: the tails and the crest are both seen.
    levels = largest * np.linspace(np.sqrt(_LOWEST), 1.0, 10) ** 2
    levels[-1] *= 1 + 1e-9
    axes = panel_grid(figure, len(grids), scene.ratio, beside=0.85)
    for ax, t, (x, y, values) in zip(axes, scene.times, grids):
        filled = ax.contourf(x, y, values, levels=levels, cmap=DENSITY, norm=PowerNorm(0.5, 0.0, largest))
        ax.contour(x, y, values, levels=levels[[0]], colors=INK, linewidths=0.4)
        set_title(ax, _when(scene, t))
        scene.frame(ax)
    bar = figure.colorbar(filled, ax=axes, fraction=0.05, pad=0.02, aspect=30, format="%.2g")
    bar.set_label(_label(scene, 2))
    bar.set_ticks(levels[::3])
    scene.name_axes(figure)


def _draw_bins(figure: Figure, scene: Scene, rng: np.random.Generator) -> None:
    axes = panel_grid(figure, len(scene.times), scene.ratio, beside=0.85)
    across = 32
    rows = max(8, round(across * scene.ratio / np.sqrt(3.0)))
    extent = tuple(scene.window.T.ravel())
    # Hexagons stand on two lattices of across x rows cells, so each covers half a lattice cell.
    area = 0.5 * scene.sides.prod() / (across * rows)
    drawn, largest = [], 0.0
    for ax, t in zip(axes, scene.times):
        points = scene.plane.project(scene.bridge.sample(t, _DRAWS, rng))
        bins = ax.hexbin(*points.T, gridsize=(across, rows), extent=extent, mincnt=1, cmap=DENSITY, linewidths=0.1)
        shares = np.asarray(bins.get_array()) / (_DRAWS * area)
        bins.set_array(shares)
        largest = max(largest, float(shares.max()))
        set_title(ax, _when(scene, t))
        scene.frame(ax)
        drawn.append(bins)
    for bins in drawn:
        bins.set_norm(PowerNorm(0.5, 0.0, largest))
    bar = figure.colorbar(drawn[-1], ax=axes, fraction=0.05, pad=0.02, aspect=30, format="%.2g")
    bar.set_label(_label(scene, 2).replace("density", "density in the plane"))
    scene.name_axes(figure)
