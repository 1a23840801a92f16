"""The report page: one static file that a browser shows and a printer prints, without scripts and without the network."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from ..writing import MARKER, write_text
from .wording import CAUTIONS, axis_name, bare_name

__all__ = ["BRIDGE", "LINKS", "report_html", "write_page"]

PAGE = "report.html"
BRIDGE, LINKS = "page.html.jinja", "links.html.jinja"
"""What a page is about: a bridge between snapshots, or links of the same particles."""

_TABLES = {
    "links": "the most probable targets of every particle",
    "paths": "sampled paths, one row a path and time",
    "clouds": "intermediate clouds drawn from the bridge",
    "drift": "drift added to the prior, forward drift and current velocity at the points of those clouds",
    "moments": "mean and covariance of the population against time, exact",
    "certificate": "how exactly each gap was solved",
    "particles": "the same particles: entropy, probability of having left, and assigned link of every earlier one",
    "estimate": "parameters of the prior estimated from the frames, without labels",
    "descendants": "probability of each final label for the descendants of every particle; inferred, not observed",
    "ancestors": "probability of each first label for the ancestors of every particle",
    "descendants_errors": "the same averaged by label, with standard errors from resampled particles",
    "ancestors_errors": "likewise for ancestors",
    "flows": "flow between labels over each gap",
    "trends": "features along the histories that end in each label",
    "early_features": "early features that go with a later label; read the note on it",
    "growth": "given and implied net growth rate of every particle, relative to the population's",
    "labels": "by time and label: weight kept and displacement on arrival, growth until the next snapshot",
    "kept": "by which factor the weight of every later particle was changed, and how far the prior was stretched for it",
    "masses": "mass of every snapshot, measured and as the given growth makes it",
    "cells": "all of this by cell, for AnnData",
    "scaling": "the map from the file's coordinates to those of the fit, and back",
    "bridge": "the fitted bridge itself; read it with ensembles.load_bridge",
    "study": "the study file, as it was read",
    "summary": "everything of this page in numbers",
}
"""Name of a file without suffix -> what it holds."""


def write_page(
    folder: str | Path, summary: Mapping[str, Any], figures: Sequence[tuple[str, str]], about: str = BRIDGE
) -> Path:
    """Write report.html into `folder`, with links to the files that stand there.

    Parameters
    ----------
    folder : an existing folder that holds the pictures and tables.
    summary : what `tables.summary` gave, and if wanted more: "study" with "title", "file" and "seed", "notes".
    figures : what `save_figures` gave, (file name, caption) of each picture.
    about : `BRIDGE` or `LINKS`.

    Returns
    -------
    Path of the page.
    """
    place = Path(folder)
    # The page is named in the summary and written before it: these two are linked although they do not stand there yet.
    files = {path.name for path in place.iterdir() if not path.name.startswith(".")} | {MARKER}
    if "study" in summary:
        files.add("study.toml")
    write_text(place / PAGE, report_html(summary, figures, about, files=files))
    return place / PAGE


def report_html(
    summary: Mapping[str, Any],
    figures: Sequence[tuple[str, str]],
    about: str = BRIDGE,
    *,
    files: set[str] | frozenset[str] = frozenset(),
) -> str:
    """The page as text; `files` are the names it may link to, by their place in the same folder."""
    from jinja2 import Environment, PackageLoader, StrictUndefined

    environment = Environment(
        loader=PackageLoader("ensembles", "report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["number"] = _number
    units, names = summary["units"], summary["columns"]
    study = summary.get("study", {})
    return environment.get_template(about).render(
        title=study.get("title") or ("Bridge between snapshots" if about == BRIDGE else "Links of the same particles"),
        study=study,
        summary=summary,
        time_heading=axis_name(names["time"], units["time"]),
        time_name=bare_name(names["time"], units["time"]),
        time_unit=units["time"],
        positions=[axis_name(name, units["length"]) for name in names["position"][:_MOST_COORDINATES]],
        left_out=max(0, len(names["position"]) - _MOST_COORDINATES),
        parameters=[(name, _parameter(value)) for name, value in summary["prior"]["parameters"].items()],
        figures=[{"file": file, "caption": caption, "alt": _first_sentence(caption)} for file, caption in figures],
        tables=_linked(files),
        cautions=summary.get("cautions", CAUTIONS),
        versions=summary.get("versions", {}),
    )


_MOST_COORDINATES = 3


def _number(value: Any) -> str:
    """Four digits; an en dash where there is no finite number."""
    if value is None:
        return "–"
    if isinstance(value, int):
        return str(value)
    return f"{value:.4g}"


def _parameter(value: Any) -> str:
    if isinstance(value, dict):  # a box
        return "; ".join(f"{name} {_parameter(item)}" for name, item in value.items())
    if isinstance(value, str):
        return value
    return ", ".join(_parameter(item) for item in value) if isinstance(value, (list, tuple)) else _number(value)


def _first_sentence(caption: str) -> str:
    return caption.partition(". ")[0].rstrip(".") + "."


def _linked(files: set[str] | frozenset[str]) -> list[tuple[str, str]]:
    """Tables and data among the files, those that are known first and in the order above."""
    order = list(_TABLES)
    named = [name for name in files if not name.endswith((".png", ".svg", ".pdf", ".html"))]
    place = {name: order.index(stem) if (stem := name.split(".")[0]) in order else len(order) for name in named}
    return [(name, _TABLES.get(name.split(".")[0], "")) for name in sorted(named, key=lambda name: (place[name], name))]
