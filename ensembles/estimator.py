"""A bridge as a scikit-learn estimator, so that its tools for model selection work on it."""

from __future__ import annotations

from typing import Any

import numpy as np
from sklearn.base import BaseEstimator
from sklearn.utils.validation import check_is_fitted, column_or_1d, validate_data

from . import checks
from .bridges.fit import fit_bridge
from .bridges.smooth import KernelEnds, MixtureEnds
from .priors.brownian import Brownian
from .priors.ornstein_uhlenbeck import OrnsteinUhlenbeck
from .snapshots.series import SnapshotSeries

__all__ = ["BridgeModel"]


class BridgeModel(BaseEstimator):
    """A Schrödinger bridge that is fitted to rows of positions and their times.

    The time of a row is its target, y: a splitter then splits both, and stratified ones, which want whole-numbered times,
    keep every snapshot.

    Parameters
    ----------
    diffusion : D in length²/time: one number, one an axis, or a matrix.
    rate : of an Ornstein-Uhlenbeck prior, in 1/time; None is Brownian motion.
    centre : of the Ornstein-Uhlenbeck prior, in length.
    ends : "mixture", "kernel", "atoms" or "auto", or their options; see `fit_bridge`. Scores at the snapshots themselves
        need smooth ends.
    components : of the ends; None is chosen by held-out likelihood.
    tolerance : of atoms.

    Attributes
    ----------
    bridge_ : Bridge
    times_ : (K,) times of the snapshots.
    n_features_in_ : number of coordinates.

    Examples
    --------
    >>> import numpy as np
    >>> from sklearn.model_selection import cross_val_score
    >>> rng = np.random.default_rng(0)
    >>> X = np.concatenate([rng.normal(0, 1, (60, 2)), rng.normal(3, 2, (60, 2))])
    >>> times = np.repeat([0, 1], 60)
    >>> scores = cross_val_score(BridgeModel(diffusion=0.5, components=1), X, times, cv=3)
    >>> scores.shape, bool(np.isfinite(scores).all())
    ((3,), True)
    """

    def __init__(
        self,
        diffusion: Any = 1.0,
        *,
        rate: Any = None,
        centre: Any = 0.0,
        ends: str | MixtureEnds | KernelEnds = "mixture",
        components: int | None = None,
        tolerance: float = 1e-6,
    ) -> None:
        self.diffusion = diffusion
        self.rate = rate
        self.centre = centre
        self.ends = ends
        self.components = components
        self.tolerance = tolerance

    def fit(self, X: Any, y: Any = None, times: Any = None) -> BridgeModel:
        """Fit the bridge to rows X (n, d) at `times` (n,); y is another name for `times`, which goes first.

        Rows of exactly equal time are one snapshot.
        """
        X = validate_data(self, X, dtype=float)
        series = SnapshotSeries.from_arrays(*self._snapshots(X, y if times is None else times))
        prior = (
            Brownian(self.diffusion) if self.rate is None else OrnsteinUhlenbeck(self.rate, self.centre, self.diffusion)
        )
        self.bridge_ = fit_bridge(series, prior, tolerance=self.tolerance, ends=self.ends, components=self.components)
        self.times_ = series.times.copy()
        return self

    def sample(self, n_samples: int = 1, time: float | None = None, random_state: int = 0) -> np.ndarray:
        """Draw positions (n_samples, d) from the population at `time`, by default the last snapshot."""
        check_is_fitted(self)
        return self.bridge_.sample(self._time(time), n_samples, rng=random_state)

    def score_samples(self, X: Any, y: Any = None, times: Any = None) -> np.ndarray:
        """log ρ_t (n,) of every row at its time, by default the last snapshot; in nats per length^d."""
        check_is_fitted(self)
        X = validate_data(self, X, dtype=float, reset=False)
        given = y if times is None else times
        at = np.full(len(X), self._time(None)) if given is None else self._row_times(X, given)
        out = np.empty(len(X))
        for t in np.unique(at):
            out[at == t] = self.bridge_.log_density(t, X[at == t])
        return out

    def score(self, X: Any, y: Any = None, times: Any = None) -> float:
        """Mean of `score_samples`."""
        return float(self.score_samples(X, y, times).mean())

    def predict(self, X: Any) -> np.ndarray:
        """Expected position (n, d) at the next snapshot of particles that are at X at the first."""
        check_is_fitted(self)
        X = validate_data(self, X, dtype=float, reset=False)
        return self.bridge_.conditional_end(X).mean()

    def __sklearn_tags__(self) -> Any:
        tags = super().__sklearn_tags__()
        tags.target_tags.required = True
        tags.non_deterministic = False
        return tags

    def _time(self, time: float | None) -> float:
        return float(self.times_[-1]) if time is None else float(time)

    def _snapshots(self, X: np.ndarray, times: Any) -> tuple[np.ndarray, list[np.ndarray]]:
        if times is None:
            raise checks.InputError(
                "BridgeModel requires y to be passed, but the target y is None; it is the time of every row of X; "
                "give fit(X, times) or fit(X, times=times)"
            )
        at = self._row_times(X, times)
        if len(X) == 1:
            raise checks.InputError(
                "a bridge needs at least two snapshots; n_samples = 1; give rows at two times or more"
            )
        distinct = np.unique(at)
        return distinct, [X[at == t] for t in distinct]

    def _row_times(self, X: np.ndarray, times: Any) -> np.ndarray:
        try:
            at = np.asarray(column_or_1d(times, warn=True), dtype=float)
        except (TypeError, ValueError) as cause:
            raise checks.InputError(f"y must be the time of every row; {cause}; give one number a row") from None
        checks.require_finite(at, "y", "y is the time of every row; NaN and inf are none")
        if len(at) != len(X):
            raise checks.InputError(
                f"y must be the time of every row; it holds {len(at)} for {len(X)} rows of X; give one number a row"
            )
        return at
