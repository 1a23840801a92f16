"""What is known of birth and death: a net growth rate for each particle, and how well it is known."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..logspace import log_sum_exp

if TYPE_CHECKING:
    from .series import SnapshotSeries

__all__ = ["Growth"]

_LARGEST_LOG = 700.0  # beyond, a factor leaves the range of floating point


@dataclass(frozen=True)
class Growth:
    """Birth and death of the particles of a series; give it to `SnapshotSeries.with_growth`.

    Over a gap of length τ particle i of the earlier snapshot leaves exp(r_i τ) descendants in the mean, so that its weight
    in the coupling is ∝ a_i exp(r_i τ). Rates that are known to ± s only (standard deviation, 1/time) let the weight
    depart from that: a departure of the log-weight by s τ costs half a nat, the penalty λ KL with λ = 1 / (s τ)². The later
    weights may depart likewise by a factor exp(± later), so that particles with no origin (contaminants) are shed.

    The penalty counts for every particle, as for rates that differ from one to the next; growth that is systematic and not
    known comes out too small under it (`schrodinger/unbalanced.py` has the factor): estimate that with `estimate_growth`.

    Parameters
    ----------
    rate : net growth rate, 1/time: the name of a feature of the series, or one number for all.
    birth, death : in place of `rate`, two rates whose difference it is.
    uncertainty : standard deviation s of the rate, 1/time; 0 takes it as exact.
    later : standard deviation of the logarithm of the later weights; 0 takes them as exact.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays(
    ...     [0, 2], [[0.0, 1.0], [0.0, 1.0]], features={"r": [[0.5, 0.0], [0.0, 0.0]]}
    ... ).with_growth(ensembles.Growth("r"))
    >>> series.growth.later_weights(series, 0).round(6).tolist()  # e to 1
    [0.731059, 0.268941]
    """

    rate: str | float | None = None
    birth: str | float | None = None
    death: str | float | None = None
    uncertainty: float = 0.0
    later: float = 0.0

    def __post_init__(self) -> None:
        for name in ("rate", "birth", "death"):
            value = getattr(self, name)
            if value is None or isinstance(value, str):
                continue
            if isinstance(value, bool) or not isinstance(value, (int, float)) or not np.isfinite(value):
                raise checks.InputError(
                    f"growth.{name} must be a number or the name of a feature; it is {value!r}; give a rate per unit of time"
                )
        if self.rate is not None and (self.birth is not None or self.death is not None):
            raise checks.InputError(
                f"give rate, or birth and death; rate = {self.rate!r}, birth = {self.birth!r}, death = {self.death!r}; "
                "leave one of them out"
            )
        for name in ("uncertainty", "later"):
            value = getattr(self, name)
            if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 <= value < np.inf:
                raise checks.InputError(
                    f"growth.{name} must be a number of at least 0; it is {value!r}; 0 takes it as exact"
                )

    @classmethod
    def from_mapping(cls, values: Mapping[str, Any]) -> Growth:
        """Make one from what `to_mapping` gave."""
        return cls(**values)

    def to_mapping(self) -> dict[str, Any]:
        """Plain values by name."""
        return asdict(self)

    @property
    def exact(self) -> bool:
        """Whether both weights are taken as they are, so that the problem stays balanced."""
        return self.uncertainty == 0.0 and self.later == 0.0

    def rates(self, series: SnapshotSeries, snapshot: int) -> np.ndarray:
        """Net growth rate of every particle of a snapshot (n,), 1/time."""
        if self.rate is not None:
            return _column(self.rate, series, snapshot)
        birth = 0.0 if self.birth is None else _column(self.birth, series, snapshot, least=0.0)
        death = 0.0 if self.death is None else _column(self.death, series, snapshot, least=0.0)
        return birth - death + np.zeros(len(series.clouds[snapshot]))

    def log_factor(self, series: SnapshotSeries, gap: int) -> float:
        """log of the factor by which the population grows over a gap.

        Raises
        ------
        InputError
            If the factor, or that of every particle, leaves the range of floating point.
        """
        with np.errstate(divide="ignore"):
            logs = np.log(series.weights[gap]) + self.rates(series, gap) * series.durations[gap]
        total = float(log_sum_exp(logs))
        if not abs(total) <= _LARGEST_LOG:
            rates = self.rates(series, gap)
            i = int(np.argmax(np.abs(rates)))
            raise checks.InputError(
                f"growth makes the mass of a snapshot {'overflow' if total > 0 else 'vanish'}; the population of t = "
                f"{series.times[gap]:g} is multiplied by exp({total:.4g}) until t = {series.times[gap + 1]:g} (rate[{i}] = "
                f"{rates[i]:g}); give rates per unit of the time column, as natural logarithms"
            )
        return total

    def later_weights(self, series: SnapshotSeries, gap: int) -> np.ndarray:
        """Weights (n,) that the particles before a gap have after it, ∝ a_i exp(r_i τ), of sum 1."""
        total = self.log_factor(series, gap)
        exponent = self.rates(series, gap) * series.durations[gap] - total
        with np.errstate(divide="ignore"):
            return np.exp(np.log(series.weights[gap]) + exponent)

    def strengths(self, duration: float) -> tuple[float, float]:
        """Penalties λ on the earlier and the later weights over a gap; infinite where they are exact."""
        spreads = (self.uncertainty * duration, self.later)
        return tuple(np.inf if spread == 0 else 1.0 / spread**2 for spread in spreads)  # type: ignore[return-value]


def _column(source: str | float, series: SnapshotSeries, snapshot: int, least: float = -np.inf) -> np.ndarray:
    """A rate of every particle of a snapshot: a feature, or one number."""
    if not isinstance(source, str):
        values = np.full(len(series.clouds[snapshot]), float(source))
    elif source not in series.features:
        raise checks.unknown_name("feature of the series (for growth)", source, list(series.features))
    else:
        values = series.features[source][snapshot]
    place = f" in snapshot t = {series.times[snapshot]:g}"
    if values.dtype.kind not in "iuf":
        raise checks.InputError(
            f"growth must be numbers; {source!r}[0] = {str(values[0])!r}{place}; name another feature"
        )
    values = values.astype(float)
    checks.require_finite(values, f"growth {source!r}", "give a rate for every particle", place=place)
    if (values < least).any():
        i = int(np.argmax(values < least))
        raise checks.InputError(
            f"birth and death must not be negative; {source!r}[{i}] = {values[i]:g}{place}; give a net rate as `rate`"
        )
    return values
