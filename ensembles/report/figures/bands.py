"""Mean and variance of the population against time, with their error bars."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.figure import Figure

from ..wording import axis_name, bare_name, square_unit, time_axis_name
from .style import ACCENT, WIDTH, plain, set_title

if TYPE_CHECKING:
    from ...assessment.uncertainty import Bands
    from ...snapshots.series import SnapshotSeries

__all__ = ["draw_bands"]

_MOST_COORDINATES = 4


def draw_bands(figure: Figure, result: Bands, series: SnapshotSeries) -> str:
    """Draw the moments of the first four coordinates; the caption says what is seen."""
    coordinates = list(dict.fromkeys(label["coordinate"] for label in result.labels if "coordinate" in label))
    shown = coordinates[:_MOST_COORDINATES]
    figure.set_size_inches(max(0.5 * WIDTH, WIDTH * len(shown) / _MOST_COORDINATES), 4.0)
    axes = figure.subplots(2, len(shown), sharex=True, squeeze=False)
    units = {"mean": series.length_unit, "variance": square_unit(series)}
    for column, name in enumerate(shown):
        for row, what in enumerate(("mean", "variance")):
            ax = axes[row, column]
            chosen = [
                i
                for i, label in enumerate(result.labels)
                if label.get("coordinate") == name and label.get("quantity") == what
            ]
            times = np.array([result.labels[i]["time"] for i in chosen])
            ax.fill_between(times, result.lower[chosen], result.upper[chosen], color=ACCENT, alpha=0.25, lw=0)
            ax.plot(times, result.estimate[chosen], color=ACCENT, lw=1.4)
            if column == 0:
                ax.set_ylabel(plain(axis_name(what, units[what])))
        set_title(axes[0, column], bare_name(name, series.length_unit))
    figure.supxlabel(plain(time_axis_name(series)))
    left_out = f" {len(shown)} of {len(coordinates)} coordinates are shown." if len(shown) < len(coordinates) else ""
    return (
        f"Mean and variance of the population against time, with {100 * result.chance:g} % bands from a weighted bootstrap "
        f"of all snapshots ({len(result.resampled)} refits).{left_out}"
    )
