"""Cells in AnnData files (.h5ad): only the named columns, coordinates and genes are read, never the whole matrix.

Needs the extra `cells`. A file that `write_snapshots` made holds everything of a series and names its own columns.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from .. import checks
from ..checks import InputError
from ..writing import atomic_path
from .columns import read_units
from .counts import require_no_counts
from .growth import Growth
from .series import SnapshotSeries
from .stages import stage_times

__all__ = ["read_cells", "require_anndata", "write_cells"]

_OWN = "ensembles_snapshots"
_POSITIONS = "ensembles_positions"
_PART = 50_000_000  # entries of the matrix that are read at once
_PCA = "pca:"


def require_anndata(path: object = "an .h5ad file") -> Any:
    """Import anndata, or say how to get it."""
    try:
        import anndata
    except ImportError:
        raise InputError(
            f"AnnData files need anndata; it is not installed, so {str(path)!r} cannot be used; "
            'pip install "ensembles[cells]", or save the table as .csv'
        ) from None
    return anndata


def read_cells(
    path: Path,
    *,
    time: str | None,
    position: str | Sequence[str] | None,
    weight: str | None = None,
    label: str | None = None,
    features: Sequence[str] = (),
    units: Mapping[str, str] | None = None,
) -> SnapshotSeries:
    """Read a series from an .h5ad file; see `ensembles.read_snapshots`.

    `time`, `weight` and `label` are columns of .obs; `features` columns of .obs or names of .var; `position` a key of
    .obsm, or "pca:30" for 30 components made here of .X (which is then read whole).
    """
    require_anndata(path)
    with _opened(path) as file:
        if time is None and position is None and _OWN in file.get("uns", {}):
            return _read_own(file)
        if time is None or position is None:
            raise InputError(
                f"time and position must be named; {str(path)!r} has the columns {_listed(file, 'obs')} in .obs and the keys "
                f"{_listed(file, 'obsm')} in .obsm; name one of each"
            )
        key = position if isinstance(position, str) else _single(position)
        names = _cell_names(file, path)
        given = _column(file, path, time)
        moments, found_unit = stage_times(given, time)
        time_unit, length_unit = read_units(units)
        if time_unit and found_unit and time_unit != found_unit:
            raise InputError(
                f"the unit of time disagrees; column {time!r} says {found_unit!r} ({str(given[0])!r}) and units says "
                f"{time_unit!r}; leave the unit out, or make a column of numbers in the unit wanted"
            )
        positions, axes = _positions(file, path, key)
        chosen = (features,) if isinstance(features, str) else tuple(features)
        columns = {name: _feature(file, path, name) for name in chosen}
        weights = None if weight is None else checks.as_float_array(_column(file, path, weight), f"column {weight!r}")
        labels = None if label is None else _column(file, path, label)
    if len(positions) != len(names):
        raise InputError(
            f"coordinates must be one row a cell; {key!r} has {len(positions)} rows for {len(names)} cells; check the file"
        )
    distinct, number = np.unique(moments, return_inverse=True)
    order = np.argsort(number, kind="stable")
    parts = np.cumsum(np.bincount(number))[:-1]

    def split(values: np.ndarray) -> list[np.ndarray]:
        return np.split(np.asarray(values)[order], parts)

    series = SnapshotSeries.from_arrays(
        distinct,
        split(positions),
        None if weights is None else split(weights),
        labels=None if labels is None else split(labels),
        features={name: split(values) for name, values in columns.items()},
        units={"time": time_unit or found_unit, "length": length_unit},
        position_names=axes,
    )
    return replace(
        series, time_name=time, rows=tuple(split(np.arange(len(names)))), names=tuple(split(names.astype(str)))
    )


@contextmanager
def _opened(path: Path) -> Iterator[Any]:
    import h5py

    try:
        file = h5py.File(path, "r")
    except OSError as cause:
        raise InputError(
            f"the file is not a whole .h5ad file; {str(path)!r}: {str(cause).splitlines()[0]}; write or copy it again"
        ) from None
    with file:
        if "obs" not in file:
            raise InputError(
                f"not an AnnData file; {str(path)!r} holds {sorted(file)} and no 'obs'; write it with anndata"
            )
        yield file


def _listed(file: Any, group: str) -> str:
    if group not in file:
        return "(none)"
    names = [name for name in file[group] if not name.startswith("_")]
    index = file[group].attrs.get("_index", "_index")
    kept = [name for name in names if name != index]
    return ", ".join(kept[:20]) + (", ..." if len(kept) > 20 else "") if kept else "(none)"


def _single(position: Sequence[str]) -> str:
    if len(position) != 1:
        raise InputError(
            f"coordinates of an .h5ad file are one key of .obsm; position = {list(position)}; name one key, or 'pca:30'"
        )
    return str(position[0])


def _names_of(file: Any, group: str) -> np.ndarray:
    from anndata.io import read_elem

    return np.asarray(read_elem(file[group][file[group].attrs["_index"]]), dtype=object)


def _cell_names(file: Any, path: Path) -> np.ndarray:
    names = _names_of(file, "obs")
    distinct, counts = np.unique(names.astype(str), return_counts=True)
    if (counts > 1).any():
        raise InputError(
            f"cell names must be unique; {str(distinct[counts > 1][0])!r} names {int(counts.max())} cells of {str(path)!r} "
            f"({int((counts > 1).sum())} such name(s)); call obs_names_make_unique() and save the file again"
        )
    return names


def _column(file: Any, path: Path, name: str) -> np.ndarray:
    from anndata.io import read_elem

    known = [key for key in file["obs"] if not key.startswith("_")]
    if name not in known:
        raise InputError(
            f"missing column in .obs of {str(path)!r}; there is no {name!r}{checks.nearest_name(name, known)}; "
            f"the columns are: {_listed(file, 'obs')}"
        )
    return np.asarray(read_elem(file["obs"][name]))


def _positions(file: Any, path: Path, key: str) -> tuple[np.ndarray, list[str]]:
    from anndata.io import read_elem

    if key.startswith(_PCA):
        return _components(file, path, key)
    known = list(file.get("obsm", {}))
    if key not in known:
        raise InputError(
            f"missing key in .obsm of {str(path)!r}; there is no {key!r}{checks.nearest_name(key, known)}; the keys are: "
            f"{_listed(file, 'obsm')}; or let components be made of .X with position = 'pca:30'"
        )
    table = read_elem(file["obsm"][key])
    names = [str(name) for name in table.columns] if hasattr(table, "columns") else None
    values = np.asarray(table.todense() if hasattr(table, "todense") else table, dtype=float)
    if values.ndim == 1:
        values = values[:, None]
    require_no_counts(values, f"{key!r} of {str(path)!r}")
    stem = key.removeprefix("X_").upper() if key.startswith("X_") else key
    return values, names or [f"{stem}{axis + 1}" for axis in range(values.shape[1])]


def _components(file: Any, path: Path, key: str) -> tuple[np.ndarray, list[str]]:
    from anndata.io import read_elem
    from sklearn.decomposition import PCA

    count = key.removeprefix(_PCA)
    if not count.isdigit() or int(count) < 1:
        raise InputError(f"components to be made are named pca: and a number; position = {key!r}; write 'pca:30'")
    if "X" not in file:
        raise InputError(
            f"there is no .X to make components of; {str(path)!r} holds {sorted(file)}; name a key of .obsm"
        )
    matrix = read_elem(file["X"])
    if int(count) >= min(matrix.shape):
        raise InputError(
            f"too many components; {key!r} of a matrix of {matrix.shape[0]} cells by {matrix.shape[1]} genes; ask for at most "
            f"{min(matrix.shape) - 1}"
        )
    require_no_counts(matrix, f".X of {str(path)!r}")
    found = PCA(int(count), svd_solver="arpack", random_state=0).fit_transform(matrix)
    return found, [f"PC{axis + 1}" for axis in range(int(count))]


def _feature(file: Any, path: Path, name: str) -> np.ndarray:
    if name in file["obs"]:
        return _column(file, path, name)
    genes = _names_of(file, "var").astype(str) if "var" in file else np.array([])
    at = np.flatnonzero(genes == name)
    if at.size != 1:
        known = [key for key in file["obs"] if not key.startswith("_")]
        what = f"it names {at.size} genes" if at.size else f"there is no {name!r}"
        raise InputError(
            f"missing feature in {str(path)!r}; {what}{checks.nearest_name(name, [*known, *genes])} among the columns of .obs "
            f"({_listed(file, 'obs')}) and the {genes.size} names of .var; correct the name"
        )
    return _gene(file["X"], int(at[0]))


def _gene(matrix: Any, column: int) -> np.ndarray:
    """One column of .X, dense or sparse, a part of the rows at a time."""
    import h5py
    from anndata.io import sparse_dataset

    if isinstance(matrix, h5py.Dataset):
        return np.asarray(matrix[:, column], dtype=float)
    stored = sparse_dataset(matrix)
    rows = max(1, _PART // max(1, stored.shape[1]))
    parts = [stored[start : start + rows][:, [column]].toarray()[:, 0] for start in range(0, stored.shape[0], rows)]
    return np.concatenate(parts).astype(float)


def write_cells(series: SnapshotSeries, path: Path) -> None:
    """Write a series to an .h5ad file, bit by bit, whole or not at all; `read_snapshots(path)` gives it back."""
    anndata = require_anndata(path)
    import pandas

    frame = pandas.DataFrame(index=[str(row) for row in np.concatenate(series.rows)])
    taken = {"snapshot", "row", "weight", "label", series.time_name}
    clash = sorted(taken & set(series.features))
    if clash or series.time_name in ("snapshot", "row", "weight", "label"):
        raise InputError(
            f"columns must have different names; {clash or [series.time_name]} would stand for two of them in .obs; rename it"
        )
    if not frame.index.is_unique:
        raise InputError(
            "row numbers must be unique to name cells; some stand twice in series.rows; write .npz instead"
        )
    frame["snapshot"] = np.repeat(np.arange(len(series)), series.counts)
    frame[series.time_name] = np.repeat(series.times, series.counts)
    frame["row"] = np.concatenate(series.rows)
    frame["weight"] = np.concatenate(series.weights)
    if series.labels is not None:
        frame["label"] = np.concatenate(series.labels).astype(object)
    for name, values in series.features.items():
        column = np.concatenate(values)
        frame[name] = column.astype(object) if column.dtype.kind == "U" else column
    header = {
        "version": 1,
        "time_name": series.time_name,
        "time_unit": series.time_unit,
        "length_unit": series.length_unit,
        "position_names": list(series.position_names),
        "features": list(series.features),
        "labels": series.labels is not None,
        "growth": None if series.growth is None else series.growth.to_mapping(),
    }
    content = {_OWN: {"header": json.dumps(header), "times": series.times, "masses": series.masses}}
    cells = anndata.AnnData(obs=frame, obsm={_POSITIONS: np.concatenate(series.clouds)}, uns=content)
    with atomic_path(path) as temporary:
        cells.write_h5ad(temporary)


def _read_own(file: Any) -> SnapshotSeries:
    from anndata.io import read_elem

    stored = {name: read_elem(file["uns"][_OWN][name]) for name in ("header", "times", "masses")}
    header = json.loads(str(stored["header"]))
    number = np.asarray(read_elem(file["obs"]["snapshot"]))
    parts = np.cumsum(np.bincount(number))[:-1]

    def split(name: str) -> tuple[np.ndarray, ...]:
        values = np.asarray(read_elem(file["obs"][name]))
        return tuple(np.split(values.astype(np.str_) if values.dtype == object else values, parts))

    return SnapshotSeries(
        times=np.asarray(stored["times"]),
        clouds=tuple(np.ascontiguousarray(part) for part in np.split(np.asarray(file["obsm"][_POSITIONS]), parts)),
        weights=split("weight"),
        masses=np.asarray(stored["masses"]),
        labels=split("label") if header["labels"] else None,
        features={name: split(name) for name in header["features"]},
        rows=split("row"),
        position_names=tuple(header["position_names"]),
        time_name=header["time_name"],
        time_unit=header["time_unit"],
        length_unit=header["length_unit"],
        growth=None if header["growth"] is None else Growth.from_mapping(header["growth"]),
    )
