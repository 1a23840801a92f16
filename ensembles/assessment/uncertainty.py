"""Error bars on what a bridge claims: weighted bootstrap over particles or replicates, and the influence of particles."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from scipy import stats

from .. import checks
from ..bridges.bridge import Bridge
from ..bridges.fit import fit_bridge
from .quantities import Quantity
from .resampled_weights import bootstrap_weights, run_repeats

if TYPE_CHECKING:
    import pandas

__all__ = ["Bands", "Influence", "bootstrap", "influence"]

_TOLERANCE = 1e-4  # L1 error of the marginals of a resample, whose weights themselves move by far more
_HANDFUL = 5


@dataclass(frozen=True, eq=False)
class Bands:
    """Numbers with error bars; made by `bootstrap`.

    Attributes
    ----------
    labels : what each number is: quantity, time, coordinate, ...
    estimate, standard_error, bias, lower, upper : (q,); `bias` is what the resamples show, and the limits allow for it.
    chance : how often such an interval holds the value of the population, if the prior is right; 0.9 for 90 %.
    resampled : (repeats, q).
    warnings : sentences on what weakens the error bars.
    """

    labels: tuple[dict[str, Any], ...]
    estimate: np.ndarray
    standard_error: np.ndarray
    bias: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    chance: float
    resampled: np.ndarray
    warnings: tuple[str, ...]

    def to_frame(self) -> pandas.DataFrame:
        """One row a number: its labels, estimate, standard_error, bias, lower, upper."""
        import pandas

        columns = ("estimate", "standard_error", "bias", "lower", "upper")
        rows = [
            {**label, **{name: float(getattr(self, name)[i]) for name in columns}}
            for i, label in enumerate(self.labels)
        ]
        return pandas.DataFrame(rows)


@dataclass(frozen=True, eq=False)
class Influence:
    """How much single particles move a number; made by `influence`.

    Attributes
    ----------
    snapshot, particle : (p,) numbers of the particles.
    change : (p,) the number without the particle, minus the number with it.
    estimate : the number with all particles.
    """

    snapshot: np.ndarray
    particle: np.ndarray
    change: np.ndarray
    estimate: float

    def to_frame(self) -> pandas.DataFrame:
        """One row a particle, the most influential first: snapshot, particle, change."""
        import pandas

        frame = pandas.DataFrame({"snapshot": self.snapshot, "particle": self.particle, "change": self.change})
        return frame.iloc[np.argsort(-np.abs(self.change), kind="stable")].reset_index(drop=True)


def bootstrap(
    bridge: Bridge,
    quantities: Quantity | Sequence[Quantity],
    *,
    repeats: int = 200,
    chance: float = 0.9,
    replicates: str | None = None,
    workers: int = 1,
    rng: Any = 0,
) -> Bands:
    """Error bars from fits to randomly re-weighted snapshots, each started from the bridge itself.

    All snapshots are re-weighted independently (see `resampled_weights`), so sampling noise of both ends of every gap is
    in the result; that the prior could be wrong is not. On the scale of the quantity (logarithm for positive numbers)
    with estimate θ, bias b and standard deviation s of the resamples, the limits are θ - b ± t s, t of Student's law. Its
    degrees of freedom are n - 1 of the smallest snapshot, and (n - 1)/7 for variances: Satterthwaite's 2 n/(κ - 1) with the
    kurtosis κ of what a particle adds, 3 for the mean and 15 for the variance of a normal population; few refits take more.

    Parameters
    ----------
    bridge : what `fit_bridge` gave.
    quantities : one or several of `Moments`, `DensityAt`, `DriftAt`, `LinkProbabilities`, `PathQuantiles`.
    repeats : number of refits, at least 2.
    chance : of the interval, between 0 and 1.
    replicates : name of a feature whose values name replicates; whole replicates are then re-weighted.
    workers : threads; the result does not depend on it.
    rng : seed or numpy Generator.

    Raises
    ------
    InputError
        With fewer than two repeats, a chance outside (0, 1), an unknown feature, or a time outside the series.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> rng = np.random.default_rng(0)
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [rng.normal(size=100), rng.normal(1.0, 1.0, 100)])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    >>> bands = ensembles.bootstrap(bridge, ensembles.Moments([0.0]), repeats=100)
    >>> bool(0.05 < bands.standard_error[0] < 0.2)  # 1 / sqrt(100) = 0.1
    True
    """
    chosen: list[Quantity] = list(quantities) if isinstance(quantities, (list, tuple)) else [quantities]  # type: ignore
    _require_atoms(bridge)
    if isinstance(repeats, (int, np.integer)) and not isinstance(repeats, bool) and repeats == 1:
        raise checks.InputError(
            "a bootstrap of one says nothing; repeats is 1; use at least 2, and 100 for an interval"
        )
    repeats = checks.whole_number(repeats, "repeats", 2)
    if not 0.0 < float(chance) < 1.0:
        raise checks.InputError(f"chance must lie between 0 and 1; it is {chance!r}; use 0.9 for a 90 % interval")
    series = bridge.series
    if replicates is not None and replicates not in series.features:
        raise checks.unknown_name("feature of the series", replicates, list(series.features))
    groups = None
    if replicates is not None:
        groups = [np.asarray(names).astype(str) for names in series.features[replicates]]
    estimate = _evaluate(chosen, bridge)

    def refit(stream: np.random.Generator) -> np.ndarray:
        weights = bootstrap_weights(series, stream, groups)
        again = fit_bridge(replace(series, weights=weights), bridge.prior, tolerance=_TOLERANCE, start=bridge)
        return _evaluate(chosen, again)

    resampled = np.array(run_repeats(refit, repeats, checks.generator(rng), workers))
    labels = [label for quantity in chosen for label in quantity.labels(bridge)]
    scales = [scale for quantity in chosen for scale in _scales(quantity, bridge)]
    counts = [np.unique(g).size for g in groups] if groups is not None else [len(c) for c in series.clouds]
    lower, upper, bias = _limits(estimate, resampled, scales, float(chance), min(counts))
    return Bands(
        tuple(labels),
        estimate,
        resampled.std(axis=0, ddof=1),
        bias,
        lower,
        upper,
        float(chance),
        resampled,
        tuple(_warnings(counts, repeats, "replicates" if groups is not None else "particles")),
    )


def influence(
    bridge: Bridge, quantity: Quantity, *, number: int = 0, snapshots: Sequence[int] | None = None
) -> Influence:
    """How much one number of a quantity changes when each particle is left out, one after another, and the bridge refitted.

    Parameters
    ----------
    bridge, quantity : as for `bootstrap`.
    number : which of the quantity's numbers, counted from 0.
    snapshots : numbers of the snapshots whose particles are left out; all if None. A lone particle is skipped.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[0.0, 1.0, 8.0], [0.0, 1.0]])
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> ensembles.influence(bridge, ensembles.Moments([0.0]), snapshots=[0]).to_frame().iloc[0].tolist()
    [0.0, 2.0, -2.5]
    """
    _require_atoms(bridge)
    series = bridge.series
    values = quantity.evaluate(bridge)
    number = checks.whole_number(number, "number", 0)
    if number >= values.size:
        raise checks.InputError(
            f"no such number; number = {number} of a quantity with {values.size}; use 0 to {values.size - 1}"
        )
    found = []
    for k in _snapshot_numbers(snapshots, len(series)):
        for i in np.flatnonzero(series.weights[k]):
            weights = [w.copy() for w in series.weights]
            weights[k][i] = 0.0
            if not weights[k].any():
                continue
            weights[k] /= weights[k].sum()
            again = fit_bridge(replace(series, weights=tuple(weights)), bridge.prior, tolerance=1e-8, start=bridge)
            found.append((k, int(i), float(quantity.evaluate(again)[number] - values[number])))
    columns = np.array(found).reshape(-1, 3)
    return Influence(columns[:, 0].astype(int), columns[:, 1].astype(int), columns[:, 2], float(values[number]))


def _require_atoms(bridge: Bridge) -> None:
    if bridge.ends != "atoms":
        raise checks.InputError(
            f"error bars are those of bridges between atoms; the bridge has {bridge.ends} ends; fit with ends='atoms'"
        )


def _snapshot_numbers(snapshots: Sequence[int] | None, count: int) -> list[int]:
    chosen = list(range(count)) if snapshots is None else [checks.whole_number(k, "snapshots", 0) for k in snapshots]
    for k in chosen:
        if k >= count:
            raise checks.InputError(f"no such snapshot; number {k} of {count}; use 0 to {count - 1}")
    return chosen


def _evaluate(quantities: Sequence[Quantity], bridge: Bridge) -> np.ndarray:
    return np.concatenate([np.atleast_1d(quantity.evaluate(bridge)) for quantity in quantities])


def _scales(quantity: Quantity, bridge: Bridge) -> list[str]:
    """One scale a number: those of the quantity, repeated."""
    count = len(quantity.labels(bridge))
    return list(quantity.scales) * (count // len(quantity.scales))


def _forward(values: np.ndarray, scale: str) -> np.ndarray:
    if scale == "linear":
        return values
    positive = np.maximum(values, 1e-300)
    return (
        np.log(positive) if scale in ("log", "variance") else np.log(positive) - np.log(np.maximum(1.0 - values, 1e-16))
    )


def _back(value: float, scale: str) -> float:
    if scale == "linear":
        return value
    return float(np.exp(value)) if scale in ("log", "variance") else float(0.5 * (1.0 + np.tanh(0.5 * value)))


def _limits(
    estimate: np.ndarray, resampled: np.ndarray, scales: Sequence[str], chance: float, count: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    repeats = len(resampled)
    degrees = {scale: max((count - 1) / (7.0 if scale == "variance" else 1.0), 1.0) for scale in scales}
    # The spread of few refits is uncertain as well, and so is their mean, by which the bias is known.
    degrees = {scale: 1.0 / (1.0 / freedom + 1.0 / (repeats - 1)) for scale, freedom in degrees.items()}
    width = {scale: stats.t.ppf(0.5 * (1.0 + chance), freedom) for scale, freedom in degrees.items()}
    lower, upper = np.empty_like(estimate), np.empty_like(estimate)
    for i, scale in enumerate(scales):
        draws = _forward(resampled[:, i], scale)
        middle = 2.0 * float(_forward(estimate[i : i + 1], scale)[0]) - draws.mean()
        reach = width[scale] * draws.std(ddof=1) * np.sqrt(1.0 + 1.0 / repeats)
        lower[i], upper[i] = _back(middle - reach, scale), _back(middle + reach, scale)
    return lower, upper, resampled.mean(axis=0) - estimate


def _warnings(counts: Sequence[int], repeats: int, what: str) -> list[str]:
    found = []
    if min(counts) <= _HANDFUL:
        found.append(
            f"a snapshot has {min(counts)} {what}: its sampling noise cannot be told from so few, and the error bars are "
            "too short"
        )
    if repeats < 50:
        found.append(
            f"{repeats} repeats: the error bars themselves are uncertain by {100 / np.sqrt(2 * repeats):.0f} %"
        )
    return found
