"""Scaling of coordinates before a fit, and the way back: none, standardise, principal components, whitening."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from .. import checks
from ..checks import InputError
from .counts import looks_like_counts
from .series import SnapshotSeries

__all__ = ["KINDS", "Scaling", "fit_scaling"]

DEVIATIONS = "s.d."
"""Unit of coordinates in standard deviations, in tables and on axes."""

KINDS = ("none", "standardise", "pca", "whiten")


@dataclass(frozen=True, eq=False)
class Scaling:
    """A linear map of coordinates, y = (x - centre) forward, and back, x = centre + y backward.

    Attributes
    ----------
    kind : one of "none", "standardise", "pca", "whiten".
    centre : (D,), in the original units.
    forward : (D, k); backward : (k, D).
    original_names, names : of the D coordinates before and the k after.
    kept : share of the variance that the k coordinates hold, 1 where nothing is left out.
    """

    kind: str
    centre: np.ndarray
    forward: np.ndarray
    backward: np.ndarray
    original_names: tuple[str, ...]
    names: tuple[str, ...]
    kept: float

    def apply(self, points: np.ndarray) -> np.ndarray:
        """Scaled coordinates (..., k) of points (..., D)."""
        return (np.asarray(points, dtype=float) - self.centre) @ self.forward

    def restore(self, points: np.ndarray) -> np.ndarray:
        """Original coordinates (..., D) of scaled ones (..., k); with fewer components, their best approximation."""
        return np.asarray(points, dtype=float) @ self.backward + self.centre

    def scale(self, series: SnapshotSeries) -> SnapshotSeries:
        """The same series in scaled coordinates, in the original unit after "pca" and in standard deviations otherwise."""
        if self.kind == "none":
            return series
        return replace(
            series,
            clouds=tuple(np.ascontiguousarray(self.apply(cloud)) for cloud in series.clouds),
            position_names=self.names,
            length_unit=series.length_unit if self.kind == "pca" else DEVIATIONS,
        )

    @property
    def sentence(self) -> str:
        """What was done to the coordinates, in words."""
        unit = "the unit of the coordinates" if self.kind == "pca" else "standard deviations (s.d.)"
        what = {
            "none": "as they are",
            "standardise": "each coordinate to mean 0 and variance 1",
            "pca": f"{len(self.names)} principal component(s)",
            "whiten": f"{len(self.names)} principal component(s) of variance 1",
        }[self.kind]
        return what if self.kind == "none" else f"{what}, in {unit}, {100 * self.kept:.4g} % of the variance"

    def to_mapping(self) -> dict[str, Any]:
        """Plain values by name, for JSON."""
        return {
            "kind": self.kind,
            "centre": self.centre.tolist(),
            "forward": self.forward.tolist(),
            "backward": self.backward.tolist(),
            "original_names": list(self.original_names),
            "names": list(self.names),
            "kept": self.kept,
        }

    @classmethod
    def from_mapping(cls, values: Mapping[str, Any]) -> Scaling:
        """Make one from what `to_mapping` gave."""
        arrays = {name: np.array(values[name], dtype=float) for name in ("centre", "forward", "backward")}
        names = {name: tuple(values[name]) for name in ("original_names", "names")}
        return cls(kind=str(values["kind"]), kept=float(values["kept"]), **arrays, **names)  # type: ignore[arg-type]


def fit_scaling(
    series: SnapshotSeries, kind: str, *, components: int | None = None, snapshots: Sequence[int] | None = None
) -> Scaling:
    """Fit a scaling to the particles of a series.

    Parameters
    ----------
    series : in its original coordinates.
    kind : "none"; "standardise", each coordinate to mean 0 and variance 1; "pca", principal components, in the unit of
        the coordinates; "whiten", principal components of variance 1.
    components : of "pca" and "whiten": how many; by default all.
    snapshots : numbers of the snapshots whose particles count; all by default. Each particle counts once.

    Raises
    ------
    InputError
        An unknown kind, too many components, a coordinate that does not vary, raw counts.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[[0.0, 0.0], [2.0, 2.1]], [[4.0, 3.9], [6.0, 6.0]]])
    >>> scaling = fit_scaling(series, "pca", components=1)
    >>> scaling.scale(series).dimension, round(scaling.kept, 3)
    (1, 1.0)
    """
    if kind not in KINDS:
        raise checks.unknown_name("kind of scaling", kind, KINDS)
    if components is not None and kind in ("none", "standardise"):
        raise InputError(
            f"components belong to pca and whiten; components = {components} with kind {kind!r}; leave it out"
        )
    numbers = range(len(series)) if snapshots is None else snapshots
    for k in numbers:
        if not isinstance(k, (int, np.integer)) or not 0 <= k < len(series):
            raise InputError(
                f"no such snapshot to fit the scaling on; {k!r} of {len(series)}; use 0 to {len(series) - 1}"
            )
    points = np.concatenate([series.clouds[k] for k in numbers])
    original, size = series.position_names, series.dimension
    if kind == "none":
        return Scaling(kind, np.zeros(size), np.eye(size), np.eye(size), original, original, 1.0)
    if looks_like_counts(points):
        raise InputError(
            f"raw counts where coordinates are expected; the positions are whole numbers from 0 to {points.max():g} with a "
            "variance far above their mean; normalise each cell and take logarithms first"
        )
    if kind == "standardise":
        centre, spread = points.mean(axis=0), points.std(axis=0)
        if not (spread > 0).all():
            name = original[int(np.argmin(spread > 0))]
            raise InputError(f"a coordinate does not vary; {name!r} is {points[0, int(np.argmin(spread > 0))]:g} throughout; "
                             "leave it out")  # fmt: skip
        names = tuple(f"standardised_{name}" for name in original)
        return Scaling(kind, centre, np.diag(1.0 / spread), np.diag(spread), original, names, 1.0)
    return _principal(points, kind, components, original)


def _principal(points: np.ndarray, kind: str, components: int | None, original: tuple[str, ...]) -> Scaling:
    from sklearn.decomposition import PCA

    most = min(points.shape)
    count = most if components is None else checks.whole_number(components, "scaling.components")
    if count > most:
        raise InputError(
            f"too many components; {count} of {points.shape[1]} coordinate(s) and {points.shape[0]} particle(s); ask for at "
            f"most {most}"
        )
    found = PCA(count, svd_solver="full").fit(points)
    axes, spread = found.components_, np.sqrt(found.explained_variance_)
    if kind == "whiten" and not spread[-1] > 1e-9 * spread[0]:
        raise InputError(
            f"a component does not vary; component {count} has standard deviation {spread[-1]:.3g} where the first has "
            f"{spread[0]:.3g}; ask for fewer components"
        )
    names = tuple(f"PC{k + 1}" for k in range(count))
    scale = spread if kind == "whiten" else np.ones(count)
    kept = float(found.explained_variance_ratio_.sum())
    return Scaling(kind, found.mean_, axes.T / scale, scale[:, None] * axes, original, names, kept)
