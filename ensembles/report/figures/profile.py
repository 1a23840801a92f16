"""The evidence of a parameter estimated from unlabelled frames."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from matplotlib.figure import Figure

from ..wording import axis_name
from .style import ACCENT, GREY, WIDTH, panel_grid, plain, set_title, with_error

if TYPE_CHECKING:
    import pandas

__all__ = ["draw_profiles"]


def draw_profiles(figure: Figure, profiles: dict[str, pandas.DataFrame], table: pandas.DataFrame, drop: float) -> str:
    """Draw the log evidence along each parameter with its estimate, interval and the line at `drop` below the maximum.

    `profiles` are those of `PriorEstimate.profile` by name, `table` is `PriorEstimate.to_frame`. Returns the caption.
    """
    rows = table.set_index("parameter")
    figure.set_size_inches(WIDTH, 0.6 * WIDTH)
    panels: Sequence = panel_grid(figure, len(profiles), 0.7, share=False)
    for ax, (name, profile) in zip(panels, profiles.items()):
        row = rows.loc[name]
        ax.axvspan(row["lower"], row["upper"], color=GREY, alpha=0.2, linewidth=0)
        ax.axhline(-drop, color=GREY, linewidth=0.8, linestyle="--")
        ax.axvline(row["value"], color=GREY, linewidth=0.8)
        ax.plot(profile["value"], -profile["below_maximum"], color=ACCENT, marker="o", markersize=3)
        set_title(ax, f"{name} = {with_error(row['value'], row['standard_error'])}")
        ax.set_xlabel(plain(axis_name(name, row["unit"])))
    figure.supylabel("log evidence,\nbelow maximum (nats)", multialignment="center")
    return (
        "Log evidence of each parameter, summed over all links of the unlabelled frames, the other parameters at their best "
        "for it. The band is the 95 % interval from the curvature; where the curve crosses the dashed line is the interval "
        "from the evidence itself."
    )
