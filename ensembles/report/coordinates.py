"""The coordinates that tables are written in: those of the fit, or the file's own where those of the fit were scaled."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from ..snapshots.scaling import Scaling
    from ..snapshots.series import SnapshotSeries

__all__ = ["Coordinates"]


@dataclass(frozen=True, eq=False)
class Coordinates:
    """Where numbers are taken back to.

    With fewer components than coordinates what comes back is the part in the plane of the components; the particles
    themselves stand where they were measured.

    Attributes
    ----------
    series : gives the names, units and particles that a table shows.
    scaling : the map from its coordinates to those of the fit; None where they are the same.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[1.0, 3.0], [5.0, 7.0]])
    >>> back = Coordinates(series, ensembles.fit_scaling(series, "standardise"))
    >>> scaled = back.scaling.scale(series)
    >>> back.points(scaled.clouds[0]).ravel().round(9).tolist(), back.covariance(np.eye(1)).round(9).tolist()
    ([1.0, 3.0], [[5.0]])
    """

    series: SnapshotSeries
    scaling: Scaling | None = None

    def points(self, points: np.ndarray) -> np.ndarray:
        """Positions (..., D) of points (..., k)."""
        return points if self.scaling is None else self.scaling.restore(points)

    def vectors(self, vectors: np.ndarray) -> np.ndarray:
        """Displacements or velocities (..., D) of vectors (..., k)."""
        return vectors if self.scaling is None else vectors @ self.scaling.backward

    def covariance(self, covariance: np.ndarray) -> np.ndarray:
        """Bᵀ C B (..., D, D) of covariances (..., k, k), B the map back."""
        if self.scaling is None:
            return covariance
        return self.scaling.backward.T @ covariance @ self.scaling.backward
