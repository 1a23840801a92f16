"""Save the pictures of an assessment: held-out snapshots, noise profile, prior check."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from .bands import draw_bands
from .holdout import draw_hold_out
from .noise import draw_noise
from .prior_check import draw_prior_check
from .saving import save_drawing

if TYPE_CHECKING:
    from ...assessment.hold_out import HoldOut
    from ...assessment.noise import NoiseProfile
    from ...assessment.surprise import PriorCheck
    from ...assessment.uncertainty import Bands
    from ...snapshots.series import SnapshotSeries

__all__ = ["save_assessment_figures"]


def save_assessment_figures(
    folder: str | Path,
    series: SnapshotSeries,
    *,
    hold_out: HoldOut | None = None,
    noise: NoiseProfile | None = None,
    prior_check: PriorCheck | None = None,
    bands: Bands | None = None,
    dpi: int = 200,
) -> list[tuple[str, str]]:
    """Draw what is given into `folder` as holdout.png, noise.png, prior_check.png and bands.png (of `Moments`).

    `series` is the one that was judged; its names and units stand at the axes.

    Returns
    -------
    list of (file name, caption).
    """
    wanted: list[tuple[str, Callable[..., str], Any]] = [
        ("holdout", draw_hold_out, hold_out),
        ("noise", draw_noise, noise),
        ("prior_check", draw_prior_check, prior_check),
        ("bands", draw_bands, bands),
    ]
    return [
        save_drawing(folder, name, draw, result, series, dpi=dpi) for name, draw, result in wanted if result is not None
    ]
