"""Leave out each interior snapshot, predict it from the rest, and score the prediction beside baselines and a floor."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..priors.base import LinearGaussianPrior, require_prior
from .entropy import neighbour_entropy
from .floors import replicate_floor, snapshot_floor
from .pairwise import MATRIX_LIMIT, Comparison, multinomial_weights
from .predictions import GAUSSIAN_ONLY, PREDICTIONS, Neighbours, Prediction, neighbours_of
from .verdicts import held_out_verdict

if TYPE_CHECKING:
    import pandas

    from ..snapshots.series import SnapshotSeries

__all__ = ["HELD_OUT_SCORES", "HeldOutScore", "HeldOutTime", "HoldOut", "hold_out"]

HELD_OUT_SCORES = (
    "energy_distance",
    "kernel_discrepancy",
    "wasserstein_1",
    "wasserstein_2",
    "mean_error",
    "covariance_error",
    "log_density",
)
"""Scores of a held-out snapshot; of `log_density` more is better, of all others less."""


@dataclass(frozen=True)
class HeldOutScore:
    """One number of the table.

    Attributes
    ----------
    lead, lead_error : how much worse the prediction is than the bridge (positive: the bridge is better), and the
        standard error of that, from the same resamples of the snapshot; NaN for Wasserstein distances and floors.
    """

    time: float
    prediction: str
    score: str
    value: float
    standard_error: float
    lead: float = float("nan")
    lead_error: float = float("nan")


@dataclass(frozen=True, eq=False)
class HeldOutTime:
    """The clouds of one left-out snapshot, for pictures: observed (n, d) with weights, and predicted ones by name."""

    time: float
    observed: np.ndarray
    weights: np.ndarray
    predictions: dict[str, np.ndarray]


@dataclass(frozen=True, eq=False)
class HoldOut:
    """How well snapshots that were left out are predicted; made by `hold_out`.

    Attributes
    ----------
    scores : one `HeldOutScore` a time, prediction and score.
    times : one `HeldOutTime` a left-out snapshot.
    dropped : sentences on scores that could not be computed, with the reason.
    verdict : sentences in plain words: one a time, and one over all of them.
    """

    scores: tuple[HeldOutScore, ...]
    times: tuple[HeldOutTime, ...]
    dropped: tuple[str, ...]
    verdict: tuple[str, ...]

    def value(self, time: float, prediction: str, score: str) -> HeldOutScore:
        """One number of the table.

        Raises
        ------
        InputError
            If there is none of that name.
        """
        for row in self.scores:
            if row.time == time and row.prediction == prediction and row.score == score:
                return row
        raise checks.InputError(
            f"no such score; time {time:g}, prediction {prediction!r}, score {score!r}; look at to_frame() and dropped"
        )

    def to_frame(self) -> pandas.DataFrame:
        """One row a number: time, prediction, score, value, standard_error, lead, lead_error."""
        import pandas

        columns = ("time", "prediction", "score", "value", "standard_error", "lead", "lead_error")
        return pandas.DataFrame(
            [{name: getattr(row, name) for name in columns} for row in self.scores], columns=columns
        )

    def __repr__(self) -> str:
        return "\n".join(self.verdict)


def hold_out(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    *,
    scores: Sequence[str] = HELD_OUT_SCORES,
    draws: int = 1000,
    repeats: int = 200,
    replicates: str | None = None,
    rng: Any = 0,
) -> HoldOut:
    """Leave out each interior snapshot, predict it from the others, and score the prediction.

    Baselines: the earlier and the later snapshot as they are; straight lines along the zero-noise coupling; ends paired
    at random with the prior pinned between them; the prior alone from the earlier snapshot. The floor is what a second
    snapshot of the same population and size would score; of log_density it is minus the entropy of the observed cloud.
    Where particles grow, the bridge's prediction counts their growth up to the left-out time; the baselines know of none.

    Parameters
    ----------
    series : SnapshotSeries of K ≥ 3 snapshots.
    prior : the dynamics to be judged.
    scores : names out of `HELD_OUT_SCORES`.
    draws : particles drawn from each prediction that is no finite cloud.
    repeats : bootstrap resamples of the observed and the predicted cloud, at least 2. The standard error is that of a
        prediction as it stands: that its own snapshots were drawn from populations is not part of it.
    replicates : name of a feature of the series whose values name replicates (plates, films); the floor is then the
        distance of each replicate to the others, wherever a snapshot has several.
    rng : seed or numpy Generator.

    Raises
    ------
    InputError
        With two snapshots, an unknown score or feature, or too few repeats.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> rng = np.random.default_rng(0)
    >>> clouds = [rng.normal(0.0, np.sqrt(1 + 2 * t), 100) for t in (0.0, 1.0, 2.0)]
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0, 2.0], clouds)
    >>> found = ensembles.hold_out(series, ensembles.Brownian(diffusion=1.0), repeats=50)
    >>> found.value(1.0, "bridge", "energy_distance").value < found.value(1.0, "earlier", "energy_distance").value
    True
    """
    require_prior(prior)
    require_interior(series, "holding out")
    if isinstance(scores, str) or len(scores) == 0:
        raise checks.InputError(
            f"scores must be a list of names; it is {scores!r}; use for example ['energy_distance']"
        )
    for name in scores:
        if name not in HELD_OUT_SCORES:
            raise checks.unknown_name("score", name, HELD_OUT_SCORES)
    draws = checks.whole_number(draws, "draws", 2)
    repeats = checks.whole_number(repeats, "repeats", 2)
    if replicates is not None and replicates not in series.features:
        raise checks.unknown_name("feature of the series", replicates, list(series.features))
    rows: list[HeldOutScore] = []
    times, dropped = [], []
    if prior.box is not None:
        dropped.append(f"the predictions {', '.join(GAUSSIAN_ONLY)} were dropped: they do not know the walls of a box")
    streams = checks.generator(rng).spawn(len(series) - 2)
    for k, stream in zip(range(1, len(series) - 1), streams):
        near = neighbours_of(series, prior, k)
        names = {name: None for name in scores}
        judge = _Judge(series, k, draws, repeats, stream)
        for name, sentence in judge.unusable(tuple(names)):
            names.pop(name)
            dropped.append(sentence)
        found, clouds = judge.score(near, tuple(names))
        floors, missing = judge.floors(near, tuple(names), replicates)
        rows += found + floors
        dropped += missing
        times.append(HeldOutTime(float(series.times[k]), judge.observed, judge.weights, clouds))
    return HoldOut(
        tuple(rows),
        tuple(times),
        tuple(dropped),
        held_out_verdict(rows, series.time_name, series.time_unit),
    )


def require_interior(series: SnapshotSeries, what: str) -> None:
    """Refuse a series without a snapshot between two others."""
    if len(series) < 3:
        first, last = float(series.times[0]), float(series.times[-1])
        raise checks.InputError(
            f"{what} needs three snapshots; the series has {len(series)}, at {first:g} and {last:g}, which every bridge "
            "fits exactly whatever its noise; add one in between, or use prior_check (could the prior have produced the "
            "end cloud?) and bootstrap (how sure is the bridge?), which need two"
        )


class _Judge:
    """Scores all predictions of one snapshot against the same resamples of it."""

    def __init__(self, series: SnapshotSeries, k: int, draws: int, repeats: int, rng: np.random.Generator) -> None:
        self.series, self.k, self.draws, self.repeats = series, k, draws, repeats
        # One stream a purpose: another score or prediction does not change the rest.
        self.cut, resampling, self.floor_rng, self.predicting, self.transport = rng.spawn(5)
        self.observed, self.weights = series.clouds[k], series.weights[k]
        if len(self.observed) > MATRIX_LIMIT:
            rows = self.cut.choice(len(self.observed), MATRIX_LIMIT, replace=False, p=self.weights)
            self.observed, self.weights = self.observed[rows], np.full(MATRIX_LIMIT, 1.0 / MATRIX_LIMIT)
        self.resampled = multinomial_weights(self.weights, repeats, resampling)
        centred = self.observed - self.weights @ self.observed
        self.bandwidth = float(np.sqrt(self.weights @ (centred**2).sum(axis=1)))

    def unusable(self, names: Sequence[str]) -> list[tuple[str, str]]:
        """Scores that this snapshot is too small for, each with a sentence."""
        count = int(np.count_nonzero(self.weights))
        least = {"energy_distance": 2, "kernel_discrepancy": 2, "covariance_error": 2}
        place = f"snapshot {self.series.time_name} = {self.series.times[self.k]:g}"
        found = [
            (name, f"{name} was dropped for {place}: it needs {least[name]} particles and there is {count}")
            for name in names
            if count < least.get(name, 1)
        ]
        if "kernel_discrepancy" in names and count >= 2 and self.bandwidth == 0.0:
            sentence = f"kernel_discrepancy was dropped for {place}: all its particles are at one place"
            found.append(("kernel_discrepancy", sentence))
        return found

    def score(self, near: Neighbours, names: Sequence[str]) -> tuple[list[HeldOutScore], dict[str, np.ndarray]]:
        """All scores of all predictions, and the predicted clouds."""
        rows: list[HeldOutScore] = []
        clouds = {}
        reference: dict[str, np.ndarray] = {}
        streams = self.predicting.spawn(len(PREDICTIONS))
        boxed = near.bridge.prior.box is not None
        size = min(len(self.observed), *(len(cloud) for cloud in near.clouds))
        for (prediction, predict), stream in zip(PREDICTIONS.items(), streams):
            if boxed and prediction in GAUSSIAN_ONLY:
                continue
            made = predict(near, self.draws, stream)
            clouds[prediction] = made.cloud
            values = self._resampled(made, names, stream)
            if prediction == "bridge":
                reference = values
            for name, all_values in values.items():
                lead = all_values - reference[name]
                lead = -lead if name == "log_density" else lead
                rows.append(self._row(prediction, name, all_values, lead))
            rows += self._transported(made, prediction, names, size, near)
        return rows, clouds

    def _row(self, prediction: str, name: str, values: np.ndarray, lead: np.ndarray) -> HeldOutScore:
        errors = (float(values[1:].std(ddof=1)), float(lead[1:].std(ddof=1)))
        time = float(self.series.times[self.k])
        if prediction == "bridge":
            return HeldOutScore(time, prediction, name, float(values[0]), errors[0])
        return HeldOutScore(time, prediction, name, float(values[0]), errors[0], float(lead[0]), errors[1])

    def _comparison(self, made: Prediction, rng: np.random.Generator) -> Comparison:
        cloud, weights = made.cloud, made.weights
        if len(cloud) > MATRIX_LIMIT:
            rows = rng.choice(len(cloud), MATRIX_LIMIT, replace=False, p=weights)
            cloud, weights = cloud[rows], np.full(MATRIX_LIMIT, 1.0 / MATRIX_LIMIT)
        resampled = multinomial_weights(weights, self.repeats, rng)
        return Comparison(cloud, self.observed, weights, self.weights, resampled, self.resampled, self.bandwidth)

    def _resampled(self, made: Prediction, names: Sequence[str], rng: np.random.Generator) -> dict[str, np.ndarray]:
        comparison = self._comparison(made, rng)
        alone = np.count_nonzero(made.weights) < 2
        values = {}
        for name in names:
            if name == "log_density":
                if made.log_density is not None:
                    logs = made.log_density(self.observed)
                    values[name] = np.vstack([self.weights, self.resampled]) @ logs
            elif not name.startswith("wasserstein") and not (
                alone and name in ("energy_distance", "kernel_discrepancy")
            ):
                values[name] = getattr(comparison, name)()
        return values

    def _transported(
        self, made: Prediction, prediction: str, names: Sequence[str], size: int, near: Neighbours
    ) -> list[HeldOutScore]:
        rows = []
        comparison = self._comparison(made, self.cut)
        for order in (1, 2):
            if f"wasserstein_{order}" in names:
                value, error = comparison.wasserstein(order, size, self.transport)
                rows.append(
                    HeldOutScore(float(self.series.times[self.k]), prediction, f"wasserstein_{order}", value, error)
                )
        return rows

    def floors(
        self, near: Neighbours, names: Sequence[str], replicates: str | None
    ) -> tuple[list[HeldOutScore], list[str]]:
        """The floor of every score: mean and standard deviation of what a second snapshot would score; what has none."""
        time = float(self.series.times[self.k])
        size = min(len(self.observed), *(len(cloud) for cloud in near.clouds))
        found, missing = {}, []
        if replicates is not None:
            groups = np.asarray(self.series.features[replicates][self.k]).astype(str)
            found = replicate_floor(
                self.series.clouds[self.k], self.series.weights[self.k], groups, names, self.bandwidth
            )
        if not found:
            found = snapshot_floor(
                self.observed, self.weights, names, size=size, bandwidth=self.bandwidth,
                repeats=self.repeats, rng=self.floor_rng,
            )  # fmt: skip
        if "log_density" in names:
            try:
                found["log_density"] = self._density_floor()
            except checks.InputError as cause:
                reason = str(cause).rsplit("; ", 1)[0]  # the remedy is for those who ask for the entropy itself
                missing.append(f"the floor of log_density at {self.series.time_name} = {time:g} was dropped: {reason}")
        return [HeldOutScore(time, "floor", name, *found[name]) for name in names if name in found], missing

    def _density_floor(self) -> tuple[float, float]:
        present = self.weights > 0
        positive = self.weights[present]
        if positive.max() > positive.min() * (1.0 + 1e-9):
            raise checks.InputError(
                "the weights are not equal, and nearest neighbours do not see weights; use equal ones"
            )
        entropy = neighbour_entropy(self.observed[present], positive)
        return -entropy.value, entropy.error
