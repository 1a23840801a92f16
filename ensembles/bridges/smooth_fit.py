"""Fit smooth ends to one gap: checks, whitening, the fit asked for, and both potentials with mass 1."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from scipy.linalg import solve_triangular

from .. import checks
from ..endpoints.base import Potential
from ..endpoints.covariance import parametrisation
from ..endpoints.likelihood import Likelihood, Tilted, WhitenedClouds
from ..endpoints.mixture import MixturePotential
from ..endpoints.quadratic import QuadraticMixture, as_full
from ..priors.base import LinearGaussianPrior, Transition
from .kernel_fit import CENTRES, fit_kernel, kernel_start
from .mixture_fit import fit_mixture
from .smooth import KernelEnds, MixtureEnds, SmoothSolution
from .start_fit import atom_start, mixture_start

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["fit_smooth_gap"]


def fit_smooth_gap(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    k: int,
    ends: MixtureEnds | KernelEnds,
    components: int | None,
    warm: SmoothSolution | None,
) -> SmoothSolution:
    """The potentials of gap k."""
    transition = prior.transition(float(series.times[k + 1] - series.times[k]), series.dimension)
    _require_usable(series, k, ends, components)
    if isinstance(ends, MixtureEnds):
        return _mixture(series, k, transition, ends, components, warm)
    return _kernel(series, k, transition, ends, components)


def _mixture(
    series: SnapshotSeries,
    k: int,
    transition: Transition,
    ends: MixtureEnds,
    components: int | None,
    warm: SmoothSolution | None,
) -> SmoothSolution:
    (cloud, weights), (end, end_weights) = (_weighted(series, index) for index in (k, k + 1))
    basis = transition.cholesky
    centre = transition.mean((weights @ cloud)[None])[0]
    u, v = (solve_triangular(basis, (points - centre).T, lower=True).T for points in (transition.mean(cloud), end))
    clouds = WhitenedClouds(np.ascontiguousarray(u), weights, np.ascontiguousarray(v), end_weights)
    begin = None
    if warm is not None:
        old = warm.terminal
        components = components or old.count  # type: ignore[attr-defined]

        def begin(model: Likelihood) -> np.ndarray:
            return model.pack(_tilted(old, centre, basis, model.kind.diagonal))  # type: ignore[arg-type]

    fit = fit_mixture(clouds, components, ends, begin)
    terminal = _potential(fit.likelihood.unpack(fit.ascent.theta), centre, basis)
    initial: Potential
    if ends.smooth_start:
        initial, notes = mixture_start(cloud, weights, terminal, transition, ends)
    else:
        initial, notes = atom_start(series.clouds[k], series.weights[k], terminal, transition), ()
    return SmoothSolution(
        initial, terminal, "mixture", _entropy(series, k, terminal, transition), fit.chosen, fit.ascent.iterations,
        fit.ascent.history, fit.notes + notes,
    )  # fmt: skip


def _kernel(
    series: SnapshotSeries, k: int, transition: Transition, ends: KernelEnds, components: int | None
) -> SmoothSolution:
    (cloud, begin_weights), (end, end_weights) = (_weighted(series, index) for index in (k, k + 1))
    weights = begin_weights, end_weights
    centres = ends.centres
    if centres is None:
        count = components or min(CENTRES, len(end))
        generator = np.random.default_rng(ends.rng)
        centres = end[np.sort(generator.choice(len(end), count, replace=False))] if count < len(end) else end
    fit = fit_kernel((cloud, end), weights, transition, centres, ends.bandwidth, ends.rng)
    notes = [f"bandwidth {fit.bandwidth:.3g}, {'given' if ends.bandwidth else 'chosen by held-out likelihood'}"]
    initial: Potential
    if ends.smooth_start:
        begin = kernel_start(cloud, weights[0], fit.potential, transition, ends.bandwidth, ends.rng)
        initial = begin.potential
        notes.append(f"start: bandwidth {begin.bandwidth:.3g}")
    else:
        initial = atom_start(series.clouds[k], series.weights[k], fit.potential, transition)
    steps = np.arange(fit.history.size)
    return SmoothSolution(
        initial, fit.potential, "kernel", _entropy(series, k, fit.potential, transition), fit.chosen, steps.size,
        np.column_stack([steps, fit.history]), tuple(notes),
    )  # fmt: skip


def _weighted(series: SnapshotSeries, k: int) -> tuple[np.ndarray, np.ndarray]:
    """The particles of a snapshot that carry weight, and their weights."""
    used = series.weights[k] > 0
    return series.clouds[k][used], series.weights[k][used]


def _potential(tilted: Tilted, centre: np.ndarray, basis: np.ndarray) -> MixturePotential:
    """Σ_k α_k N(v | r_k, C_k) exp(½|v|²) in the frame with this centre, scaled to be of order 1."""
    r, c = tilted.r, tilted.c
    if c.ndim == 2:
        precision, linear, log_det = 1.0 / c - 1.0, r / c, np.log(c).sum(axis=1)
    else:
        inverse = np.linalg.inv(c)
        precision = 0.5 * (inverse + inverse.swapaxes(1, 2)) - np.eye(r.shape[1])
        linear, log_det = np.einsum("kij,kj->ki", inverse, r), np.linalg.slogdet(c)[1]
    log_weights = tilted.log_alpha - 0.5 * ((linear * r).sum(axis=1) + log_det)
    return MixturePotential(centre, basis, QuadraticMixture(log_weights - log_weights.max(), linear, precision))


def _tilted(potential: MixturePotential, centre: np.ndarray, basis: np.ndarray, diagonal: bool) -> Tilted:
    """The parameters of a potential fitted in another frame, made admissible in this one."""
    matrix = solve_triangular(potential.basis, basis, lower=True)
    shift = solve_triangular(potential.basis, centre - potential.centre, lower=True)
    moved = potential.mixture.full().moved(matrix, shift)
    values, vectors = np.linalg.eigh(as_full(moved.precision) + np.eye(centre.size))
    c = (vectors / np.maximum(values, 0.05)[:, None]) @ vectors.swapaxes(1, 2)
    r = np.einsum("kij,kj->ki", c, moved.linear)
    log_alpha = moved.log_weights + 0.5 * ((moved.linear * r).sum(axis=1) + np.linalg.slogdet(c)[1])
    return Tilted(log_alpha, r, np.diagonal(c, axis1=1, axis2=2).copy() if diagonal else c)


def _entropy(series: SnapshotSeries, k: int, terminal: MixturePotential, transition: Transition) -> float:
    ends, _ = terminal.log_value(series.clouds[k + 1])
    starts, _ = terminal.carried_back(transition, series.clouds[k])
    return float(series.weights[k + 1] @ ends - series.weights[k] @ starts)


def _require_usable(series: SnapshotSeries, k: int, ends: MixtureEnds | KernelEnds, components: int | None) -> None:
    """Refuse what no smooth end can be fitted to, and name the snapshot, the column or the particles."""
    smooth_start = ends.smooth_start
    for index in (k, k + 1) if smooth_start else (k + 1,):
        used = np.flatnonzero(series.weights[index] > 0)
        cloud, place = series.clouds[index][used], f"snapshot t = {series.times[index]:g}"
        names = series.position_names
        spread = np.ptp(cloud, axis=0)
        if len(cloud) > 1 and (spread == 0).any() and not (cloud == cloud[0]).all():
            name = names[int(np.argmax(spread == 0))]
            raise checks.InputError(
                f"the covariance of {place} is singular; the column {name} is constant, {cloud[0, names.index(name)]:g}; "
                f"leave {name} out, or use ends='atoms'"
            )
        distinct, first = np.unique(cloud, axis=0, return_index=True)
        if len(distinct) < 2:
            raise checks.InputError(
                f"the covariance of {place} is singular; its {len(cloud)} particle(s) are at one place, "
                f"{cloud[0].tolist()}; smooth ends need different particles: use ends='atoms'"
            )
        wanted = components if index == k + 1 and components else 1
        if isinstance(ends, KernelEnds) and ends.centres is not None:
            wanted = 1
        if wanted > len(distinct):
            copies = np.setdiff1d(np.arange(len(cloud)), first)
            twice = f" (row {used[copies[0]]} repeats an earlier one)" if copies.size else ""
            raise checks.InputError(
                f"more components than particles; components = {wanted} for {len(distinct)} different particle(s) of "
                f"{place}{twice}; ask for at most {len(distinct)}"
            )
        if isinstance(ends, MixtureEnds) and ends.covariance == "full":
            _require_full_rank(cloud, place, names)
    if isinstance(ends, KernelEnds) and ends.centres is not None and ends.centres.shape[1] != series.dimension:
        raise checks.InputError(
            f"centres have the wrong dimension; {ends.centres.shape[1]} coordinate(s) where the series has "
            f"{series.dimension}; give one position a centre"
        )
    if isinstance(ends, MixtureEnds):
        parametrisation(ends.covariance, 1, series.dimension, ends.rank)


def _require_full_rank(cloud: np.ndarray, place: str, names: tuple[str, ...]) -> None:
    scaled = (cloud - cloud.mean(axis=0)) / cloud.std(axis=0)
    values, vectors = np.linalg.eigh(scaled.T @ scaled / len(cloud))
    if values[0] > 1e-10:
        return
    involved = [name for name, share in zip(names, np.abs(vectors[:, 0])) if share > 0.1]
    raise checks.InputError(
        f"the covariance of {place} is singular; its smallest eigenvalue is {values[0]:.2g} with {len(cloud)} particles in "
        f"{len(names)} coordinates, along {', '.join(involved)}; leave a column out, or use "
        "MixtureEnds(covariance='diagonal') or 'low-rank'"
    )
