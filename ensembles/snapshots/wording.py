"""A series in words: its notes, its text form and its table for notebooks."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

import numpy as np

from .columns import duplicate_count, time_text
from .counts import looks_like_counts

if TYPE_CHECKING:
    from .series import SnapshotSeries

__all__ = ["series_html", "series_notes", "series_text"]

_LINES_SHOWN = 12
# A gap this small beside the whole duration is more likely a rounding difference than a measurement.
_NEAR_GAP = 1e-9


def series_notes(series: SnapshotSeries) -> tuple[str, ...]:
    """Return sentences about what is allowed but worth knowing; see `SnapshotSeries.notes`."""
    found = []
    for k, t in enumerate(series.times):
        snapshot, cloud = f"snapshot t = {time_text(t)}", series.clouds[k]
        if len(cloud) == 1:
            found.append(
                f"{snapshot} has one particle: its spread, effective sample size and any error bar are meaningless"
            )
        if repeated := duplicate_count(cloud):
            found.append(f"{snapshot} has {repeated} particle(s) at a position that an earlier row already holds")
        if massless := int((series.weights[k] == 0).sum()):
            found.append(f"{snapshot} has {massless} particle(s) of weight 0: they take no part")
        if series.labels is not None and (unlabelled := int((series.labels[k] == "").sum())):
            found.append(f"{snapshot} has {unlabelled} particle(s) without label")
    near = series.durations < _NEAR_GAP * (series.times[-1] - series.times[0])
    for k in map(int, np.flatnonzero(near)):
        early, late = map(float, series.times[k : k + 2])
        found.append(f"snapshots t = {early!r} and t = {late!r} are almost one time: is the difference a rounding?")
    first = series.clouds[0][0]
    for axis, name in enumerate(series.position_names):
        if all((cloud[:, axis] == first[axis]).all() for cloud in series.clouds):
            found.append(f"coordinate {name} is {first[axis]:g} for every particle: it carries no information")
    if looks_like_counts(np.concatenate(series.clouds)):
        found.append(
            "the coordinates are whole numbers with a variance far above their mean, like raw counts: normalise, take "
            "logarithms and make components first"
        )
    return tuple(found)


def _title(series: SnapshotSeries) -> str:
    names = series.position_names if series.dimension <= 4 else (*series.position_names[:3], "...")
    unit = f" in {series.length_unit}" if series.length_unit else ""
    plural = "" if series.dimension == 1 else "s"
    return f"SnapshotSeries: {len(series)} snapshots, {series.dimension} dimension{plural} ({', '.join(names)}{unit})"


def _shortened(lines: list[str], middle: str) -> list[str]:
    if len(lines) <= _LINES_SHOWN:
        return lines
    hidden = len(lines) - _LINES_SHOWN + 1
    return [*lines[: _LINES_SHOWN - 2], middle.format(hidden=hidden), lines[-1]]


def series_text(series: SnapshotSeries) -> str:
    """Return the text form: a title and a line per snapshot, shortened in the middle."""
    unit = f" {series.time_unit}" if series.time_unit else ""
    lines = [
        f"  {series.time_name} = {time_text(t)}{unit}: {n} particle{'' if n == 1 else 's'}"
        for t, n in zip(series.times, series.counts, strict=True)
    ]
    return "\n".join([_title(series), *_shortened(lines, "  ... {hidden} more")])


def series_html(series: SnapshotSeries) -> str:
    """Return the HTML table: time, particles and mass of every snapshot, shortened in the middle."""
    unit = f" ({series.time_unit})" if series.time_unit else ""
    lines = [
        f"<tr><td>{time_text(t)}</td><td>{n}</td><td>{mass:g}</td></tr>"
        for t, n, mass in zip(series.times, series.counts, series.masses, strict=True)
    ]
    body = "".join(_shortened(lines, "<tr><td colspan='3'>... {hidden} more</td></tr>"))
    head = f"<tr><th>{escape(series.time_name + unit)}</th><th>particles</th><th>mass</th></tr>"
    return f"<table><caption>{escape(_title(series))}</caption>{head}{body}</table>"
