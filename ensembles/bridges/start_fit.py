"""The smooth initial potential of a gap, once its terminal one is fitted; and both put together with mass 1."""

from __future__ import annotations

import numpy as np

from ..endpoints.ascent import ascend
from ..endpoints.atoms import AtomPotential
from ..endpoints.covariance import parametrisation
from ..endpoints.likelihood import Tilted
from ..endpoints.mixture import MixturePotential
from ..endpoints.pair import PairLaw
from ..endpoints.quadratic import QuadraticMixture
from ..endpoints.start_density import StartLikelihood
from ..logspace import log_sum_exp
from ..priors.base import Transition
from .mixture_fit import choose_count, distinct_rows, split_folds
from .mixture_starts import cluster_labels
from .smooth import MixtureEnds

__all__ = ["atom_start", "mixture_start", "normalised"]

_FINE = 0.02
_COLLAPSE = 1e-3


def normalised(initial: MixturePotential, terminal: MixturePotential, transition: Transition) -> MixturePotential:
    """The initial potential divided by the mass of the bridge."""
    log_mass = float(log_sum_exp(PairLaw(initial, terminal, transition).log_masses, axis=None))
    return initial.shifted(-log_mass)


def atom_start(
    cloud: np.ndarray, weights: np.ndarray, terminal: MixturePotential, transition: Transition
) -> AtomPotential:
    """Particles as the start: their weights over φ carried back to them, so that ρ_0 is the cloud itself."""
    ahead, _ = terminal.carried_back(transition, cloud)
    with np.errstate(divide="ignore"):
        return AtomPotential(cloud, np.log(weights) - ahead)


def mixture_start(
    cloud: np.ndarray, weights: np.ndarray, terminal: MixturePotential, transition: Transition, ends: MixtureEnds
) -> tuple[MixturePotential, tuple[str, ...]]:
    """A mixture for φ̂_0 by maximum likelihood of the start cloud; the number of components by held-out likelihood."""
    centre = weights @ cloud
    basis = np.diag(np.sqrt(weights @ (cloud - centre) ** 2))
    points = (cloud - centre) / np.diag(basis)
    ahead = terminal.backed_up(transition, centre, basis)
    d = points.shape[1]
    floor = np.full(d, _COLLAPSE)

    def model(rows: np.ndarray, count: int) -> StartLikelihood:
        share = weights[rows] / weights[rows].sum()
        kind = parametrisation(ends.covariance, count, d, ends.rank)
        return StartLikelihood(points[rows], share, ahead, kind, floor, 0.0 if count == 1 else 1.0 / len(rows))

    def fitted(train: StartLikelihood, theta: np.ndarray, rest: StartLikelihood | None) -> np.ndarray:
        scale = np.concatenate([np.ones(train.kind.count), np.full(train.size - train.kind.count, 0.5)])
        fine = train.size * len(train.points) > 2e6 or rest is not None
        resolution = _FINE * train.size / (2.0 * len(train.points)) if fine else 0.0
        held_out = None if rest is None else lambda t: float(rest.weights @ rest.terms(t))
        return ascend(train.value_and_gradient, theta, scale, resolution=resolution, held_out=held_out).theta

    folds = [(train[0], rest[0]) for train, rest in split_folds(len(points), len(points), ends.rng)]

    def contributions(count: int) -> list[np.ndarray]:
        out = []
        for rows, rest in folds:
            train, judge = model(rows, count), model(rest, count)
            theta = fitted(train, _begin(train, ends.rng), judge)
            out.append(judge.weights * judge.terms(theta) / len(folds))
        return out

    most = min(ends.most, *(distinct_rows(points[rows], ends.most) for rows, _ in folds))
    count, tried = choose_count(contributions, most)
    whole = model(np.arange(len(points)), count)
    theta = fitted(whole, _begin(whole, ends.rng), None)
    initial = MixturePotential(centre, basis, whole.potential(theta))
    listed = ", ".join(f"{k:.0f}" for k in tried[:, 0])
    note = f"start: {count} component(s) chosen by held-out likelihood among {listed}"
    return normalised(initial, terminal, transition), (note,)


def _begin(model: StartLikelihood, seed: int) -> np.ndarray:
    """Bumps from clusters: those that give the clusters' moments once φ_0 is multiplied in, were it one Gaussian."""
    count, d, diagonal = model.kind.count, model.kind.dimension, model.kind.diagonal
    labels = cluster_labels(model.points, model.weights, count, seed)
    tilted: QuadraticMixture = model.tilted()
    shares, means, covariances = [], [], []
    pooled = model.weights @ (model.points - np.stack([_mean(model, labels == k) for k in range(count)])[labels]) ** 2
    for k in range(count):
        group = labels == k
        mean = _mean(model, group)
        share = model.weights[group] / model.weights[group].sum()
        centred = model.points[group] - mean
        spread = share @ centred**2 if diagonal else (centred.T * share) @ centred
        size = group.sum()
        if count > 1:
            spread = (size * spread + 2.0 * (pooled if diagonal else np.diag(pooled))) / (size + 2.0) + _COLLAPSE * (
                1.0 if diagonal else np.eye(d)
            )
        values = tilted.log_components(mean[None])[0]
        weight = np.exp(values - log_sum_exp(values, axis=0))
        slope = weight @ tilted.linear
        # Undo the narrowing by the mean precision of φ_0's components, as far as the result stays positive.
        extra = np.tensordot(weight, np.broadcast_to(tilted.precision, (tilted.count, *tilted.precision.shape[1:])), 1)
        if diagonal:
            extra = extra if extra.ndim == 1 else np.diag(extra)
            wide = 1.0 / np.maximum(1.0 / spread - extra, 0.05 / spread)
            centre = wide * (mean / spread - slope)
        else:
            extra = np.diag(extra) if extra.ndim == 1 else extra
            inverse = np.linalg.inv(spread)
            values, vectors = np.linalg.eigh(inverse - extra)
            wide = (vectors / np.maximum(values, 0.05 * np.diag(inverse).min())) @ vectors.T
            centre = wide @ (inverse @ mean - slope)
        shares.append(model.weights[group].sum())
        means.append(centre)
        covariances.append(wide)
    start = Tilted(np.log(np.maximum(shares, 1e-12)), np.array(means), np.array(covariances))
    logs = log_sum_exp(model.pairs(start, tilted)[0] - start.log_alpha[:, None], axis=1)
    return model.pack(Tilted(start.log_alpha - logs, start.r, start.c))


def _mean(model: StartLikelihood, group: np.ndarray) -> np.ndarray:
    share = model.weights * group
    return share @ model.points / share.sum()
