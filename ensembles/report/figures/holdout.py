"""Held-out snapshots: every prediction's score beside the floor, and the clouds of the bridge beside the observed ones."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from ..wording import axis_name, square_unit, time_text
from .pair import draw_pair
from .style import ACCENT, GREY, INK, MARKERS, WIDTH, plain, set_title

if TYPE_CHECKING:
    from ...assessment.hold_out import HeldOutTime, HoldOut
    from ...snapshots.series import SnapshotSeries

__all__ = ["PREDICTION_WORDS", "draw_hold_out"]

PREDICTION_WORDS = {
    "bridge": "bridge",
    "earlier": "earlier snapshot",
    "later": "later snapshot",
    "straight": "straight lines",
    "independent": "random pairing",
    "prior": "prior alone",
}
_MOST_TIMES = 4
_MOST_POINTS = 600


def draw_hold_out(figure: Figure, result: HoldOut, series: SnapshotSeries, score: str = "energy_distance") -> str:
    """Draw scores above, clouds below (up to four times, spread evenly); the caption says what is seen."""
    held = {row.time for row in result.scores if row.score == score}
    if not held:
        score = next((row.score for row in result.scores if row.score == "mean_error"), result.scores[0].score)
    chosen = np.linspace(0, len(result.times) - 1, min(len(result.times), _MOST_TIMES)).round().astype(int)
    times = [result.times[i] for i in dict.fromkeys(chosen.tolist())]
    figure.set_size_inches(WIDTH, 5.0)
    grid = figure.add_gridspec(2, len(times), height_ratios=[1.0, 1.05])
    top: Axes | None = None
    for column, time in enumerate(times):
        ax = figure.add_subplot(grid[0, column], sharex=top, sharey=top)
        top = top or ax
        _draw_scores(ax, result, time.time, score, first=column == 0)
        set_title(ax, f"left out: {time_text(series, time.time)}")
        ax.set_xlabel(_score_name(score, series, narrow=len(times) > 2))
    first: Axes | None = None
    for column, time in enumerate(times):
        ax = figure.add_subplot(grid[1, column], sharex=first, sharey=first)
        _draw_clouds(ax, series, time, first=first is None)
        first = first or ax
    handles, labels = figure.axes[-1].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside lower center", ncols=2, markerscale=1.6, handletextpad=0.3)
    shown = (
        "" if len(times) == len(result.times) else f" {len(times)} of {len(result.times)} left-out snapshots are shown."
    )
    return (
        f"Held-out snapshots: {score.replace('_', ' ')} of the bridge and of the baselines to the snapshot that was left "
        "out. Bars: one standard error; grey band: mean ± two standard deviations of what a second snapshot of the same "
        f"population would score, the floor. Below: the observed snapshot and as many draws from the bridge.{shown}"
    )


def _score_name(score: str, series: SnapshotSeries, *, narrow: bool) -> str:
    """Name and unit of a score, the unit on a line of its own in a narrow panel."""
    unit = {"covariance_error": square_unit(series), "log_density": "nats", "kernel_discrepancy": ""}.get(
        score, series.length_unit
    )
    name = axis_name(score.replace("_", " "), unit)
    return plain(name.replace(" (", "\n(") if narrow else name)


def _draw_scores(ax: Axes, result: HoldOut, time: float, score: str, *, first: bool) -> None:
    here = {row.prediction: row for row in result.scores if row.time == time and row.score == score}
    floor = here.pop("floor", None)
    names = [
        name for name in PREDICTION_WORDS if any(row.prediction == name for row in result.scores if row.score == score)
    ]
    if floor is not None:
        ax.axvspan(
            floor.value - 2 * floor.standard_error, floor.value + 2 * floor.standard_error, color=GREY, alpha=0.25, lw=0
        )
        ax.axvline(floor.value, color=GREY, lw=0.8)
    for position, name in enumerate(names):
        if name in here:
            row = here[name]
            colour = ACCENT if name == "bridge" else INK
            ax.errorbar(row.value, position, xerr=row.standard_error, fmt=MARKERS[position], ms=5, color=colour, lw=1.0)
    ax.set_yticks(range(len(names)), [PREDICTION_WORDS[name] for name in names])
    ax.tick_params(labelleft=first)
    if first:
        ax.set_ylim(len(names) - 0.5, -0.5)


def _draw_clouds(ax: Axes, series: SnapshotSeries, time: HeldOutTime, *, first: bool) -> None:
    rng = np.random.default_rng(0)
    predicted = time.predictions["bridge"]
    count = min(_MOST_POINTS, len(time.observed), len(predicted))
    observed = time.observed[rng.choice(len(time.observed), count, p=time.weights)]
    predicted = predicted[rng.choice(len(predicted), count, replace=False)]
    draw_pair(ax, observed, predicted, series, label="bridge", first=first)
    ax.tick_params(labelleft=first)
