"""How far a predicted cloud is from an observed one; how well that is known is in resampling.py.

The contract of a score: ``score(predicted, observed, *, weights=(None, None))`` takes two clouds (n, d) and (m, d) with
their non-negative weights (n,) and (m,) (None: all equal; only their ratios matter) and returns one float, 0 for equal
clouds and larger for worse predictions. A point of weight 2 is the same as that point given twice.

To add a score, you must
1. write one function with that contract, whose docstring gives the equation and the unit,
2. list it in `SCORES`,
3. keep its memory bounded by tiles where it looks at pairs of particles.
tests/test_scores.py runs the laws of a score on every listed one. The log-density of held-out particles is no function of
two clouds; hold_out.py adds it.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.spatial.distance import cdist

from .. import checks
from ..checks import InputError
from .transport import wasserstein

__all__ = [
    "SCORES",
    "Score",
    "covariance_error",
    "energy_distance",
    "kernel_discrepancy",
    "mean_error",
    "pooled_bandwidth",
    "wasserstein_1",
    "wasserstein_2",
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


def pooled_bandwidth(predicted: np.ndarray, observed: np.ndarray, *, weights: Weights = (None, None)) -> float:
    """The rule for the bandwidth: h² = ½ (tr Cov x + tr Cov y), in units of length.

    Half the mean squared distance within a cloud is the trace of its covariance, so that two points of one cloud have
    a kernel of about exp(-1), in any dimension and unit.

    Examples
    --------
    >>> from ensembles.assessment.scores import pooled_bandwidth
    >>> pooled_bandwidth([0.0, 2.0], [5.0, 7.0])
    1.0
    """
    (x, a), (y, b) = two_clouds(predicted, observed, weights)
    spread = 0.5 * (a @ ((x - a @ x) ** 2).sum(axis=1) + b @ ((y - b @ y) ** 2).sum(axis=1))
    if spread <= 0.0:
        raise InputError(
            "the kernel discrepancy needs a bandwidth; each cloud is a single place, whose spread is 0; "
            "give bandwidth=..., in units of length"
        )
    return float(np.sqrt(spread))


def kernel_discrepancy(
    predicted: np.ndarray,
    observed: np.ndarray,
    *,
    weights: Weights = (None, None),
    bandwidth: float | None = None,
    unbiased: bool = False,
) -> float:
    """Squared maximum mean discrepancy E k(X, X') + E k(Y, Y') - 2 E k(X, Y), k = exp(-½|x - y|²/h²); dimensionless.

    Streamed over all pairs, as `energy_distance`, whose remarks on `unbiased` hold here too.

    Parameters
    ----------
    predicted, observed, weights : as for `energy_distance`.
    bandwidth : h in length; that of `pooled_bandwidth` if None. To compare predictions give all of them the same.
    unbiased : leave out the pairs of a particle with itself.

    Notes
    -----
    A. Gretton et al., Journal of Machine Learning Research 13, 723 (2012).

    Examples
    --------
    >>> from ensembles.assessment.scores import kernel_discrepancy
    >>> round(kernel_discrepancy([0.0], [2.0], bandwidth=1.0), 6)  # 2 - 2 exp(-2)
    1.729329
    """
    (x, a), (y, b) = two_clouds(predicted, observed, weights)
    if bandwidth is None:
        bandwidth = pooled_bandwidth(x, y, weights=(a, b))
    h = checks.positive_number(bandwidth, "bandwidth", "give it in units of length")

    def mean_kernel(one: np.ndarray, other: np.ndarray, w: np.ndarray, v: np.ndarray) -> float:
        return _mean_over_pairs(
            one, other, w, v, lambda rows, columns: np.exp(-0.5 * cdist(rows, columns, "sqeuclidean") / h**2)
        )

    within_x, within_y = mean_kernel(x, x, a, a), mean_kernel(y, y, b, b)
    if unbiased:
        within_x = (within_x - float(a @ a)) / _share_of_other_pairs(a, "predicted")
        within_y = (within_y - float(b @ b)) / _share_of_other_pairs(b, "observed")
    return within_x + within_y - 2.0 * mean_kernel(x, y, a, b)


def wasserstein_1(predicted: np.ndarray, observed: np.ndarray, *, weights: Weights = (None, None)) -> float:
    """Wasserstein-1 distance min E|X - Y| over couplings, in units of length; see `transport.wasserstein`.

    Examples
    --------
    >>> from ensembles.assessment.scores import wasserstein_1
    >>> wasserstein_1([0.0, 1.0], [5.0, 8.0])
    6.0
    """
    (x, a), (y, b) = two_clouds(predicted, observed, weights)
    return wasserstein(x, y, a, b, order=1).value


def wasserstein_2(predicted: np.ndarray, observed: np.ndarray, *, weights: Weights = (None, None)) -> float:
    """Wasserstein-2 distance (min E|X - Y|²)^½ over couplings, in units of length; see `transport.wasserstein`.

    Examples
    --------
    >>> from ensembles.assessment.scores import wasserstein_2
    >>> wasserstein_2([0.0, 1.0], [5.0, 6.0])
    5.0
    """
    (x, a), (y, b) = two_clouds(predicted, observed, weights)
    return wasserstein(x, y, a, b, order=2).value


SCORES: dict[str, Score] = {
    "energy_distance": energy_distance,
    "kernel_discrepancy": kernel_discrepancy,
    "wasserstein_1": wasserstein_1,
    "wasserstein_2": wasserstein_2,
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
    """Σ a_i b_j |x_i - y_j|."""
    return _mean_over_pairs(x, y, a, b, cdist)


def _mean_over_pairs(
    x: np.ndarray, y: np.ndarray, a: np.ndarray, b: np.ndarray, pairs: Callable[[np.ndarray, np.ndarray], np.ndarray]
) -> float:
    """Σ a_i b_j pairs(x, y)_ij, in tiles of fixed size so that memory does not grow with the clouds."""
    total = 0.0
    for i in range(0, len(x), _TILE_ROWS):
        rows = slice(i, i + _TILE_ROWS)
        for j in range(0, len(y), _TILE_COLUMNS):
            columns = slice(j, j + _TILE_COLUMNS)
            total += float(a[rows] @ (pairs(x[rows], y[columns]) @ b[columns]))
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
