"""How many starts and ends carry each region of a bridge, and where the answer rests on a handful of particles."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..bridges.bridge import Bridge
from ..bridges.gap import Gap
from ..kernels.streamed import StreamedKernel
from .relative_entropy import refuse_box

if TYPE_CHECKING:
    import pandas

__all__ = ["EffectiveSizes", "effective_sizes"]

_HANDFUL = 5.0
_NOTABLE = 0.05  # share of the population beyond which a handful is worth a warning


@dataclass(frozen=True, eq=False)
class EffectiveSizes:
    """Effective numbers of starts and ends behind points of the population; made by `effective_sizes`.

    Attributes
    ----------
    times : (T,).
    points : (T, count, d) draws from the population at these times.
    starts, ends : (T, count), (Σ p)² / Σ p² over the probabilities p that such a point came from (goes to) each particle.
    warnings : sentences.
    """

    times: np.ndarray
    points: np.ndarray
    starts: np.ndarray
    ends: np.ndarray
    warnings: tuple[str, ...]

    def to_frame(self) -> pandas.DataFrame:
        """One row a time: median and lowest decile of the effective numbers, and the share of points behind a handful."""
        import pandas

        rows = []
        for t, starts, ends in zip(self.times, self.starts, self.ends):
            row = {"time": float(t)}
            for name, sizes in (("starts", starts), ("ends", ends)):
                row[f"median {name}"] = float(np.median(sizes))
                row[f"lowest decile of {name}"] = float(np.quantile(sizes, 0.1))
                row[f"share below {_HANDFUL:g} {name}"] = float(np.mean(sizes < _HANDFUL))
            rows.append(row)
        return pandas.DataFrame(rows)


def effective_sizes(
    bridge: Bridge, *, times: Sequence[float] | None = None, count: int = 500, rng: Any = 0
) -> EffectiveSizes:
    """Draw points of the population at times between the snapshots and count the particles that each rests on.

    A point x at t came from particle i with probability p_i ∝ a_i exp(f_i) p(x | x_i), and goes to j likewise; the
    effective number is (Σ p)² / Σ p², 1 if a single particle decides and n if all do alike.

    Parameters
    ----------
    bridge : what `fit_bridge` gave.
    times : strictly between snapshots; the quarters of every gap if None.
    count : points a time.
    rng : seed or numpy Generator.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 0.0, 0.0, 0.0], [1.0]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> found = ensembles.effective_sizes(bridge, times=[0.5], count=3)
    >>> found.starts.round(6).tolist(), found.ends.round(6).tolist()
    ([[4.0, 4.0, 4.0]], [[1.0, 1.0, 1.0]])
    """
    count = checks.whole_number(count, "count")
    refuse_box(bridge.prior, "the effective number of particles")
    if bridge.ends != "atoms":
        raise checks.InputError(
            f"effective numbers of particles belong to atoms; the bridge has {bridge.ends} ends; fit with ends='atoms'"
        )
    if times is None:
        measured = bridge.series.times
        chosen = np.concatenate([measured[:-1] + share * np.diff(measured) for share in (0.25, 0.5, 0.75)])
        chosen.sort()
    else:
        chosen = checks.times(times)
    streams = checks.generator(rng).spawn(len(chosen))
    points, starts, ends = [], [], []
    for t, stream in zip(chosen, streams):
        bridge.log_density(t, bridge.series.clouds[0][:1])  # refuses a time at a snapshot or outside, in its own words
        gap = bridge.gaps[int(np.searchsorted(bridge.series.times, t)) - 1]
        drawn = bridge.sample(float(t), count, stream)
        points.append(drawn)
        starts.append(_behind(gap, float(t), drawn))
        ends.append(_ahead(gap, float(t), drawn))
    found = np.array(starts), np.array(ends)
    return EffectiveSizes(chosen, np.array(points), *found, tuple(_warnings(chosen, *found)))


def _effective(points: np.ndarray, atoms: np.ndarray, log_weights: np.ndarray) -> np.ndarray:
    """(Σ w k)² / Σ (w k)² for the unit Gaussian kernel k between whitened points; k² is the kernel of √2 the distance."""
    first = StreamedKernel(points, atoms).log_sum_targets(log_weights)
    second = StreamedKernel(np.sqrt(2.0) * points, np.sqrt(2.0) * atoms).log_sum_targets(2.0 * log_weights)
    return np.maximum(np.exp(2.0 * first - second), 1.0)


def _behind(gap: Gap, t: float, points: np.ndarray) -> np.ndarray:
    step = gap.before(t)
    return _effective(step.whiten_targets(points), step.whiten_sources(gap.clouds[0]), gap.log_p)


def _ahead(gap: Gap, t: float, points: np.ndarray) -> np.ndarray:
    step = gap.after(t)
    return _effective(step.whiten_sources(points), step.whiten_targets(gap.clouds[1]), gap.log_q)


def _warnings(times: np.ndarray, starts: np.ndarray, ends: np.ndarray) -> list[str]:
    found = []
    for t, at_start, at_end in zip(times, starts, ends):
        for name, sizes in (("starts", at_start), ("ends", at_end)):
            share = float(np.mean(sizes < _HANDFUL))
            if share > _NOTABLE:
                found.append(
                    f"t = {t:g}: {100 * share:.0f} % of the population rests on fewer than {_HANDFUL:g} {name}; densities and "
                    "drifts there are those of single particles"
                )
    return found
