"""Series of snapshots as numpy archives (.npz); the arrays are listed at `ensembles.read_snapshots`."""

from __future__ import annotations

import json
import zipfile
import zlib
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from .. import checks
from ..checks import InputError
from ..writing import atomic_path
from .columns import read_units
from .growth import Growth
from .series import SnapshotSeries

__all__ = ["FORMAT", "VERSION", "read_archive", "write_archive"]

FORMAT = "ensembles-snapshots"
VERSION = 1
# Weights that were stored as normalised: further off than rounding, they were not.
_SUM_TOLERANCE = 1e-9


def write_archive(series: SnapshotSeries, path: Path) -> None:
    """Write a series to an .npz file, bit by bit, whole or not at all."""
    arrays: dict[str, Any] = {
        "format": np.array(FORMAT),
        "version": np.array(VERSION),
        "times": series.times,
        "masses": series.masses,
        "position_names": np.array(series.position_names, dtype=np.str_),
        "time_name": np.array(series.time_name),
        "time_unit": np.array(series.time_unit),
        "length_unit": np.array(series.length_unit),
        "feature_names": np.array(list(series.features), dtype=np.str_),
    }
    if series.growth is not None:
        arrays["growth"] = np.array(json.dumps(series.growth.to_mapping()))
    for k in range(len(series)):
        arrays[f"positions_{k}"] = series.clouds[k]
        arrays[f"weights_{k}"] = series.weights[k]
        arrays[f"rows_{k}"] = series.rows[k]
        if series.labels is not None:
            arrays[f"labels_{k}"] = series.labels[k]
        for number, values in enumerate(series.features.values()):
            arrays[f"feature_{number}_{k}"] = values[k]
    with atomic_path(path) as temporary:
        np.savez_compressed(temporary, allow_pickle=False, **arrays)


def read_archive(
    path: Path,
    *,
    time: str | None = None,
    position: str | Sequence[str] | None = None,
    features: Sequence[str] = (),
    units: Mapping[str, str] | None = None,
) -> SnapshotSeries:
    """Read a series from an .npz file and keep the named coordinates and features; see `read_snapshots`."""
    arrays = _load(path)
    series = _series(arrays, path)
    if time is not None and time != series.time_name:
        raise InputError(
            f"missing column in {str(path)!r}; its times are named {series.time_name!r}, not {time!r}; "
            "use that name or leave time out"
        )
    if position is not None:
        series = _keep_coordinates(series, (position,) if isinstance(position, str) else tuple(position))
    if features:
        names = (features,) if isinstance(features, str) else tuple(features)
        _require_known("feature", names, tuple(series.features))
        series = replace(series, features={name: series.features[name] for name in names})
    if units is not None:
        time_unit, length_unit = read_units(units)
        series = replace(series, time_unit=time_unit or series.time_unit, length_unit=length_unit or series.length_unit)
    return series


def _load(path: Path) -> dict[str, np.ndarray]:
    if not zipfile.is_zipfile(path):
        raise InputError(
            f"the file is not a whole .npz archive; {str(path)!r} is truncated or another kind of file; "
            "write or copy it again"
        )
    try:
        with np.load(path, allow_pickle=False) as archive:
            if "format" not in archive.files:
                listed = ", ".join(archive.files[:8]) or "nothing"
                raise InputError(
                    f"not an archive of snapshots; {str(path)!r} has no array 'format' (it holds {listed}); "
                    "write it with the arrays that read_snapshots documents, or save a table"
                )
            arrays = {name: archive[name] for name in archive.files}
    except InputError:
        raise
    except (
        zipfile.BadZipFile,
        zlib.error,
        ValueError,
        EOFError,
        OSError,
        KeyError,
        NotImplementedError,
        RuntimeError,
    ) as cause:
        raise InputError(
            f"the file is not a whole .npz archive of plain arrays; {str(path)!r}: {str(cause).splitlines()[0]}; "
            "write or copy it again"
        ) from None
    if arrays["format"].shape != () or str(arrays["format"]) != FORMAT:
        raise InputError(
            f"not an archive of snapshots; the format of {str(path)!r} is {str(arrays['format'])!r}; "
            f"the format must be {FORMAT!r}"
        )
    version = _array(arrays, "version", path)
    if version.shape != () or version.dtype.kind not in "iu" or not 1 <= int(version) <= VERSION:
        raise InputError(
            f"an archive of another version; the version of {str(path)!r} is {version}; "
            f"this program reads version {VERSION}: update it or write the archive again"
        )
    return arrays


def _array(arrays: Mapping[str, np.ndarray], name: str, path: Path) -> np.ndarray:
    if name not in arrays:
        raise InputError(
            f"an array is missing from the archive; {str(path)!r} has no {name!r}; write it again with all arrays"
        )
    return arrays[name]


def _group(arrays: Mapping[str, np.ndarray], stem: str, count: int, path: Path) -> list[np.ndarray] | None:
    """Return the arrays stem_0, ..., one per snapshot, or None where there is not one of them."""
    if not any(f"{stem}_{k}" in arrays for k in range(count)):
        return None
    return [_array(arrays, f"{stem}_{k}", path) for k in range(count)]


def _text(arrays: Mapping[str, np.ndarray], name: str, default: str) -> str:
    return str(arrays[name]) if name in arrays else default


def _series(arrays: Mapping[str, np.ndarray], path: Path) -> SnapshotSeries:
    times = np.atleast_1d(_array(arrays, "times", path))
    count = len(times)
    clouds = [_array(arrays, f"positions_{k}", path) for k in range(count)]
    if f"positions_{count}" in arrays:
        raise InputError(
            f"an archive must hold one cloud a time; {str(path)!r} has {count} time(s) and an array "
            f"'positions_{count}'; add the missing time or remove that array"
        )
    names = [str(name) for name in np.atleast_1d(arrays.get("feature_names", np.array([], dtype=np.str_)))]
    weights = _group(arrays, "weights", count, path)
    series = SnapshotSeries.from_arrays(
        times,
        clouds,
        weights,
        labels=_group(arrays, "labels", count, path),
        features={
            name: [_array(arrays, f"feature_{i}_{k}", path) for k in range(count)] for i, name in enumerate(names)
        },
        units={"time": _text(arrays, "time_unit", ""), "length": _text(arrays, "length_unit", "")},
        position_names=[str(name) for name in arrays["position_names"]] if "position_names" in arrays else None,
    )
    series = replace(series, time_name=_text(arrays, "time_name", "time"))
    rows = _group(arrays, "rows", count, path)
    if rows is not None:
        series = replace(series, rows=_rows(rows, series.counts, path))
    if "masses" in arrays:
        series = _with_masses(series, weights, arrays["masses"], path)
    if "growth" in arrays:
        try:
            series = series.with_growth(Growth.from_mapping(json.loads(str(arrays["growth"]))))
        except (ValueError, TypeError) as cause:
            raise InputError(
                f"the growth in an archive cannot be used; {str(path)!r}: {cause}; write the archive again"
            ) from None
    return series


def _rows(rows: list[np.ndarray], counts: np.ndarray, path: Path) -> tuple[np.ndarray, ...]:
    for k, (values, count) in enumerate(zip(rows, counts)):
        if values.shape != (count,) or values.dtype.kind not in "iu":
            raise InputError(
                f"row numbers must be one whole number a particle; rows_{k} in {str(path)!r} has shape "
                f"{values.shape} for {count} particle(s); correct it or leave all rows out"
            )
    return tuple(values.astype(np.int64) for values in rows)


def _with_masses(
    series: SnapshotSeries, weights: list[np.ndarray] | None, masses: np.ndarray, path: Path
) -> SnapshotSeries:
    """Take weights and masses as they were stored, so that writing and reading change no bit."""
    masses = checks.as_float_array(masses, "masses")
    if masses.shape != (len(series),):
        raise InputError(
            f"masses must be one number a snapshot; their shape in {str(path)!r} is {masses.shape} for {len(series)} "
            "snapshot(s); correct them or leave them out"
        )
    if not (np.isfinite(masses) & (masses > 0)).all():
        k = int(np.argmin(np.isfinite(masses) & (masses > 0)))
        raise InputError(
            f"masses must be positive and finite; masses[{k}] = {masses[k]:g} in {str(path)!r}; correct it"
        )
    if weights is None:
        return replace(series, masses=masses)
    for k, (given, mass) in enumerate(zip(weights, series.masses)):
        if abs(mass - 1) > _SUM_TOLERANCE:
            raise InputError(
                f"weights beside masses must have the sum 1; weights_{k} of {str(path)!r} has the sum {mass:g} over "
                f"{given.size} particle(s); divide it by that sum, or leave the array 'masses' out"
            )
    return replace(series, weights=tuple(np.array(given, dtype=float) for given in weights), masses=masses)


def _require_known(kind: str, names: Sequence[str], known: Sequence[str]) -> None:
    for name in names:
        if name not in known:
            raise checks.unknown_name(kind, name, known)


def _keep_coordinates(series: SnapshotSeries, names: tuple[str, ...]) -> SnapshotSeries:
    _require_known("coordinate", names, series.position_names)
    if len(set(names)) != len(names) or not names:
        raise InputError(f"each coordinate must be named once; position = {list(names)}; name the ones to keep")
    axes = [series.position_names.index(name) for name in names]
    kept = tuple(np.ascontiguousarray(cloud[:, axes]) for cloud in series.clouds)
    return replace(series, clouds=kept, position_names=names)
