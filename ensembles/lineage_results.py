"""What `ensembles solve` writes of lineages where the study names a label, and of growth where it names or asks for rates."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from . import checks, writing

if TYPE_CHECKING:
    import pandas

    from .bridges.bridge import Bridge
    from .priors.base import LinearGaussianPrior
    from .snapshots.series import SnapshotSeries
    from .study import Study

__all__ = ["series_with_growth", "write_lineage"]

_LARGEST_REPEATED = 4_000_000  # pairs of particles in all gaps up to which resampling is done unasked


def series_with_growth(
    study: Study, series: SnapshotSeries, prior: LinearGaussianPrior, say: Callable[[str, float], None]
) -> tuple[SnapshotSeries, tuple[str, ...]]:
    """The series with the growth rates that the study asks to be estimated, and a sentence on them; as it is otherwise."""
    if study.growth is None or not study.growth.estimate:
        return series, ()
    from .lineage.growth_estimate import estimate_growth

    say("Estimating growth", 0.0)
    found = estimate_growth(series, prior, uncertainty=study.growth.uncertainty or None, rng=study.seed)
    return found.series, (f"growth was estimated from the snapshots under the prior: {found}",)


def write_lineage(
    bridge: Bridge, folder: Path, *, repeats: int, seed: int, annotated: bool
) -> tuple[list[tuple[str, str]], list[str], list[dict[str, Any]]]:
    """Write lineage tables and pictures into `folder`.

    Parameters
    ----------
    bridge : a bridge between particles.
    repeats : resamples for the standard errors; 0 for none.
    seed : of the random numbers.
    annotated : whether an .h5ad of all results is written too.

    Returns
    -------
    pictures as (file name, caption), sentences worth knowing, and the rows by label for the page and summary.json.
    """
    from .lineage.growth import label_summary, masses
    from .report import lineage_tables as tables
    from .report.figures.lineage import save_lineage_figures

    series, notes, pictures = bridge.series, [], []
    by_label = None if series.labels is None else label_summary(bridge)
    if series.growth is not None:
        growth = tables.growth_table(bridge)
        writing.write_table(folder / "growth.csv", growth)
        writing.write_table(folder / "masses.csv", masses(bridge))
        if not series.growth.exact:
            pictures += save_lineage_figures(folder, series, growth=growth)
    if series.growth is not None or series.labels is not None:
        writing.write_table(folder / "kept.csv", tables.kept_table(bridge))
    labelled = [k for k in range(len(series)) if series.labels is not None and (series.labels[k] != "").any()]
    if series.labels is not None and len(labelled) < 2:
        notes.append("labels are missing at all times but one: no lineage tables were written")
    if by_label is not None and len(labelled) >= 2:
        writing.write_table(folder / "labels.csv", by_label)
        found, sentences = _write_labels(bridge, folder, labelled, repeats, seed)
        pictures, notes = found + pictures, notes + sentences
        if annotated and len(labelled) == len(series):
            from .lineage.annotate import annotate_cells, save_cells

            save_cells(annotate_cells(bridge), folder / "cells.h5ad")
    return pictures, notes, [] if by_label is None else _plain_rows(by_label)


def _plain_rows(table: pandas.DataFrame) -> list[dict[str, Any]]:
    """Rows ready for JSON: None for what is not finite."""
    rows = table.to_dict(orient="records")
    return [
        {str(k): None if isinstance(v, float) and not np.isfinite(v) else v for k, v in row.items()} for row in rows
    ]


def _write_labels(
    bridge: Bridge, folder: Path, labelled: list[int], repeats: int, seed: int
) -> tuple[list[tuple[str, str]], list[str]]:
    from .lineage.fates import label_flows
    from .lineage.features import CAVEAT, early_features, feature_trends
    from .lineage.labels import label_notes
    from .lineage.uncertainty import LineageProbabilities, lineage_errors
    from .report import lineage_tables as tables
    from .report.figures.lineage import save_lineage_figures

    series, notes = bridge.series, list(label_notes(bridge.series))
    first, last = labelled[0], labelled[-1]
    writing.write_table(folder / "descendants.csv", tables.descendants_table(bridge, last))
    writing.write_table(folder / "ancestors.csv", tables.ancestors_table(bridge, first))
    flows = label_flows(bridge) if any(b - a == 1 for a, b in pairwise(labelled)) else None
    if flows is not None:
        writing.write_table(folder / "flows.csv", flows)
    trends = None
    numeric = [name for name, columns in series.features.items() if _numbers(columns)]
    if numeric and last > 0:
        trends = feature_trends(bridge, numeric, end=last, rng=seed)
        writing.write_table(folder / "trends.csv", trends)
        if np.count_nonzero(series.weights[first]) >= 8:
            writing.write_table(folder / "early_features.csv", early_features(bridge, numeric, start=first, end=last))
            notes.append(f"early_features.csv: {CAVEAT}")
    pairs = sum(len(a) * len(b) for a, b in zip(series.clouds, series.clouds[1:]))
    if repeats and pairs <= _LARGEST_REPEATED:
        for direction in ("descendants", "ancestors"):
            quantity = LineageProbabilities(direction, first, last, by="label")
            try:
                frame = lineage_errors(bridge, quantity, repeats=repeats, rng=seed)
            except checks.ComputationError as cause:
                notes.append(f"no standard errors of {direction}: {cause}")
                continue
            writing.write_table(folder / f"{direction}_errors.csv", frame)
            notes += [f"{direction}_errors.csv: {sentence}" for sentence in frame.attrs["warnings"]]
    elif repeats:
        notes.append(f"no standard errors of lineages: {pairs} pairs of particles; ask for lineage_errors in Python")
    return save_lineage_figures(folder, series, flows=flows, trends=trends), notes


def _numbers(columns: tuple[np.ndarray, ...]) -> bool:
    return all(column.dtype.kind in "biuf" and np.isfinite(column.astype(float)).all() for column in columns)
