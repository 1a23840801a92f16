"""Points put into an order in which neighbours stand together, cut into tiles with their boxes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

__all__ = ["Tiles", "make_tiles"]


@dataclass(frozen=True)
class Tiles:
    """Tiles of neighbouring points.

    Attributes
    ----------
    order : (n,) row numbers, tile after tile.
    bounds : (t, 2) first and last + 1 place of each tile in that order.
    low, high : (t, d) corners of each tile's box.
    """

    order: np.ndarray
    bounds: np.ndarray
    low: np.ndarray
    high: np.ndarray


def make_tiles(points: np.ndarray, size: int) -> Tiles:
    """Split points (n, d) at the median of the widest axis until no part holds more than `size` of them."""
    order = np.arange(points.shape[0])
    pending = [(0, points.shape[0])]
    finished = []
    while pending:
        start, stop = pending.pop()
        if stop - start <= size:
            finished.append((start, stop))
            continue
        part = order[start:stop]
        values = points[part]
        axis = int(np.argmax(np.ptp(values, axis=0)))
        # The earlier half is a multiple of the tile size, so that tiles are full.
        middle = size * max(1, round((stop - start) / (2 * size)))
        order[start:stop] = part[np.argpartition(values[:, axis], middle)]
        pending += [(start + middle, stop), (start, start + middle)]
    bounds = np.array(sorted(finished), dtype=np.int64)
    ordered = points[order]
    low = np.minimum.reduceat(ordered, bounds[:, 0], axis=0)
    high = np.maximum.reduceat(ordered, bounds[:, 0], axis=0)
    return Tiles(order, bounds, low, high)
