"""Which noise level the data support: the held-out scores of a grid of priors, the best of them, and its interval."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import product
from typing import TYPE_CHECKING, Any

import numpy as np

from .. import checks
from ..priors.base import LinearGaussianPrior, require_prior
from .hold_out import require_interior
from .interval import coordinate, from_coordinate, largest_loss, profile_interval
from .pairwise import Comparison, multinomial_weights
from .parameters import level_grid
from .profile import Cell, Profile, climb, quadratic_around
from .resampled_weights import bootstrap_weights, run_repeats

if TYPE_CHECKING:
    import pandas

    from ..snapshots.series import SnapshotSeries

__all__ = ["NoiseLevel", "NoiseProfile", "choose_noise"]

_ENERGY_DRAWS = 600
_ENERGY_PARTICLES = 2000
_BOOTSTRAP_TOLERANCE = 1e-4  # L1 error of the marginals; resampled weights themselves move by far more
_RIDGE = 0.8  # correlation of two parameters beyond which it is worth a sentence


@dataclass(frozen=True)
class NoiseLevel:
    """One cell of the grid.

    Attributes
    ----------
    values : of the parameters, by name.
    log_score, log_score_error : mean log-density of the held-out particles in nats, and its bootstrap standard error.
    deficit, deficit_error : how far it lies below the best, with the standard error of the difference, particle by
        particle.
    energy_distance, energy_distance_error : mean over the left-out snapshots, in length, unbiased.
    """

    values: dict[str, float]
    log_score: float
    log_score_error: float
    deficit: float
    deficit_error: float
    energy_distance: float
    energy_distance_error: float


@dataclass(frozen=True, eq=False)
class NoiseProfile:
    """Held-out scores over a grid of priors; made by `choose_noise`.

    Attributes
    ----------
    names : the parameters.
    levels : one `NoiseLevel` a cell.
    best : values of the cell with the largest held-out log score.
    smallest_within_error : the cell with the smallest first parameter among those whose deficit is within one standard
        error of the difference; between equals the better one.
    estimate : maximum of the quadratic through the cells around the best.
    interval : per parameter, (lower, upper) at 90 %, from bootstrap resamples of all snapshots with the bridges fitted
        again; see `choose_noise`.
    resampled : (repeats, parameters) maxima of the resamples.
    warnings : sentences, such as that the data do not bound a parameter on one side.
    """

    names: tuple[str, ...]
    levels: tuple[NoiseLevel, ...]
    best: dict[str, float]
    smallest_within_error: dict[str, float]
    estimate: dict[str, float]
    interval: dict[str, tuple[float, float]]
    resampled: np.ndarray
    warnings: tuple[str, ...]

    def to_frame(self) -> pandas.DataFrame:
        """One row a cell: the parameters by name, the scores with their errors, and which cell was chosen."""
        import pandas

        scores = (
            "log_score",
            "log_score_error",
            "deficit",
            "deficit_error",
            "energy_distance",
            "energy_distance_error",
        )
        rows = []
        for level in self.levels:
            chosen = {
                "best": level.values == self.best,
                "smallest_within_error": level.values == self.smallest_within_error,
            }
            rows.append({**level.values, **{name: getattr(level, name) for name in scores}, **chosen})
        return pandas.DataFrame(rows)

    def __repr__(self) -> str:
        parts = [
            f"{name}: {self.estimate[name]:.3g} between the levels, 90 % interval {self.interval[name][0]:.3g} to "
            f"{self.interval[name][1]:.3g}; best level {self.best[name]:.3g}, smallest within one standard error "
            f"{self.smallest_within_error[name]:.3g}"
            for name in self.names
        ]
        return "\n".join([*parts, *self.warnings])


def choose_noise(
    series: SnapshotSeries,
    prior: LinearGaussianPrior,
    levels: Sequence[float] | Mapping[str, Sequence[float]],
    *,
    parameter: str = "diffusion",
    repeats: int = 100,
    workers: int = 1,
    rng: Any = 0,
) -> NoiseProfile:
    """Profile the held-out log score and energy distance over one or two parameters of the prior.

    Each interior snapshot is left out and its particles are scored by log ρ of the bridge between its neighbours. The
    best cell has the largest mean log score. The interval holds all values whose score lies less than c below the
    maximum, where c is such that 90 % of bootstrap resamples of all snapshots, with the bridges fitted again, lose less
    than c at the estimate against their own maximum. The log-density that finite clouds foretell is too low by half its
    relative variance, and that is larger the less noise the prior has: the log score asks for somewhat more noise than
    there was, by a part of its interval (scripts/calibration prints how much), and much more where particles are further
    apart than the prior's spread between the snapshots.

    Parameters
    ----------
    series : SnapshotSeries of K ≥ 3 snapshots.
    prior : gives the kind of dynamics and all other parameters.
    levels : increasing values of `parameter`, or {name: values} for one or two parameters; see `with_parameters` for
        parameters that are not one number.
    parameter : name of the parameter that a plain list is for.
    repeats : bootstrap resamples, at least 2; the interval is a rough one below about 50.
    workers : threads; the result does not depend on it.
    rng : seed or numpy Generator.

    Raises
    ------
    InputError
        With two snapshots, a parameter the prior does not have, levels that are not positive or do not increase.

    Examples
    --------
    >>> import numpy as np, ensembles
    >>> rng = np.random.default_rng(0)
    >>> clouds = [rng.normal(0.0, np.sqrt(1 + 2 * t), 150) for t in (0.0, 2.0, 4.0)]
    >>> series = ensembles.SnapshotSeries.from_arrays([0.0, 2.0, 4.0], clouds)
    >>> found = ensembles.choose_noise(series, ensembles.Brownian(1.0), [0.1, 0.3, 1.0, 3.0, 10.0], repeats=20)
    >>> 0.1 < found.best["diffusion"] < 10
    True
    """
    require_prior(prior)
    require_interior(series, "choosing the noise level")
    grid = level_grid(prior, levels, parameter)
    repeats = checks.whole_number(repeats, "repeats", 2)
    resampling, energy, refitting = checks.generator(rng).spawn(3)
    profile = Profile(series, prior, grid, tolerance=1e-6)
    cells = [tuple(cell) for cell in product(*(range(n) for n in profile.shape))]
    best = max(cells, key=profile.score)
    log_scores = _resampled_log_scores(profile, cells, repeats, resampling)
    energies = _energy_distances(profile, cells, repeats, energy)
    rows = tuple(_levels(grid, cells, cells.index(best), log_scores, energies))
    axes = [coordinate(values) for values in grid.values()]
    around = quadratic_around(profile.score, best, axes)
    estimate = around.maximum()

    def refit(stream: np.random.Generator) -> np.ndarray:
        return _refitted(profile, best, axes, estimate, stream)

    # Every bridge exists by now, so threads only read them.
    refitted = np.array(run_repeats(refit, repeats, refitting, workers))
    maxima, losses = refitted[:, :-1], refitted[:, -1]
    scores = np.array([profile.score(cell) for cell in cells]).reshape(profile.shape)
    interval = profile_interval(grid, estimate, around.at(estimate), scores, largest_loss(losses))
    names = tuple(grid)
    return NoiseProfile(
        names,
        rows,
        rows[cells.index(best)].values,
        _smallest(rows, names[0]).values,
        {name: from_coordinate(grid[name], value) for name, value in zip(names, estimate)},
        interval,
        np.array([[from_coordinate(grid[n], v) for n, v in zip(names, row)] for row in maxima]),
        tuple(_warnings(grid, rows, maxima, axes, interval, series)),
    )


def _resampled_log_scores(profile: Profile, cells: list[Cell], repeats: int, rng: np.random.Generator) -> np.ndarray:
    """(1 + repeats, cells): the log score, then those of resampled held-out particles, the same ones for every cell."""
    series = profile.series
    total = sum(len(series.clouds[k]) for k in profile.interior)
    scores = np.zeros((1 + repeats, len(cells)))
    for k in profile.interior:
        weights = np.vstack([series.weights[k], multinomial_weights(series.weights[k], repeats, rng)])
        logs = np.array([profile.log_densities(cell, k) for cell in cells])
        scores += len(series.clouds[k]) / total * (weights @ logs.T)
    return scores


def _energy_distances(profile: Profile, cells: list[Cell], repeats: int, rng: np.random.Generator) -> np.ndarray:
    """(1 + repeats, cells) mean energy distances; every cell draws with the same random numbers."""
    series = profile.series
    out = np.full((1 + repeats, len(cells)), np.nan)
    used = [k for k in profile.interior if np.count_nonzero(series.weights[k]) >= 2]
    if not used:
        return out
    out[:] = 0.0
    for k, stream in zip(used, rng.spawn(len(used))):
        cutting, resampling = stream.spawn(2)
        seed = int(stream.integers(2**31))
        y, b = series.clouds[k], series.weights[k]
        if len(y) > _ENERGY_PARTICLES:
            y = y[cutting.choice(len(y), _ENERGY_PARTICLES, replace=False, p=b)]
            b = np.full(_ENERGY_PARTICLES, 1.0 / _ENERGY_PARTICLES)
        a = np.full(_ENERGY_DRAWS, 1.0 / _ENERGY_DRAWS)
        resampled = multinomial_weights(a, repeats, resampling), multinomial_weights(b, repeats, resampling)
        for column, cell in enumerate(cells):
            drawn = profile.population(cell, k).sample(float(series.times[k]), _ENERGY_DRAWS, rng=seed)
            out[:, column] += Comparison(drawn, y, a, b, *resampled, 1.0).energy_distance() / len(used)
    return out


def _levels(
    grid: dict[str, np.ndarray], cells: list[Cell], best: int, log_scores: np.ndarray, energies: np.ndarray
) -> list[NoiseLevel]:
    deficits = log_scores[:, [best]] - log_scores
    return [
        NoiseLevel(
            {name: float(values[i]) for (name, values), i in zip(grid.items(), cell)},
            float(log_scores[0, c]),
            float(log_scores[1:, c].std(ddof=1)),
            float(deficits[0, c]),
            float(deficits[1:, c].std(ddof=1)),
            float(energies[0, c]),
            float(energies[1:, c].std(ddof=1)),
        )
        for c, cell in enumerate(cells)
    ]


def _smallest(rows: Sequence[NoiseLevel], name: str) -> NoiseLevel:
    within = [row for row in rows if row.deficit <= row.deficit_error]
    return min(within, key=lambda row: (row.values[name], row.deficit))


def _refitted(
    profile: Profile, best: Cell, axes: list[np.ndarray], estimate: np.ndarray, rng: np.random.Generator
) -> np.ndarray:
    """The maximum of a resample, and how much lower its score is at the estimate."""
    again = profile.reweighted(bootstrap_weights(profile.series, rng), _BOOTSTRAP_TOLERANCE)
    top = quadratic_around(again.score, climb(again.score, best, again.shape), axes)
    maximum = top.maximum()
    loss = top.at(maximum) - quadratic_around(again.score, best, axes).at(estimate)
    return np.append(maximum, max(loss, 0.0))


def _warnings(
    grid: dict[str, np.ndarray],
    rows: Sequence[NoiseLevel],
    maxima: np.ndarray,
    axes: list[np.ndarray],
    interval: dict[str, tuple[float, float]],
    series: SnapshotSeries,
) -> list[str]:
    found = []
    for position, (name, axis) in enumerate(zip(grid, axes)):
        low, high = (float(np.mean(maxima[:, position] == axis[end])) for end in (0, -1))
        for share, side, end in ((low, "below", 0), (high, "above", -1)):
            if share > 0.05:
                found.append(
                    f"the data do not bound {name} from {side}: {100 * share:.0f} % of the resamples have their best "
                    f"value at the edge {grid[name][end]:g} of the levels; take wider levels, or measure {name} another way"
                )
        limits = coordinate(np.array(interval[name]))
        nearest = int(np.argmin(np.abs(axis - limits.mean())))
        step = float(np.mean(np.diff(axis[max(0, nearest - 1) : nearest + 2])))
        if np.ptp(limits) < step and low <= 0.05 and high <= 0.05:
            found.append(
                f"the levels of {name} are too coarse for its interval, {interval[name][0]:.3g} to {interval[name][1]:.3g}, "
                "which was interpolated between them; profile again with levels around it"
            )
    if len(grid) == 2 and np.ptp(maxima, axis=0).all():
        correlation = float(np.corrcoef(maxima.T)[0, 1])
        if abs(correlation) > _RIDGE:
            first, second = grid
            found.append(
                f"{first} and {second} are told together rather than apart: their best values correlate {correlation:.2f} "
                "over the resamples; fix one of them from elsewhere to learn the other"
            )
    if all(row.deficit <= 2.0 * row.deficit_error for row in rows if row.deficit > 0):
        found.append(
            "flat profile: no level is worse than the best by more than two standard errors; these snapshots do not tell "
            "the noise level, and any level of the grid explains them; take it from elsewhere or add snapshots in between"
        )
    if len(series) == 3:
        found.append(
            "one left-out snapshot only: the profile rests on a single time; it cannot tell a wrong noise level from a "
            "wrong drift of the prior"
        )
    return found
