"""Relative entropy of a bridge to its prior, in nats per particle: what the data ask of the prior.

Over one gap, with the prior started from the observed start cloud μ₀ and the end population of density ρ₁,

    H = KL(π | μ₀ ⊗ p) = Σ a_i f_i + Σ b_j g_j - log_normaliser - h(ρ₁),

where h is the entropy of the end population and log_normaliser belongs to the transition density p. It is also the
relative entropy of the whole path law, since the bridge keeps the prior's pinned paths. By Sanov's theorem the prior
produces such an end cloud from N particles with probability about exp(-N H).

Split. Means: ½|m - n|² in whitened coordinates, which is exact since a shift changes neither entropy nor fluctuations.
Spread: the same H for the two Gaussians with the covariances of the clouds and equal means. Shape: the rest.

Standard errors: by the envelope theorem the derivative of H in the weights is f at the start and g + log ρ₁ at the end
(up to constants), so its variance is Σ a²(f - f̄)² + Σ b²(...)²; likewise for the Gaussian part with the Gaussian
potentials.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..bridges.bridge import Bridge
from ..bridges.closed_form import GaussianBridge
from ..bridges.gap import Gap
from ..priors.base import LinearGaussianPrior
from ..schrodinger.gaussian_start import gaussian_curvature, gaussian_potentials
from .entropy import neighbour_entropy

if TYPE_CHECKING:
    import pandas

__all__ = [
    "GapEntropy",
    "RelativeEntropy",
    "atoms_relative_entropy",
    "gaussian_relative_entropy",
    "refuse_box",
    "relative_entropy",
]


@dataclass(frozen=True)
class GapEntropy:
    """One gap, in nats per particle; errors are standard errors, 0 for a closed form.

    Attributes
    ----------
    start, end : times.
    value, mean_shift, spread, shape : H and its three parts.
    particles : N that `log10_probability` is for.
    """

    start: float
    end: float
    value: float
    error: float
    mean_shift: float
    mean_shift_error: float
    spread: float
    spread_error: float
    shape: float
    shape_error: float
    particles: int

    @property
    def log10_probability(self) -> float:
        """-N H / log 10, the leading order for many particles; at most 0."""
        return float(min(0.0, -self.particles * self.value / np.log(10.0)))

    @property
    def log10_probability_error(self) -> float:
        """Its standard error, from that of H."""
        return float(self.particles * self.error / np.log(10.0))


@dataclass(frozen=True)
class RelativeEntropy:
    """Relative entropy of a bridge to its prior, gap by gap; made by `relative_entropy`.

    Attributes
    ----------
    gaps : one `GapEntropy` a gap.
    value, error : of the whole series: gaps add up. Their errors are taken as independent, though neighbouring gaps
        share a snapshot.
    """

    gaps: tuple[GapEntropy, ...]
    value: float
    error: float

    def to_frame(self) -> pandas.DataFrame:
        """One row a gap: times, value and parts with their errors, particles, log10_probability."""
        import pandas

        names = ("start", "end", "value", "error", "mean_shift", "mean_shift_error", "spread", "spread_error", "shape",
                 "shape_error", "particles", "log10_probability", "log10_probability_error")  # fmt: skip
        return pandas.DataFrame([{name: getattr(gap, name) for name in names} for gap in self.gaps])

    def __repr__(self) -> str:
        lines = [
            f"{gap.start:g} to {gap.end:g}: {gap.value:.3f} ± {gap.error:.3f} nats per particle (mean shift "
            f"{gap.mean_shift:.3f}, spread {gap.spread:.3f}, shape {gap.shape:.3f}); for {gap.particles} particles a "
            f"probability of about 10^({gap.log10_probability:.3g} ± {gap.log10_probability_error:.2g}) under the prior"
            for gap in self.gaps
        ]
        return "\n".join(lines)


def relative_entropy(bridge: Bridge | GaussianBridge, *, particles: int | None = None) -> RelativeEntropy:
    """Relative entropy of a bridge to its prior in nats per particle, with its parts and standard errors.

    H = KL(π | μ₀ ⊗ p) a gap, summed over gaps; see the module's docstring. Closed form for a `gaussian_bridge`; on atoms
    the potentials and a nearest-neighbour estimate of the end cloud's entropy (`neighbour_entropy`); with smooth ends the
    mean of both log-potentials. Finite clouds make
    it a little too small or too large; scripts/calibration prints by how much on Gaussians.

    Parameters
    ----------
    bridge : what `fit_bridge` or `gaussian_bridge` gave.
    particles : N of the probability; for a fitted bridge by default the number in each gap's end snapshot.

    Raises
    ------
    InputError
        If an end snapshot is too small for the entropy estimate, has duplicates, no spread in a direction, or unequal
        weights.

    Examples
    --------
    A shift by 3 against a noise of variance 2 · 0.5 · 1: ½ · 3² nats, and spreads that the prior itself would give.

    >>> import ensembles
    >>> prior = ensembles.Brownian(diffusion=0.5)
    >>> found = ensembles.relative_entropy(ensembles.gaussian_bridge(0.0, 1.0, 3.0, 2.0, prior, 1.0), particles=10)
    >>> round(found.value, 9), round(found.gaps[0].log10_probability, 3)
    (4.5, -19.543)
    """
    if particles is not None:
        particles = checks.whole_number(particles, "particles")
    if isinstance(bridge, GaussianBridge):
        gaps: tuple[GapEntropy, ...] = (gaussian_relative_entropy(bridge, particles or 1),)
    else:
        if not isinstance(bridge, Bridge):
            raise checks.InputError(
                f"bridge must be a fitted bridge; it is {type(bridge).__name__}; use fit_bridge or gaussian_bridge"
            )
        refuse_box(bridge.prior, "the relative entropy")
        one_gap = _on_atoms if bridge.ends == "atoms" else _on_smooth_ends
        gaps = tuple(one_gap(bridge, k, particles) for k in range(len(bridge.gaps)))
    return RelativeEntropy(
        gaps, float(sum(gap.value for gap in gaps)), float(np.sqrt(sum(gap.error**2 for gap in gaps)))
    )


def refuse_box(prior: LinearGaussianPrior, what: str) -> None:
    """Refuse a prior with walls, whose transition is no Gaussian."""
    if prior.box is not None:
        raise checks.InputError(
            f"{what} is not available in a box; the prior is {prior!r}; use hold_out and choose_noise, which are"
        )


def _on_smooth_ends(bridge: Bridge, k: int, particles: int | None) -> GapEntropy:
    """H = E log φ_T(X_T) - E log φ_0(X_0), a plain mean over the two clouds: smooth potentials need no entropy estimate.

    The potentials were fitted to these clouds, which makes the mean a little too large.
    """
    gap = bridge.gaps[k]
    a, b = gap.weights
    transition = gap.transition
    start = -gap.ahead(gap.times[0], gap.clouds[0])[0]
    end = gap.terminal.log_value(gap.clouds[1])[0]
    parts = _gaussian_parts(transition.whiten_sources(gap.clouds[0]), transition.whiten_targets(gap.clouds[1]), a, b)
    return _assembled(gap, float(a @ start + b @ end), (start, end), parts, 0.0, particles or int(np.count_nonzero(b)))


def _on_atoms(bridge: Bridge, k: int, particles: int | None) -> GapEntropy:
    weights = bridge.series.weights[k + 1]
    positive = weights[weights > 0]
    if positive.max() > positive.min() * (1.0 + 1e-9):
        raise checks.InputError(
            f"the relative entropy needs equal weights at the end of a gap; those of snapshot t = "
            f"{bridge.series.times[k + 1]:g} range from {positive.min():.3g} to {positive.max():.3g}; nearest neighbours "
            "say how dense the particles are, not their weights: use the simulated p-value by energy distance"
        )
    return atoms_relative_entropy(bridge.gaps[k], particles or positive.size)


def atoms_relative_entropy(gap: Gap, particles: int) -> GapEntropy:
    """The relative entropy of one gap between clouds; see the module's docstring."""
    a, b = gap.weights
    rows = [np.flatnonzero(weights) for weights in (a, b)]
    transition = gap.transition
    entropy = neighbour_entropy(gap.clouds[1][rows[1]], b[rows[1]])
    f, g = gap.coupled.log_f[rows[0]], gap.coupled.log_g[rows[1]]
    a, b = a[rows[0]], b[rows[1]]
    value = float(a @ f + b @ g) - transition.log_normaliser - entropy.value
    u, v = transition.whiten_sources(gap.clouds[0][rows[0]]), transition.whiten_targets(gap.clouds[1][rows[1]])
    # The noise of the nearest-neighbour distances is shared by neighbours: it is in the entropy's own error only.
    extra = max(entropy.error**2 - _variance(entropy.log_density, b), 0.0)
    reduced = replace(gap, clouds=(gap.clouds[0][rows[0]], gap.clouds[1][rows[1]]), weights=(a, b))
    return _assembled(reduced, value, (f, g + entropy.log_density), _gaussian_parts(u, v, a, b), extra, particles)


def _assembled(
    gap: Gap,
    value: float,
    terms: tuple[np.ndarray, np.ndarray],
    parts: dict[str, Any],
    extra: float,
    particles: int,
) -> GapEntropy:
    """The parts of H with their errors, from what each particle at the start and at the end adds to H."""
    a, b = gap.weights
    shift, gaussian = parts["shift_terms"], parts["gaussian_terms"]

    def error(start_terms: np.ndarray, end_terms: np.ndarray, more: float = 0.0) -> float:
        return float(np.sqrt(_variance(start_terms, a) + _variance(end_terms, b) + more))

    return GapEntropy(
        gap.times[0],
        gap.times[1],
        value,
        error(*terms, extra),
        parts["mean_shift"],
        error(*shift),
        parts["spread"],
        error(gaussian[0] - shift[0], gaussian[1] - shift[1]),
        value - parts["mean_shift"] - parts["spread"],
        error(terms[0] - gaussian[0], terms[1] - gaussian[1], extra),
        particles,
    )


def _variance(values: np.ndarray, weights: np.ndarray) -> float:
    return float(np.sum((weights * (values - weights @ values)) ** 2))


def _gaussian_parts(u: np.ndarray, v: np.ndarray, a: np.ndarray, b: np.ndarray) -> dict[str, Any]:
    """Mean shift and spread of whitened clouds, and each particle's share in them."""
    m, n = a @ u, b @ v
    start, end = ((c - mean).T * w @ (c - mean) for c, mean, w in ((u, m, a), (v, n, b)))
    shift = m - n
    log_f, log_g = gaussian_potentials(u, v, a, b)
    residual = np.linalg.solve(np.linalg.cholesky(end), (v - n).T)
    return {
        "mean_shift": float(0.5 * shift @ shift),
        "spread": _spread(start, end),
        "shift_terms": ((u - m) @ shift, -(v - n) @ shift),
        "gaussian_terms": (log_f, log_g - 0.5 * (residual**2).sum(axis=0)),
    }


def _spread(start: np.ndarray, end: np.ndarray) -> float:
    """H between centred Gaussians of whitened covariances A, B.

    The coupling that is closest to the prior has E[v | u] = M u with M = B^½ r(B^½ A B^½) B^½; given u, v has covariance
    S = B - M A M, and H = ½ E|v - u|² - ½ log det S - d/2.
    """
    regression = gaussian_curvature(start, end)
    given = end - regression @ start @ regression.T
    squared = np.trace(end) - 2.0 * np.trace(regression @ start) + np.trace(start)
    return float(0.5 * squared - 0.5 * np.linalg.slogdet(given)[1] - 0.5 * len(start))


def gaussian_relative_entropy(bridge: GaussianBridge, particles: int) -> GapEntropy:
    """The relative entropy between Gaussians, in closed form."""
    transition = bridge.transition
    inverse = np.linalg.inv(transition.cholesky)
    start = inverse @ transition.matrix @ bridge.cov_start @ transition.matrix.T @ inverse.T
    end = inverse @ bridge.cov_end @ inverse.T
    shift = inverse @ (bridge.mean_end - transition.mean(bridge.mean_start[None])[0])
    mean_shift, spread = float(0.5 * shift @ shift), _spread(start, end)
    return GapEntropy(0.0, bridge.duration, mean_shift + spread, 0.0, mean_shift, 0.0, spread, 0.0, 0.0, 0.0, particles)
