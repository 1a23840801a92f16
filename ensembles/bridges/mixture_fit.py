"""Fit mixture ends to one gap: how many components by held-out likelihood, then all the data."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from ..endpoints.ascent import Ascent, ascend
from ..endpoints.covariance import parametrisation
from ..endpoints.likelihood import Likelihood, WhitenedClouds
from .mixture_starts import cluster_labels, coupled_starts, gaussian_component, start_by_splitting, start_from_clusters
from .smooth import MixtureEnds

__all__ = ["MixtureFit", "candidates", "choose_count", "distinct_rows", "fit_mixture", "split_folds", "stated_floor"]

_WHOLE = 4_000  # points up to which the choice is by 4 folds; beyond it one held-out part
_PART = 15_000  # points of the training and of the held-out part, at most
_COLLAPSE = 1e-3  # standard deviation² that the stated prior holds a component at, beside the whole cloud's
_LARGE = 2e6  # parameters times points beyond which the last ascent, too, stops at what the data can tell
_FINE = 0.02  # an ascent stops below this share of the log-likelihood's own optimism, parameters / 2n


@dataclass(frozen=True)
class MixtureFit:
    """The likelihood on all the data with its parameters, what was tried, and notes."""

    likelihood: Likelihood
    ascent: Ascent
    chosen: np.ndarray
    notes: tuple[str, ...]


def stated_floor(clouds: WhitenedClouds) -> np.ndarray:
    """τ (d,): 1e-3 of the conditional variance of the one-component bridge along each axis."""
    moments = []
    for points, weights in ((clouds.u, clouds.a), (clouds.v, clouds.b)):
        mean = weights @ points
        moments.append((mean, weights @ (points - mean) ** 2))
    return _COLLAPSE * gaussian_component(moments[0], moments[1], True)[1]


def fit_mixture(
    clouds: WhitenedClouds, components: int | None, ends: MixtureEnds, warm: Callable[[Likelihood], np.ndarray] | None
) -> MixtureFit:
    """Fit the terminal potential; `warm` gives parameters to begin with, from another fit."""
    walk = _Walk(clouds, ends, components or 1)
    tried = np.empty((0, 3))
    notes: tuple[str, ...] = ()
    count = components
    if count is None:
        count, tried = choose_count(walk.contributions, walk.most)
        listed = ", ".join(f"{k:.0f}" for k in tried[:, 0])
        notes = (f"{count} component(s) chosen by held-out likelihood among {listed}",)
    model = walk.likelihood(clouds, count)
    theta = walk.beginning(model) if warm is None else warm(model)
    size = min(len(clouds.u), len(clouds.v))
    resolution = _FINE * model.size / (2.0 * size) if model.size * size > _LARGE else 0.0
    final = ascend(model.value_and_gradient, theta, model.scale(theta), resolution=resolution)
    return MixtureFit(model, final, tried, notes + _collapsed(model, final))


class _Walk:
    """Fits with a rising number of components on parts of the data; each begins at the one before among others."""

    def __init__(self, clouds: WhitenedClouds, ends: MixtureEnds, wanted: int) -> None:
        self.clouds, self.ends, self.floor = clouds, ends, stated_floor(clouds)
        folds = split_folds(len(clouds.u), len(clouds.v), ends.rng)
        self.parts = [(clouds.subset(*train), clouds.subset(*rest)) for train, rest in folds]
        self.different = min(distinct_rows(train.v, max(ends.most, wanted)) for train, _ in self.parts)
        self.most = min(ends.most, self.different)
        coupled = ends.begin != "clusters"
        self.plans = [coupled_starts(train, ends.rng) if coupled else None for train, _ in self.parts]
        self.fits: dict[tuple[int, int], Ascent] = {}

    def likelihood(self, part: WhitenedClouds, count: int) -> Likelihood:
        kind = parametrisation(self.ends.covariance, count, part.u.shape[1], self.ends.rank)
        strength = 0.0 if count == 1 else 1.0 / min(len(part.u), len(part.v))
        return Likelihood(part, kind, self.floor, strength)

    def contributions(self, count: int) -> list[np.ndarray]:
        """Held-out terms, each times its weight, whose sum is J (averaged over folds)."""
        out = []
        for fold, (_, rest) in enumerate(self.parts):
            ahead, behind = self.likelihood(rest, count).terms(self.fit(fold, count).theta)
            out += [rest.b * ahead / len(self.parts), -rest.a * behind / len(self.parts)]
        return out

    def fit(self, fold: int, count: int) -> Ascent:
        """The best of all beginnings on the fold's training part, stopped by its held-out part."""
        if (fold, count) not in self.fits:
            train, rest = self.parts[fold]
            model, judge = self.likelihood(train, count), self.likelihood(rest, count)
            resolution = _FINE * model.size / (2.0 * len(rest.v))
            runs = [
                ascend(model.value_and_gradient, theta, model.scale(theta), resolution=resolution, held_out=judge.value)
                for theta in self._beginnings(model, fold)
            ]
            self.fits[fold, count] = max(runs, key=lambda run: run.value)
        return self.fits[fold, count]

    def beginning(self, model: Likelihood) -> np.ndarray:
        """Where the fit to all the data begins: the fit to a part, if that is large enough for so many components."""
        count = model.kind.count
        if count == 1:
            return start_from_clusters(model, np.zeros(len(model.clouds.v), dtype=np.int64))
        if count > self.different:
            return start_from_clusters(model, cluster_labels(model.clouds.v, model.clouds.b, count, self.ends.rng))
        if (0, count) not in self.fits:  # the number was given: walk up to it
            for fewer in candidates(count - 1):
                self.fit(0, fewer)
        return self.fit(0, count).theta

    def _beginnings(self, model: Likelihood, fold: int) -> Iterator[np.ndarray]:
        count, ends = model.kind.count, self.ends
        fewer = max((k for f, k in self.fits if f == fold and k < count), default=0)
        if fewer:
            before = self.fits[fold, fewer]
            yield start_by_splitting(model, self.likelihood(model.clouds, fewer).unpack(before.theta))
        for repeat in range(ends.repeats if count > 1 else 1):
            labels = cluster_labels(model.clouds.v, model.clouds.b, count, ends.rng + repeat)
            if self.plans[fold] is not None:
                yield start_from_clusters(model, labels, self.plans[fold])
            if ends.begin != "coupling" and (ends.begin == "clusters" or len(model.clouds.v) <= _WHOLE):
                yield start_from_clusters(model, labels)


def split_folds(n: int, m: int, seed: int) -> list[tuple[tuple[np.ndarray, np.ndarray], tuple[np.ndarray, np.ndarray]]]:
    """((rows, columns) to fit, (rows, columns) held out): four folds of small clouds, one split of large ones."""
    rng = np.random.default_rng(seed)
    rows, columns = rng.permutation(n), rng.permutation(m)
    if min(n, m) < 2:
        return [((rows, columns), (rows, columns))]
    if min(n, m) <= _WHOLE:
        count = min(4, n, m)
        cut_rows, cut_columns = np.array_split(rows, count), np.array_split(columns, count)
        folds = []
        for k in range(count):
            kept = [np.concatenate([cut[i] for i in range(count) if i != k]) for cut in (cut_rows, cut_columns)]
            folds.append(((kept[0], kept[1]), (cut_rows[k], cut_columns[k])))
        return folds
    first, second = (min(_PART, size // 2) for size in (n, m))
    return [((rows[:first], columns[:second]), (rows[first : 2 * first], columns[second : 2 * second]))]


def choose_count(contributions: Callable[[int], list[np.ndarray]], most: int) -> tuple[int, np.ndarray]:
    """The smallest count whose held-out value is within one standard error of the best; counts rise until it falls twice.

    Returns the count and a table (tries, 3): count, held-out value, standard error of its difference to the best.
    """
    values: dict[int, list[np.ndarray]] = {}
    best, worse = 1, 0
    for count in candidates(most):
        values[count] = contributions(count)
        if count == 1:
            continue
        if _total(values[count]) > _total(values[best]):
            best, worse = count, 0
        else:
            worse += 1
        if worse >= 2:
            break
    table = np.array([
        (count, _total(terms), np.sqrt(sum(_variance(t - s) for t, s in zip(terms, values[best]))))
        for count, terms in values.items()
    ])  # fmt: skip
    within = table[:, 1] >= table[table[:, 0] == best, 1] - table[:, 2]
    return int(table[within, 0].min()), table


def candidates(most: int) -> Iterator[int]:
    """1, 2, ..., 6, 8, 11, 15, ... up to `most`."""
    count = 1
    while count <= most:
        yield count
        count = count + 1 if count < 6 else int(np.ceil(count * 1.3))


def _total(terms: list[np.ndarray]) -> float:
    return float(sum(part.sum() for part in terms))


def _variance(terms: np.ndarray) -> float:
    """Of the sum of terms that are draws of one law each."""
    return float(terms.size * terms.var())


def distinct_rows(points: np.ndarray, enough: int) -> int:
    """The number of different rows; counting stops where there are `enough`."""
    few = len(np.unique(points[: 10 * enough], axis=0))
    return few if few >= enough or len(points) <= 10 * enough else len(np.unique(points, axis=0))


def _collapsed(model: Likelihood, final: Ascent) -> tuple[str, ...]:
    tilted = model.unpack(final.theta)
    variances = tilted.c if model.kind.diagonal else np.diagonal(tilted.c, axis1=1, axis2=2)
    thin = (variances < 3.0 * model.floor).any(axis=1) & (model.strength > 0)
    masses = model.masses(final.theta)[0]
    return tuple(
        f"component {k} rests on about {max(1, round(masses[k] * len(model.clouds.v)))} particle(s) of the end cloud; the "
        f"stated prior holds its variance at {variances[k].min():.2g} of the noise: fewer components may serve better"
        for k in np.flatnonzero(thin)
    )
