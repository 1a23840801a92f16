"""How well a score is known, by resampling particles, and the score that a perfect prediction would get."""

from __future__ import annotations

from typing import Any

import numpy as np

from .. import checks
from .scores import Score, Weights, energy_distance, shares, two_clouds

__all__ = ["resampled_scores", "resampling_error", "resampling_floor"]

_RESAMPLED = ("both", "predicted", "observed")


def resampled_scores(
    predicted: np.ndarray,
    observed: np.ndarray,
    *,
    score: Score = energy_distance,
    weights: Weights = (None, None),
    resampled: str = "both",
    repeats: int = 200,
    rng: Any = 0,
) -> np.ndarray:
    """Score bootstrap resamples of the clouds, (repeats,).

    Of n particles n are drawn with replacement, each with its weight; particles of weight 0 are left out. With one seed
    the resamples of `observed` are the same for every prediction, so that differences between two predictions can be
    taken draw by draw.

    Parameters
    ----------
    predicted, observed, weights : as for the score.
    score : function with the contract of the module's docstring.
    resampled : "both", "predicted" or "observed"; the other cloud is taken as exact.
    repeats : number of resamples, at least 2.
    rng : seed or numpy Generator.

    Raises
    ------
    InputError
        If `resampled` or `repeats` is out of range, or the score refuses its input.
    """
    if resampled not in _RESAMPLED:
        raise checks.unknown_name("choice of resampled clouds", resampled, _RESAMPLED)
    repeats = checks.whole_number(repeats, "repeats", 2)
    (x, a), (y, b) = (_present(*cloud) for cloud in two_clouds(predicted, observed, weights))
    observed_rng, predicted_rng = checks.generator(rng).spawn(2)
    values = np.empty(repeats)
    for r in range(repeats):
        j = observed_rng.integers(len(y), size=len(y)) if resampled != "predicted" else slice(None)
        i = predicted_rng.integers(len(x), size=len(x)) if resampled != "observed" else slice(None)
        values[r] = score(x[i], y[j], weights=(a[i], b[j]))
    return values


def resampling_error(
    predicted: np.ndarray,
    observed: np.ndarray,
    *,
    score: Score = energy_distance,
    weights: Weights = (None, None),
    resampled: str = "both",
    repeats: int = 200,
    rng: Any = 0,
) -> float:
    """Bootstrap standard error of a score: the standard deviation of `resampled_scores`, which has the arguments.

    It is the error of a score well above its floor. Where the two clouds agree, a score bounded below by 0 is not near
    normal: compare it with `resampling_floor` then.

    Examples
    --------
    >>> import numpy as np
    >>> from ensembles.assessment.resampling import resampling_error
    >>> from ensembles.assessment.scores import mean_error
    >>> cloud = np.random.default_rng(0).normal(size=(400, 1))
    >>> error = resampling_error([9.0], cloud, score=mean_error, resampled="observed")
    >>> 0.04 < error < 0.06  # 1 / sqrt(400) = 0.05
    True
    """
    values = resampled_scores(
        predicted, observed, score=score, weights=weights, resampled=resampled, repeats=repeats, rng=rng
    )
    return float(values.std(ddof=1))


def resampling_floor(
    observed: np.ndarray,
    *,
    count: int | None = None,
    score: Score = energy_distance,
    weights: Any = None,
    repeats: int = 200,
    rng: Any = 0,
) -> np.ndarray:
    """Scores (repeats,) that a perfect prediction would get: `count` against n draws, both from the observed cloud.

    Draws are independent, with probabilities ∝ weights: the observed cloud stands for the population it came from.

    Parameters
    ----------
    observed, weights : (n, d) cloud and its weights (n,).
    count : particles of the prediction to be judged; n if None.
    score, repeats, rng : as for `resampled_scores`.

    Examples
    --------
    >>> from ensembles.assessment.resampling import resampling_floor
    >>> float(resampling_floor([0.0, 0.0, 0.0], repeats=5).max())
    0.0
    """
    y = checks.points(observed, "observed")
    b = shares(weights, len(y), "weights")
    count = len(y) if count is None else checks.whole_number(count, "count")
    repeats = checks.whole_number(repeats, "repeats", 2)
    generator = checks.generator(rng)
    values = np.empty(repeats)
    for r in range(repeats):
        first, second = generator.choice(len(y), size=count, p=b), generator.choice(len(y), size=len(y), p=b)
        values[r] = score(y[first], y[second])
    return values


def _present(x: np.ndarray, a: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return x[a > 0], a[a > 0]
