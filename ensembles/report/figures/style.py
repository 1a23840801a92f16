"""One look for all pictures: colours, markers, sizes, axes. Set on each figure; nothing global is changed."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.text import Text

__all__ = [
    "ACCENT",
    "DENSITY",
    "GREY",
    "INK",
    "MARKERS",
    "PALE",
    "SECOND",
    "TIME",
    "WIDTH",
    "colour_part",
    "panel_grid",
    "plain",
    "polish",
    "quantity",
    "round_number",
    "set_title",
    "with_error",
]

WIDTH = 7.0
"""Inches: two columns of a journal page."""

INK, GREY, ACCENT, SECOND = "#222222", "#8c8c8c", "#0b5d8a", "#c8641e"
"""Text; what stands back; and two colours that differ in hue and in lightness, also in grey."""

PALE = "#f0a868"
"""Filled marks that lie under `INK`; light also in grey."""

MARKERS = ("o", "^", "s", "D", "v", "P", "X", "*")
"""One a snapshot, so that colour is not needed to tell them apart."""


def colour_part(name: str, low: float, high: float) -> Colormap:
    return LinearSegmentedColormap.from_list(f"{name} part", colormaps[name](np.linspace(low, high, 256)))


TIME: Colormap = colour_part("viridis", 0.0, 0.88)
"""Early is dark, late is light; the palest end is left out because it is lost on white."""

DENSITY: Colormap = colour_part("YlGnBu", 0.12, 1.0)
"""Little is light, much is dark."""

_SIZES = {"label": 9.0, "tick": 8.0, "title": 9.0, "legend": 8.0, "note": 7.5}


def plain(text: str) -> str:
    """Text from outside, in which a dollar sign is a dollar sign and not the beginning of a formula."""
    return text.replace("$", r"\$")


def set_title(ax: Axes, text: str) -> None:
    """Say what a panel shows, above it on the left."""
    ax.set_title(plain(text), loc="left", fontsize=_SIZES["title"], color=INK)


def panel_grid(
    figure: Figure,
    count: int,
    ratio: float,
    *,
    most: int = 5,
    share: bool = True,
    beside: float = 0.0,
    above: float = 0.0,
) -> list[Axes]:
    """Lay out `count` panels of height/width `ratio` so that the whole is about 0.6 as high as wide; sets the size.

    With `share` all have the same axes, and only the outer ones are numbered. `beside` and `above` are inches left for
    a colour bar and a legend.
    """

    def size(columns: int) -> tuple[float, float]:
        rows = -(-count // columns)
        width = min((WIDTH - 0.65 - beside) / columns - 0.1, 4.4)
        height = rows * (width * ratio + 0.36) + 0.42 + above
        return columns * (width + 0.1) + 0.65 + beside, height

    def cost(columns: int) -> float:
        return abs(size(columns)[1] - 0.6 * WIDTH) + 0.8 * (-count % columns)

    columns = min(range(1, min(count, most) + 1), key=cost)
    rows = -(-count // columns)
    figure.set_size_inches(*size(columns))
    axes = figure.subplots(rows, columns, sharex=share, sharey=share, squeeze=False)
    flat = list(axes.ravel())
    for unused in flat[count:]:
        unused.remove()
    if share:
        for ax in flat[max(0, count - columns) : count]:
            ax.tick_params(labelbottom=True)
    return flat[:count]


def polish(figure: Figure) -> None:
    """Set sizes and lines of everything drawn so far: open axes, small outward ticks, sizes legible at column width."""
    for ax in figure.axes:
        ax.spines[["top", "right"]].set_visible(False)
        ax.tick_params(labelsize=_SIZES["tick"], colors=INK, length=3, width=0.6)
        for spine in ax.spines.values():
            spine.set_linewidth(0.6)
        _size([ax.xaxis.label, ax.yaxis.label], _SIZES["label"])
        _size([ax.xaxis.get_offset_text(), ax.yaxis.get_offset_text()], _SIZES["tick"])
        _size(ax.texts, _SIZES["note"], only_larger=True)
    legends = [legend for legend in (*figure.legends, *(ax.get_legend() for ax in figure.axes)) if legend]
    for legend in legends:
        legend.set_frame_on(False)
        _size([*legend.get_texts(), legend.get_title()], _SIZES["legend"])
    _size([text for text in figure.texts], _SIZES["label"])
    _clear_factors(figure)


def _clear_factors(figure: Figure) -> None:
    """Lift titles above the common factor of an axis, such as 1e6, that stands where they begin."""
    figure.draw_without_rendering()  # the factors are known only then
    factors = [ax.yaxis.get_offset_text() for ax in figure.axes if ax.get_title(loc="left")]
    if not any(factor.get_visible() and factor.get_text() for factor in factors):
        return
    for ax in figure.axes:  # all of them: titles of a row stay on one line
        if title := ax.get_title(loc="left"):
            ax.set_title(title, loc="left", fontsize=_SIZES["title"], color=INK, pad=_SIZES["tick"] + 8.0)


def _size(texts: Sequence[Text], size: float, only_larger: bool = False) -> None:
    for text in texts:
        text.set_color(text.get_color() if only_larger else INK)
        if not only_larger or float(text.get_fontsize()) > size:
            text.set_fontsize(size)


def quantity(value: float, unit: str) -> str:
    """A number with its unit: ``0.5 µm/s``; one over a time as ``1 per d``, in which the number is not lost in the unit."""
    return f"{value:g} per {unit[2:]}" if unit.startswith("1/") else f"{value:g} {unit}".rstrip()


def with_error(value: float, error: float) -> str:
    """A number and its standard error, both to the second significant digit of the error.

    Examples
    --------
    >>> with_error(1.3684, 0.1231), with_error(45617.0, 1234.0), with_error(2.0, 0.0996)
    ('1.37 ± 0.12', '45600 ± 1200', '2.00 ± 0.10')
    """
    if not (np.isfinite(value) and np.isfinite(error) and error > 0.0):
        return f"{value:.3g} ± {error:.2g}"
    places = 1 - int(f"{error:.1e}".partition("e")[2])
    if places > 4 or places < -4:
        power = int(f"{max(abs(value), error):e}".partition("e")[2])
        places = max(0, power + places)
        return f"({value / 10.0**power:.{places}f} ± {error / 10.0**power:.{places}f})e{power:+03d}"
    return f"{round(value, places):.{max(0, places)}f} ± {round(error, places):.{max(0, places)}f}"


def round_number(value: float) -> float:
    """The nearest of 1, 2, 5 times a power of ten at or below `value` > 0.

    Examples
    --------
    >>> round_number(0.37), round_number(21.0), round_number(9.9)
    (0.2, 20.0, 5.0)
    """
    power = 10.0 ** np.floor(np.log10(value))
    return float(f"{power * max(step for step in (1, 2, 5) if step * power <= value * (1 + 1e-12)):.3g}")
