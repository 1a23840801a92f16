"""Fit the bridge of a study, and write everything that came out of it into one folder."""

from __future__ import annotations

import importlib.metadata
import platform
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from . import __version__, writing
from .lineage_results import series_with_growth, write_lineage
from .overview import verdicts
from .study import Study

if TYPE_CHECKING:
    from .bridges.bridge import Bridge
    from .bridges.paths import Paths
    from .report.coordinates import Coordinates
    from .schrodinger.solution import State

__all__ = ["fit_study", "write_results"]

_LIBRARIES = ("numpy", "scipy", "pandas", "matplotlib", "numba")
Say = Callable[[str, float], None]
_SOLVING = 0.7  # share of the progress bar that the solver gets
_LARGEST_CLOUD = 2000  # points of an intermediate cloud: enough for a picture and a table one can open


def fit_study(study: Study, *, say: Say) -> Bridge:
    """Read the snapshots of a study and fit their bridge.

    Parameters
    ----------
    study : what `study.read_study` gave.
    say : told what is being done and the share of all work done by then, for a progress bar.

    Raises
    ------
    InputError
        If the data or the prior cannot be used.
    ComputationError
        If a gap does not reach the tolerance.
    """
    from .bridges.fit import SolverOptions, fit_bridge
    from .schrodinger.solve import SWEEP_LIMIT

    writing.require_table_format(f".{study.output.format}")
    say("Reading the snapshots", 0.0)
    series = study.read_series()
    gaps = len(series) - 1

    def observe(gap: int, state: State) -> None:
        say(f"Gap {gap + 1} of {gaps}: sweep {state.sweep}, L1 error {state.error:.2g}", _SOLVING * gap / gaps)

    prior = study.build_prior()
    series, notes = series_with_growth(study, series, prior, say)
    bridge = fit_bridge(
        series,
        prior,
        tolerance=study.solve.tolerance,
        options=SolverOptions(sweep_limit=study.solve.sweeps or SWEEP_LIMIT, observe=observe),
    )
    return replace(bridge, notes=(*bridge.notes, *notes))


def write_results(study: Study, bridge: Bridge, folder: Path, *, seed: int, say: Say) -> list[str]:
    """Write tables, pictures, the report page, the bridge itself, a summary and a copy of the study file into `folder`.

    Parameters
    ----------
    study, bridge : the study and what was fitted to it.
    folder : an existing, empty folder.
    seed : of every random number here; the study's own unless the command line gave another.
    say : told what is being done, as in `fit_study`.

    Returns
    -------
    list of the names of the files written, sorted.
    """
    from .report.figures import save_figures
    from .report.page import write_page

    # One stream each: more paths do not change the clouds, and more clouds do not change the paths.
    path_stream, cloud_stream, picture_stream = np.random.default_rng(seed).spawn(3)
    snapshots = bridge.series.times
    say("Drawing paths", _SOLVING)
    times = np.union1d(np.linspace(snapshots[0], snapshots[-1], study.output.path_times), snapshots)
    paths = bridge.sample_paths(study.output.paths, times, rng=path_stream)
    say("Writing tables", 0.75)
    back = _way_back(study, folder)
    _write_tables(study, bridge, paths, folder, cloud_stream, back)
    bridge.save(folder / "bridge.npz")
    say("Drawing pictures", 0.85)
    figures = save_figures(bridge, folder, paths=paths, rng=picture_stream)
    say("Following lineages", 0.9)
    lineages, sentences, labels = write_lineage(
        bridge, folder, repeats=study.output.repeats, seed=seed, annotated=study.data_file.suffix == ".h5ad"
    )
    figures += lineages
    summary = _summary(study, bridge, seed, back)
    summary["notes"] += [*bridge.notes, *sentences, *_scaling_notes(back)]
    summary["labels"] = labels
    write_page(folder, summary, figures)
    writing.write_text(folder / "study.toml", study.text)
    # Last: the folder is known as a complete output by this file.
    writing.write_json(folder / writing.MARKER, summary)
    return sorted(path.name for path in folder.iterdir())


def _write_tables(
    study: Study, bridge: Bridge, paths: Paths, folder: Path, rng: np.random.Generator, back: Coordinates | None
) -> None:
    from .report import tables
    from .report.wording import intermediate_times

    times = intermediate_times(bridge.series.times, study.output.intermediate)
    count = min(int(bridge.series.counts.max()), _LARGEST_CLOUD)
    clouds = [bridge.sample(t, count, rng) for t in times]
    writing.write_table(folder / "links.csv", tables.links_table(bridge, study.output.links, back))
    writing.write_table(folder / f"paths.{study.output.format}", tables.paths_table(bridge, paths, back))
    writing.write_table(folder / "clouds.csv", tables.clouds_table(bridge, times, clouds, back))
    writing.write_table(folder / "drift.csv", tables.drift_table(bridge, times, clouds, back))
    writing.write_table(folder / "moments.csv", tables.moments_table(bridge, paths.times, back))
    writing.write_table(folder / "certificate.csv", tables.certificate_table(bridge))


def _way_back(study: Study, folder: Path) -> Coordinates | None:
    """Where tables are taken back to if the study scales, with the map written into `folder`."""
    from .report.coordinates import Coordinates

    if study.scaling.kind == "none":
        return None
    original = study.read_original()
    scaling = study.fit_scaling(original)
    writing.write_json(folder / "scaling.json", scaling.to_mapping())
    return Coordinates(original, scaling)


def _scaling_notes(back: Coordinates | None) -> list[str]:
    """What a reader must know of coordinates that were scaled for the fit and taken back."""
    if back is None or back.scaling is None:
        return []
    scaling = back.scaling
    notes = [
        f"the fit is in scaled coordinates: {scaling.sentence}; tables are in the file's own coordinates, the prior, the "
        "pictures of positions and bridge.npz in the scaled ones; scaling.json has the map between them"
    ]
    if len(scaling.names) < len(scaling.original_names):
        notes.append(
            f"paths, clouds, moments and velocities are those in the plane of the {len(scaling.names)} component(s) kept; what "
            f"the cells vary out of it, {100 * (1 - scaling.kept):.4g} % of the variance, is not in them"
        )
    return notes


def _summary(study: Study, bridge: Bridge, seed: int, back: Coordinates | None) -> dict[str, Any]:
    from .report import tables

    return {
        "program": "ensembles",
        "versions": {"ensembles": __version__, "python": platform.python_version(), **_versions()},
        "study": {
            "file": study.path.name,
            "title": study.title,
            "seed": seed,
            "data": {"file": study.data.file, "fingerprint": bridge.series.fingerprint()},
            "solve": study.solve.model_dump(),
            "output": study.output.model_dump(),
        },
        **tables.summary(bridge, back),
        "noise": list(verdicts(bridge.series, bridge.prior)),
    }


def _versions() -> dict[str, str]:
    return {name: importlib.metadata.version(name) for name in _LIBRARIES}
