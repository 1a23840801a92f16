"""Observed end clouds beside what the prior alone predicts, and the simulated statistics."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from ..wording import axis_name, gap_title
from .pair import draw_pair
from .style import GREY, INK, WIDTH, plain, set_title

if TYPE_CHECKING:
    from ...assessment.surprise import GapSurprise, PriorCheck
    from ...snapshots.series import SnapshotSeries

__all__ = ["draw_prior_check"]

_MOST_GAPS = 4


def draw_prior_check(figure: Figure, result: PriorCheck, series: SnapshotSeries) -> str:
    """Draw one column a gap (at most four): clouds above, simulated energy distances below."""
    chosen = np.linspace(0, len(result.gaps) - 1, min(len(result.gaps), _MOST_GAPS)).round().astype(int)
    gaps = {int(i): result.gaps[i] for i in chosen}
    figure.set_size_inches(min(WIDTH, 2.2 * len(gaps) + 1.2), 4.6)
    axes = figure.subplots(2, len(gaps), squeeze=False)
    for column, (i, gap) in enumerate(gaps.items()):
        _draw_clouds(axes[0, column], series, gap, first=column == 0)
        set_title(axes[0, column], gap_title(series, i))
        _draw_simulated(axes[1, column], gap, first=column == 0)
    handles, labels = axes[0, 0].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside upper center", ncols=2, markerscale=1.6, handletextpad=0.3)
    figure.supxlabel(plain(axis_name("energy distance to the prior's prediction", series.length_unit)))
    shown = "" if len(gaps) == len(result.gaps) else f" {len(gaps)} of {len(result.gaps)} gaps are shown."
    return (
        "Observed end clouds beside what the prior alone makes of the snapshot before. Above: positions (first two "
        "coordinates); below: energy distances of end clouds simulated under the prior, and the observed one (dashed line)."
        f"{shown}"
    )


def _draw_clouds(ax: Axes, series: SnapshotSeries, gap: GapSurprise, *, first: bool) -> None:
    count = min(600, len(gap.observed), len(gap.predicted))
    rng = np.random.default_rng(0)
    observed = gap.observed[rng.choice(len(gap.observed), count, replace=False)]
    predicted = gap.predicted[:count]
    draw_pair(ax, observed, predicted, series, label="prior", first=first)


def _draw_simulated(ax: Axes, gap: GapSurprise, *, first: bool) -> None:
    ax.hist(gap.simulated_energy, 20, color=GREY, ec=GREY, lw=1.0)
    ax.axvline(gap.energy_distance, color=INK, lw=1.6, ls=(0, (4, 1.5)))
    entropy = f"\n{gap.entropy_p_value:.2g} by relative entropy" if gap.entropy else ""
    set_title(ax, f"p = {gap.energy_p_value:.2g}{entropy}")
    if first:
        ax.set_ylabel("simulations")
