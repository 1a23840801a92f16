"""Could the prior have produced the end cloud? Simulated p-values, beside the relative entropy."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..bridges.fit import fit_bridge
from ..bridges.growing import growing_weights
from ..priors.base import LinearGaussianPrior, Transition, require_prior
from .population import population_behind
from .relative_entropy import GapEntropy, atoms_relative_entropy, refuse_box
from .resampled_weights import run_repeats
from .scores import energy_distance

if TYPE_CHECKING:
    import pandas

    from ..snapshots.series import SnapshotSeries

__all__ = ["GapSurprise", "PriorCheck", "prior_check"]

_REFERENCE = 400  # particles, at least, that stand for what the prior predicts
_LARGEST = 2000
_TOLERANCE = 1e-5
_SHOWN = 2000


@dataclass(frozen=True, eq=False)
class GapSurprise:
    """One gap.

    Attributes
    ----------
    start, end : times.
    energy_distance, energy_p_value : of the observed end cloud to what the prior predicts from the start cloud, and the
        share of simulated end clouds that lie as far or further.
    entropy : `GapEntropy`, or None where it cannot be computed; entropy_p_value : its simulated p-value, else NaN.
    simulated_energy, simulated_entropy : (simulations,) values under the prior.
    observed, predicted : clouds for the picture.
    """

    start: float
    end: float
    energy_distance: float
    energy_p_value: float
    entropy: GapEntropy | None
    entropy_p_value: float
    simulated_energy: np.ndarray
    simulated_entropy: np.ndarray
    observed: np.ndarray
    predicted: np.ndarray

    @property
    def excess(self) -> float:
        """Relative entropy beyond the mean of the simulations, in nats per particle: what is not the noise of finite clouds."""
        return self.entropy.value - float(self.simulated_entropy.mean()) if self.entropy is not None else float("nan")

    @property
    def log10_probability(self) -> float:
        """-N excess / log 10, at most 0: the large-deviation probability that the prior gives such an end cloud."""
        if self.entropy is None:
            return float("nan")
        return float(min(0.0, -self.entropy.particles * self.excess / np.log(10.0)))


@dataclass(frozen=True, eq=False)
class PriorCheck:
    """How surprising the snapshots are under the prior; made by `prior_check`.

    Attributes
    ----------
    gaps : one `GapSurprise` a gap.
    dropped : sentences on what could not be computed, with the reason.
    verdict : one sentence a gap.
    """

    gaps: tuple[GapSurprise, ...]
    dropped: tuple[str, ...]
    verdict: tuple[str, ...]

    def to_frame(self) -> pandas.DataFrame:
        """One row a gap: p-values, energy distance, and the relative entropy with its parts."""
        import pandas

        rows = []
        for gap in self.gaps:
            row: dict[str, Any] = {
                "start": gap.start,
                "end": gap.end,
                "energy_distance": gap.energy_distance,
                "energy_p_value": gap.energy_p_value,
                "entropy_p_value": gap.entropy_p_value,
            }
            for name in ("value", "error", "mean_shift", "mean_shift_error", "spread", "spread_error", "shape",
                         "shape_error", "particles", "log10_probability_error"):  # fmt: skip
                key = {"value": "relative_entropy", "error": "relative_entropy_error"}.get(name, name)
                row[key] = getattr(gap.entropy, name) if gap.entropy is not None else float("nan")
            rows.append({**row, "excess": gap.excess, "log10_probability": gap.log10_probability})
        return pandas.DataFrame(rows)

    def __repr__(self) -> str:
        return "\n".join(self.verdict)


def prior_check(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    *,
    simulations: int = 199,
    same_particles: bool = False,
    with_entropy: bool = True,
    workers: int = 1,
    rng: Any = 0,
) -> PriorCheck:
    """Compare every snapshot with what the prior alone makes of the snapshot before it.

    A simulation draws two clouds from the population behind the start cloud, independently and of the observed sizes and
    weights, moves the second by the prior, and computes the same statistics as for the data: the energy distance between
    the end cloud and what the prior makes of the start cloud, and the relative entropy of the bridge between the two. The
    population is a smoothed bootstrap of the start cloud within its clusters (`population.py`). The p-value is
    (1 + number of simulations at least as far) / (1 + simulations). scripts/calibration prints how uniform it is. Heavy
    tails, of which a cloud shows too little, make the p-value by relative entropy too small; that by energy distance
    does not mind them.

    Parameters
    ----------
    series : SnapshotSeries of K ≥ 2 snapshots; its growth, if any, changes the weights of the start clouds.
    prior : the dynamics to be judged, with its drift.
    simulations : at least 19; the smallest p-value is 1 / (1 + simulations).
    same_particles : whether the end cloud holds the very particles of the start cloud (their labels lost); each start
        particle then has one end in a simulation, and start clouds are not drawn anew.
    with_entropy : whether bridges are fitted to the simulations as well; most of the time goes there.
    workers : threads; the result does not depend on it.
    rng : seed or numpy Generator.

    Raises
    ------
    InputError
        If there are too few simulations, or `same_particles` with snapshots of different sizes or with growth.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> rng = np.random.default_rng(0)
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [rng.normal(size=60), rng.normal(3.0, 1.4, 60)])
    >>> found = ensembles.prior_check(series, ensembles.Brownian(diffusion=0.5), simulations=39)
    >>> found.gaps[0].energy_p_value  # shifted by 3: no simulation lies as far
    0.025
    """
    require_prior(prior)
    refuse_box(prior, "the prior check")
    simulations = checks.whole_number(simulations, "simulations", 19)
    streams = checks.generator(rng).spawn(len(series) - 1)
    gaps, dropped, verdict = [], [], []
    for k, stream in enumerate(streams):
        choosing, judging = stream.spawn(2)
        case = _Case(series, prior, k, same_particles, choosing)
        found, reason = _judge(case, simulations, with_entropy, workers, judging)
        gaps.append(found)
        if reason:
            dropped.append(f"the relative entropy from {found.start:g} to {found.end:g} was dropped: {reason}")
        verdict.append(_sentence(found))
    return PriorCheck(tuple(gaps), tuple(dropped), tuple(verdict))


class _Case:
    """One gap: its clouds, the prior over it, and how new ones are simulated."""

    def __init__(
        self, series: SnapshotSeries, prior: LinearGaussianPrior, k: int, same_particles: bool, rng: np.random.Generator
    ) -> None:
        self.times = float(series.times[k]), float(series.times[k + 1])
        self.prior, self.same = prior, same_particles
        self.pair = series.subset([k, k + 1])
        # Growth changes which starts the end cloud came from: the weights are those of a bridge over the gap.
        self.clouds, self.weights = self.pair.clouds, growing_weights(self.pair, 0)
        if same_particles and series.growth is not None:
            raise checks.InputError(
                f"same_particles means that none divides or dies; the series has {series.growth!r}; use "
                "same_particles=False, or series.with_growth(None)"
            )
        if same_particles and len(self.clouds[0]) != len(self.clouds[1]):
            raise checks.InputError(
                f"same_particles needs equal numbers; the snapshots at {self.times[0]:g} and {self.times[1]:g} hold "
                f"{len(self.clouds[0])} and {len(self.clouds[1])}; use same_particles=False"
            )
        self.transition: Transition = prior.transition(self.times[1] - self.times[0], series.dimension)
        self.ends = int(np.count_nonzero(self.weights[1]))
        self.population = population_behind(self.clouds[0], self.weights[0], rng)

    def predicted(self, start: np.ndarray, weights: np.ndarray, rng: np.random.Generator) -> np.ndarray:
        """A cloud that stands for what the prior makes of a start cloud."""
        size = int(np.clip(2 * len(start), _REFERENCE, _LARGEST))
        rows = rng.choice(len(start), size, p=weights)
        return self.transition.sample(start[rows], rng)

    def simulate(self, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """A start cloud and an end cloud as the prior would have produced them; both have the weights of the observed ones.

        Independent samples come from the population behind the start cloud, for which `population` stands.
        """
        start, weights = self.clouds[0], self.weights[0]
        if self.same:
            return start, weights, self.transition.sample(start, rng)
        drawn = self.population.sample(len(start), rng)
        ends = self.transition.sample(self.population.sample(len(self.clouds[1]), rng), rng)
        return drawn, weights, ends

    def energy(
        self, start: np.ndarray, weights: np.ndarray, end: np.ndarray, end_weights: np.ndarray, rng: np.random.Generator
    ) -> float:
        """Energy distance of an end cloud to what the prior makes of a start cloud."""
        return energy_distance(self.predicted(start, weights, rng), end, weights=(None, end_weights))

    def entropy(self, start: np.ndarray, weights: np.ndarray, end: np.ndarray, end_weights: np.ndarray) -> GapEntropy:
        """Relative entropy of the bridge between two clouds."""
        from ..snapshots.series import SnapshotSeries

        pair = SnapshotSeries.from_arrays(self.times, [start, end], [weights, end_weights])
        bridge = fit_bridge(pair, self.prior, tolerance=_TOLERANCE)
        return atoms_relative_entropy(bridge.gaps[0], self.ends)


def _judge(
    case: _Case, simulations: int, with_entropy: bool, workers: int, rng: np.random.Generator
) -> tuple[GapSurprise, str]:
    observing, showing, simulating = rng.spawn(3)
    start, end = case.clouds
    entropy, reason = None, ""
    if with_entropy:
        positive = case.weights[1][case.weights[1] > 0]
        if positive.max() > positive.min() * (1.0 + 1e-9):
            reason = "the weights of the end snapshot are not equal, and nearest neighbours do not see weights"
        else:
            try:
                entropy = case.entropy(start, case.weights[0], end, case.weights[1])
            except checks.InputError as cause:
                reason = str(cause)
    observed = case.energy(start, case.weights[0], end, case.weights[1], observing)

    def once(stream: np.random.Generator) -> tuple[float, float]:
        first, weights, last = case.simulate(stream)
        clouds = first, weights, last, case.weights[1]
        return case.energy(*clouds, stream), case.entropy(*clouds).value if entropy is not None else float("nan")

    simulated = np.array(run_repeats(once, simulations, simulating, workers))
    return (
        GapSurprise(
            *case.times,
            observed,
            _p_value(observed, simulated[:, 0]),
            entropy,
            _p_value(entropy.value, simulated[:, 1]) if entropy is not None else float("nan"),
            simulated[:, 0],
            simulated[:, 1],
            end,
            case.predicted(start, case.weights[0], showing)[:_SHOWN],
        ),
        reason,
    )


def _p_value(observed: float, simulated: np.ndarray) -> float:
    return float((1 + np.count_nonzero(simulated >= observed)) / (1 + simulated.size))


def _sentence(gap: GapSurprise) -> str:
    chance = gap.energy_p_value
    if chance <= 0.01:
        judged = "the prior alone does not produce the end cloud"
    elif chance <= 0.05:
        judged = "the end cloud is unlikely under the prior alone"
    else:
        judged = "the prior alone can have produced the end cloud"
    text = f"{gap.start:g} to {gap.end:g}: {judged} (p = {chance:.3g} by energy distance"
    if gap.entropy is None:
        return text + ")."
    entropy = gap.entropy
    return (
        f"{text}, {gap.entropy_p_value:.3g} by relative entropy); {entropy.value:.3g} ± {entropy.error:.2g} nats per "
        f"particle, of which mean shift {entropy.mean_shift:.3g}, spread {entropy.spread:.3g}, shape {entropy.shape:.3g}; "
        f"clouds of the prior itself give {gap.simulated_entropy.mean():.3g} ± {gap.simulated_entropy.std(ddof=1):.2g}, and "
        f"what exceeds that has for {entropy.particles} particles a probability of about "
        f"10^({gap.log10_probability:.3g} ± {entropy.log10_probability_error:.2g})."
    )
