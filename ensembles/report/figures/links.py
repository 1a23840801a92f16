"""Who is who between frames of the same particles: links by how probable they are, and how sure all of them are."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from ..wording import axis_name, gap_title, time_axis_name
from .style import ACCENT, GREY, INK, MARKERS, SECOND, TIME, WIDTH, plain, set_title

if TYPE_CHECKING:
    from ...links.particle_links import ParticleLinks
    from ...priors.box import Box
    from ...snapshots.series import SnapshotSeries

__all__ = ["draw_links"]

_MOST_GAPS = 3
_MOST_PARTICLES = 40  # in the map; of more, those nearest to the middle are shown
_SHOWN = 0.1  # probability from which an alternative is drawn
_STYLES = (
    (0.9, "0.9 or more", {"colors": INK, "linewidths": 1.6}),
    (0.5, "0.5 to 0.9", {"colors": ACCENT, "linewidths": 1.1}),
    (_SHOWN, "0.1 to 0.5", {"colors": SECOND, "linewidths": 0.8, "linestyles": (0, (2, 1.2))}),
)
"""Least probability, its words, and the line of such a link; told apart by width and dashes where there is no colour."""


def draw_links(figure: Figure, series: SnapshotSeries, links: Sequence[ParticleLinks], box: Box | None) -> str:
    """Draw a map of the links of up to three gaps, and beside each how sure the most probable assignment is.

    Returns the caption.
    """
    shown = list(links[:_MOST_GAPS])
    figure.set_size_inches(WIDTH, len(shown) * 3.1 + 0.35)
    grid = figure.subplots(len(shown), 2, squeeze=False, width_ratios=[1.5, 1])
    right = []
    for (left, beside), found in zip(grid, shown):
        _draw_map(left, series, found, box)
        set_title(left, gap_title(series, found.source))
        right.append(_draw_sureness(beside, found))
    handles = [
        Line2D([], [], color=str(line["colors"]), lw=float(line["linewidths"]), ls=line.get("linestyles", "-"), label=words)
        for _, words, line in _STYLES
    ]  # fmt: skip
    figure.legend(handles=handles, title="probability of the link", loc="outside upper center", ncols=3)
    left_out = len(links) - len(shown)
    particles = [min(found.shape[0], _MOST_PARTICLES) for found in shown]
    return (
        "Links between frames of the same particles, by their probability under the prior. Left: earlier (circles, dark) and "
        f"later places (triangles, light) of {' and '.join(dict.fromkeys(map(str, particles)))} particles"
        f"{' around the middle' if any(found.shape[0] > _MOST_PARTICLES for found in shown) else ''}, with every link that has "
        f"a probability of at least {_SHOWN:g}{', in the first two coordinates' if series.dimension > 2 else ''}. Right: "
        "probability of each particle's link in the most probable one-to-one assignment; the dashed line is their mean, the "
        f"share of right links to be expected ({', '.join(f'{value:.3g}' for value in right)})."
        f"{f' {left_out} further gap(s) are in links.csv.' if left_out else ''} Links are inferences under the prior, not "
        "observed tracks."
    )


def _draw_map(ax: Axes, series: SnapshotSeries, links: ParticleLinks, box: Box | None) -> None:
    early, late = series.clouds[links.source], series.clouds[links.target]
    middle = np.median(early, axis=0)
    chosen = np.sort(np.argsort(((early - middle) ** 2).sum(axis=1), kind="stable")[:_MOST_PARTICLES])
    table = links.sparse()[chosen].tocoo()
    likely = table.data >= _SHOWN
    sources, targets, probability = chosen[table.row[likely]], table.col[likely], table.data[likely]
    moved = late[targets] - early[sources]
    ends = early[sources] + (moved if box is None else box.shortest(moved))
    line = series.dimension == 1

    def on_page(points: np.ndarray, k: int) -> np.ndarray:
        return np.column_stack([np.full(len(points), series.times[k]), points[:, 0]]) if line else points[:, :2]

    segments = np.stack([on_page(early[sources], links.source), on_page(ends, links.target)], axis=1)
    upper = np.inf
    for z, (least, _, style) in enumerate(_STYLES):
        part = (probability >= least) & (probability < upper)
        ax.add_collection(LineCollection(list(segments[part]), zorder=3 - 0.1 * z, capstyle="round", **style))
        upper = least
    span = series.times[-1] - series.times[0]
    low, high = early[chosen].min(axis=0), early[chosen].max(axis=0)
    margin = 0.05 * (high - low)
    inside = late[((late >= low - margin) & (late <= high + margin)).all(axis=1)]
    for points, k in ((np.concatenate([ends, inside]), links.target), (early[chosen], links.source)):
        colour = TIME((series.times[k] - series.times[0]) / span)
        ax.scatter(*on_page(points, k).T, s=9, marker=MARKERS[int(k == links.target)], color=colour,
                   edgecolor="white", linewidth=0.3, zorder=4)  # fmt: skip
    names = [axis_name(name, series.length_unit) for name in series.position_names]
    if line:
        times = series.times[[links.source, links.target]]
        ax.set_xticks(times, [f"{t:g}" for t in times])
        ax.set_xlabel(plain(time_axis_name(series)))
        ax.set_ylabel(plain(names[0]))
        return
    ax.set_aspect("equal", adjustable="datalim")
    ax.autoscale_view()
    ax.set_xlabel(plain(names[0]))
    ax.set_ylabel(plain(names[1]))


def _draw_sureness(ax: Axes, links: ParticleLinks) -> float:
    """Histogram of the probabilities of the most probable assignment; their mean."""
    probability = links.probability_of(links.assignment)[links.assignment >= 0]
    mean = float(probability.mean()) if probability.size else 0.0
    ax.hist(
        probability, bins=list(np.linspace(0.0, 1.0, 21)), color=ACCENT, alpha=0.85, edgecolor="white", linewidth=0.4
    )
    ax.axvline(mean, color=SECOND, lw=1.2, ls=(0, (4, 1.5)))
    ax.set_xlim(0.0, 1.0)
    ax.set_xlabel("probability of the assigned link")
    ax.set_ylabel("particles")
    ax.spines["left"].set_color(GREY)
    return mean
