"""Words that tables, pictures and the page share: units, names of axes and gaps, sentences about certificates."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from ..schrodinger.solution import Solution

if TYPE_CHECKING:
    from ..bridges.bridge import Bridge
    from ..snapshots.series import SnapshotSeries

__all__ = [
    "CAUTIONS",
    "GROWTH_CAUTION",
    "LINK_CAUTIONS",
    "axis_name",
    "bare_name",
    "bracketed",
    "density_unit",
    "gap_sentence",
    "gap_title",
    "intermediate_times",
    "parameter_unit",
    "speed_unit",
    "square_unit",
    "time_axis_name",
    "time_text",
    "warning_sentences",
]

CAUTIONS = (
    "Couplings and paths are inferences under a model, the prior, not observed lineages or tracks.",
    "They depend on the prior: with another diffusion coefficient or drift they are others. Fit several.",
    "Snapshots are taken as exact and complete: sampling noise, measurement error, birth and death are not modelled.",
    "A certificate says how exactly the stated problem was solved, not whether the prior is right.",
    "Not for clinical, diagnostic or safety decisions without licensed practice and local rules.",
)
"""What every report says about its own results."""

LINK_CAUTIONS = (
    "Links and paths are inferences under a model, the prior, not observed tracks.",
    "They depend on the prior and take particles to move independently; with another diffusion coefficient they are others.",
    "A certificate says how exactly the probabilities were computed, not whether the prior is right.",
    CAUTIONS[-1],
)
"""The same for links of particles that stand in every frame."""

GROWTH_CAUTION = (
    "Snapshots are taken as complete: sampling noise and measurement error are not modelled; birth and death are as the study "
    "gives them, and between snapshots the bridge shows the histories that reach the next one."
)
"""What it says in place of one of them where the study tells how particles grow."""

_TELLING = 0.1
"""Largest error of the log-potentials (0.1 is ten per cent) at which the rigorous bound is worth a sentence."""

_SUPERSCRIPTS = str.maketrans("0123456789", "⁰¹²³⁴⁵⁶⁷⁸⁹")


def bare_name(name: str, unit: str) -> str:
    """Take the unit off the end of a column's name, for an axis that shows the unit beside it.

    Examples
    --------
    >>> bare_name("x_um", "µm"), bare_name("height", "m"), bare_name("t_s", "s")
    ('x', 'height', 't')
    """
    for ending in {unit, unit.replace("µ", "u").replace("μ", "u")} - {""}:
        if name.endswith(f"_{ending}") and len(name) > len(ending) + 1:
            return name[: -len(ending) - 1]
    return name


def axis_name(name: str, unit: str) -> str:
    """Name and unit of an axis: ``x (µm)``."""
    return f"{bare_name(name, unit)} ({unit})" if unit else name


def bracketed(name: str, unit: str) -> str:
    """Name of a table's column with its unit: ``mean_x [µm]``."""
    return f"{name} [{unit}]" if unit else name


def time_axis_name(series: SnapshotSeries) -> str:
    """Name and unit of the time axis."""
    return axis_name(series.time_name, series.time_unit)


def time_text(series: SnapshotSeries, t: float) -> str:
    """``t = 6 s``."""
    unit = f" {series.time_unit}" if series.time_unit else ""
    return f"{bare_name(series.time_name, series.time_unit)} = {t:g}{unit}"


def gap_title(series: SnapshotSeries, gap: int) -> str:
    """``t = 0 → 6 s``."""
    return time_text(series, series.times[gap + 1]).replace("= ", f"= {series.times[gap]:g} → ", 1)


def speed_unit(series: SnapshotSeries) -> str:
    """Length per time; '' where the unit of time is unknown."""
    if not series.time_unit:
        return ""
    return f"{series.length_unit or '1'}/{series.time_unit}"


def parameter_unit(name: str, series: SnapshotSeries) -> str:
    """Unit of a parameter of a prior; '' where it is unknown or there is none.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0], [1.0]], units={"length": "mm", "time": "h"})
    >>> parameter_unit("diffusion", series), parameter_unit("drift", series), parameter_unit("rate", series)
    ('mm²/h', 'mm/h', '1/h')
    """
    time = series.time_unit
    units = {
        "diffusion": f"{square_unit(series) or '1'}/{time}" if time else "",
        "drift": speed_unit(series),
        "rate": f"1/{time}" if time else "",
        "friction": f"1/{time}" if time else "",
        "centre": series.length_unit,
    }
    return units.get(name, "")


def square_unit(series: SnapshotSeries) -> str:
    """Length squared."""
    return f"{series.length_unit}²" if series.length_unit else ""


def density_unit(series: SnapshotSeries, dimension: int) -> str:
    """One over length to the power of the dimension.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0], [1.0]], units={"length": "mm"})
    >>> density_unit(series, 1), density_unit(series, 2)
    ('1/mm', '1/mm²')
    """
    power = str(dimension).translate(_SUPERSCRIPTS) if dimension > 1 else ""
    return f"1/{series.length_unit}{power}" if series.length_unit else ""


def intermediate_times(times: np.ndarray, count: int) -> np.ndarray:
    """Share `count` times among the gaps by their durations, evenly inside each and never at a snapshot.

    At a snapshot the bridge is a set of atoms, which has no density.

    Examples
    --------
    >>> intermediate_times(np.array([0.0, 6.0, 12.0]), 5).tolist()
    [1.5, 3.0, 4.5, 8.0, 10.0]
    >>> intermediate_times(np.arange(17.0), 5).tolist()
    [1.5, 4.5, 8.5, 11.5, 14.5]
    """
    shares = count * np.diff(times) / (times[-1] - times[0])
    counts = np.floor(shares).astype(int)
    if count < len(shares):
        # Remainders of many short gaps are alike, and ties would gather at the beginning.
        even = times[0] + (times[-1] - times[0]) * (np.arange(count) + 0.5) / count
        counts = np.bincount(np.searchsorted(times, even, side="right") - 1, minlength=len(shares))
    else:
        # Largest remainders; a stable sort gives ties to the earlier gap.
        counts[np.argsort(counts - shares, kind="stable")[: count - counts.sum()]] += 1
    inside = [np.linspace(start, end, n + 2)[1:-1] for start, end, n in zip(times, times[1:], counts)]
    return np.concatenate(inside)


def gap_sentence(bridge: Bridge, gap: int) -> str:
    """What the certificate of one gap means, in plain words."""
    solution = bridge.solutions[gap]
    certificate = solution.certificate
    text = f"{gap_title(bridge.series, gap)}: {solution.message}"
    if solution.outcome.value == "converged":
        text = (
            f"{gap_title(bridge.series, gap)}: solved in {solution.iterations} sweep(s). The coupling meets both snapshots "
            f"to {certificate.marginal_error:.2g} (L1, tolerance {certificate.tolerance:.2g})."
        )
    if certificate.potential_error_bound <= _TELLING:
        return (
            f"{text} The log-potentials are within {certificate.potential_error_bound:.2g} of the exact ones, proven."
        )
    if np.isfinite(certificate.potential_error_estimate):
        return (
            f"{text} From the contraction observed, {certificate.contraction_observed:.2g} a sweep, the log-potentials "
            f"are within about {certificate.potential_error_estimate:.2g} of the exact ones; the a-priori bound on the "
            "contraction is too near 1 to prove it."
        )
    return f"{text} How far the log-potentials are from the exact ones is not known."


def warning_sentences(bridge: Bridge) -> list[str]:
    """What a reader must know before using the numbers: gaps that missed their tolerance, targets left out."""
    found = []
    for gap, solution in enumerate(bridge.solutions):
        title = gap_title(bridge.series, gap)
        if solution.outcome.value != "converged":
            found.append(f"{title}: not converged. {solution.message}")
        elif isinstance(solution, Solution) and solution.unreachable:
            rows = bridge.series.rows[gap + 1][list(solution.unreachable)]
            shown = ", ".join(map(str, rows[:5])) + (" and others" if len(rows) > 5 else "")
            found.append(f"{title}: {len(rows)} particle(s) cannot be reached under the prior: row(s) {shown}.")
    return found
