"""Snapshots with sampled paths between them."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.collections import LineCollection
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from ..wording import time_axis_name, time_text
from .scene import Scene
from .style import GREY, INK, MARKERS, TIME, WIDTH, plain

__all__ = ["draw_clouds"]

_MOST_PATHS = 12
_MOST_LEGEND = 8


def draw_clouds(figure: Figure, scene: Scene, rng: np.random.Generator) -> str:
    """Draw every snapshot with its own marker and colour, and some of the paths."""
    series = scene.bridge.series
    shown = min(_MOST_PATHS, len(scene.paths.positions))
    if series.dimension == 1:
        _draw_line(figure, scene, rng, shown)
    else:
        _draw_plane(figure, scene, rng, shown)
    counts = " + ".join(str(len(cloud)) for cloud in series.clouds) if len(series) <= _MOST_LEGEND else ""
    return (
        f"Snapshots of the population and sampled paths between them. {len(series)} snapshots"
        f"{f' ({counts} particles)' if counts else ''}, one marker and colour each; lines: {shown} of "
        f"{len(scene.paths.positions)} paths drawn from the bridge, which run through a particle of every snapshot."
        f"{scene.projection_sentence} Paths are draws from a model, not observed tracks."
    )


def _time_colours(scene: Scene) -> ScalarMappable:
    times = scene.bridge.series.times
    return ScalarMappable(Normalize(times[0], times[-1]), TIME)


def _draw_line(figure: Figure, scene: Scene, rng: np.random.Generator, shown: int) -> None:
    series = scene.bridge.series
    figure.set_size_inches(WIDTH * 0.8, 3.6)
    ax = figure.subplots()
    for path in scene.paths.positions[:shown, :, 0]:
        ax.plot(scene.paths.times, path, color=GREY, lw=0.7, alpha=0.8)
    colours = _time_colours(scene)
    for k, (t, cloud, weights) in enumerate(zip(series.times, series.clouds, series.weights)):
        rows = scene.some(cloud, weights, rng)
        ax.plot(np.full(rows.size, t), cloud[rows, 0], MARKERS[k % len(MARKERS)], ms=4, color=colours.to_rgba(t),
                mec="white", mew=0.3, alpha=0.8, zorder=3, rasterized=True)  # fmt: skip
    ax.set_xlabel(plain(time_axis_name(series)))
    ax.set_ylabel(scene.plane.names[0])
    ax.margins(0.03)


def _draw_plane(figure: Figure, scene: Scene, rng: np.random.Generator, shown: int) -> None:
    series = scene.bridge.series
    colours = _time_colours(scene)
    height = min(max(0.8 * WIDTH * scene.ratio, 2.2), 4.8)
    figure.set_size_inches(WIDTH, height + 0.8)
    ax = figure.subplots()
    many = max(len(cloud) for cloud in series.clouds) > 100
    for k, (t, cloud, weights) in enumerate(zip(series.times, series.clouds, series.weights)):
        points = scene.plane.project(cloud[scene.some(cloud, weights, rng)])
        ax.scatter(*points.T, s=9 if many else 22, marker=MARKERS[k % len(MARKERS)], color=colours.to_rgba(t),
                   edgecolor="white", linewidth=0.25, alpha=0.65, zorder=2, rasterized=True)  # fmt: skip
    _draw_paths(ax, scene, shown, colours)
    if scene.one_scale:
        ax.set_aspect("equal", adjustable="datalim")
    ax.margins(0.03)
    ax.autoscale_view()
    ax.set_xlabel(scene.plane.names[0])
    ax.set_ylabel(scene.plane.names[1])
    bar = figure.colorbar(colours, ax=ax, fraction=0.04, pad=0.02, aspect=25)
    bar.set_label(plain(time_axis_name(series)))
    if len(series) <= _MOST_LEGEND:
        bar.set_ticks(series.times, labels=[f"{t:g}" for t in series.times])
        handles = [
            Line2D([], [], ls="", marker=MARKERS[k % len(MARKERS)], color=colours.to_rgba(t), ms=5,
                   label=plain(f"{time_text(series, t)}, n = {len(cloud)}"))
            for k, (t, cloud) in enumerate(zip(series.times, series.clouds))
        ]  # fmt: skip
        figure.legend(handles=handles, loc="outside upper center", ncols=min(len(series), 4), handletextpad=0.2)


def _draw_paths(ax: Axes, scene: Scene, shown: int, colours: ScalarMappable) -> None:
    times = scene.paths.times
    for path in scene.paths.positions[:shown]:
        points = scene.plane.project(path)
        segments = np.stack([points[:-1], points[1:]], axis=1)
        # A dark line below the coloured one keeps a path apart from the points and from other paths.
        ax.add_collection(
            LineCollection(list(segments), colors=INK, linewidths=1.0, alpha=0.35, zorder=3, capstyle="round")
        )
        ax.add_collection(LineCollection(list(segments), array=0.5 * (times[:-1] + times[1:]), cmap=colours.get_cmap(),
                                         norm=colours.norm, linewidths=0.7, zorder=3, capstyle="round"))  # fmt: skip
