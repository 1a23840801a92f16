"""How the solver converged: errors against sweeps, with the certificate."""

from __future__ import annotations

from textwrap import wrap

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from ...schrodinger.solution import Certificate
from ..wording import gap_title
from .scene import Scene
from .style import ACCENT, GREY, INK, SECOND, panel_grid, set_title

__all__ = ["draw_convergence"]


def draw_convergence(figure: Figure, scene: Scene, rng: np.random.Generator) -> str:
    """Draw the L1 errors of both marginals and the Hilbert step of every sweep, one panel a gap."""
    axes = panel_grid(figure, len(scene.gaps), 0.8, most=3, above=0.6)
    lowest = min(solution.certificate.tolerance for solution in scene.bridge.solutions)
    positive = [
        solution.history[:, 2:][solution.history[:, 2:] > 0]
        for solution in scene.bridge.solutions
        if solution.history.size
    ]
    smallest = min((values.min() for values in positive if values.size), default=lowest)
    largest = max((values.max() for values in positive if values.size), default=1.0)
    # Errors at the level of rounding, of sweeps that meet one marginal exactly, would flatten everything else.
    floor = 0.2 * max(min(smallest, lowest), 1e-3 * lowest)
    ladders = [_draw_gap(ax, scene, gap, floor) for ax, gap in zip(axes, scene.gaps)]
    axes[0].set_yscale("log")
    axes[0].set_ylim(floor, 3.0 * max(largest, lowest))
    axes[0].set_xlim(0.5, max(2, *(len(scene.bridge.solutions[gap].history) for gap in scene.gaps)) + 0.5)
    figure.legend(*axes[0].get_legend_handles_labels(), loc="outside upper center", ncols=4 if len(axes) > 1 else 2,
                  handlelength=2.6)  # fmt: skip
    figure.supxlabel("iteration")
    figure.supylabel("error, Hilbert step")
    return _caption(scene, any(ladders))


def _draw_gap(ax: Axes, scene: Scene, gap: int, floor: float) -> bool:
    """Draw one gap, nothing of it below `floor`; whether it began on a ladder of noise levels."""
    solution = scene.bridge.solutions[gap]
    history = np.asarray(solution.history, dtype=float).reshape(-1, 4)
    sweeps = np.arange(1, len(history) + 1)
    # A line to a point below the axis would leave the panel and look like a fall of the error.
    shown = np.where((history >= floor) & np.isfinite(history), history, np.nan)
    mark = len(history) <= 60
    for column, name, colour, style, marker in (
        (1, "L1 error, earlier marginal", GREY, (0, (3, 1.2)), "s"),
        (2, "L1 error, later marginal", ACCENT, "-", "o"),
        (3, "Hilbert step", SECOND, (0, (6, 1.2, 1, 1.2)), "^"),
    ):
        ax.plot(
            sweeps, shown[:, column], color=colour, ls=style, lw=1.2, marker=marker if mark else "", ms=3, label=name
        )
    ax.axhline(solution.certificate.tolerance, color=INK, lw=0.8, ls=(0, (1, 1.5)), label="tolerance")
    changes = np.flatnonzero(np.diff(history[:, 0])) + 1
    for k in changes:
        ax.axvline(k + 0.5, color=GREY, lw=0.5, zorder=0)
    if changes.size:
        # In one text: steps are often one sweep apart, nearer than two labels are wide.
        steps = ", ".join(f"×{scale:.4g}" for scale in history[[0, *changes], 0])
        ax.text(0.03, 0.03, "\n".join(wrap(f"noise {steps}", 24)), transform=ax.transAxes, fontsize=7.5, color=INK,
                va="bottom", ha="left", zorder=4,
                bbox={"facecolor": "white", "alpha": 0.85, "lw": 0, "pad": 1.0})  # fmt: skip
    ax.xaxis.set_major_locator(MaxNLocator(5, integer=True, min_n_ticks=1))
    certificate = solution.certificate
    title = (
        f"{gap_title(scene.bridge.series, gap)}\n{solution.outcome.value}, L1 error {certificate.marginal_error:.2g}\n"
        f"contraction {_observed(certificate)} (bound {certificate.contraction_bound:.3g})"
    )
    set_title(ax, title)
    if not np.isfinite(shown[:, 1:]).any():
        ax.text(0.5, 0.5, "no error left after the start", transform=ax.transAxes, ha="center", va="center")
    return bool(changes.size)


def _observed(certificate: Certificate) -> str:
    contraction = certificate.contraction_observed
    return f"{contraction:.2g}" if np.isfinite(contraction) else "not seen"


def _caption(scene: Scene, ladder: bool) -> str:
    parts = []
    for gap in scene.gaps:
        solution = scene.bridge.solutions[gap]
        certificate = solution.certificate
        parts.append(
            f"{gap_title(scene.bridge.series, gap)}: {solution.outcome.value} after {solution.iterations} sweeps, "
            f"L1 error {certificate.marginal_error:.2g}, Hilbert step {certificate.hilbert_step:.2g}, contraction "
            f"observed: {_observed(certificate)} (a-priori bound {certificate.contraction_bound:.6g})"
        )
    steps = (
        " Vertical lines: steps of the noise ladder; ×s, in their order, is the noise variance over the problem's own."
        if ladder
        else ""
    )
    return (
        "Convergence of the solver, L1 error of both marginals and Hilbert step against the iteration. An iteration is "
        f"a sweep or a second-order step; the dotted line is the tolerance, {scene.bridge.tolerance:g}; errors at the "
        f"level of rounding lie below the axis.{steps} {'; '.join(parts)}.{scene.gaps_left_out}"
    )
