"""Argon atoms with hidden labels: what a bridge from 0 to 100 ps says about 50 ps, beside what was there.

Run it to print the tables (scripts/argon); tests/test_argon.py holds its numbers.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np
import ot

import ensembles
from ensembles.assessment.resampling import resampled_scores, resampling_floor
from ensembles.assessment.scores import energy_distance
from ensembles.bridges.bridge import Bridge

DATA = Path(__file__).resolve().parents[1] / "data" / "argon_diffusion.npz"
DIFFUSION = 0.205  # Å²/ps, from the mean squared displacement of the same run: see data/README.md
START, MIDDLE, END = 0.0, 50.0, 100.0  # ps
SLAB = 0.27  # share of the box edge, so that about 270 of 1000 atoms lie in the slab
DRAWS = 1000  # of each bridge
REPEATS = 200

# Clouds of different sizes are compared, so the score is the one whose expectation is 0 for a perfect prediction.
unbiased = partial(energy_distance, unbiased=True)


@dataclass(frozen=True)
class Slab:
    """The atoms that lie in a slab at time 0: their positions (n, 3) in Å at three times, rows in unrelated orders."""

    axis: int
    start: np.ndarray
    middle: np.ndarray
    end: np.ndarray


@dataclass(frozen=True)
class Row:
    """One prediction of the middle cloud.

    Attributes
    ----------
    across, space : energy distance to the true cloud in Å, of the coordinate across the slab and of all three.
    lead, lead_error : the prediction's `across` minus the bridge's, and its bootstrap standard error.
    mean, variance : of the coordinate across the slab, in Å and Å².
    """

    name: str
    across: float
    space: float
    lead: float
    lead_error: float
    mean: float
    variance: float


@dataclass(frozen=True)
class Study:
    """All rows of one slab; a floor is the scores that a perfect prediction of `DRAWS` points would get.

    Attributes
    ----------
    across_floor, space_floor : (REPEATS,) from independent draws out of the true cloud.
    across_expected : (REPEATS,) scores of clouds the bridge itself makes, one path from each atom of the first cloud.
    mean, mean_error, variance, variance_error : of the true cloud across the slab, with standard errors for n atoms.
    """

    axis: int
    count: int
    rows: dict[str, Row]
    across_floor: np.ndarray
    space_floor: np.ndarray
    across_expected: np.ndarray
    mean: float
    mean_error: float
    variance: float
    variance_error: float

    def floors_above(self, name: str) -> float:
        """How many standard deviations of the floor a prediction lies above it, across the slab."""
        return (self.rows[name].across - self.across_floor.mean()) / self.across_floor.std(ddof=1)


def read_slab(axis: int = 0, centre: float = 0.5, seed: int = 0) -> Slab:
    """Select atoms on one unwrapped coordinate at time 0 only, and forget which is which by shuffling every frame."""
    with np.load(DATA, allow_pickle=False) as archive:
        positions, box, times = (archive[name] for name in ("unwrapped_A", "box_A", "time_ps"))
    fraction = positions[0, :, axis] / box[0, axis]
    inside = np.abs(fraction - centre) <= SLAB / 2
    rng = np.random.default_rng(seed)
    frames = [rng.permutation(positions[np.flatnonzero(times == t)[0], inside]) for t in (START, MIDDLE, END)]
    return Slab(axis, *frames)


def fit(slab: Slab, diffusion: float) -> Bridge:
    """The bridge between the first and the last cloud; the middle one is not shown to it."""
    series = ensembles.SnapshotSeries.from_arrays(
        [START, END], [slab.start, slab.end], units={"time": "ps", "length": "Å"}
    )
    return ensembles.fit_bridge(series, ensembles.Brownian(diffusion=diffusion))


def straight_line(slab: Slab) -> np.ndarray:
    """Half-way points along the zero-noise optimal matching, which minimises the sum of squared displacements."""
    n = len(slab.start)
    plan = ot.emd(np.full(n, 1 / n), np.full(n, 1 / n), ot.dist(slab.start, slab.end))
    return 0.5 * (slab.start + slab.end[plan.argmax(axis=1)])


def predict(slab: Slab, seed: int) -> dict[str, np.ndarray]:
    """The middle cloud in five ways, none of which sees it."""
    return {
        "bridge": fit(slab, DIFFUSION).sample(MIDDLE, DRAWS, rng=seed),
        "earlier snapshot": slab.start,
        "later snapshot": slab.end,
        "straight line": straight_line(slab),
        "bridge, 10 x D": fit(slab, 10 * DIFFUSION).sample(MIDDLE, DRAWS, rng=seed),
    }


def study(axis: int = 0, centre: float = 0.5, repeats: int = REPEATS, seed: int = 0) -> Study:
    """Predict the middle cloud of one slab in five ways, and score each against the true one."""
    slab = read_slab(axis, centre, seed)
    predictions = predict(slab, seed)
    truth, across = slab.middle, slice(axis, axis + 1)
    draws = {
        name: resampled_scores(cloud[:, across], truth[:, across], score=unbiased, repeats=repeats, rng=seed)
        for name, cloud in predictions.items()
    }
    values = {name: unbiased(cloud[:, across], truth[:, across]) for name, cloud in predictions.items()}
    rows = {
        name: Row(
            name,
            values[name],
            unbiased(cloud, truth),
            values[name] - values["bridge"],
            float((draws[name] - draws["bridge"]).std(ddof=1)),
            *_mean_and_variance(cloud[:, axis]),
        )
        for name, cloud in predictions.items()
    }
    paths = fit(slab, DIFFUSION).sample_paths_from(np.tile(slab.start, (repeats, 1)), START, [MIDDLE], rng=seed + 1)
    replicates = paths.positions[:, 0, across].reshape(repeats, len(truth), 1)
    mean, variance = _mean_and_variance(truth[:, axis])
    fourth = np.mean((truth[:, axis] - mean) ** 4)
    return Study(
        axis,
        len(truth),
        rows,
        resampling_floor(truth[:, across], count=DRAWS, score=unbiased, repeats=repeats, rng=seed),
        resampling_floor(truth, count=DRAWS, score=unbiased, repeats=repeats, rng=seed),
        np.array([unbiased(predictions["bridge"][:, across], cloud) for cloud in replicates]),
        mean,
        float(np.sqrt(variance / len(truth))),
        variance,
        float(np.sqrt((fourth - variance**2) / len(truth))),
    )


@dataclass(frozen=True)
class Average:
    """Means over nine slabs, three disjoint ones across each axis, with the standard errors that the nine values give.

    Attributes
    ----------
    lead, lead_error : energy distance across the slab minus the bridge's, in Å.
    excess, excess_error : variance across the slab minus the true one, in Å².
    """

    name: str
    lead: float
    lead_error: float
    excess: float
    excess_error: float


def nine_slabs(seed: int = 0) -> dict[str, Average]:
    """Compare the predictions over nine slabs, which tells more than the bootstrap of one."""
    leads, excesses = {}, {}
    for axis in range(3):
        for centre in (1 / 6, 1 / 2, 5 / 6):
            slab = read_slab(axis, centre, seed)
            truth = slab.middle[:, [axis]]
            across = {name: cloud[:, [axis]] for name, cloud in predict(slab, seed).items()}
            behind = unbiased(across["bridge"], truth)
            for name, cloud in across.items():
                leads.setdefault(name, []).append(unbiased(cloud, truth) - behind)
                excesses.setdefault(name, []).append(float(cloud.var() - truth.var()))
    return {name: Average(name, *_mean_and_error(leads[name]), *_mean_and_error(excesses[name])) for name in leads}


def _mean_and_error(values: list[float]) -> tuple[float, float]:
    return float(np.mean(values)), float(np.std(values, ddof=1) / np.sqrt(len(values)))


def average_table(averages: dict[str, Average]) -> str:
    """The averages as text."""
    lines = [
        "Nine slabs, three across each axis: mean ± standard error from the nine values",
        f"{'prediction':<18}{'behind the bridge, Å':>24}{'in errors':>12}{'variance - true, Å²':>24}{'in errors':>11}",
    ]
    for row in averages.values():
        behind = ("", "") if row.name == "bridge" else _with_error(row.lead, row.lead_error, 3)
        excess = _with_error(row.excess, row.excess_error, 1)
        lines.append(f"{row.name:<18}{behind[0]:>24}{behind[1]:>12}{excess[0]:>24}{excess[1]:>11}")
    return "\n".join(lines)


def _with_error(value: float, error: float, digits: int) -> tuple[str, str]:
    return f"{value:.{digits}f} ± {error:.{digits}f}", f"{value / error:.1f}"


def _mean_and_variance(values: np.ndarray) -> tuple[float, float]:
    return float(values.mean()), float(values.var())


def table(result: Study) -> str:
    """The study as text, with the standard error of everything that has one."""
    lines = [
        f"{result.count} atoms of a slab across {'xyz'[result.axis]}, cloud at {MIDDLE:g} ps from those at {START:g} "
        f"and {END:g} ps, D = {DIFFUSION} Å²/ps",
        f"{'prediction':<18}{'energy distance, Å':>20}{'above the floor':>17}{'behind the bridge':>19}"
        f"{'mean, Å':>15}{'variance, Å²':>15}{'in 3-D, Å':>17}",
        f"{'':<18}{'across the slab':>20}{'in its sd':>17}{'in Å':>19}{'across':>15}{'across':>15}{'':>17}",
    ]
    for row in result.rows.values():
        lead = "" if row.name == "bridge" else f"{row.lead:.3f} ± {row.lead_error:.3f}"
        lines.append(
            f"{row.name:<18}{row.across:>20.3f}{result.floors_above(row.name):>17.1f}{lead:>19}"
            f"{row.mean:>15.2f}{row.variance:>15.1f}{row.space:>17.3f}"
        )
    floor, space, expected = result.across_floor, result.space_floor, result.across_expected
    lines += [
        f"{'floor: true cloud':<18}{f'{floor.mean():.3f} ± {floor.std(ddof=1):.3f}':>20}{'':>36}"
        f"{f'{result.mean:.2f} ± {result.mean_error:.2f}':>15}"
        f"{f'{result.variance:.1f} ± {result.variance_error:.1f}':>15}"
        f"{f'{space.mean():.3f} ± {space.std(ddof=1):.3f}':>17}",
        f"{'bridge on itself':<18}{f'{expected.mean():.3f} ± {expected.std(ddof=1):.3f}':>20}",
    ]
    return "\n".join(lines)


NOTES = """
"±" is one standard deviation. Floor: as many independent draws from the true cloud as the bridge was drawn, against as
many as there are atoms. The bridge may fall below it, since its ends are those of the same atoms: "bridge on itself" is
the score of clouds that it makes itself, one path an atom. "Behind the bridge" is a difference of energy distances; its
bootstrap error takes the clouds as independent, though they hold the same atoms, and is too large for that reason.
In 3-D two directions are as wide as the box and do not change: there the energy distance cannot tell the later snapshot
from the true cloud. Across the slab it cannot tell the straight line from the bridge; the variance can."""


def main() -> None:
    """Print the table of the middle slab across each axis, and the averages over nine slabs."""
    for axis in range(3):
        print(table(study(axis)), end="\n\n")
    print(average_table(nine_slabs()), NOTES.strip(), sep="\n\n")


if __name__ == "__main__":
    main()
