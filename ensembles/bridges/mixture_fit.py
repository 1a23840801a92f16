"""Fit mixture ends to one gap: how many components by held-out likelihood, then all the data."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np

from ..endpoints.ascent import Ascent, ascend
from ..endpoints.covariance import parametrisation
from ..endpoints.likelihood import Likelihood, WhitenedClouds
from .mixture_starts import cluster_labels, coupled_starts, gaussian_component, start_from_clusters
from .smooth import MixtureEnds

__all__ = ["MixtureFit", "choose_count", "fit_mixture", "split_folds", "stated_floor"]

_WHOLE = 4_000  # points up to which the choice is by 4 folds; beyond it one held-out part
_PART = 15_000  # points of the training and of the held-out part, at most
_COLLAPSE = 1e-3  # standard deviation² that the stated prior holds a component at, beside the whole cloud's
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
    floor = stated_floor(clouds)
    size = min(len(clouds.u), len(clouds.v))

    def likelihood(part: WhitenedClouds, count: int) -> Likelihood:
        kind = parametrisation(ends.covariance, count, part.u.shape[1], ends.rank)
        strength = 0.0 if count == 1 else 1.0 / min(len(part.u), len(part.v))
        return Likelihood(part, kind, floor, strength)

    folds = split_folds(len(clouds.u), len(clouds.v), ends.rng)
    parts = [(clouds.subset(*train), clouds.subset(*rest)) for train, rest in folds]
    coupled = [coupled_starts(train, ends.rng) if ends.begin != "clusters" else None for train, _ in parts]

    def fitted(train: WhitenedClouds, rest: WhitenedClouds, plan: Plan, count: int, thorough: bool) -> Ascent:
        best = None
        for theta, model in _beginnings(likelihood(train, count), plan, ends, thorough):
            ascent = ascend(
                model.value_and_gradient,
                theta,
                model.scale(theta),
                resolution=_FINE * model.size / (2.0 * len(rest.v)),
                held_out=likelihood(rest, count).value,
            )
            if best is None or ascent.value > best.value:
                best = ascent
        assert best is not None
        return best

    def contributions(count: int) -> list[np.ndarray]:
        """Held-out terms, each times its weight, whose sum is J (averaged over folds)."""
        out = []
        for (train, rest), plan in zip(parts, coupled):
            ahead, behind = likelihood(rest, count).terms(fitted(train, rest, plan, count, False).theta)
            out += [rest.b * ahead / len(parts), -rest.a * behind / len(parts)]
        return out

    notes: list[str] = []
    tried = np.empty((0, 3))
    count = components
    if warm is None and count is None:
        count, tried = choose_count(contributions, min(ends.most, _distinct(clouds.v)))
        notes.append(
            f"{count} component(s) chosen by held-out likelihood among {', '.join(f'{k:.0f}' for k in tried[:, 0])}"
        )
    if warm is not None:
        count = components
    assert count is not None
    model = likelihood(clouds, count)
    if warm is not None:
        theta = warm(model)
    elif count == 1:
        theta = start_from_clusters(model, np.zeros(len(clouds.v), dtype=np.int64))
    else:
        train, rest = parts[0]
        theta = fitted(train, rest, coupled[0], count, True).theta
    work = model.size * size
    resolution = _FINE * model.size / (2.0 * size) if work > 2e6 else 0.0
    final = ascend(model.value_and_gradient, theta, model.scale(theta), resolution=resolution)
    return MixtureFit(model, final, tried, tuple(notes) + _collapsed(model, final))


Plan = tuple[np.ndarray, np.ndarray, np.ndarray] | None


def _beginnings(
    model: Likelihood, plan: Plan, ends: MixtureEnds, thorough: bool
) -> Iterator[tuple[np.ndarray, Likelihood]]:
    """Starting parameters, one after the other; the coupling first."""
    for repeat in range(ends.repeats + 1 if thorough and model.kind.count > 1 else 1):
        labels = cluster_labels(model.clouds.v, model.clouds.b, model.kind.count, ends.rng + repeat)
        if plan is not None:
            yield start_from_clusters(model, labels, plan), model
        if ends.begin == "clusters" or (ends.begin == "both" and (thorough or len(model.clouds.v) <= _WHOLE)):
            yield start_from_clusters(model, labels), model


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
    for count in _candidates(most):
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


def _candidates(most: int) -> Iterator[int]:
    count = 1
    while count <= most:
        yield count
        count = count + 1 if count < 6 else int(np.ceil(count * 1.3))


def _total(terms: list[np.ndarray]) -> float:
    return float(sum(part.sum() for part in terms))


def _variance(terms: np.ndarray) -> float:
    """Of the sum of terms that are draws of one law each."""
    return float(terms.size * terms.var())


def _distinct(points: np.ndarray) -> int:
    return len(np.unique(points, axis=0)) if len(points) < 100 else len(points)


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
