"""How far a predicted cloud is from an observed one; how well that is known is in resampling.py.

The contract of a score: ``score(predicted, observed, *, weights=(None, None))`` takes two clouds (n, d) and (m, d) with
their non-negative weights (n,) and (m,) (None: all equal; only their ratios matter) and returns one float, 0 for equal
clouds and larger for worse predictions. A point of weight 2 is the same as that point given twice.

To add a score, you must
1. write one function with that contract, whose docstring gives the equation and the unit,
2. list it in `SCORES`,
3. keep its memory bounded by tiles where it looks at pairs of particles.
tests/test_scores.py runs the laws of a score on every listed one.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.spatial.distance import cdist

from .. import checks
from ..checks import InputError

__all__ = [
    "SCORES",
    "Score",
    "covariance_error",
    "energy_distance",
    "mean_error",
]

Score = Callable[..., float]
Weights = tuple[Any, Any]

_TILE_ROWS, _TILE_COLUMNS = 1024, 2048  # 16 MB of distances at a time


def energy_distance(
    predicted: np.ndarray, observed: np.ndarray, *, weights: Weights = (None, None), unbiased: bool = False
) -> float:
    """Energy distance 2 E|X - Y| - E|X - X'| - E|Y - Y'| between two weighted clouds, in units of length.

    With weights a, b of sum 1 the means are Σ a_i b_j |x_i - y_j| and likewise within each cloud, over all pairs and
    streamed in tiles. By default a particle is paired with itself too (V-statistic): this is the distance between the
    two sets of atoms, never negative and 0 only for equal ones, but for samples of n and m from one law its expectation
    is (1/n + 1/m) E|X - X'|.

    Parameters
    ----------
    predicted, observed : (n, d) and (m, d) clouds.
    weights : (n,) and (m,) non-negative weights; None is all equal.
    unbiased : divide the means within a cloud by 1 - Σ a_i² (U-statistic). The expectation over independent samples is
        then that of the populations, 0 for equal ones, whatever n and m, and a single value can be negative. Here a
        point of weight 2 is one particle of twice the weight, not two particles.

    Raises
    ------
    InputError
        A cloud that is empty, not finite or of another dimension, bad weights, or `unbiased` with one particle.

    Notes
    -----
    G. J. Székely and M. L. Rizzo, Journal of Statistical Planning and Inference 143, 1249 (2013). There are also texts
    that call the square root of this number the energy distance.

    Examples
    --------
    >>> from ensembles.assessment.scores import energy_distance
    >>> energy_distance([0.0], [3.0, 5.0])
    7.0
    """
    (x, a), (y, b) = two_clouds(predicted, observed, weights)
    within_x, within_y = _mean_distance(x, x, a, a), _mean_distance(y, y, b, b)
    if unbiased:
        within_x /= _share_of_other_pairs(a, "predicted")
        within_y /= _share_of_other_pairs(b, "observed")
    return 2.0 * _mean_distance(x, y, a, b) - within_x - within_y


def mean_error(predicted: np.ndarray, observed: np.ndarray, *, weights: Weights = (None, None)) -> float:
    """Distance |Σ a_i x_i - Σ b_j y_j| between the means of two weighted clouds, in units of length.

    Examples
    --------
    >>> from ensembles.assessment.scores import mean_error
    >>> mean_error([[0.0, 0.0]], [[3.0, 0.0], [3.0, 8.0]])
    5.0
    """
    (x, a), (y, b) = two_clouds(predicted, observed, weights)
    return float(np.linalg.norm(a @ x - b @ y))


def covariance_error(predicted: np.ndarray, observed: np.ndarray, *, weights: Weights = (None, None)) -> float:
    """Frobenius norm of the difference between the covariances of two weighted clouds, in units of length².

    The covariance of a cloud is Σ a_i (x_i - x̄)(x_i - x̄)ᵀ with weights of sum 1, that of the atoms themselves.

    Examples
    --------
    >>> from ensembles.assessment.scores import covariance_error
    >>> covariance_error([0.0, 2.0], [0.0, 6.0])
    8.0
    """
    (x, a), (y, b) = two_clouds(predicted, observed, weights)
    return float(np.linalg.norm(_covariance(x, a) - _covariance(y, b)))


SCORES: dict[str, Score] = {
    "energy_distance": energy_distance,
    "mean_error": mean_error,
    "covariance_error": covariance_error,
}
"""Every score by its name; see the module's docstring for the contract."""


def two_clouds(predicted: Any, observed: Any, weights: Weights) -> tuple[tuple[np.ndarray, np.ndarray], ...]:
    """Check both clouds, and give each with weights of sum 1."""
    x = checks.points(predicted, "predicted")
    y = checks.points(observed, "observed", x.shape[1])
    if not isinstance(weights, (tuple, list)) or len(weights) != 2:
        raise InputError(
            f"weights must be a pair, of the predicted and of the observed cloud; it is {type(weights).__name__}; "
            "give (predicted_weights, observed_weights), with None for equal ones"
        )
    return (x, shares(weights[0], len(x), "weights[0]")), (y, shares(weights[1], len(y), "weights[1]"))


def shares(weights: Any, count: int, name: str) -> np.ndarray:
    """Weights (count,) of sum 1; None is all equal."""
    if weights is None:
        return np.full(count, 1.0 / count)
    checked = checks.weights(weights, count, name)
    return checked / checked.sum()


def _mean_distance(x: np.ndarray, y: np.ndarray, a: np.ndarray, b: np.ndarray) -> float:
    """Σ a_i b_j |x_i - y_j|, in tiles of fixed size so that memory does not grow with the clouds."""
    total = 0.0
    for i in range(0, len(x), _TILE_ROWS):
        rows = slice(i, i + _TILE_ROWS)
        for j in range(0, len(y), _TILE_COLUMNS):
            columns = slice(j, j + _TILE_COLUMNS)
            total += float(a[rows] @ (cdist(x[rows], y[columns]) @ b[columns]))
    return total


def _share_of_other_pairs(a: np.ndarray, name: str) -> float:
    if np.count_nonzero(a) < 2:
        raise InputError(
            f"the unbiased energy distance needs two particles in each cloud; the {name} one has 1 of positive "
            "weight; use unbiased=False"
        )
    return 1.0 - float(a @ a)


def _covariance(x: np.ndarray, a: np.ndarray) -> np.ndarray:
    centred = x - a @ x
    return (centred.T * a) @ centred
