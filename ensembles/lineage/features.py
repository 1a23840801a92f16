"""Features along the way to each label, and features whose early value tells the later label."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..bridges.histories import draw_histories
from .chain import ancestor_weights, expected_at_end
from .labels import labels_at, snapshot_pair

if TYPE_CHECKING:
    import pandas

    from ..bridges.bridge import Bridge
    from ..snapshots.series import SnapshotSeries

__all__ = ["CAVEAT", "early_features", "feature_trends"]

CAVEAT = (
    "The probabilities come from positions under the prior; a feature that went into the positions predicts a label the "
    "bridge was told of, p-values take the particles as independent, and none of it shows a cause."
)
"""What must be read beside a table of early features."""

_BAND = (0.05, 0.5, 0.95)
_FEWEST = 8  # particles from which a rank correlation is worth a p-value


def _feature(series: SnapshotSeries, name: str, snapshot: int) -> np.ndarray:
    """A feature of one snapshot as finite numbers."""
    if name not in series.features:
        raise checks.unknown_name("feature of the series", name, list(series.features))
    values = series.features[name][snapshot]
    if values.dtype.kind not in "biuf":
        raise checks.InputError(
            f"a feature along time must be numbers; {name!r} holds texts such as {str(values[0])!r}; choose another"
        )
    place = f" in snapshot t = {series.times[snapshot]:g}"
    checks.require_finite(values.astype(float), name, "fill it in, or leave that feature out", place=place)
    return values.astype(float)


def _names(series: SnapshotSeries, features: Sequence[str] | None) -> list[str]:
    """The features asked for; by default all that are numbers everywhere."""
    if isinstance(features, str):
        return [features]
    if features is not None:
        return list(features)
    numeric = [
        name
        for name, columns in series.features.items()
        if all(column.dtype.kind in "biuf" and np.isfinite(column.astype(float)).all() for column in columns)
    ]
    if not numeric:
        raise checks.InputError(
            f"there is no feature to follow; the series has {list(series.features)} and none is numbers throughout; "
            "name numeric columns as features"
        )
    return numeric


def feature_trends(
    bridge: Bridge,
    features: Sequence[str] | None = None,
    *,
    end: int = -1,
    times: Sequence[float] | None = None,
    paths: int = 2000,
    rng: Any = 0,
) -> pandas.DataFrame:
    """Expected value of features along time for the histories that end in each label.

    Particles of snapshot `end` are followed back: at snapshot k their ancestors have weights w_k, and between snapshots
    a history that passes particles i and j has the feature (1 - s) f_i + s f_j at the share s of the gap: the coupling,
    not the nearest neighbour, interpolates. The mean is exact; the band is that of `paths` drawn histories a label.

    Parameters
    ----------
    bridge : a bridge between particles of a series with labels and features.
    features : names; by default all features that are numbers.
    end : the snapshot whose labels sort the histories.
    times : times up to that snapshot; by default 31 and all snapshots.
    paths : histories drawn for each label.
    rng : int or numpy Generator.

    Returns
    -------
    DataFrame
        time, label, feature, mean, lower, median, upper (quantiles 5, 50 and 95 %), in the feature's own unit.

    Examples
    --------
    >>> import ensembles
    >>> series = ensembles.SnapshotSeries.from_arrays(
    ...     [0, 1], [[0.0, 9.0], [0.0, 9.0]], labels=[["a", "a"], ["b", "c"]], features={"gene": [[1.0, 3.0], [5.0, 7.0]]}
    ... )
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    >>> feature_trends(bridge, times=[0.0, 0.5])["mean"].round(6).tolist()
    [1.0, 3.0, 3.0, 5.0]
    """
    import pandas

    series = bridge.series
    _, end = snapshot_pair(bridge, 0, end)
    names, found, generator = _names(series, features), labels_at(series, end), checks.generator(rng)
    count = checks.whole_number(paths, "paths", 2)
    snapshots = series.times[: end + 1]
    asked = np.union1d(np.linspace(snapshots[0], snapshots[-1], 31), snapshots) if times is None else times
    at = checks.times(asked)
    if at[0] < snapshots[0] or at[-1] > snapshots[-1]:
        raise checks.InputError(
            f"times lie outside the histories; they run from {at[0]:g} to {at[-1]:g}, the histories from {snapshots[0]:g} "
            f"to {snapshots[-1]:g}; a bridge says nothing before its first or after its last snapshot"
        )
    later = bridge.gaps[end - 1].weights[1][:, None] * found.indicators
    present = later.sum(axis=0) > 0
    weights = ancestor_weights(bridge, later[:, present], 0, end)
    kept = [name for name, there in zip(found.names, present) if there]
    before = np.clip(np.searchsorted(snapshots, at, side="right") - 1, 0, end - 1)
    share = (at - snapshots[before]) / np.diff(snapshots)[before]
    columns = {name: [_feature(series, name, k) for k in range(end + 1)] for name in names}
    parts = []
    for p, label in enumerate(kept):
        last = generator.choice(weights[-1].shape[0], size=count, p=weights[-1][:, p])
        members = draw_histories(bridge, last, 0, end, generator)
        for name in names:
            exact = np.array([weights[k][:, p] @ columns[name][k] for k in range(end + 1)])
            drawn = np.stack([columns[name][k][members[:, k]] for k in range(end + 1)], axis=1)
            between = (1.0 - share) * drawn[:, before] + share * drawn[:, before + 1]
            lower, median, upper = np.quantile(between, _BAND, axis=0)
            mean = (1.0 - share) * exact[before] + share * exact[before + 1]
            parts.append(
                pandas.DataFrame(
                    {"time": at, "label": label, "feature": name, "mean": mean,
                     "lower": lower, "median": median, "upper": upper}
                )
            )  # fmt: skip
    return pandas.concat(parts, ignore_index=True)


def early_features(
    bridge: Bridge, features: Sequence[str] | None = None, *, start: int = 0, end: int = -1
) -> pandas.DataFrame:
    """Features whose value at an early snapshot goes with the probability of a later label.

    Spearman's rank correlation over the particles of `start` between a feature and the probability of each label at
    `end`; q-values by Benjamini and Hochberg (1995) over all rows of the table.

    Returns
    -------
    DataFrame
        feature, label, correlation, p_value, q_value, probability_high and probability_low : mean probability of the
        label for the particles in the upper and the lower third of the feature, effect : their difference. Sorted by
        the size of the correlation; `attrs["caveat"]` holds a sentence to be read beside it. A feature that is constant
        has no correlation (NaN).

    Raises
    ------
    InputError
        With fewer than 8 particles of positive weight at `start`.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> x = np.linspace(0.0, 9.0, 10)
    >>> series = ensembles.SnapshotSeries.from_arrays(
    ...     [0, 1], [x, x], labels=[["a"] * 10, ["low"] * 5 + ["high"] * 5], features={"gene": [x**2, x**2]}
    ... )
    >>> bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))
    >>> early_features(bridge)[["label", "correlation"]].round(6).to_numpy().tolist()
    [['high', 1.0], ['low', -1.0]]
    """
    import pandas
    from scipy.stats import false_discovery_control, spearmanr

    series = bridge.series
    start, end = snapshot_pair(bridge, start, end)
    found = labels_at(series, end)
    taken = np.flatnonzero(series.weights[start])
    if taken.size < _FEWEST:
        raise checks.InputError(
            f"too few particles for a rank correlation; {taken.size} at t = {series.times[start]:g} where {_FEWEST} are "
            "needed; choose a snapshot with more"
        )
    probability = expected_at_end(bridge, found.indicators, start, end)[taken]
    rows = []
    for name in _names(series, features):
        values = _feature(series, name, start)[taken]
        low, high = np.quantile(values, [1 / 3, 2 / 3])
        for p, label in enumerate(found.names):
            chance = probability[:, p]
            constant = np.ptp(values) == 0 or np.ptp(chance) == 0
            correlation, p_value = (np.nan, np.nan) if constant else spearmanr(values, chance)
            pair = chance[values >= high].mean(), chance[values <= low].mean()
            rows.append((name, label, correlation, p_value, np.nan, *pair, pair[0] - pair[1]))
    frame = pandas.DataFrame(
        rows,
        columns=["feature", "label", "correlation", "p_value", "q_value",
                 "probability_high", "probability_low", "effect"],
    )  # fmt: skip
    known = frame["p_value"].notna().to_numpy()
    if known.any():
        frame.loc[known, "q_value"] = false_discovery_control(frame.loc[known, "p_value"].to_numpy())
    order = np.argsort(-frame["correlation"].abs().fillna(-1.0).to_numpy(), kind="stable")
    frame = frame.iloc[order].reset_index(drop=True)
    frame.attrs["caveat"] = CAVEAT
    return frame
