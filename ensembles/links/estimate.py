"""Parameters of the prior from unlabelled frames of the same particles: no tracking, the links are summed over.

The evidence of parameters θ is the sum over all assignments of every gap, log Z(θ) = Σ_gaps log Σ_σ Π_i p_θ(y_σ(i) | x_i),
by belief propagation (the Bethe permanent). At its stationary point only the weights depend on θ, so that

    ∂ log Z_B / ∂θ = Σ_ij β_ij ∂ log p_θ(y_j | x_i) / ∂θ,

the score of labelled data averaged over the links. Belief propagation is too sure of links, which makes a diffusion
coefficient a few per cent too small; the last steps therefore solve for a zero of the same score with the link
probabilities of exact sums over clusters, and the curvature is that of this score.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import minimize

from .. import checks
from ..schrodinger.clusters import sum_clusters
from .candidates import LinkOptions, linked_posterior, messages_of_all_pairs
from .estimated_prior import PriorEstimate
from .families import PriorFamily
from .frames import loner_weights, regularity, require_same_particles
from .law import link_law

if TYPE_CHECKING:
    from ..priors.base import LinearGaussianPrior
    from ..priors.box import Box
    from ..snapshots.series import SnapshotSeries

__all__ = ["EstimateOptions", "Evidence", "estimate_prior"]

_STEP = 1e-3  # of free parameters, for derivatives of log-weights
_CURVATURE_STEP = 0.03
_SCAN = (16.0, 6.0, 2.5, 1.0)  # times a lower bound; from the top, where messages settle soon
_REACH = 1.2  # how far a free parameter may go in one search: a wild first step would leave all links behind
_RECENTRED = 8
_CORRECTIONS = 6
_CROWD = 20  # particles from which crowding is looked at
_KEPT_APART = 1.4  # times the nearest distance of independent positions; 1.7 in liquid argon
_CROWDED = 0.2  # noise length over spacing
_CURVATURE_HOLDS = 0.15  # change of a free parameter over which the curvature is not computed anew


@dataclass(frozen=True)
class EstimateOptions:
    """Details of an estimate.

    Attributes
    ----------
    rate : "scalar" or "axis", of an Ornstein-Uhlenbeck prior.
    detection, birth_density : as in `link_particles`.
    links : how the evidence is computed; `cluster` = 0 leaves belief propagation uncorrected. The evidence is that of
        particles that move independently: `correlation` and `hold_spread` are refused.
    gradient_tolerance : largest derivative of the log evidence per particle where the search ends.
    iteration_limit : steps of the search.
    """

    rate: str = "scalar"
    detection: float | None = None
    birth_density: float | None = None
    links: LinkOptions = field(default_factory=lambda: LinkOptions(tolerance=2e-5, iteration_limit=3_000, cluster=8))
    gradient_tolerance: float = 3e-4
    iteration_limit: int = 60

    def __post_init__(self) -> None:
        for name in ("correlation", "hold_spread"):
            if value := getattr(self.links, name):
                raise checks.InputError(
                    f"an estimate takes particles to move independently; links.{name} is {value:g}; give it to link_particles, "
                    "and leave it out here"
                )


@dataclass(frozen=True, eq=False)
class Evidence:
    """log Z_B of all gaps as a function of the free parameters of a family; `warm` keeps messages to start from."""

    series: SnapshotSeries
    family: PriorFamily
    options: EstimateOptions
    warm: dict[int, np.ndarray] = field(default_factory=dict)

    @property
    def particles(self) -> int:
        """Earlier particles over all gaps."""
        return int(self.series.counts[:-1].sum())

    def at(self, free: np.ndarray, *, clusters: bool = False) -> tuple[float, np.ndarray]:
        """log Z_B and its gradient (p,); with `clusters` both corrected by exact sums over clusters."""
        total, gradient = 0.0, np.zeros(free.size)
        for k in range(len(self.series) - 1):
            clouds = (self.series.clouds[k], self.series.clouds[k + 1])
            duration = float(self.series.times[k + 1] - self.series.times[k])

            def law(parameters: np.ndarray, duration: float = duration, clouds: tuple = clouds):  # type: ignore[no-untyped-def]
                prior, localisation = self.family.build(parameters)
                return link_law(prior, duration, clouds, localisation)

            prior, _ = self.family.build(free)
            loners = loner_weights(self.series, k, prior, self.options.detection, self.options.birth_density)
            posterior, _ = linked_posterior(law(free), loners.log_alone, self.options.links, self.warm.get(k))
            messages = messages_of_all_pairs(posterior)
            if messages is not None and posterior.certificate.converged:
                self.warm[k] = messages
            total += posterior.log_evidence + loners.log_constant
            graph, probabilities = posterior.graph, posterior.probabilities
            if clusters and self.options.links.cluster:
                sums = sum_clusters(posterior, limit=self.options.links.cluster)
                total += sums.log_evidence_correction
                probabilities = sums.probabilities
            for i in range(free.size):
                step = np.zeros(free.size)
                step[i] = _STEP
                above = law(free + step).log_weights(graph.rows, graph.columns)
                below = law(free - step).log_weights(graph.rows, graph.columns)
                gradient[i] += probabilities @ (above - below) / (2.0 * _STEP)
        return total, gradient

    def maximise(self, start: np.ndarray, held: int | None = None) -> tuple[np.ndarray, float, bool]:
        """Free parameters of the largest evidence from a start, its value, and whether the search ended well.

        The parameter number `held` keeps its value.
        """
        moving = np.array([i for i in range(start.size) if i != held], dtype=int)
        if not moving.size:
            return start, self.at(start)[0], True
        scale = float(self.particles)

        def loss(part: np.ndarray) -> tuple[float, np.ndarray]:
            free = start.copy()
            free[moving] = part
            value, gradient = self.at(free)
            return -value / scale, -gradient[moving] / scale

        best = start[moving]
        for _ in range(_RECENTRED):
            found = minimize(
                loss,
                best,
                jac=True,
                method="L-BFGS-B",
                bounds=[(x - _REACH, x + _REACH) for x in best],
                options={
                    "gtol": self.options.gradient_tolerance,
                    "maxiter": self.options.iteration_limit,
                    "ftol": 1e-12,
                },
            )
            inside = bool((np.abs(found.x - best) < 0.99 * _REACH).all())
            best = found.x
            if inside:
                break
        free = start.copy()
        free[moving] = best
        flat = float(np.abs(found.jac).max()) <= 20.0 * self.options.gradient_tolerance
        return free, -float(found.fun) * scale, flat and inside

    def correct(self, free: np.ndarray) -> tuple[np.ndarray, float, np.ndarray]:
        """From the maximum of log Z_B to a zero of the corrected gradient, by Newton steps that keep their curvature.

        Returns the free parameters, the corrected log evidence there, and the curvature there.
        """
        matrix, begun = self.curvature(free), free
        for _ in range(_CORRECTIONS):
            value, gradient = self.at(free, clusters=True)
            if np.linalg.eigvalsh(matrix)[0] <= 0.0:
                return free, value, matrix
            step = np.linalg.solve(matrix, gradient)
            if np.abs(step).max() > _REACH:
                return free, value, matrix
            free = free + step
            if np.abs(step).max() < 1e-3:
                break
        if np.abs(free - begun).max() > _CURVATURE_HOLDS:
            matrix = self.curvature(free)
        return free, value, matrix

    def curvature(self, free: np.ndarray) -> np.ndarray:
        """-∂² of the corrected log evidence (p, p) by differences of its gradient."""
        size = free.size
        matrix = np.empty((size, size))
        for i in range(size):
            step = np.zeros(size)
            step[i] = _CURVATURE_STEP
            above, below = (self.at(free + sign * step, clusters=True)[1] for sign in (1.0, -1.0))
            matrix[i] = -(above - below) / (2.0 * _CURVATURE_STEP)
        return 0.5 * (matrix + matrix.T)


def estimate_prior(
    series: SnapshotSeries,
    family: str,
    *,
    diffusion: str = "scalar",
    drift: bool = False,
    localisation: float | str = 0.0,
    box: Box | None = None,
    options: EstimateOptions | None = None,
) -> PriorEstimate:
    """Estimate the prior from unlabelled frames of the same particles, by maximising the evidence summed over links.

    Belief propagation finds the maximum; exact sums over clusters correct it.

    Parameters
    ----------
    series : frames with the same particles, in any order.
    family : "brownian" or "ornstein-uhlenbeck"; the latter with rate and centre.
    diffusion : "scalar", "axis" or "matrix".
    drift : whether a Brownian prior has a constant drift.
    localisation : standard error of every measured coordinate in length, or "estimate": it adds to the variance of every
        displacement, but not with time, so that two different gaps are needed to tell it from diffusion.
    box : `Box` of a Brownian prior.
    options : `EstimateOptions`.

    Returns
    -------
    PriorEstimate : .prior, .standard_errors, .log_evidence, .interval(name), .profile(name)

    Raises
    ------
    InputError
        What `link_particles` refuses; a localisation error from equal gaps; an unknown family or shape; a coordinate that
        never changes.

    Warns
    -----
    RuntimeWarning
        Where the evidence has no clear maximum: then the frames do not tell the parameter. Where particles keep apart and are
        crowded against their noise, as all atoms of a liquid: then its maximum can be in a wrong place, with a small error,
        and `identified` is false.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> rng = np.random.default_rng(0)
    >>> start = rng.uniform(0, 60, (60, 2))
    >>> later = rng.permutation(start + rng.normal(size=(60, 2)))
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, later])
    >>> estimate = ensembles.estimate_prior(series, "brownian")
    >>> 0.4 < float(estimate.prior.diffusion) < 0.6
    True
    """
    options = options or EstimateOptions()
    free_error = localisation == "estimate"
    if not free_error and isinstance(localisation, str):
        raise checks.unknown_name("localisation", localisation, ["estimate"])
    gaps = np.diff(series.times)
    if free_error and np.ptp(gaps) <= 1e-9 * gaps.max():
        raise checks.InputError(
            f"a localisation error cannot be told from diffusion over equal gaps; all {gaps.size} gap(s) last {gaps[0]:g}; "
            "add a frame at another distance in time, or give the error as a number"
        )
    _require_extent(series)
    scales = _scales(series)
    chosen = PriorFamily(
        kind=family, dimension=series.dimension, diffusion=diffusion, rate=options.rate, drift=bool(drift),
        localisation=free_error, known_localisation=0.0 if free_error else float(localisation),
        speed=scales.speed, spread=scales.spread, origin=scales.origin, box=box,
    )  # fmt: skip
    evidence = Evidence(series, chosen, options)
    require_same_particles(series, chosen.build(scales.start(chosen, 1.0))[0], options.detection)
    starts = [scales.start(chosen, factor) for factor in _SCAN]
    values = [evidence.at(start)[0] for start in starts]
    free, _, good = evidence.maximise(starts[int(np.argmax(values))])
    free, log_evidence, curvature = evidence.correct(free)
    crowding = _crowding(series, chosen.build(free)[0])
    estimate = PriorEstimate(evidence, free, log_evidence, curvature, good, bool(crowding))
    if not estimate.has_maximum:
        warnings.warn(
            f"the frames do not tell every parameter; the log evidence has no clear maximum at {estimate.values}; "
            "use shorter gaps, more particles, or fewer free parameters",
            RuntimeWarning,
            stacklevel=2,
        )
    if crowding:
        warnings.warn(crowding, RuntimeWarning, stacklevel=2)
    return estimate


def _require_extent(series: SnapshotSeries) -> None:
    """Refuse a coordinate that never changes: it would count as one along which nothing diffuses."""
    flat = np.ptp(np.concatenate(series.clouds), axis=0) == 0.0
    if flat.any():
        axis = int(np.argmax(flat))
        raise checks.InputError(
            f"a coordinate that never changes tells nothing of diffusion; {series.position_names[axis]!r} is "
            f"{series.clouds[0][0, axis]:g} everywhere; leave it out of the positions"
        )


def _crowding(series: SnapshotSeries, prior: LinearGaussianPrior) -> str:
    """What is wrong where particles are crowded and keep apart in every frame, or nothing.

    The evidence takes particles to pass through one another. Independent ones that moved far enough would not keep apart in
    the next frame, even if they did in the first.
    """
    if series.counts.min() < _CROWD:
        return ""
    found = [regularity(cloud, prior.box) for cloud in series.clouds]
    index, spacing = min(found)[0], found[0][1]
    noise = prior.transition(float(np.diff(series.times).min()), series.dimension).covariance
    reach = float(np.sqrt(np.diag(noise).mean()))
    if index <= _KEPT_APART or reach <= _CROWDED * spacing:
        return ""
    return (
        f"the particles keep apart and are crowded; nearest neighbours lie {index:.2f} times as far as those of independent "
        f"positions, and the noise length {reach:.3g} is {reach / spacing:.2f} of the spacing; the evidence takes particles "
        "to move independently, and the estimate can be far off: use a shorter gap, or tag a part of the particles; where the "
        "diffusion is known from elsewhere, link with LinkOptions(hold_spread=True)"
    )


@dataclass(frozen=True, eq=False)
class _Scales:
    diffusion: float
    speed: float
    spread: float
    origin: np.ndarray
    localisation: float

    def start(self, family: PriorFamily, factor: float) -> np.ndarray:
        diffusion = self.diffusion * factor
        return family.start(diffusion, diffusion / self.spread**2, self.localisation)


def _scales(series: SnapshotSeries) -> _Scales:
    """Orders of magnitude: nearest neighbours bound the diffusion from below, the clouds give the spread."""
    from scipy.spatial import cKDTree

    dimension = series.dimension
    gaps = np.diff(series.times)
    squares = [
        float(np.mean(cKDTree(late).query(early)[0] ** 2)) for early, late in zip(series.clouds[:-1], series.clouds[1:])
    ]
    everything = np.concatenate(series.clouds)
    spread = float(np.sqrt(everything.var(axis=0).mean()))
    nearest = max(float(np.mean(squares)), 1e-12 * spread**2)
    diffusion = float(np.mean(np.maximum(squares, 1e-12 * spread**2) / (2.0 * dimension * gaps)))
    return _Scales(
        diffusion, float(np.sqrt(2.0 * diffusion / gaps.mean())), spread, everything.mean(axis=0),
        0.3 * float(np.sqrt(nearest / dimension)),
    )  # fmt: skip
