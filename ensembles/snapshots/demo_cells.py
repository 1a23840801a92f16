"""Invented data: cells of a fin ray that grows back after an injury.

One population of progenitors branches into two terminal types, sheath and core. Each day another piece of tissue is
taken apart, so no cell is measured twice. Eight components stand for the leading principal components of a table of
gene counts, and two columns for the logarithmic counts of one marker gene of each type.
"""

from __future__ import annotations

import numpy as np

__all__ = ["COUNTS", "DAYS", "cells"]

DAYS = (0.0, 2.0, 4.0, 7.0)
"""Days after the injury."""
COUNTS = (340, 410, 460, 380)
"""Cells measured on each."""
PROGRESS = (0.05, 0.30, 0.60, 0.92)
"""Mean progress of a cell on each day: 0 a resting progenitor, 1 a finished sheath or core cell."""
NOISE = (0.45, 0.40, 0.35, 0.30, 0.28, 0.26, 0.24, 0.22)
"""Standard deviation of each component about the course of differentiation."""
BRANCHING = 0.40
"""Progress at which the two types part."""
SHEATH_SHARE = 0.6
"""Share of progenitors that become sheath."""


def _course(progress: np.ndarray, side: np.ndarray) -> np.ndarray:
    """Mean position (n, 8) of cells at that progress (n,) on that side (n,): +1 sheath, -1 core."""
    apart = np.clip(progress - BRANCHING, 0.0, None) / (1.0 - BRANCHING)
    course = np.zeros((progress.size, 8))
    course[:, 0] = 7.0 * progress - 3.0
    course[:, 1] = 3.5 * side * apart**1.3
    course[:, 2] = 1.5 * np.sin(np.pi * progress)
    course[:, 3] = 0.8 * side * np.sin(np.pi * apart)
    course[:, 4] = -0.6 * apart
    return course


def cells(rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Draw the cells of all days.

    Parameters
    ----------
    rng : numpy Generator.

    Returns
    -------
    dict of columns day (days), C1 to C8 (dimensionless), type (progenitor, sheath or core), marker_sheath and
    marker_core (logarithmic counts), one row a cell.

    Examples
    --------
    >>> columns = cells(np.random.default_rng(0))
    >>> len(columns["day"]), np.unique(columns["type"]).tolist()
    (1590, ['core', 'progenitor', 'sheath'])
    """
    day = np.repeat(DAYS, COUNTS)
    progress = np.clip(np.repeat(PROGRESS, COUNTS) + 0.09 * rng.standard_normal(day.size), 0.0, 1.0)
    sheath = rng.random(day.size) < SHEATH_SHARE
    side = np.where(sheath, 1.0, -1.0)
    positions = _course(progress, side) + np.array(NOISE) * rng.standard_normal((day.size, 8))
    apart = np.clip((progress - BRANCHING) / (1.0 - BRANCHING), 0.0, 1.0)
    # A cell is called by its look, a little after it has taken its way.
    kind = np.where(apart < 0.2, "progenitor", np.where(sheath, "sheath", "core"))
    markers = {}
    for name, expressed in (("marker_sheath", sheath), ("marker_core", ~sheath)):
        markers[name] = np.log1p(rng.poisson(1.0 + 30.0 * apart * expressed))
    components = {f"C{k + 1}": positions[:, k] for k in range(8)}
    return {"day": day, **components, "type": kind, **markers}
