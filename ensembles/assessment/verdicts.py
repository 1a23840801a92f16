"""Verdicts on held-out snapshots, in plain words."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from .hold_out import HeldOutScore

__all__ = ["held_out_verdict"]

_WORDS = {
    "earlier": "the earlier snapshot",
    "later": "the later snapshot",
    "straight": "straight lines",
    "independent": "random pairing",
    "prior": "the prior alone",
}
_CLEAR = 2.0  # standard errors


def held_out_verdict(rows: Sequence[HeldOutScore], time_name: str, time_unit: str) -> tuple[str, ...]:
    """One sentence a left-out snapshot, and one over all of them, by the energy distance (else the mean error).

    Better or worse means by more than two standard errors of the difference; at the floor means within two standard
    deviations of what a second snapshot of the same population would score.
    """
    score = "energy_distance" if any(row.score == "energy_distance" for row in rows) else "mean_error"
    chosen = [row for row in rows if row.score == score]
    times = sorted({row.time for row in chosen})
    unit = f" {time_unit}" if time_unit else ""
    sentences = []
    for time in times:
        here = {row.prediction: row for row in chosen if row.time == time}
        sentences.append(f"{time_name} = {time:g}{unit}: {_one_time(here, score.replace('_', ' '))}")
    if len(times) > 1:
        sentences.append(_over_all(chosen, times))
    return tuple(sentences)


def _one_time(here: dict[str, HeldOutScore], score: str) -> str:
    if "bridge" not in here:
        return f"the bridge has no {score} here; see the scores that were dropped."
    bridge = here["bridge"]
    text = f"the bridge's {score} is {bridge.value:.3g} ± {bridge.standard_error:.2g}"
    if "floor" in here:
        floor = here["floor"]
        top = floor.value + _CLEAR * floor.standard_error
        text += (
            f", at the floor ({floor.value:.3g} ± {floor.standard_error:.2g})"
            if bridge.value <= top
            else f", above the floor ({floor.value:.3g} ± {floor.standard_error:.2g})"
        )
    groups: dict[str, list[str]] = {"better than": [], "no better than": [], "worse than": []}
    for name, words in _WORDS.items():
        if name in here:
            row = here[name]
            groups[_compared(row.lead, row.lead_error)].append(words)
    said = [f"{how} {_listed(names)}" for how, names in groups.items() if names]
    return f"{text}; it is {'; '.join(said)}." if said else f"{text}."


def _compared(lead: float, error: float) -> str:
    if lead > _CLEAR * error:
        return "better than"
    return "worse than" if lead < -_CLEAR * error else "no better than"


def _over_all(chosen: Sequence[HeldOutScore], times: Sequence[float]) -> str:
    groups: dict[str, list[str]] = {"better than": [], "no better than": [], "worse than": []}
    for name, words in _WORDS.items():
        rows = [row for row in chosen if row.prediction == name and np.isfinite(row.lead)]
        if rows:
            lead = float(np.mean([row.lead for row in rows]))
            # Left-out snapshots are resampled independently of each other.
            error = float(np.sqrt(np.sum([row.lead_error**2 for row in rows])) / len(rows))
            groups[_compared(lead, error)].append(words)
    said = [f"{how} {_listed(names)}" for how, names in groups.items() if names]
    if not said:
        return "Nothing can be said over all left-out snapshots."
    alone = "" if groups["better than"] else " Nothing beats the baselines here: do not use the bridge for these times."
    return f"Over all {len(times)} left-out snapshots the bridge is {'; '.join(said)}.{alone}"


def _listed(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
