"""Net growth rates that nobody measured, estimated as a smooth function of state from the snapshots alone.

Particles that wander by the prior and multiply at the rate r₀ + δ on their way are after gap k a population of density

    p_k(y) = exp(½ τ r(y)) Σ_i w_i k(y | x_i) / Z,   w_i ∝ a_i exp(½ τ r(x_i)),   Z = Σ_i w_i E[exp(½ τ r(Y)) | x_i]

with r = r₀ + δ, half of the growth at either end of the gap: Strang's splitting, exact to second order in τ, and altogether for
Brownian motion, a Gaussian population and a linear rate. The later snapshot is a sample of p_k. (Where there is no particle r₀
is that of the nearest.) δ is a Gaussian process of standard deviation s and length ℓ, the same function in all gaps. Its most
probable value maximises

    L(δ) = Σ_k n_k Σ_j b_j log p_k(y_j) + log prior(δ)

with n_k = (Σ a² + Σ b²)⁻¹, which counts both snapshots as samples. The slope of L compares the mean of δ over the ends of the
unbalanced bridge whose earlier marginal is free, Σ_ij b_j w_i k_ij / Σ_i' w_i' k_i'j, with that over the population that the
model expects: the maximum is where implied growth, made smooth over the cloud, given as the rate and found again, settles. Read
off one free bridge the growth is too small, smoothed by the noise; with all of it at the start of the gap it would come out
too large, as the noise would have to be undone. The penalty on a function counts once, that of `Growth.uncertainty` once a
particle: this one leaves systematic growth alone where there are many particles (schrodinger/unbalanced.py on the other).

The rate given back is that by which `Growth` weighs a particle, the logarithm of its mean number of descendants over the gap,
r_i = r₀_i + ½ δ(x_i) + (1/τ) log E[exp(½ τ δ(Y)) | x_i]. s and ℓ are those of the largest evidence, Laplace's approximation
log ∫ exp L ≈ L - ½ log det(1 + s² H) with H the outer product of the scores of the later particles; where no evidence is above
that of δ = 0, the rates stay as given.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..priors.base import LinearGaussianPrior, require_prior
from ..snapshots.growth import Growth
from .growth_process import Fit, Problem, fits

if TYPE_CHECKING:
    import pandas

    from ..snapshots.series import SnapshotSeries

__all__ = ["RATE", "GrowthEstimate", "estimate_growth"]

RATE = "estimated_rate"
"""Name of the feature that holds the rates."""

_SPREADS = (0.06, 0.12, 0.25, 0.5, 1.0)  # s times the mean duration: standard deviation of log-numbers over a gap
_LENGTHS = (0.5, 1.0, 2.0)  # ℓ over the median distance of two particles
_TOO_MUCH = (
    "numbers that change by a factor e or more over a gap explain the snapshots best: movement that the prior lacks (a drift, "
    "more noise) may have been taken for growth, so mend the prior or give rates before trusting these"
)


@dataclass(frozen=True, eq=False)
class GrowthEstimate:
    """Net growth rates estimated from a series; made by `estimate_growth`.

    Attributes
    ----------
    series : the series given, with the feature "estimated_rate" and the `Growth` that uses it: what to fit.
    rates, errors : of every particle of every snapshot, 1/time, and the standard errors of them (the curvature at the
        maximum). Shares of a population do not tell its size: the mean rate of all particles before a gap is as given.
    uncertainty : s, 1/time; 0 where the snapshots ask for no growth but the given.
    length : ℓ, in the prior's standard deviations over a mean gap.
    evidence : log-evidence over that of the given rates, nats.
    tried : (s, ℓ, evidence) of everything tried.
    warnings : sentences, such as that the rates are too large to be growth alone.
    """

    series: SnapshotSeries
    rates: tuple[np.ndarray, ...]
    errors: tuple[np.ndarray, ...]
    uncertainty: float
    length: float
    evidence: float
    tried: tuple[tuple[float, float, float], ...]
    warnings: tuple[str, ...] = ()

    def to_frame(self) -> pandas.DataFrame:
        """One row a particle: time, particle, rate, standard_error, and label where there are any."""
        import pandas

        parts, labels = [], self.series.labels
        for k, (rate, error) in enumerate(zip(self.rates, self.errors)):
            columns = {"time": self.series.times[k], "particle": np.arange(rate.size)}
            columns |= {"rate": rate, "standard_error": error} | ({} if labels is None else {"label": labels[k]})
            parts.append(pandas.DataFrame(columns))
        return pandas.concat(parts, ignore_index=True)

    def __repr__(self) -> str:
        if self.uncertainty == 0.0:
            return "GrowthEstimate: the snapshots do not ask for growth other than the given"
        every = np.concatenate(self.rates)
        return (
            f"GrowthEstimate: rates {every.min():.3g} to {every.max():.3g}, standard errors about "
            f"{np.median(np.concatenate(self.errors)):.2g}; {self.evidence:.3g} nats of evidence for growth "
            f"(s = {self.uncertainty:.3g}, ℓ = {self.length:.3g})" + "".join(f"; {text}" for text in self.warnings)
        )


def estimate_growth(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    *,
    uncertainty: float | None = None,
    length: float | None = None,
    particles: int = 1000,
    rng: Any = 0,
) -> GrowthEstimate:
    """Estimate the net growth rate as a smooth function of state from two or more snapshots.

    The most probable rates r₀ + δ, δ ~ GP(s² exp(-½|x - x'|²/ℓ²)), given that each later snapshot is a sample of what the
    earlier one becomes as it wanders by the prior and grows; the module's docstring has the equations. What the prior does
    not explain is taken for growth: with a wrong drift or too little noise the rates are wrong, and a rate that changes with
    time at one place is averaged (estimate such gaps one by one, with `series.subset`). Error bars of a bridge through the result
    take the rates as they are; how sure these are, `errors` says.

    Parameters
    ----------
    series : its growth, if any, gives r₀ and the freedom `later` of later weights, which the bridge keeps; the estimate takes
        all later particles as offspring.
    prior : the dynamics between snapshots, without a box.
    uncertainty : s, standard deviation of what is not known of the rate, 1/time; by default that of largest evidence.
    length : ℓ over which the rate varies, in the prior's standard deviations over a mean gap; by default likewise.
    particles : of a snapshot that are used at most, drawn by weight; the rate is then known at all of them.
    rng : seed or numpy Generator, of those drawn.

    Raises
    ------
    InputError
        A prior in a box, an uncertainty or length that is not positive.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> rng = np.random.default_rng(0)
    >>> early, late = rng.normal(0, 1, 400), rng.normal(0.625, np.sqrt(1.5), 400)  # N(0, 1) growing at ½ x, D = ¼
    >>> series = ensembles.SnapshotSeries.from_arrays([0, 1], [early, late])
    >>> found = ensembles.estimate_growth(series, ensembles.Brownian(diffusion=0.25))
    >>> slope = np.polyfit(early, found.rates[0], 1)[0]
    >>> bool(0.3 < slope < 0.7), found.series.growth.rate
    (True, 'estimated_rate')
    """
    require_prior(prior)
    if prior.box is not None:
        raise checks.InputError(
            "growth cannot be estimated in a box; the prior has walls; give rates, or an uncertainty"
        )
    for name, value in (("uncertainty", uncertainty), ("length", length)):
        if value is not None:
            checks.positive_number(value, name, "leave it out to have it chosen by the evidence")
    problem = Problem(series, prior, checks.whole_number(particles, "particles", 2), checks.generator(rng))
    mean_gap = float(series.durations.mean())
    spreads = [s / mean_gap for s in _SPREADS] if uncertainty is None else [float(uncertainty)]
    lengths = [share * problem.typical_distance for share in _LENGTHS] if length is None else [float(length)]
    tried = [fit for ell in lengths for fit in fits(problem, ell, spreads)]
    best = max(tried, key=lambda fit: fit.evidence)
    found = _estimate(series, problem, best, tried)
    if uncertainty is None and found.uncertainty == spreads[-1]:
        found = replace(found, warnings=(_TOO_MUCH,))
    return found


def _estimate(series: SnapshotSeries, problem: Problem, best: Fit, tried: list[Fit]) -> GrowthEstimate:
    found = best.evidence > 0.0
    rates, errors = best.everywhere() if found else (problem.given, [np.zeros(len(cloud)) for cloud in series.clouds])
    later = 0.0 if series.growth is None else series.growth.later
    named = replace(series, features=dict(series.features) | {RATE: tuple(rates)})
    return GrowthEstimate(
        named.with_growth(Growth(RATE, later=later)),
        tuple(rates),
        tuple(errors),
        best.spread if found else 0.0,
        best.length,
        max(best.evidence, 0.0),
        tuple((fit.spread, fit.length, fit.evidence) for fit in tried),
    )
