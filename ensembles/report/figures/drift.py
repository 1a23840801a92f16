"""The drift that the snapshots add to the prior, at the middle of each gap."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from ..wording import gap_title, speed_unit, time_text
from .density import density_on_grid
from .scene import Scene
from .style import ACCENT, DENSITY, GREY, INK, SECOND, panel_grid, plain, quantity, round_number, set_title

__all__ = ["draw_drift"]

_POPULATED = 0.02  # of the largest density: arrows stand where at least that much of the population is
_ARROWS = 20  # along the longer side of the window
_LENGTH = 1.3  # of a fast arrow, in cells
_DRAWS = 4000
_FEWEST = 6  # draws in a cell, for a mean that is more than noise


def draw_drift(figure: Figure, scene: Scene, rng: np.random.Generator) -> str:
    """Draw the added drift: curves on a line, arrows in a plane."""
    if scene.bridge.series.dimension == 1:
        _draw_curves(figure, scene)
        what = (
            "Solid: 2D ∂ log φ / ∂x, the forward drift without the prior's; dashed: the current velocity, by which the "
            "population as a whole moves; grey: its density, in arbitrary height. Drawn where the density is at least "
            f"{100 * _POPULATED:g} % of its largest value."
        )
    else:
        what = _draw_arrows(figure, scene, rng)
    return (
        f"Drift that the snapshots add to the prior, at the middle of each gap. {what}"
        f"{scene.projection_sentence}{scene.gaps_left_out}"
    )


def _middle(scene: Scene, gap: int) -> float:
    return float(0.5 * (scene.bridge.series.times[gap] + scene.bridge.series.times[gap + 1]))


def _title(scene: Scene, gap: int) -> str:
    series = scene.bridge.series
    return f"{time_text(series, _middle(scene, gap))}  (gap {gap_title(series, gap).partition('= ')[2]})"


def _added(scene: Scene, t: float, points: np.ndarray) -> np.ndarray:
    return scene.bridge.drift(t, points) - scene.bridge.prior.drift(points)


def _draw_curves(figure: Figure, scene: Scene) -> None:
    axes = panel_grid(figure, len(scene.gaps), 0.75, above=0.3)
    grid = scene.ticks(0, 400)
    for ax, gap in zip(axes, scene.gaps):
        t = _middle(scene, gap)
        density = np.exp(scene.bridge.log_density(t, grid[:, None]))
        x = grid[density >= _POPULATED * density.max()]
        ax.plot(x, _added(scene, t, x[:, None])[:, 0], color=ACCENT, lw=1.6, label="added drift")
        current = scene.bridge.current_velocity(t, x[:, None])[:, 0]
        ax.plot(x, current, color=SECOND, lw=1.6, ls=(0, (5, 1.5)), label="current velocity")
        ax.axhline(0.0, color=GREY, lw=0.6, zorder=1)
        back = ax.twinx()
        back.fill_between(grid, density, color=GREY, alpha=0.25, lw=0)
        back.set_ylim(0, 3.0 * density.max())
        back.set_axis_off()
        set_title(ax, _title(scene, gap))
    figure.legend(*axes[0].get_legend_handles_labels(), loc="outside upper center", ncols=2)
    unit = speed_unit(scene.bridge.series)
    figure.supxlabel(scene.plane.names[0])
    figure.supylabel(plain(f"velocity ({unit})" if unit else "velocity"))


def _draw_arrows(figure: Figure, scene: Scene, rng: np.random.Generator) -> str:
    axes = panel_grid(figure, len(scene.gaps), scene.ratio, most=3)
    cell = (np.full(2, scene.sides.max()) if scene.one_scale else scene.sides) / _ARROWS
    exact = scene.bridge.series.dimension == 2
    field = _exact_field if exact else _mean_field
    fields = [field(ax, scene, gap, cell, rng) for ax, gap in zip(axes, scene.gaps)]
    rates = np.concatenate([np.linalg.norm(vectors / cell, axis=1) for _, vectors in fields])
    # One scale in all panels: a fast arrow is `_LENGTH` cells long.
    fast = float(np.quantile(rates, 0.95)) if rates.size else 0.0
    for ax, gap, (points, vectors) in zip(axes, scene.gaps, fields):
        scene.frame(ax)
        set_title(ax, _title(scene, gap))
        if fast > 0.0:
            arrows = ax.quiver(*points.T, *vectors.T, angles="xy", scale_units="xy", scale=fast / _LENGTH,
                               color=INK, width=0.0045, headwidth=3.6, headlength=4.2, headaxislength=3.8,
                               minlength=0.5, pivot="tail", zorder=3)  # fmt: skip
    if fast > 0.0:
        # The key's arrow begins at `x` and must end inside the picture.
        columns = len({round(ax.get_position().x0, 6) for ax in axes})
        width = float(scene.sides[0]) * columns
        key = round_number(min(fast * float(cell[0]), 0.1 * width * fast / _LENGTH))
        x = min(0.91, 0.985 - _LENGTH * key / fast / width)
        text = plain(quantity(key, speed_unit(scene.bridge.series)))
        axes[-1].quiverkey(arrows, x, 0.13 / figure.get_figheight(), key, text, labelpos="W", coordinates="figure",
                           color=INK, fontproperties={"size": 8})  # fmt: skip
    scene.name_axes(figure)
    if exact:
        return (
            f"Arrows: 2D ∇ log φ, to one scale; colour: density. Drawn where the density is at least "
            f"{100 * _POPULATED:g} % of its largest value."
        )
    return (
        f"Arrows: mean of 2D ∇ log φ in each cell over {_DRAWS} draws from the population, to one scale, where at "
        f"least {_FEWEST} of them fell; dots: draws."
    )


def _exact_field(
    ax: Axes, scene: Scene, gap: int, cell: np.ndarray, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Points (n, 2) and added drift (n, 2) on a grid where there is population, over a background of its density."""
    t = _middle(scene, gap)
    x, y, density = density_on_grid(scene, t, 90)
    largest = density.max()
    levels = largest * np.linspace(np.sqrt(_POPULATED), 1.0, 7) ** 2
    ax.contourf(x, y, density, levels=levels, cmap=DENSITY, alpha=0.45, extend="max")
    ticks = [np.arange(scene.window[0, k] + 0.5 * cell[k], scene.window[1, k], cell[k]) for k in (0, 1)]
    points = np.stack(np.meshgrid(*ticks), axis=-1).reshape(-1, 2)
    points = points[np.exp(scene.bridge.log_density(t, points)) >= _POPULATED * largest]
    return points, _added(scene, t, points) if len(points) else points


def _mean_field(
    ax: Axes, scene: Scene, gap: int, cell: np.ndarray, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Mean position and mean added drift, in the plane, of the draws in each cell."""
    t = _middle(scene, gap)
    draws = scene.bridge.sample(t, _DRAWS, rng)
    points, vectors = scene.plane.project(draws), scene.plane.turn(_added(scene, t, draws))
    ax.plot(*points[:1500].T, ".", ms=1.6, color=GREY, alpha=0.35, mew=0, rasterized=True)
    keys = np.floor((points - scene.window[0]) / cell).astype(int)
    _, inverse, counts = np.unique(keys, axis=0, return_inverse=True, return_counts=True)
    inverse = inverse.ravel()
    means = [
        np.stack([np.bincount(inverse, values[:, k]) / counts for k in (0, 1)], axis=1) for values in (points, vectors)
    ]
    full = counts >= _FEWEST
    return means[0][full], means[1][full]
