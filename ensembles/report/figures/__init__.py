"""The pictures of a fitted bridge.

To add one, write a function ``draw(figure, scene, rng) -> caption`` in a file of this folder and list it in `FIGURES`.
It takes an empty `matplotlib.figure.Figure`, sets its size, and says in the caption what is to be seen, in plain text;
the first sentence of the caption is also the text for readers who cannot see the picture.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.figure import Figure

from ... import checks
from .clouds import draw_clouds
from .convergence import draw_convergence
from .coupling import draw_coupling
from .density import draw_density
from .drift import draw_drift
from .saving import save_drawing
from .scene import Scene

if TYPE_CHECKING:
    from ...bridges.bridge import Bridge
    from ...bridges.paths import Paths

__all__ = ["FIGURES", "save_figures"]

Draw = Callable[[Figure, Scene, np.random.Generator], str]

FIGURES: dict[str, Draw] = {
    "clouds": draw_clouds,
    "density": draw_density,
    "drift": draw_drift,
    "coupling": draw_coupling,
    "convergence": draw_convergence,
}
"""File name without suffix -> function, in the order of the report."""


def save_figures(
    bridge: Bridge, folder: str | Path, *, paths: Paths, rng: Any = 0, dpi: int = 200
) -> list[tuple[str, str]]:
    """Draw every picture of `FIGURES` into `folder` as PNG.

    Parameters
    ----------
    bridge : what to draw.
    folder : an existing folder.
    paths : sampled paths, of which some are drawn.
    rng : int or numpy Generator, for the points drawn of large clouds and of densities above two dimensions.
    dpi : dots an inch; the pictures are about 7 inches wide.

    Returns
    -------
    list of (file name, caption), in the order of the report.

    Examples
    --------
    >>> import tempfile, ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 1.0, 2.0], [0.5, 2.0]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    >>> paths = bridge.sample_paths(5, np.linspace(0, 1, 5))
    >>> [file for file, caption in save_figures(bridge, tempfile.mkdtemp(), paths=paths, dpi=50)]
    ['clouds.png', 'density.png', 'drift.png', 'coupling.png', 'convergence.png']
    """
    scene = Scene(bridge, paths)
    # One stream each: another picture in the list does not change the rest.
    streams = checks.generator(rng).spawn(len(FIGURES))
    return [
        save_drawing(folder, name, draw, scene, stream, dpi=dpi)
        for (name, draw), stream in zip(FIGURES.items(), streams)
    ]
