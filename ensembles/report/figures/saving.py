"""One way for every picture from a function that draws it to a file."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from ...writing import atomic_path
from .style import polish

__all__ = ["save_drawing"]


def save_drawing(
    folder: str | Path, name: str, draw: Callable[..., str], *arguments: Any, dpi: int = 200
) -> tuple[str, str]:
    """Call `draw` with an empty figure and the arguments, and write it into `folder` as PNG; (file name, caption)."""
    figure = Figure(layout="constrained", facecolor="white")
    FigureCanvasAgg(figure)
    caption = draw(figure, *arguments)
    polish(figure)
    with atomic_path(Path(folder) / f"{name}.png") as temporary:
        figure.savefig(temporary, dpi=dpi)
    return f"{name}.png", caption
