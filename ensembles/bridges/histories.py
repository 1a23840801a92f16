"""Histories: particles followed back from a snapshot, which with growth is the way that keeps every snapshot's weights."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from .paths import Paths

if TYPE_CHECKING:
    from .bridge import Bridge

__all__ = ["draw_histories", "history_paths"]


def draw_histories(bridge: Bridge, last: np.ndarray, start: int, end: int, rng: np.random.Generator) -> np.ndarray:
    """Row numbers (count, end - start + 1) of drawn ancestors of the particles `last` (count,) of snapshot `end`."""
    members = [last]
    for gap in range(end - 1, start - 1, -1):
        members.insert(0, bridge.coupling(gap).draw_sources(members[0], rng))
    return np.stack(members, axis=1)


def history_paths(bridge: Bridge, count: int, times: np.ndarray, rng: np.random.Generator) -> Paths:
    """Paths that run back from particles of the last snapshot, filled in by the pinned prior, at checked `times`."""
    if bridge.prior.box is not None:
        raise checks.InputError(
            "paths with growth are not available in a box; the series has growth and the prior a box; leave one of them out, or "
            "use couplings and densities"
        )
    last = bridge.gaps[-1].weights[1]
    members = draw_histories(bridge, rng.choice(last.size, size=count, p=last), 0, len(bridge.gaps), rng)
    positions = np.empty((count, times.size, bridge.series.dimension))
    for k, gap in enumerate(bridge.gaps):
        begin, end = gap.clouds[0][members[:, k]], gap.clouds[1][members[:, k + 1]]
        inside = slice(*np.searchsorted(times, [np.nextafter(gap.times[0], np.inf), gap.times[1]]))
        gap.fill_path(gap.times[0], begin, end, times[inside], rng, positions[:, inside])
        positions[:, times == gap.times[0]] = begin[:, None]
        positions[:, times == gap.times[1]] = end[:, None]
    return Paths(times, positions, members, bridge.series.position_names)
