"""The profile of held-out scores over noise levels: a curve for one parameter, contours for two."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.patheffects import withStroke
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter

from ..wording import axis_name, parameter_unit
from .style import ACCENT, DENSITY, GREY, INK, SECOND, WIDTH, plain, set_title

if TYPE_CHECKING:
    from ...assessment.noise import NoiseProfile
    from ...snapshots.series import SnapshotSeries

__all__ = ["draw_noise"]


def draw_noise(figure: Figure, result: NoiseProfile, series: SnapshotSeries) -> str:
    """Draw the profile; the caption says what is seen."""
    draw = _draw_curve if len(result.names) == 1 else _draw_contours
    return draw(figure, result, series)


def _name(parameter: str, series: SnapshotSeries) -> str:
    return plain(axis_name(parameter, parameter_unit(parameter, series)))


def _draw_curve(figure: Figure, result: NoiseProfile, series: SnapshotSeries) -> str:
    (name,) = result.names
    figure.set_size_inches(WIDTH, 3.4)
    left, right = figure.subplots(1, 2)
    x = np.array([level.values[name] for level in result.levels])
    scores = np.array([level.log_score for level in result.levels])
    deficits = np.array([level.deficit_error for level in result.levels])
    left.errorbar(x, scores, deficits, fmt="o-", ms=4, lw=1.2, color=ACCENT, capsize=2)
    left.set_ylabel("held-out log density\n(nats per particle)")
    best = int(np.argmax(scores))
    left.plot(x[best], scores[best], "*", ms=9, color=ACCENT)
    span = np.sort(scores)[-max(2, len(scores) * 2 // 3) :]
    lowest = span[0] - 0.15 * np.ptp(span)
    left.set_ylim(lowest, span[-1] + 0.15 * np.ptp(span))
    below = x[scores < lowest]
    left.plot(below, np.full(below.size, 0.03), "v", ms=6, mfc="none", mec=INK, transform=left.get_xaxis_transform())
    bars = "bars: standard error of the difference\nfrom the best level (★), which has none"
    set_title(left, f"{bars}\n{_below(below.size, x.size)} (▽)" if below.size else bars)
    set_title(right, "bars: standard error")
    energy = np.array([level.energy_distance for level in result.levels])
    right.errorbar(x, energy, [level.energy_distance_error for level in result.levels], fmt="s-", ms=4, lw=1.2,
                   color=SECOND, capsize=2)  # fmt: skip
    right.set_ylabel(plain(axis_name("energy distance to\nthe left-out snapshots", series.length_unit)))
    for ax in (left, right):
        ax.axvspan(*result.interval[name], color=GREY, alpha=0.25, lw=0)
        ax.axvline(result.estimate[name], color=GREY, lw=0.8)
        if (x > 0).all():
            _logarithmic(ax, "x")
        ax.set_xlabel(_name(name, series))
    cut = f" Open triangles: {_below(below.size, x.size)}." if below.size else ""
    return (
        f"Held-out scores against {name}. Left: mean log-density of the left-out particles; bars: standard error of the "
        "difference from the best level (star), which therefore has no bar. "
        "Right: energy distance with its standard error. Line and grey band: maximum of the "
        f"log score and its 90 % interval.{cut}"
    )


def _below(count: int, levels: int) -> str:
    return f"{count} of {levels} levels {'lies' if count == 1 else 'lie'} below the axis"


def _draw_contours(figure: Figure, result: NoiseProfile, series: SnapshotSeries) -> str:
    first, second = result.names
    figure.set_size_inches(0.72 * WIDTH, 3.6)
    ax = figure.subplots()
    x, y = (np.unique([level.values[name] for level in result.levels]) for name in result.names)
    deficit = np.array([level.deficit for level in result.levels]).reshape(x.size, y.size).T
    error = np.array([level.deficit_error for level in result.levels]).reshape(x.size, y.size).T
    # The colours are spent on the levels that compete; far ones are all dark.
    top = float(np.quantile(deficit[deficit > 0], 0.4)) if (deficit > 0).any() else 1.0
    filled = ax.contourf(x, y, deficit, levels=np.linspace(0.0, top, 9), cmap=DENSITY, extend="max")
    with np.errstate(divide="ignore", invalid="ignore"):
        clear = np.where(error > 0, deficit / error, 0.0)
    if clear.max() > 1.0:
        levels = [v for v in (1.0, 2.0) if v < clear.max()]
        lines = ax.contour(
            x, y, clear, levels=levels, colors=INK, linewidths=1.2, linestyles=["-", "--"][: len(levels)]
        )
        # Pale round them: the colours beneath run from light to dark.
        lines.set_path_effects([withStroke(linewidth=2.6, foreground="white")])
        for text in ax.clabel(lines, fmt=lambda v: f"{v:g} s.e.", fontsize=7):
            text.set_bbox({"facecolor": "white", "lw": 0, "pad": 0.8})
    ax.plot(result.resampled[:, 0], result.resampled[:, 1], "o", ms=3.2, color=INK, mec="white", mew=0.6, zorder=3,
            clip_on=False)  # fmt: skip
    ax.plot(
        result.best[first], result.best[second], "*", ms=11, color=SECOND, mec=INK, mew=0.6, zorder=4, clip_on=False
    )
    for which, values in (("x", x), ("y", y)):
        if (values > 0).all():
            _logarithmic(ax, which)
    ax.set_xlabel(_name(first, series))
    ax.set_ylabel(_name(second, series))
    bar = figure.colorbar(filled, ax=ax, format="%.2g")
    bar.set_label("below the best\n(nats per particle)")
    return (
        f"Held-out log score over {first} and {second}. Colour: how far it lies below the best; lines, solid and "
        "dashed: where that is one and two standard errors; star: the best level; dots: the best of bootstrap resamples."
    )


def _logarithmic(ax: Axes, which: str) -> None:
    """A logarithmic axis with plain numbers at 1, 2 and 5, since levels seldom span many decades."""
    (ax.set_xscale if which == "x" else ax.set_yscale)("log")
    axis = ax.xaxis if which == "x" else ax.yaxis
    low, high = sorted(ax.get_xlim() if which == "x" else ax.get_ylim())
    axis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0) if high < 200 * low else (1.0,)))
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axis.set_minor_formatter(NullFormatter())
