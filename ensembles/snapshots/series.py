"""A population measured at a few times, one cloud of positions per time."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..checks import InputError
from .columns import (
    column_arrays,
    feature_array,
    label_array,
    position_clouds,
    read_names,
    read_units,
    require_length,
    snapshot_places,
    time_text,
    too_few_snapshots,
    weight_arrays,
)
from .growth import Growth
from .wording import series_html, series_notes, series_text

if TYPE_CHECKING:
    import pandas
    from numpy.typing import ArrayLike

__all__ = ["SnapshotSeries"]


@dataclass(frozen=True, eq=False, repr=False, kw_only=True)
class SnapshotSeries:
    """Snapshots of a population at K increasing times; make one with `from_arrays`, `from_frame` or `read_snapshots`.

    Every array is read-only. Two series hold the same data exactly when their fingerprints are equal.

    Parameters
    ----------
    times : (K,) array, in the unit `time_unit`
    clouds : tuple of (n_k, d) arrays, in the unit `length_unit`
    weights : tuple of (n_k,) arrays, each with sum 1
    masses : (K,) array
        The sum of the weights as they were given, or the number of particles where none were given.
    labels : tuple of (n_k,) arrays of strings, or None
        An empty string is a particle without label.
    features : dict of name -> tuple of (n_k,) arrays
        Further columns, carried along unchecked (they may hold NaN).
    rows : tuple of (n_k,) arrays of whole numbers
        The row of each particle in the table it came from, counted from 0.
    position_names, time_name, time_unit, length_unit : names of the axes; '' is an unknown unit
    growth : `Growth`, or None where particles neither divide nor die; see `with_growth`
    names : tuple of (n_k,) arrays of strings, or None
        What the file calls each particle (.obs_names of an .h5ad file).

    Examples
    --------
    >>> from ensembles import SnapshotSeries
    >>> series = SnapshotSeries.from_arrays([0, 2], [[[0.0, 1.0], [1.0, 1.0]], [[0.5, 3.0]]])
    >>> series
    SnapshotSeries: 2 snapshots, 2 dimensions (x, y)
      time = 0: 2 particles
      time = 2: 1 particle
    >>> series.durations
    array([2.])
    """

    times: np.ndarray
    clouds: tuple[np.ndarray, ...]
    weights: tuple[np.ndarray, ...]
    masses: np.ndarray
    labels: tuple[np.ndarray, ...] | None
    features: Mapping[str, tuple[np.ndarray, ...]]
    rows: tuple[np.ndarray, ...]
    position_names: tuple[str, ...]
    time_name: str = "time"
    time_unit: str = ""
    length_unit: str = ""
    growth: Growth | None = None
    names: tuple[np.ndarray, ...] | None = None

    def __post_init__(self) -> None:
        if len(self.clouds) < 2:
            raise too_few_snapshots(f"{len(self.clouds)} is left")
        first = self.clouds[0][0]
        if all((cloud == first).all() for cloud in self.clouds):
            raise InputError(
                f"the positions must differ; all {sum(map(len, self.clouds))} particles of the series are at "
                f"{first.tolist()}; there is nothing to bridge: check the position columns"
            )
        for array in (self.times, self.masses):
            array.setflags(write=False)
        for group in (
            self.clouds,
            self.weights,
            self.rows,
            self.labels or (),
            self.names or (),
            *self.features.values(),
        ):
            for array in group:
                array.setflags(write=False)

    @classmethod
    def from_arrays(
        cls,
        times: ArrayLike,
        clouds: Sequence[Any],
        weights: Sequence[Any] | None = None,
        *,
        labels: Sequence[Any] | None = None,
        features: Mapping[str, Sequence[Any]] | None = None,
        units: Mapping[str, str] | None = None,
        position_names: Sequence[str] | None = None,
    ) -> SnapshotSeries:
        """Make a series from one cloud of positions per time.

        Parameters
        ----------
        times : (K,) increasing numbers
        clouds : K tables of (n_k, d) positions; a plain list of numbers is n_k points on a line
        weights : K lists of n_k non-negative numbers (None in place of a list: all equal), or None
        labels : K lists of n_k names, or None
        features : name -> K lists of n_k values
        units : {"time": ..., "length": ...}, used on axes only
        position_names : d names; by default x, y, z, or x1, x2, ... above three dimensions

        Raises
        ------
        InputError
            A value that is not finite, times that do not increase, unequal dimensions or lengths, negative or all-zero
            weights, fewer than two snapshots, all particles at one place.

        Examples
        --------
        >>> from ensembles import SnapshotSeries
        >>> series = SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [2.0, 4.0, 5.0]], weights=[None, [1, 1, 2]])
        >>> series.weights[1]
        array([0.25, 0.25, 0.5 ])
        >>> series.masses
        array([2., 4.])
        """
        measured = checks.times(times, minimum=0)
        if len(measured) < 2:
            raise too_few_snapshots(
                f"one time only, t = {time_text(measured[0])}" if len(measured) else "there is none"
            )
        require_length(clouds, len(measured), "clouds")
        places = snapshot_places(measured)
        tables = position_clouds(clouds, places)
        counts = [len(table) for table in tables]
        normalised, masses = weight_arrays(weights, counts, places)
        time_unit, length_unit = read_units(units)
        return cls(
            times=measured,
            clouds=tables,
            weights=normalised,
            masses=masses,
            labels=None if labels is None else column_arrays(labels, counts, places, "labels", label_array),
            features={
                str(name): column_arrays(values, counts, places, f"feature {name!r}", feature_array)
                for name, values in (features or {}).items()
            },
            rows=tuple(np.split(np.arange(sum(counts)), np.cumsum(counts)[:-1])),
            position_names=read_names(position_names, tables[0].shape[1]),
            time_unit=time_unit,
            length_unit=length_unit,
        )

    @classmethod
    def from_frame(
        cls,
        frame: pandas.DataFrame,
        *,
        time: str,
        position: str | Sequence[str],
        weight: str | None = None,
        label: str | None = None,
        features: Sequence[str] = (),
        units: Mapping[str, str] | None = None,
    ) -> SnapshotSeries:
        """Make a series from a data frame with one row per particle; rows of exactly equal time are one snapshot.

        Parameters
        ----------
        frame : pandas.DataFrame; its index is ignored
        time, position : column of the times and columns of the coordinates
        weight, label, features : further columns; see `SnapshotSeries`
        units : {"time": ..., "length": ...}, used on axes only

        Raises
        ------
        InputError
            A missing column, a text or an empty cell in a number column (row and column named), and every error of
            `from_arrays`.

        Examples
        --------
        >>> import pandas
        >>> frame = pandas.DataFrame({"t": [5, 0, 0], "x": [3.0, 1.0, 2.0]})
        >>> series = SnapshotSeries.from_frame(frame, time="t", position="x")
        >>> series.times, series.rows[0]
        (array([0., 5.]), array([1, 2]))
        """
        from .table import choose_columns, series_from_frame

        columns = choose_columns(time, position, weight=weight, label=label, features=features)
        return series_from_frame(frame, columns, units=units)

    @property
    def dimension(self) -> int:
        """The number d of coordinates."""
        return self.clouds[0].shape[1]

    @property
    def counts(self) -> np.ndarray:
        """The number of particles of each snapshot, (K,)."""
        return np.array([len(cloud) for cloud in self.clouds])

    @property
    def durations(self) -> np.ndarray:
        """The times between neighbouring snapshots, (K-1,)."""
        return np.diff(self.times)

    def __len__(self) -> int:
        return len(self.clouds)

    def subset(self, indices: Sequence[int]) -> SnapshotSeries:
        """Return the series of some of the snapshots, by number (negative numbers count from the end).

        Examples
        --------
        >>> series = SnapshotSeries.from_arrays([0, 1, 2], [[0.0], [1.0], [3.0]])
        >>> series.subset([0, -1]).times
        array([0., 2.])
        """
        kept = []
        for k in indices:
            if (
                isinstance(k, (bool, np.bool_))
                or not isinstance(k, (int, np.integer))
                or not -len(self) <= k < len(self)
            ):
                raise InputError(
                    f"indices must be snapshot numbers; {k!r} is not one of the {len(self)} snapshots; "
                    f"use whole numbers from 0 to {len(self) - 1}"
                )
            kept.append(int(k) % len(self))
        if any(late <= early for early, late in pairwise(kept)):
            raise InputError(
                f"indices must increase; they are {list(map(int, indices))}; sort them and give each snapshot once"
            )
        pick = lambda values: tuple(values[k] for k in kept)  # noqa: E731
        return replace(
            self,
            times=self.times[kept],
            clouds=pick(self.clouds),
            weights=pick(self.weights),
            masses=self.masses[kept],
            labels=None if self.labels is None else pick(self.labels),
            features={name: pick(values) for name, values in self.features.items()},
            rows=pick(self.rows),
            names=None if self.names is None else pick(self.names),
        )

    def with_growth(self, growth: Growth | None) -> SnapshotSeries:
        """Return the same series with what is known of birth and death; every fit then accounts for it.

        Raises
        ------
        InputError
            A feature that does not exist or is no rate, and a growth that leaves the range of floating point.

        Examples
        --------
        >>> from ensembles import Growth
        >>> series = SnapshotSeries.from_arrays([0, 1], [[0.0, 1.0], [1.0, 3.0]]).with_growth(Growth(0.5, uncertainty=0.2))
        >>> series.growth.uncertainty
        0.2
        """
        if growth is not None:
            if not isinstance(growth, Growth):
                raise InputError(f"growth must be a Growth; it is {growth!r}; write ensembles.Growth(rate=...)")
            for gap in range(len(self) - 1):
                growth.log_factor(self, gap)
        return replace(self, growth=growth)

    def to_frame(self) -> pandas.DataFrame:
        """Return a data frame with one row per particle, in order of time.

        The columns are the time, the coordinates, ``weight`` (weight times mass; left out where all weights of every
        snapshot are 1), ``label`` (where there are labels) and the features.
        """
        from .table import frame_from_series

        return frame_from_series(self)

    def fingerprint(self) -> str:
        """Return the SHA-256 of times, clouds, weights, masses and growth: equal exactly when these are equal bit by bit."""
        digest = hashlib.sha256(b"ensembles-snapshots")
        for array in (self.times, self.masses, *self.clouds, *self.weights):
            digest.update(repr(array.shape).encode())
            digest.update(np.ascontiguousarray(array, dtype="<f8").data)
        if self.growth is not None:
            digest.update(repr(self.growth).encode())
            for k in range(len(self)):
                digest.update(np.ascontiguousarray(self.growth.rates(self, k), dtype="<f8").data)
        return digest.hexdigest()

    def notes(self) -> tuple[str, ...]:
        """Return sentences about what is allowed but worth knowing: lone particles, duplicates, empty labels, ...

        Examples
        --------
        >>> SnapshotSeries.from_arrays([0, 3], [[0.0, 1.0], [2.0]]).notes()[0]
        'snapshot t = 3 has one particle: its spread, effective sample size and any error bar are meaningless'
        """
        return series_notes(self)

    def __repr__(self) -> str:
        return series_text(self)

    def _repr_html_(self) -> str:
        return series_html(self)
