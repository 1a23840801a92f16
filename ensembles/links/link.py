"""Link the same particles between frames: the posterior over one-to-one assignments under a prior."""

from __future__ import annotations

import warnings
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from .. import checks
from ..priors.base import LinearGaussianPrior, require_prior
from ..schrodinger.assignment import AssignmentPosterior
from .candidates import LinkOptions, linked_posterior
from .cluster_sums import is_enumerated, link_sums
from .frames import LonerWeights, loner_weights, require_same_particles
from .held_spread import held_variance, relative_spread
from .law import LinkLaw, link_law
from .particle_links import LinkCertificate, ParticleLinks

if TYPE_CHECKING:
    from ..snapshots.series import SnapshotSeries

__all__ = ["link_particles"]

_FITS = 0.6  # ratio of the links' mean square to the prior's, or its inverse, below which they are called different
_SURE = 5.0  # standard errors


def link_particles(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    *,
    detection: float | None = None,
    birth_density: float | None = None,
    localisation: float = 0.0,
    options: LinkOptions | None = None,
) -> list[ParticleLinks]:
    """Link the same, unlabelled particles of consecutive frames: probabilities over one-to-one assignments.

    With p(y | x) the prior's transition density, an assignment weighs Π_links q p(y | x) Π_missed (1 - q) Π_new λ. Sums
    over assignments by belief propagation, corrected by exact sums over clusters; up to 12 particles all exact.

    Parameters
    ----------
    series : frames with the same particles, in any order; weights must be equal.
    prior : in the units of the series; a `Brownian` in a box sums over images.
    detection : probability q that a particle of one frame is found in the next one; None: always, so that counts must be
        equal.
    birth_density : λ, expected number of new particles per length^d in a frame; by default (1 - q) times the number of
        particles over the volume that the two frames span.
    localisation : standard error of every measured coordinate, in length; it adds to the variance of every displacement.
    options : `LinkOptions`.

    Returns
    -------
    list of `ParticleLinks`, one a gap. Under a Markov prior the gaps are independent given the frames.

    Raises
    ------
    InputError
        Unequal counts without a detection probability, two particles at one place, unequal weights, positions outside the
        box.
    ComputationError
        More links than fit in memory; links that cannot move as the prior says, where `hold_spread` asks for it.

    Warns
    -----
    RuntimeWarning
        Where a gap is so long that its links carry next to no information, where belief propagation did not converge, and
        where the links move much more or less than the prior says.

    Source: Chertkov, Kroc, Krzakala, Vergassola, Zdeborová, PNAS 2010 (from memory).

    Examples
    --------
    >>> import ensembles
    >>> frames = [[[0.0], [5.0], [9.0]], [[9.2], [0.1], [4.8]]]
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], frames)
    >>> links = ensembles.link_particles(series, ensembles.Brownian(diffusion=0.1))
    >>> links[0].assignment.tolist()
    [1, 2, 0]
    """
    require_prior(prior)
    options = options or LinkOptions()
    localisation = float(localisation)
    if not localisation >= 0.0:
        raise checks.InputError(f"localisation must not be negative; it is {localisation:g}; give a length, or 0")
    require_same_particles(series, prior, detection)
    found = []
    for k in range(len(series) - 1):
        clouds = (series.clouds[k], series.clouds[k + 1])
        duration = float(series.times[k + 1] - series.times[k])
        loners = loner_weights(series, k, prior, detection, birth_density)

        def law_at(factor: float, duration: float = duration, clouds: tuple = clouds) -> LinkLaw:
            return link_law(prior, duration, clouds, localisation, factor)

        factor = 1.0 - options.correlation
        if options.hold_spread:
            factor = held_variance(law_at, loners.log_alone, options, _gap_name(series, k))
        posterior, left_out = linked_posterior(law_at(factor), loners.log_alone, options)
        links = _assemble(k, posterior, left_out, loners, options, factor)
        links = replace(links, spread=relative_spread(links.graph, links.probabilities, law_at))
        _warn(links, series)
        found.append(links)
    return found


def _assemble(
    k: int,
    posterior: AssignmentPosterior,
    left_out: float,
    loners: LonerWeights,
    options: LinkOptions,
    variance_factor: float,
) -> ParticleLinks:
    n, m = posterior.graph.shape
    enumerated = is_enumerated(posterior)
    sums = link_sums(posterior, options)
    graph = posterior.graph
    if not np.isfinite(sums.probabilities).all():
        raise checks.ComputationError(
            f"link probabilities are not numbers; those of gap {k} left the range of floating point in sums over clusters; "
            "use LinkOptions(cluster=0), and tell us of the data"
        )
    row_error = np.abs(np.bincount(graph.rows, weights=sums.probabilities, minlength=n) + sums.alone_rows - 1.0).max()
    column_sums = np.bincount(graph.columns, weights=sums.probabilities, minlength=m) + sums.alone_columns
    log_evidence, missing = posterior.log_evidence + loners.log_constant, sums.log_evidence_correction
    if enumerated:
        log_evidence, missing = log_evidence + _exact_excess(posterior), 0.0
    square = not np.isfinite(graph.log_alone_rows).any() and not np.isfinite(graph.log_alone_columns).any()
    upper = log_evidence if enumerated else posterior.log_evidence + 0.5 * n * np.log(2.0)
    certificate = LinkCertificate(
        posterior.certificate, left_out, float(row_error), float(np.abs(column_sums - 1.0).max()), sums.column_mismatch
    )
    method = "enumeration" if enumerated else "propagation and clusters" if options.cluster else "propagation"
    return ParticleLinks(
        k, k + 1, graph, sums.probabilities, posterior.probabilities, sums.alone_rows, sums.alone_columns,
        float(log_evidence), float(missing), float(upper) if square or enumerated else float("inf"), certificate, method,
        variance_factor,
    )  # fmt: skip


def _exact_excess(posterior: AssignmentPosterior) -> float:
    """Exact log evidence minus the Bethe one, of a small problem."""
    from ..schrodinger.exact_assignment import exact_assignment

    graph = posterior.graph
    log_weights = np.full(graph.shape, -np.inf)
    log_weights[graph.rows, graph.columns] = graph.log_weights
    exact = exact_assignment(log_weights, (graph.log_alone_rows, graph.log_alone_columns))[0]
    return exact - posterior.log_evidence


def _gap_name(series: SnapshotSeries, k: int) -> str:
    return f"between t = {series.times[k]:g} and t = {series.times[k + 1]:g}"


def _warn(links: ParticleLinks, series: SnapshotSeries) -> None:
    gap = _gap_name(series, links.source)
    if not links.certificate.converged:
        p = links.certificate.propagation
        warnings.warn(
            f"the links {gap} are not certified; sums are off by up to {max(p.row_error, p.column_error):.2g} after "
            f"{p.iterations} rounds and {links.certificate.left_out:.2g} of a particle is left out; allow more rounds or damping",
            RuntimeWarning,
            stacklevel=3,
        )
    if not links.informative:
        warnings.warn(
            f"the links {gap} carry next to no information; the mean entropy {links.entropy.mean():.2f} is near log "
            f"{links.shape[1]} = {np.log(links.shape[1]):.2f}; use a shorter gap, or fit_bridge for the population",
            RuntimeWarning,
            stacklevel=3,
        )
    ratio = min(links.spread, 1.0 / max(links.spread, 1e-300))
    if (
        links.informative
        and ratio < _FITS
        and abs(links.spread - 1.0) > _SURE * np.sqrt(2.0 / (links.shape[0] * series.dimension))
    ):
        warnings.warn(
            f"the links {gap} move {links.spread:.3g} times as far, in the mean of squares, as the prior says; links by a prior "
            "that does not fit are too sure or too unsure: compare with estimate_prior, and look for a missing box and for "
            "particles that were not found",
            RuntimeWarning,
            stacklevel=3,
        )
