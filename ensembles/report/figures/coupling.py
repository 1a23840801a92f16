"""Who became whom: flows between labels, or the most probable links and how sharp they are."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from ..wording import gap_title, time_axis_name
from .scene import Scene
from .style import ACCENT, GREY, INK, MARKERS, SECOND, TIME, WIDTH, colour_part, panel_grid, plain, set_title

if TYPE_CHECKING:
    from ...bridges.bridge import Bridge
    from ...snapshots.series import SnapshotSeries

__all__ = ["LabelFlow", "draw_coupling", "effective_targets", "label_flow"]

_MOST_LABELS = 10
_MOST_LINKS = 80
_LONGEST = 16
_FLOW = colour_part("Blues", 0.0, 0.9)


@dataclass(frozen=True, eq=False)
class LabelFlow:
    """Flow between the labels of two snapshots.

    Attributes
    ----------
    names : (p,) the labels of the series, the same for every gap; "no label" for an empty one.
    shares : (p,) weight of each label in the earlier snapshot.
    probability : (p, p) probability of a later label (column) given an earlier one (row); NaN where the share is 0.
    """

    names: tuple[str, ...]
    shares: np.ndarray
    probability: np.ndarray


def label_flow(bridge: Bridge, gap: int) -> LabelFlow:
    """Sum the coupling of a gap over labels."""
    names, codes = _label_codes(bridge.series)
    weights = bridge.series.weights[gap]
    towards = bridge.coupling(gap).expectation(np.eye(len(names))[codes[gap + 1]])
    mass = np.zeros((len(names), len(names)))
    np.add.at(mass, codes[gap], weights[:, None] * towards)
    shares = mass.sum(axis=1)
    return LabelFlow(names, shares, mass / np.where(shares > 0, shares, np.nan)[:, None])


def _label_codes(series: SnapshotSeries) -> tuple[tuple[str, ...], list[np.ndarray]]:
    """Names in order of appearance, and the number of each particle's; beyond ten the rare ones are "others"."""
    assert series.labels is not None
    mass: dict[str, float] = {}
    for labels, weights in zip(series.labels, series.weights):
        for name in np.unique(labels):
            mass[str(name)] = mass.get(str(name), 0.0) + float(weights[labels == name].sum())
    names = list(mass)
    kept = names
    if len(names) > _MOST_LABELS:
        frequent = sorted(names, key=lambda name: -mass[name])[: _MOST_LABELS - 1]
        kept = [name for name in names if name in frequent]
    numbers = {name: kept.index(name) if name in kept else len(kept) for name in names}
    codes = [np.array([numbers[str(name)] for name in labels]) for labels in series.labels]
    shown = tuple(name or "no label" for name in kept)
    return (shown if len(kept) == len(names) else (*shown, "others")), codes


def effective_targets(bridge: Bridge, gap: int) -> np.ndarray:
    """exp of the entropy of each particle's probabilities over the next snapshot (n,): 1 is a certain target."""
    chosen = bridge.gaps[gap]
    kernel, log_q = chosen.kernel, chosen.log_q
    # Entropy = log Z - Σ p (log q + log k) with log k = -½|u - v|², expanded around the middle of the targets.
    middle = kernel.targets.mean(axis=0)
    u, v = kernel.sources - middle, kernel.targets - middle
    values = np.column_stack([v, (v**2).sum(axis=1), np.where(np.isfinite(log_q), log_q, 0.0)])
    mean = bridge.coupling(gap).expectation(values)
    squared = (u**2).sum(axis=1) - 2.0 * (u * mean[:, :-2]).sum(axis=1) + mean[:, -2]
    entropy = kernel.log_sum_targets(log_q) + 0.5 * squared - mean[:, -1]
    return np.exp(np.maximum(entropy, 0.0))


def draw_coupling(figure: Figure, scene: Scene, rng: np.random.Generator) -> str:
    """Draw the flow between labels where there are any, and links otherwise."""
    series = scene.bridge.series
    labelled = series.labels is not None and any(np.unique(labels).size > 1 for labels in series.labels)
    caution = "Couplings are inferences under the prior, not observed lineages."
    if labelled:
        _draw_flows(figure, scene)
        return (
            "Flow between labels over each gap: probability of a label later (columns) given one earlier (rows). "
            "The share of each label in the earlier snapshot stands in brackets; rows sum to 1, and a label without "
            f"particles has an empty row.{scene.gaps_left_out} {caution}"
        )
    medians = _draw_links(figure, scene, rng)
    return (
        "Links drawn from the coupling, and how sharp it is. Left: lines from particles "
        f"(up to {_MOST_LINKS} at random) to one partner each in the next snapshot, drawn with the coupling's "
        "probabilities; each snapshot has its own marker, the later one the "
        "lighter. Right: effective number of targets of each particle, the exponential of the entropy of its "
        "probabilities; 1 is a certain target, and the dashed line is the median "
        f"({', '.join(f'{m:.3g}' for m in medians)}). With many targets a single link means little."
        f"{scene.projection_sentence}{scene.gaps_left_out} {caution}"
    )


def _short(name: str) -> str:
    return plain(name if len(name) <= _LONGEST else name[: _LONGEST - 1] + "…")


def _draw_flows(figure: Figure, scene: Scene) -> None:
    flows = [label_flow(scene.bridge, gap) for gap in scene.gaps]
    size = len(flows[0].names)
    most = 3 if size <= 4 else 2
    axes = panel_grid(figure, len(flows), 0.75, share=False, most=most, beside=0.8, above=0.3)
    short = [plain(name if len(name) <= _LONGEST else name[: _LONGEST - 1] + "…") for name in flows[0].names]
    for ax, gap, flow in zip(axes, scene.gaps, flows):
        image = ax.imshow(np.ma.masked_invalid(flow.probability), cmap=_FLOW, vmin=0.0, vmax=1.0, aspect="auto")
        for (i, j), value in np.ndenumerate(flow.probability):
            if np.isfinite(value):
                ax.text(j, i, f"{value:.2f}" if value >= 0.005 else "0", ha="center", va="center",
                        fontsize=8 if size <= 4 else 6, color="white" if value > 0.55 else INK)  # fmt: skip
        rows = [f"{name}\n({100 * share:.0f} %)" if share > 0 else name for name, share in zip(short, flow.shares)]
        ax.set_yticks(range(size), rows)
        ax.set_xticks(range(size), short, rotation=35, ha="right", rotation_mode="anchor")
        set_title(ax, gap_title(scene.bridge.series, gap))
    figure.colorbar(image, ax=axes, fraction=0.04, pad=0.02, aspect=25).set_label("probability")
    figure.supxlabel("label later")
    figure.supylabel("label earlier")


def _draw_links(figure: Figure, scene: Scene, rng: np.random.Generator) -> list[float]:
    """Draw links and histograms, a row a gap; the median effective number of targets of each."""
    series = scene.bridge.series
    ratio = 0.6 if series.dimension == 1 else min(max(scene.ratio, 0.3), 1.1)
    row = min(0.52 * WIDTH * ratio + 0.7, max(9.0 / len(scene.gaps), 2.0))
    figure.set_size_inches(WIDTH, len(scene.gaps) * row)
    grid = figure.subplots(len(scene.gaps), 2, squeeze=False, width_ratios=[1.6, 1])
    medians = []
    for (left, right), gap in zip(grid, scene.gaps):
        (_links_on_line if series.dimension == 1 else _links_in_plane)(left, scene, gap, rng)
        set_title(left, gap_title(series, gap))
        medians.append(_draw_histogram(right, effective_targets(scene.bridge, gap), series.weights[gap]))
        right.set_xlabel(f"effective number of targets, of {len(series.clouds[gap + 1])}")
    return medians


def _drawn_links(scene: Scene, gap: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Row numbers of sources and of one drawn target each, and of all targets shown."""
    series = scene.bridge.series
    sources = scene.some(series.clouds[gap], series.weights[gap], rng, _MOST_LINKS)
    return sources, scene.bridge.gaps[gap].draw_ends(sources, rng), scene.some(
        series.clouds[gap + 1], series.weights[gap + 1], rng
    )  # fmt: skip


def _draw_ends(ax: Axes, scene: Scene, gap: int, starts: np.ndarray, ends: np.ndarray, others: np.ndarray) -> None:
    lines = LineCollection(list(np.stack([starts, ends], axis=1)), colors=GREY, linewidths=0.6, alpha=0.8, zorder=2)
    ax.add_collection(lines)
    span = np.ptp(scene.bridge.series.times)
    for k, points in ((gap + 1, others), (gap, starts)):
        colour = TIME((scene.bridge.series.times[k] - scene.bridge.series.times[0]) / span)
        ax.scatter(*points.T, s=10, marker=MARKERS[k % len(MARKERS)], color=colour, edgecolor="white", linewidth=0.25,
                   zorder=3 if k == gap else 1, rasterized=True)  # fmt: skip


def _links_in_plane(ax: Axes, scene: Scene, gap: int, rng: np.random.Generator) -> None:
    early, late = scene.bridge.series.clouds[gap], scene.bridge.series.clouds[gap + 1]
    sources, targets, others = _drawn_links(scene, gap, rng)
    project = scene.plane.project
    _draw_ends(ax, scene, gap, project(early[sources]), project(late[targets]), project(late[others]))
    if scene.one_scale:
        ax.set_aspect("equal", adjustable="datalim")
    ax.autoscale_view()
    ax.set_xlabel(scene.plane.names[0])
    ax.set_ylabel(scene.plane.names[1])


def _links_on_line(ax: Axes, scene: Scene, gap: int, rng: np.random.Generator) -> None:
    series = scene.bridge.series
    times = series.times[[gap, gap + 1]]
    at = [
        np.column_stack([np.full(rows.size, times[k]), series.clouds[gap + k][rows, 0]])
        for rows, k in zip(_drawn_links(scene, gap, rng), (0, 1, 1))
    ]
    _draw_ends(ax, scene, gap, *at)
    ax.set_xticks(times, [f"{t:g}" for t in times])
    ax.set_xlabel(plain(time_axis_name(series)))
    ax.set_ylabel(scene.plane.names[0])


def _draw_histogram(ax: Axes, numbers: np.ndarray, weights: np.ndarray) -> float:
    """Draw the effective numbers of targets, each source by its weight; their weighted median."""
    order = np.argsort(numbers)
    median = float(numbers[order][np.searchsorted(np.cumsum(weights[order]), 0.5 * (1.0 - 1e-12))])
    low, high = float(numbers.min()), float(numbers.max())
    spread = high > 1.001 * low
    count = int(np.clip(np.sqrt(4.0 * numbers.size), 5, 20))
    bins = np.linspace(low, high, count + 1) if spread else np.array([low - 0.5, low + 0.5])
    ax.hist(numbers, bins=bins, weights=weights, color=ACCENT, alpha=0.85, edgecolor="white", linewidth=0.4)
    ax.axvline(median, color=SECOND, lw=1.2, ls=(0, (4, 1.5)))
    ax.xaxis.set_major_locator(MaxNLocator(4))
    ax.set_ylabel("share of particles")
    ax.spines["left"].set_color(GREY)
    return median
