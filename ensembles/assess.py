"""Judge a study: held-out snapshots, noise level, prior check and effective sizes, written into one folder."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from . import __version__, checks, writing
from .study import Study

if TYPE_CHECKING:
    import pandas as pd

    from .assessment.effective_sizes import EffectiveSizes
    from .assessment.hold_out import HoldOut
    from .assessment.noise import NoiseProfile
    from .assessment.surprise import PriorCheck
    from .assessment.uncertainty import Bands
    from .snapshots.series import SnapshotSeries

__all__ = ["Assessment", "assess_study", "held_out_table", "write_assessment"]

Say = Callable[[str, float], None]


@dataclass(frozen=True, eq=False)
class Assessment:
    """Everything that judges a study.

    `series` is what was judged, in the coordinates of the fit; `noise` is None where the study asks for no levels;
    `prior_check` and `effective_sizes` are None in a box; `scaling` says in words which coordinates all of it is in, None
    for the file's own.
    """

    series: SnapshotSeries
    hold_out: HoldOut
    noise: NoiseProfile | None
    prior_check: PriorCheck | None
    effective_sizes: EffectiveSizes | None
    bands: Bands
    scaling: str | None = None

    @property
    def sentences(self) -> list[str]:
        """Verdicts, warnings and what was dropped, in the order of the tables."""
        noise = [] if self.noise is None else repr(self.noise).splitlines()
        return [
            *self.hold_out.verdict,
            *self.hold_out.dropped,
            *noise,
            *(() if self.prior_check is None else (*self.prior_check.verdict, *self.prior_check.dropped)),
            *(() if self.effective_sizes is None else self.effective_sizes.warnings),
            *self.bands.warnings,
            *(
                ()
                if self.scaling is None
                else (f"scores, moments and pictures are in scaled coordinates: {self.scaling}",)
            ),
        ]


def assess_study(study: Study, *, seed: int, say: Say) -> Assessment:
    """Read the snapshots of a study and judge its prior on them.

    Parameters
    ----------
    study : what `study.read_study` gave; its tables [holdout] and [noise] say how.
    seed : of every random number here.
    say : told what is being done and the share of all work done by then.

    Raises
    ------
    InputError
        With identity = "same", two snapshots, unknown names or levels in the tables, and whatever the data and the prior raise.
    ComputationError
        If a fit does not reach its tolerance.
    """
    from .assessment.effective_sizes import effective_sizes
    from .assessment.hold_out import hold_out
    from .assessment.noise import choose_noise
    from .assessment.parameters import level_grid
    from .assessment.quantities import Moments
    from .assessment.surprise import prior_check
    from .assessment.uncertainty import bootstrap
    from .bridges.fit import fit_bridge
    from .lineage_results import series_with_growth

    if study.identity == "same":
        raise checks.InputError(
            "left-out snapshots judge the bridge of a population; the study has identity = 'same'; use solve, whose page has the "
            "estimate and the links with their errors, or identity = 'lost'"
        )
    say("Reading the snapshots", 0.0)
    original, prior, asked = study.read_original(), study.build_prior(), study.holdout
    scaling = study.fit_scaling(original)
    series, _ = series_with_growth(study, scaling.scale(original), prior, say)
    checks.generator(seed)
    if study.noise.levels:
        level_grid(prior, study.noise.levels, "diffusion")  # refused before any work is done
    say("Predicting left-out snapshots", 0.05)
    held = hold_out(series, prior, draws=asked.draws, repeats=asked.repeats, replicates=asked.replicates, rng=seed)
    noise = None
    if study.noise.levels:
        say("Profiling the noise level", 0.3)
        noise = choose_noise(series, prior, study.noise.levels, repeats=asked.repeats, rng=seed + 1)
    surprise = None
    if prior.box is None:
        say("Simulating the prior", 0.6)
        surprise = prior_check(series, prior, simulations=asked.simulations, rng=seed + 2)
    say("Error bars", 0.85)
    bridge = fit_bridge(series, prior, tolerance=study.solve.tolerance)
    middles = [series.times[:-1] + share * series.durations for share in (0.25, 0.5, 0.75)]
    times = np.sort(np.concatenate([series.times, *middles])).tolist()
    bands = bootstrap(bridge, Moments(times), repeats=asked.repeats, replicates=asked.replicates, rng=seed + 4)
    sizes = effective_sizes(bridge, rng=seed + 3) if prior.box is None else None
    sentence = None if scaling.kind == "none" else scaling.sentence
    return Assessment(series, held, noise, surprise, sizes, bands, sentence)


def held_out_table(found: HoldOut) -> pd.DataFrame:
    """Value ± standard error of the scores that are most telling, one row a time and prediction, for the terminal."""
    import pandas

    shown = ("energy_distance", "wasserstein_2", "mean_error", "covariance_error", "log_density")
    rows: dict[tuple[float, str], dict[str, Any]] = {}
    for row in found.scores:
        if row.score in shown:
            line = rows.setdefault((row.time, row.prediction), {"time": row.time, "prediction": row.prediction})
            line[row.score.replace("_", " ")] = f"{row.value:.3g} ± {row.standard_error:.2g}"
    return pandas.DataFrame(list(rows.values())).fillna("–")


def write_assessment(study: Study, found: Assessment, folder: Path, *, seed: int) -> list[str]:
    """Write tables, pictures, verdict.txt, a summary and a copy of the study file into an existing, empty folder.

    Returns
    -------
    list of the names of the files written, sorted.
    """
    from .report.figures.assessment import save_assessment_figures

    writing.write_table(folder / "holdout.csv", found.hold_out.to_frame())
    writing.write_table(folder / "bands.csv", found.bands.to_frame())
    for name in ("prior_check", "effective_sizes", "noise"):
        result = getattr(found, name)
        if result is not None:
            writing.write_table(folder / f"{name}.csv", result.to_frame())
    figures = save_assessment_figures(
        folder, found.series, hold_out=found.hold_out, noise=found.noise, prior_check=found.prior_check,
        bands=found.bands,
    )  # fmt: skip
    captions = [f"{name}: {caption}" for name, caption in figures]
    writing.write_text(folder / "verdict.txt", "\n".join([*found.sentences, "", *captions]) + "\n")
    writing.write_text(folder / "study.toml", study.text)
    noise = found.noise
    chosen = None
    if noise is not None:
        chosen = {
            "best": noise.best,
            "smallest_within_error": noise.smallest_within_error,
            "estimate": noise.estimate,
            "interval_90": {name: list(limits) for name, limits in noise.interval.items()},
        }
    # Last: the folder is known as a complete output by this file.
    writing.write_json(
        folder / writing.MARKER,
        {
            "program": "ensembles",
            "command": "holdout",
            "versions": {"ensembles": __version__},
            "study": {"file": study.path.name, "title": study.title, "seed": seed},
            "verdict": found.sentences,
            "noise": chosen,
        },
    )
    return sorted(path.name for path in folder.iterdir())
