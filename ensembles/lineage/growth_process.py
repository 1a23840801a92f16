"""The likelihood of a growth rate that is a Gaussian process over state, its maximum and its evidence; see growth_estimate.py."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import minimize
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist

from ..logspace import log_sum_exp
from ..priors.base import LinearGaussianPrior, Transition
from ..snapshots.growth import Growth

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["Fit", "Problem", "fits"]

_CENTRES = 80
_RANK = 1e-6  # smallest eigenvalue of the process at the centres, of the largest, that is kept
_PAIRS = 2  # draws of where a particle goes, each with its mirror image
_ROWS = 4096


@dataclass(frozen=True, eq=False)
class _Piece:
    """One gap: the particles used at either end, their weights, kernel k_ij = kernel_ij exp(log_scale_j), τ and n_k.

    `ahead` (draws, n, d) are places, in whitened coordinates, that particles go to; `given` is ½ τ r₀ at the later particles
    and at these places, and `log_a` holds it at the earlier particles.
    """

    rows: np.ndarray
    columns: np.ndarray
    log_a: np.ndarray
    b: np.ndarray
    kernel: np.ndarray
    log_scale: np.ndarray
    ahead: np.ndarray
    given: tuple[np.ndarray, np.ndarray]
    duration: float
    count: float


class Problem:
    """What does not depend on s and ℓ: the gaps, and the centres through which the process is seen."""

    def __init__(
        self, series: SnapshotSeries, prior: LinearGaussianPrior, particles: int, rng: np.random.Generator
    ) -> None:
        growth = series.growth or Growth()
        self.series, self.prior = series, prior
        self.given = [growth.rates(series, k) for k in range(len(series))]
        # Distances in the prior's own spread: it knows which coordinates can be compared.
        self.whole = prior.transition(float(series.durations.mean()), series.dimension)
        drawing, walking, choosing = rng.spawn(3)
        used = [_some(weights, particles, drawing) for weights in series.weights]
        self.pieces = []
        for k, duration in enumerate(series.durations):
            step, (i, a), (j, b) = self.step(k), used[k], used[k + 1]
            logs = -0.5 * cdist(
                step.whiten_sources(series.clouds[k][i]), step.whiten_targets(series.clouds[k + 1][j]), "sqeuclidean"
            )
            top = logs.max(axis=0)
            ahead = self.ahead(step, series.clouds[k][i], walking)
            half = [0.5 * duration * rates for rates in (self.given[k][i], self.given[k + 1][j])]
            known = np.concatenate([self.place(k, i), self.place(k + 1, j)])
            given = (half[1], _nearest(known, np.concatenate(half), ahead))
            kernel, count = np.exp(logs - top), 1.0 / float(a @ a + b @ b)
            self.pieces.append(_Piece(i, j, np.log(a) + half[0], b, kernel, top, ahead, given, float(duration), count))
        early = np.concatenate([self.place(k, piece.rows) for k, piece in enumerate(self.pieces)])
        self.centres = early[np.sort(choosing.choice(len(early), min(_CENTRES, len(early)), replace=False))]

    def step(self, gap: int) -> Transition:
        """The prior over a gap; the last snapshot's is that of a mean gap."""
        if gap == len(self.series.durations):
            return self.whole
        return self.prior.transition(float(self.series.durations[gap]), self.series.dimension)

    def place(self, k: int, rows: np.ndarray) -> np.ndarray:
        """Whitened coordinates of particles of snapshot k."""
        return self.whole.whiten_targets(self.series.clouds[k][rows])

    def ahead(self, step: Transition, points: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """Whitened places (2 pairs, n, d) that points (n, d) go to: draws and their mirror images about the mean."""
        noise = rng.standard_normal((_PAIRS, *points.shape)) @ step.cholesky.T
        mean = step.mean(points)
        both = np.concatenate([mean + noise, mean - noise])
        return self.whole.whiten_targets(both.reshape(-1, points.shape[1])).reshape(both.shape)

    @cached_property
    def typical_distance(self) -> float:
        """Median distance between two centres."""
        between = cdist(self.centres, self.centres)[np.triu_indices(len(self.centres), 1)]
        apart = between[between > 0]
        return float(np.median(apart)) if apart.size else 1.0


def _nearest(known: np.ndarray, values: np.ndarray, places: np.ndarray) -> np.ndarray:
    """Values (...,) at places (..., d): those of the nearest of the known ones."""
    if np.ptp(values) == 0.0:
        return np.full(places.shape[:-1], values[0])
    return values[cKDTree(known).query(places.reshape(-1, places.shape[-1]))[1]].reshape(places.shape[:-1])


def _some(weights: np.ndarray, most: int, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Row numbers of at most so many particles and their weights, of sum 1."""
    rows = np.flatnonzero(weights > 0)
    if rows.size <= most:
        return rows, weights[rows]
    return np.sort(rng.choice(weights.size, most, replace=False, p=weights)), np.full(most, 1.0 / most)


class Process:
    """δ(x) = φ(x)·c with c ~ N(0, s²): the Gaussian process of one length, seen through its values at the centres."""

    def __init__(self, problem: Problem, length: float) -> None:
        self.problem, self.length = problem, length
        values, vectors = np.linalg.eigh(self._covariance(problem.centres))
        kept = values > _RANK * values[-1]
        self.root = vectors[:, kept] / np.sqrt(values[kept])
        # Half of τ φ at the start, at the end, and at the draws of the end.
        self.halves = [
            tuple(
                0.5 * piece.duration * phi
                for phi in (
                    self.at(problem.place(k, piece.rows)),
                    self.at(problem.place(k + 1, piece.columns)),
                    self.at(piece.ahead),
                )
            )
            for k, piece in enumerate(problem.pieces)
        ]

    def _covariance(self, places: np.ndarray) -> np.ndarray:
        return np.exp(-0.5 * cdist(places, self.problem.centres, "sqeuclidean") / self.length**2)

    def at(self, places: np.ndarray) -> np.ndarray:
        """φ (..., p) at whitened places (..., d)."""
        flat = self._covariance(places.reshape(-1, places.shape[-1])) @ self.root
        return flat.reshape(*places.shape[:-1], -1)

    def loss(self, c: np.ndarray, spread: float) -> tuple[float, np.ndarray]:
        """-L and its gradient."""
        value, gradient = 0.5 * float(c @ c) / spread**2, c / spread**2
        for piece, (start, end, ahead) in zip(self.problem.pieces, self.halves):
            score, w, density, expected = self._density(piece, start, end, ahead, c)
            found = w * (piece.kernel @ (piece.b / density))
            value -= piece.count * score
            gradient = gradient - piece.count * (start.T @ found + end.T @ piece.b - expected)
        return value, gradient

    def information(self, c: np.ndarray) -> np.ndarray:
        """H = Σ_k n_k Σ_j b_j s_j s_jᵀ of the scores s_j = ∂ log p_k(y_j) / ∂c."""
        total = np.zeros((c.size, c.size))
        for piece, (start, end, ahead) in zip(self.problem.pieces, self.halves):
            _, w, density, expected = self._density(piece, start, end, ahead, c)
            scores = (piece.kernel.T @ (w[:, None] * start)) / density[:, None] + end - expected
            total += piece.count * (scores * piece.b[:, None]).T @ scores
        return total

    @staticmethod
    def _density(
        piece: _Piece, start: np.ndarray, end: np.ndarray, ahead: np.ndarray, c: np.ndarray
    ) -> tuple[float, np.ndarray, np.ndarray, np.ndarray]:
        """Σ_j b_j log p_j, w, Σ_i w_i kernel_ij and ∂ log Z / ∂c; w of sum 1."""
        logs = piece.log_a + start @ c
        logs = logs - log_sum_exp(logs)
        w = np.exp(logs)
        density = np.maximum(w @ piece.kernel, np.finfo(float).tiny)
        at_draws = logs + piece.given[1] + ahead @ c - np.log(len(ahead))
        log_z = float(log_sum_exp(at_draws.ravel()))
        share = np.exp(at_draws - log_z)
        expected = share.sum(axis=0) @ start + np.tensordot(share, ahead, axes=2)
        score = float(piece.b @ (np.log(density) + piece.log_scale + piece.given[0] + end @ c)) - log_z
        return score, w, density, expected


@dataclass(frozen=True, eq=False)
class Fit:
    """The most probable process of one s and ℓ, and its log-evidence over δ = 0."""

    process: Process
    c: np.ndarray
    spread: float
    evidence: float

    @property
    def length(self) -> float:
        """ℓ."""
        return self.process.length

    def everywhere(self) -> tuple[list[np.ndarray], list[np.ndarray]]:
        """Rates and standard errors of all particles, with the mean of all before a gap as given."""
        problem = self.process.problem
        found = [self._descendants(k) for k in range(len(problem.series))]
        early = found[:-1]
        level = np.concatenate([rate for rate, _ in early]).mean()
        centre = np.concatenate([slope for _, slope in early]).mean(axis=0)
        covariance = np.linalg.inv(np.eye(self.c.size) / self.spread**2 + self.process.information(self.c))
        rates = [given + rate - level for (rate, _), given in zip(found, problem.given)]
        errors = [np.sqrt(np.einsum("ij,jk,ik->i", slope - centre, covariance, slope - centre)) for _, slope in found]
        return rates, errors

    def _descendants(self, k: int) -> tuple[np.ndarray, np.ndarray]:
        """½ δ(x) + (1/τ) log E[exp(½ τ δ(Y)) | x] (n,) of all particles of snapshot k, and its derivatives by c (n, p)."""
        problem, step = self.process.problem, self.process.problem.step(k)
        durations = problem.series.durations
        half = 0.5 * float(durations[k] if k < len(durations) else durations.mean())
        rng = np.random.default_rng(k)
        rates, slopes = [], []
        for first in range(0, len(problem.series.clouds[k]), _ROWS):
            points = problem.series.clouds[k][first : first + _ROWS]
            start, ahead = (
                self.process.at(problem.whole.whiten_targets(points)),
                self.process.at(problem.ahead(step, points, rng)),
            )
            logs = half * (ahead @ self.c)
            mean = log_sum_exp(logs, axis=0) - np.log(len(logs))
            rates.append(0.5 * start @ self.c + 0.5 * mean / half)
            share = np.exp(logs - mean) / len(logs)
            slopes.append(0.5 * start + 0.5 * np.einsum("di,dip->ip", share, ahead))
        return np.concatenate(rates), np.concatenate(slopes)


def fits(problem: Problem, length: float, spreads: Sequence[float]) -> Iterator[Fit]:
    """The most probable process of one length at each standard deviation, each started from the one before."""
    process = Process(problem, length)
    c = np.zeros(process.root.shape[1])
    constant, _ = process.loss(c, 1.0)
    for spread in spreads:
        options = {"maxiter": 200, "ftol": 1e-8}
        done = minimize(process.loss, c, args=(spread,), jac=True, method="L-BFGS-B", options=options)
        c = done.x
        _, log_determinant = np.linalg.slogdet(np.eye(c.size) + spread**2 * process.information(c))
        yield Fit(process, c, spread, constant - float(done.fun) - 0.5 * float(log_determinant))
