"""Bridges on disk: one .npz of plain arrays and a JSON header, versioned, without pickle.

Arrays: `header` (JSON text: format, version, prior, tolerance, names, units, certificates), `times`, `masses`, and per
snapshot k `cloud_k`, `weights_k`, `rows_k`, optionally `labels_k` and `feature_i_k`; per gap `log_f_k`, `log_g_k`,
`history_k`, with smooth ends (version 2) both potentials as in smooth_storage.py, and with growth (version 3) the weights
`gap_weights_0_k`, `gap_weights_1_k` that the gap couples. `digest` is the SHA-256 of all of
them, so that a damaged file is known as such.
"""

from __future__ import annotations

import hashlib
import json
import zipfile
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np

from .. import checks
from ..priors.registry import build_prior
from ..schrodinger.solution import Certificate, Outcome, Solution
from ..snapshots.growth import Growth
from ..snapshots.series import SnapshotSeries
from ..writing import atomic_path
from .bridge import Bridge
from .smooth import SmoothSolution
from .smooth_storage import pack_solution, unpack_solution

__all__ = ["load_bridge", "save_bridge"]

_FORMAT = "ensembles-bridge"
_VERSION = 3  # 2: smooth ends; 3: growth. A bridge without them is still written as 1, for earlier readers


def _digest(arrays: dict[str, np.ndarray]) -> str:
    digest = hashlib.sha256()
    for name in sorted(arrays):
        array = np.ascontiguousarray(arrays[name])
        digest.update(f"{name}:{array.dtype.str}:{array.shape}".encode())
        digest.update(array.tobytes())
    return digest.hexdigest()


def save_bridge(bridge: Bridge, path: str | Path) -> None:
    """Write `bridge` to `path` (.npz), under a temporary name until it is whole."""
    series = bridge.series
    features = list(series.features)
    packed = [
        pack_solution(solution, k) if isinstance(solution, SmoothSolution) else _pack_coupling(solution, k)
        for k, solution in enumerate(bridge.solutions)
    ]
    header = {
        "format": _FORMAT,
        "version": _version(bridge),
        "ends": bridge.ends,
        "notes": list(bridge.notes),
        "prior": {"kind": bridge.prior.kind, "parameters": bridge.prior.parameters()},
        "tolerance": bridge.tolerance if np.isfinite(bridge.tolerance) else None,
        "position_names": list(series.position_names),
        "time_name": series.time_name,
        "time_unit": series.time_unit,
        "length_unit": series.length_unit,
        "features": features,
        "solutions": [entry for entry, _ in packed],
    }
    if series.growth is not None:
        header["growth"] = series.growth.to_mapping()
    arrays: dict[str, np.ndarray] = {
        "header": np.array(json.dumps(header)),
        "times": series.times,
        "masses": series.masses,
    }
    for k in range(len(series.times)):
        arrays |= {f"cloud_{k}": series.clouds[k], f"weights_{k}": series.weights[k], f"rows_{k}": series.rows[k]}
        if series.labels is not None:
            arrays[f"labels_{k}"] = np.asarray(series.labels[k]).astype(str)
        for i, name in enumerate(features):
            column = np.asarray(series.features[name][k])
            arrays[f"feature_{i}_{k}"] = column.astype(str) if column.dtype == object else column
    for k, (early, late) in enumerate(bridge.gap_weights or ()):
        arrays |= {f"gap_weights_0_{k}": early, f"gap_weights_1_{k}": late}
    for _, parts in packed:
        arrays |= parts
    path = Path(path)
    if path.suffix != ".npz":
        raise checks.InputError(f"a bridge is saved as .npz; the name is {path.name!r}; end it in .npz")
    with atomic_path(path) as temporary, open(temporary, "wb") as stream:
        np.savez(stream, **{**arrays, "digest": np.array(_digest(arrays))})  # type: ignore[arg-type]


def _version(bridge: Bridge) -> int:
    if bridge.series.growth is not None:
        return _VERSION
    return 1 if bridge.ends == "atoms" else 2


def _pack_coupling(solution: Solution, k: int) -> tuple[dict[str, Any], dict[str, np.ndarray]]:
    entry = {
        "iterations": solution.iterations,
        "outcome": solution.outcome.value,
        "certificate": asdict(solution.certificate),
        "unreachable": list(solution.unreachable),
    }
    return entry, {f"log_f_{k}": solution.log_f, f"log_g_{k}": solution.log_g, f"history_{k}": solution.history}


def load_bridge(path: str | Path) -> Bridge:
    """Read a bridge that `Bridge.save` wrote.

    Raises
    ------
    InputError
        If the file is missing, truncated, damaged, of another kind, or written by a later version.
    """
    path = Path(path)
    if not path.is_file():
        raise checks.InputError(f"no such file; {str(path)!r}; give the .npz that Bridge.save wrote")
    try:
        with open(path, "rb") as stream, np.lib.npyio.NpzFile(stream, allow_pickle=False) as archive:
            arrays = {name: archive[name] for name in archive.files}
    except (zipfile.BadZipFile, ValueError, OSError, EOFError, KeyError, RuntimeError) as cause:
        raise checks.InputError(
            f"the file cannot be read as a bridge; {str(path)!r} is truncated, damaged or of another kind ({cause}); "
            "save the bridge again"
        ) from None
    header = _header(arrays, path)
    digest = str(arrays.pop("digest", ""))
    if digest != _digest(arrays):
        raise checks.InputError(
            f"the bridge file is damaged; the checksum of {str(path)!r} does not match its contents; save the bridge again"
        )
    return _rebuild(header, arrays)


def _header(arrays: dict[str, Any], path: Path) -> dict[str, Any]:
    try:
        header = json.loads(str(arrays["header"]))
        if header["format"] != _FORMAT:
            raise KeyError(header["format"])
    except (KeyError, ValueError, TypeError):
        raise checks.InputError(
            f"the file is not a bridge; {str(path)!r} holds {', '.join(sorted(arrays)[:5]) or 'nothing'}; "
            "give the .npz that Bridge.save wrote"
        ) from None
    if header["version"] > _VERSION:
        raise checks.InputError(
            f"the bridge file is newer than this package; its version is {header['version']}, the newest known {_VERSION}; "
            "update ensembles"
        )
    return header


def _rebuild(header: dict[str, Any], arrays: dict[str, np.ndarray]) -> Bridge:
    count = arrays["times"].size

    def per_snapshot(name: str) -> tuple[np.ndarray, ...]:
        return tuple(arrays[f"{name}_{k}"] for k in range(count))

    series = SnapshotSeries(
        times=arrays["times"],
        clouds=per_snapshot("cloud"),
        weights=per_snapshot("weights"),
        masses=arrays["masses"],
        labels=per_snapshot("labels") if "labels_0" in arrays else None,
        features={name: per_snapshot(f"feature_{i}") for i, name in enumerate(header["features"])},
        rows=per_snapshot("rows"),
        position_names=tuple(header["position_names"]),
        time_name=header["time_name"],
        time_unit=header["time_unit"],
        length_unit=header["length_unit"],
        growth=Growth.from_mapping(header["growth"]) if "growth" in header else None,
    )
    solutions = tuple(
        unpack_solution(entry, arrays, k)
        if "kind" in entry
        else Solution(
            arrays[f"log_f_{k}"],
            arrays[f"log_g_{k}"],
            entry["iterations"],
            Outcome(entry["outcome"]),
            Certificate(**entry["certificate"]),
            arrays[f"history_{k}"],
            tuple(entry["unreachable"]),
        )
        for k, entry in enumerate(header["solutions"])
    )
    prior = build_prior(header["prior"]["kind"], header["prior"]["parameters"])
    tolerance = float("nan") if header["tolerance"] is None else header["tolerance"]
    gap_weights = None
    if "gap_weights_0_0" in arrays:
        gap_weights = tuple((arrays[f"gap_weights_0_{k}"], arrays[f"gap_weights_1_{k}"]) for k in range(count - 1))
    notes = tuple(header.get("notes", ()))
    return Bridge(series, prior, solutions, tolerance, header.get("ends", "atoms"), notes, gap_weights)
