"""How a bridge shows itself in a terminal and in a notebook."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from .bridge import Bridge

__all__ = ["bridge_html", "bridge_text"]


def _heading(bridge: Bridge) -> str:
    series = bridge.series
    counts = ", ".join(str(len(cloud)) for cloud in series.clouds)
    times = ", ".join(f"{t:g}" for t in series.times)
    unit = f" {series.time_unit}" if series.time_unit else ""
    return (
        f"Bridge through {len(series.times)} snapshots (t = {times}{unit}; {counts} particles) under {bridge.prior!r}"
    )


def bridge_text(bridge: Bridge) -> str:
    """The heading and one line a gap."""
    lines = [_heading(bridge)]
    for k, solution in enumerate(bridge.solutions):
        if bridge.ends != "atoms":
            lines.append(f"  gap {k}: {solution.message}")
            continue
        certificate = solution.certificate
        lines.append(
            f"  gap {k}: {solution.outcome.value} after {solution.iterations} sweeps; "
            f"L1 error {certificate.marginal_error:.2g} (tolerance {certificate.tolerance:.2g}), "
            f"Hilbert step {certificate.hilbert_step:.2g}, contraction {certificate.contraction_observed:.3g} a sweep"
        )
    lines += [f"  note: {note}" for note in bridge.notes]
    return "\n".join(lines)


def bridge_html(bridge: Bridge) -> str:
    """The same as a small table."""
    notes = "".join(f"<p>{escape(note)}</p>" for note in bridge.notes)
    if bridge.ends != "atoms":
        items = "".join(f"<li>gap {k}: {escape(solution.message)}</li>" for k, solution in enumerate(bridge.solutions))
        return f"<p>{escape(_heading(bridge))}</p><ul>{items}</ul>{notes}"
    head = "".join(
        f"<th>{name}</th>"
        for name in ("gap", "outcome", "sweeps", "L1 error", "tolerance", "Hilbert step", "contraction")
    )
    rows = []
    for k, solution in enumerate(bridge.solutions):
        c = solution.certificate
        cells = (k, solution.outcome.value, solution.iterations, f"{c.marginal_error:.2g}", f"{c.tolerance:.2g}",
                 f"{c.hilbert_step:.2g}", f"{c.contraction_observed:.3g}")  # fmt: skip
        rows.append("<tr>" + "".join(f"<td>{escape(str(cell))}</td>" for cell in cells) + "</tr>")
    return f"<p>{escape(_heading(bridge))}</p><table><tr>{head}</tr>{''.join(rows)}</table>{notes}"
