"""Link the same particles of a study's frames, estimate the prior from them, and write everything into one folder."""

from __future__ import annotations

import platform
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from . import __version__, writing
from .study import Study

if TYPE_CHECKING:
    import pandas

    from .links.estimated_prior import PriorEstimate
    from .links.particle_links import ParticleLinks
    from .priors.box import Box
    from .snapshots.series import SnapshotSeries

__all__ = ["write_links"]

Say = Callable[[str, float], None]


def write_links(study: Study, folder: Path, *, seed: int, say: Say) -> tuple[list[str], list[str]]:
    """Write links.csv, particles.csv, estimate.csv, paths.csv, two pictures, report.html, summary.json and the study file.

    Returns
    -------
    the names of the files written, sorted, and the warnings that the page shows.

    Raises
    ------
    InputError
        If the frames cannot hold the same particles.
    """
    from .links.candidates import LinkOptions
    from .links.chain import chain_links
    from .links.estimate import EstimateOptions, estimate_prior
    from .links.link import link_particles
    from .report.page import LINKS, write_page

    series = study.read_series()
    settings = study.links
    said: list[str] = []
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always", RuntimeWarning)
        say("Estimating the prior from unlabelled frames", 0.05)
        options = EstimateOptions(detection=settings.detection, birth_density=settings.birth_density)
        estimate = estimate_prior(
            series, study.prior.kind, localisation=settings.localisation, box=study.box.build(), options=options
        )
        prior = estimate.prior if settings.prior == "estimated" else study.build_prior()
        say("Linking particles", 0.5)
        links = link_particles(
            series, prior, detection=settings.detection, birth_density=settings.birth_density,
            localisation=settings.localisation,
            options=LinkOptions(correlation=settings.correlation, hold_spread=settings.hold_spread),
        )  # fmt: skip
        chain = chain_links(series, prior, links)
        said += list(dict.fromkeys(str(w.message) for w in caught))
    say("Writing tables", 0.7)
    writing.write_table(folder / "links.csv", _links_table(series, links, prior.box, settings.alternatives))
    writing.write_table(folder / "particles.csv", _particles_table(series, links))
    writing.write_table(folder / "estimate.csv", estimate.to_frame())
    times = np.union1d(np.linspace(series.times[0], series.times[-1], study.output.path_times), series.times)
    paths = chain.sample_paths(study.output.paths, times, rng=seed)
    writing.write_table(folder / "paths.csv", paths.to_frame().rename(columns={"time": series.time_name}))
    say("Drawing pictures", 0.8)
    figures = _save_figures(folder, series, estimate, links, prior.box)
    writing.write_text(folder / "study.toml", study.text)
    summary = _summary(study, series, (estimate, prior, links), said, seed)
    write_page(folder, summary, figures, LINKS)
    # Last: the folder is known as a complete output by this file.
    writing.write_json(folder / writing.MARKER, summary)
    return sorted(path.name for path in folder.iterdir()), said


def _links_table(series: SnapshotSeries, links: list[ParticleLinks], box: Box | None, count: int) -> pandas.DataFrame:
    """The most probable later particles of every particle, with the displacement to each (to the nearest image on periodic
    axes) and whether it is assigned."""
    import pandas

    unit = f" [{series.length_unit}]" if series.length_unit else ""
    parts = []
    for found in links:
        table = found.top_alternatives(count)
        k = found.source
        source, target = table["source"].to_numpy(), table["target"].to_numpy()
        moved = series.clouds[k + 1][target] - series.clouds[k][source]
        moved = moved if box is None else box.shortest(moved)
        columns: dict[str, Any] = {
            "gap": k, "source_row": series.rows[k][source], "target_row": series.rows[k + 1][target],
            "rank": table["rank"], "probability": table["probability"], "assigned": found.assignment[source] == target,
        }  # fmt: skip
        columns |= {f"moved_{name}{unit}": moved[:, axis] for axis, name in enumerate(series.position_names)}
        parts.append(pandas.DataFrame(columns))
    return pandas.concat(parts, ignore_index=True)


def _particles_table(series: SnapshotSeries, links: list[ParticleLinks]) -> pandas.DataFrame:
    """One row an earlier particle of every gap: its entropy, the probability of having left, and its assigned link."""
    import pandas

    parts = []
    for found in links:
        k, assigned = found.source, found.assignment
        rows = series.rows[k + 1]
        target = pandas.array([int(rows[j]) if j >= 0 else None for j in assigned], dtype="Int64")
        parts.append(pandas.DataFrame({
            "gap": k, "source_row": series.rows[k], "assigned_row": target,
            "assigned_probability": found.probability_of(assigned), "probability_left": found.probability_left,
            "entropy [nats]": found.entropy,
        }))  # fmt: skip
    return pandas.concat(parts, ignore_index=True)


def _save_figures(
    folder: Path, series: SnapshotSeries, estimate: PriorEstimate, links: list[ParticleLinks], box: Box | None
) -> list[tuple[str, str]]:
    """Draw the links and the evidence of every parameter; (file name, caption) of each picture."""
    from .report.figures.links import draw_links
    from .report.figures.profile import draw_profiles
    from .report.figures.saving import save_drawing

    profiles = {name: estimate.profile(name, points=9) for name in list(estimate.values)[:6]}
    return [
        save_drawing(folder, "links", draw_links, series, links, box),
        save_drawing(folder, "profile", draw_profiles, profiles, estimate.to_frame(), estimate.drop_at()),
    ]


def _summary(
    study: Study, series: SnapshotSeries, found: tuple[Any, Any, list[ParticleLinks]], said: list[str], seed: int
) -> dict[str, Any]:
    from .report.wording import LINK_CAUTIONS

    estimate, prior, links = found
    rows = estimate.to_frame().to_dict(orient="records")
    gaps = [
        {
            "from": float(series.times[link.source]),
            "to": float(series.times[link.target]),
            "particles": list(link.shape),
            "expected_right_links": link.expected_right_links,
            "mean_entropy_nats": float(link.entropy.mean()),
            "expected_left": float(link.probability_left.sum()),
            "expected_new": float(link.probability_new.sum()),
            "log_evidence": link.log_evidence,
            "log_evidence_error": link.log_evidence_error,
            "method": link.method,
            "variance_factor": link.variance_factor,
            "certificate": {
                "converged": link.certificate.converged,
                "message_change": link.certificate.propagation.message_change,
                "row_error": link.certificate.propagation.row_error,
                "column_error": link.certificate.propagation.column_error,
                "evidence_difference": link.certificate.propagation.evidence_difference,
                "left_out": link.certificate.left_out,
            },
        }
        for link in links
    ]
    return {
        "program": "ensembles",
        "converged": all(link.certificate.converged for link in links),
        "versions": {"ensembles": __version__, "python": platform.python_version()},
        "study": {
            "file": study.path.name, "title": study.title, "seed": seed, "identity": "same",
            "data": {"file": study.data.file, "fingerprint": series.fingerprint()},
        },
        "columns": {"time": series.time_name, "position": list(series.position_names)},
        "units": {"time": series.time_unit, "length": series.length_unit},
        "frames": [{"time": float(t), "particles": len(cloud)} for t, cloud in zip(series.times, series.clouds)],
        "prior": {"kind": prior.kind, "parameters": prior.parameters(), "taken": study.links.prior},
        "estimate": {
            "parameters": rows, "log_evidence": estimate.log_evidence, "identified": estimate.identified
        },
        "links": gaps,
        "warnings": said,
        "cautions": list(LINK_CAUTIONS),
    }  # fmt: skip
