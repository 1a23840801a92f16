"""An observed cloud with a predicted one over it, told apart without colour."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.axes import Axes

from ..wording import axis_name
from .style import INK, PALE, plain

if TYPE_CHECKING:
    from ...snapshots.series import SnapshotSeries

__all__ = ["draw_pair"]


def draw_pair(
    ax: Axes, observed: np.ndarray, predicted: np.ndarray, series: SnapshotSeries, *, label: str, first: bool
) -> None:
    """Draw two clouds (n, d), pale and filled what was observed, dark and open what was predicted: first two coordinates.

    On a line both are histograms. `label` names the prediction; the `first` panel of a row names its vertical axis.
    """
    names = [plain(axis_name(name, series.length_unit)) for name in series.position_names]
    ax.set_xlabel(names[0])
    if observed.shape[1] == 1:
        edges = np.histogram_bin_edges(np.concatenate([observed, predicted])[:, 0], 25)
        ax.hist(observed[:, 0], edges, color=PALE, label="observed")
        ax.hist(predicted[:, 0], edges, histtype="step", color=INK, lw=1.2, label=label)
    else:
        ax.plot(*observed[:, :2].T, "o", ms=3.2, color=PALE, mew=0, label="observed", rasterized=True)
        ax.plot(*predicted[:, :2].T, "^", ms=2.6, mfc="none", mec=INK, mew=0.4, label=label, rasterized=True)
    if first:
        ax.set_ylabel("particles" if observed.shape[1] == 1 else names[1])
