"""Argon atoms with hidden labels, and particles in a trap: what links and estimates from unlabelled frames are worth.

Run it to print the tables (scripts/links); tests/test_estimate.py holds small versions of them.
"""

from __future__ import annotations

import sys
import time
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.spatial import cKDTree

import ensembles
from ensembles.links.estimated_prior import PriorEstimate
from ensembles.schrodinger.assignment import AssignmentGraph, propagate_beliefs
from ensembles.schrodinger.clusters import sum_clusters
from ensembles.schrodinger.exact_assignment import exact_assignment

DATA = Path(__file__).resolve().parents[1] / "data" / "argon_diffusion.npz"
FRAME = 10.0  # ps between frames
START_STEP = 8  # frames between the starts of two draws, so that draws of all atoms differ too
UNITS = {"time": "ps", "length": "Å"}
DIFFUSION = 0.205  # Å²/ps: data/README.md
FLOOR = 1e-4  # probability below which a log score counts no further


@dataclass(frozen=True)
class Draw:
    """One draw of tagged atoms and one gap: what was estimated without labels, and what the labels say.

    Attributes
    ----------
    true, estimated, error : D in Å²/ps from the labels (mean squared displacement), from unlabelled frames, and its
        standard error; identified is false where the frames do not tell D.
    factor : of the variance that told links apart: 1 - c, c the correlation of neighbours' displacements measured without
        labels, or that of a held spread.
    right : share of right links by method: most probable (least squares), most expected, nearest neighbour.
    probability, linked : of pooled links: what was said, and whether it is so, for links, propagation, coupling.
    log_score : mean log probability of the true link by method.
    """

    count: int
    gap: float
    true: float
    estimated: float
    error: float
    identified: bool
    factor: float
    entropy: float
    right: dict[str, float]
    pooled: dict[str, tuple[np.ndarray, np.ndarray]]
    log_score: dict[str, float]


def read_positions() -> tuple[np.ndarray, np.ndarray]:
    """Unwrapped positions (101, 1000, 3) and mean box edges (3,) in Å."""
    with np.load(DATA, allow_pickle=False) as archive:
        return archive["unwrapped_A"].astype(float), archive["box_A"].mean(axis=0)


def study(
    count: int,
    steps: int,
    seeds: Sequence[int],
    *,
    wrapped: bool = False,
    independent: bool = False,
    diffusion: float | None = None,
) -> list[Draw]:
    """For every seed tag `count` atoms, forget which is which, and compare `steps` frames later.

    A first look at the links of all draws gives the correlation of neighbours' displacements, as a film would, whose labels
    are not known either; where it stands out from its error, the links are made again with it. `wrapped` keeps only the
    place in the box; `independent` replaces the atoms' moves by independent Gaussian ones. With a `diffusion` known from
    elsewhere, links are made with it, their spread held, and the estimate is only reported.
    """
    looks = [_first_look(two_frames(count, steps, seed, wrapped=wrapped, independent=independent)) for seed in seeds]
    if diffusion is not None:
        known = [ensembles.Brownian(diffusion=diffusion, box=look.frames.box) for look in looks]
        return [_compare(look, prior, ensembles.LinkOptions(hold_spread=True)) for look, prior in zip(looks, known)]
    found = np.array([look.correlation for look in looks])
    error = found.std(ddof=1) / np.sqrt(found.size) if found.size > 1 else np.inf
    together = float(found.mean()) if found.mean() > 2.0 * error else 0.0
    options = ensembles.LinkOptions(correlation=together)
    return [_compare(look, look.estimate.prior, options) for look in looks]


@dataclass(frozen=True)
class Frames:
    """Two unlabelled frames; own: the row of each earlier particle in the later one; true: D by the labels, in Å²/ps."""

    series: ensembles.SnapshotSeries
    own: np.ndarray
    box: ensembles.Box | None
    gap: float
    true: float


def two_frames(count: int, steps: int, seed: int, *, wrapped: bool = False, independent: bool = False) -> Frames:
    """Tag `count` atoms, and shuffle them in the frame `steps` later; `wrapped` and `independent` as for `study`."""
    positions, edges = read_positions()
    rng = np.random.default_rng(seed)
    tagged = rng.choice(positions.shape[1], count, replace=False)
    first = START_STEP * seed
    start, end = positions[first, tagged], positions[first + steps, tagged]
    gap = FRAME * steps
    if independent:
        end = start + rng.normal(size=start.shape) * np.sqrt(2.0 * DIFFUSION * gap)
    true = float(((end - start) ** 2).mean() / (2.0 * gap))
    box = None
    if wrapped:
        box = ensembles.Box(np.zeros(3), edges)
        start, end = box.fold(start), box.fold(end)
    order = rng.permutation(count)
    series = ensembles.SnapshotSeries.from_arrays([0.0, gap], [start, end[order]], units=UNITS)
    return Frames(series, np.argsort(order), box, gap, true)


@dataclass(frozen=True)
class Look:
    """Two frames, the prior estimated from them, and what the first links say of common motion."""

    frames: Frames
    estimate: PriorEstimate
    correlation: float


def _first_look(frames: Frames) -> Look:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        estimate = ensembles.estimate_prior(frames.series, "brownian", box=frames.box)
        links = ensembles.link_particles(frames.series, estimate.prior)
    return Look(frames, estimate, ensembles.neighbour_correlation(links, frames.series, estimate.prior).value)


def _compare(look: Look, prior: ensembles.Brownian, options: ensembles.LinkOptions) -> Draw:
    estimate, frames = look.estimate, look.frames
    series, own, box = frames.series, frames.own, frames.box
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        links = ensembles.link_particles(series, prior, options=options)[0]
    coupling = ensembles.fit_bridge(series, prior, tolerance=1e-4).coupling(0).matrix() * own.size
    count = own.size
    rows = np.arange(count)
    said = {"links": links.matrix(), "coupling": coupling}
    said["propagation"] = np.zeros_like(coupling)
    said["propagation"][links.graph.rows, links.graph.columns] = links.propagated
    tree = cKDTree(series.clouds[1], boxsize=None if box is None else box.lengths)
    nearest = tree.query(series.clouds[0])[1]
    right = {
        "most probable": float((links.assignment == own).mean()),
        "most expected": float((links.expected_assignment == own).mean()),
        "nearest": float((nearest == own).mean()),
    }
    # The kindest use of nearest neighbours: its own share of right links as the probability, the rest shared by all.
    share = min(max(right["nearest"], FLOOR), 1.0 - FLOOR)
    chance = np.where(nearest == own, share, (1.0 - share) / (count - 1))
    scores = {name: float(np.log(np.maximum(table[rows, own], FLOOR)).mean()) for name, table in said.items()}
    scores["nearest"] = float(np.log(np.maximum(chance, FLOOR)).mean())
    pooled = {}
    for name, table in said.items():
        shown = table > 1e-3
        pooled[name] = (table[shown], (own[:, None] == np.arange(count))[shown])
    return Draw(
        count, frames.gap, frames.true, float(estimate.prior.diffusion), estimate.standard_errors["diffusion"],
        estimate.identified, links.variance_factor, float(links.entropy.mean()), right, pooled, scores,
    )  # fmt: skip


def reliability(draws: list[Draw], name: str, bins: int = 10) -> np.ndarray:
    """Pooled links by what was said of them: (bins, 3) count, mean probability said, share that is so; NaN where empty."""
    said = np.concatenate([draw.pooled[name][0] for draw in draws])
    so = np.concatenate([draw.pooled[name][1] for draw in draws])
    which = np.minimum((said * bins).astype(int), bins - 1)
    counts = np.bincount(which, minlength=bins)
    with np.errstate(invalid="ignore"):
        means = [np.bincount(which, weights=values, minlength=bins) / counts for values in (said, so)]
    return np.column_stack([counts, *means])


def estimate_table(groups: dict[str, list[Draw]]) -> str:
    """Estimated against true diffusion coefficients, and accuracy, one line a group of draws."""
    lines = [
        f"{'group':<22}{'D true':>9}{'D est.':>9}{'median |ratio-1|':>18}{'within 95 %':>13}{'told':>6}{'factor':>10}"
        f"{'entropy/log n':>15}"
        f"{'most probable':>15}{'most expected':>15}{'nearest':>9}{'log score links':>17}{'propag.':>9}{'n pi':>9}{'nearest':>9}"
    ]
    for name, draws in groups.items():
        ratio = np.array([draw.estimated / draw.true for draw in draws])
        spread = np.array([1.96 * draw.error / draw.estimated for draw in draws])
        right = {key: np.mean([draw.right[key] for draw in draws]) for key in draws[0].right}
        scores = {key: np.mean([draw.log_score[key] for draw in draws]) for key in draws[0].log_score}
        lines.append(
            f"{name:<22}{np.median([d.true for d in draws]):>9.4f}{np.median([d.estimated for d in draws]):>9.4f}"
            f"{100 * np.median(np.abs(ratio - 1)):>16.1f} %{np.mean(np.abs(np.log(ratio)) < spread):>13.0%}"
            f"{sum(d.identified for d in draws):>3}/{len(draws):<2}{np.mean([d.factor for d in draws]):>10.3f}"
            f"{np.mean([d.entropy / np.log(d.count) for d in draws]):>15.2f}"
            f"{right['most probable']:>15.3f}{right['most expected']:>15.3f}{right['nearest']:>9.3f}"
            f"{scores['links']:>17.3f}{scores['propagation']:>9.3f}{scores['coupling']:>9.3f}{scores['nearest']:>9.3f}"
        )
    return "\n".join(lines)


def reliability_table(draws: list[Draw]) -> str:
    """Reliability of links, of propagation alone and of the Schrödinger coupling, pooled."""
    lines = [f"{'said':<12}" + "".join(f"{name + ': links':>20}{'said':>8}{'so':>8}" for name in draws[0].pooled)]
    tables = {name: reliability(draws, name) for name in draws[0].pooled}
    for k in range(10):
        cells = "".join(f"{int(t[k, 0]):>20}{t[k, 1]:>8.3f}{t[k, 2]:>8.3f}" for t in tables.values())
        lines.append(f"{k / 10:.1f} to {(k + 1) / 10:.1f}  " + cells)
    return "\n".join(lines)


def trap_recovery(repeats: int, count: int = 300, seed: int = 0, gap: float = 0.2) -> dict[str, list[bool]]:
    """Share of 95 % intervals that hold the true rate and D of an Ornstein-Uhlenbeck process, from unlabelled frames."""
    rate, diffusion = 0.5, 1.0
    prior = ensembles.OrnsteinUhlenbeck(rate=rate, centre=[1.0, -2.0], diffusion=diffusion)
    inside: dict[str, list[bool]] = {"rate": [], "diffusion": []}
    for repeat in range(repeats):
        rng = np.random.default_rng([seed, repeat])
        # Released from a wider cloud than the stationary one, so that one gap shows the rate.
        clouds = [rng.normal(size=(count, 2)) * 12.0 + [1.0, -2.0]]
        clouds += [prior.transition(gap, 2).sample(clouds[0], rng)]
        series = ensembles.SnapshotSeries.from_arrays([0.0, gap], [clouds[0], rng.permutation(clouds[1])])
        estimate = ensembles.estimate_prior(series, "ornstein-uhlenbeck")
        for name, truth in (("rate", rate), ("diffusion", diffusion)):
            low, high = estimate.interval(name)
            inside[name].append(bool(low <= truth <= high))
    return inside


def few_particles(problems: int = 50) -> str:
    """Belief propagation and clusters of 6 against enumeration of 3 to 12 particles, by noise in units of the spacing."""
    lines = [
        f"{'noise':>6}{'problems':>10}{'link error, propagation: mean':>31}{'largest':>9}{'clusters of 6: mean':>21}"
        f"{'largest':>9}{'exact - Bethe: least':>22}{'mean':>8}{'most':>8}{'estimated, 6: mean':>20}{'most over n/2 log 2':>21}"
    ]
    for noise in (0.1, 0.3, 1.0, 3.0):
        rng = np.random.default_rng(int(10 * noise))
        rows = []
        for _ in range(problems):
            n = int(rng.integers(3, 13))
            start = rng.random((n, 2)) * np.sqrt(n)
            end = start + noise * rng.standard_normal((n, 2))
            log_weights = -0.5 * ((start[:, None] - end[None]) ** 2).sum(axis=2) / noise**2
            exact, links, _, _ = exact_assignment(log_weights)
            posterior = propagate_beliefs(AssignmentGraph.dense(log_weights), tolerance=1e-6)
            sums = sum_clusters(posterior, limit=6)
            errors = [float(np.abs(p - links.ravel()).max()) for p in (posterior.probabilities, sums.probabilities)]
            excess = exact - posterior.log_evidence
            rows.append([*errors, excess, sums.log_evidence_correction, excess / (0.5 * n * np.log(2.0))])
        found = np.array(rows)
        mean, most = found.mean(axis=0), found.max(axis=0)
        lines.append(
            f"{noise:>6g}{problems:>10}{mean[0]:>31.4f}{most[0]:>9.4f}{mean[1]:>21.4f}{most[1]:>9.4f}"
            f"{found[:, 2].min():>22.1e}{mean[2]:>8.3f}{most[2]:>8.3f}{mean[3]:>20.3f}{most[4]:>21.3f}"
        )
    return "\n".join(lines)


def timing(count: int) -> str:
    """Link `count` simulated particles at a spacing of 3 noise lengths in two dimensions."""
    import resource

    rng = np.random.default_rng(0)
    start = rng.random((count, 2)) * 3.0 * np.sqrt(count)
    moved = start + rng.standard_normal((count, 2))
    order = rng.permutation(count)
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, moved[order]])
    began, busy = time.perf_counter(), time.process_time()
    links = ensembles.link_particles(series, ensembles.Brownian(diffusion=0.5))[0]
    took, busy = time.perf_counter() - began, time.process_time() - busy
    right = int((links.expected_assignment == np.argsort(order)).sum())
    c = links.certificate
    own = np.asarray(links.sparse()[np.arange(count), np.argsort(order)]).ravel()
    rounds, end = c.propagation.iterations, "" if right < 0 else f", {right} right in the most expected assignment"
    return (
        f"{count} x {count}: {took:.1f} s ({busy:.1f} s of processors), {links.graph.edges} links kept, {rounds} rounds, "
        f"certified: {c.converged}; sums off by {c.propagation.row_error:.1e}, after balancing {c.row_error:.1e}; two formulas "
        f"for the log evidence ({links.log_evidence:.1f}) differ by {c.propagation.evidence_difference:.1e}; left out "
        f"{c.left_out:.1e}; mean probability of the true link {own.mean():.4f}{end}; peak memory "
        f"{resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6:.2f} GB"
    )


def argon(draws: int = 10) -> None:
    """Print the argon tables, a line as soon as its draws are done."""
    groups: dict[str, list[Draw]] = {}
    print("Argon with hidden labels; D in Å²/ps; medians over draws; shares of right links; mean log probability")
    for count, steps in [(n, k) for n in (50, 200, 1000) for k in (1, 3, 10)]:
        name = f"{count} atoms, {FRAME * steps:g} ps"
        groups[name] = study(count, steps, range(draws))
        table = estimate_table({name: groups[name]}).splitlines()
        print("\n".join(table if len(groups) == 1 else table[1:]), flush=True)
        if steps == 10:
            chosen = [draw for draws in groups.values() for draw in draws]
            print(f"\nReliability of all links so far ({len(chosen)} draws)\n{reliability_table(chosen)}\n", flush=True)
    liquid(draws)


def liquid(draws: int = 10) -> None:
    """All 1,000 atoms at their places in the periodic box: what their frames tell, and links by the D of 200 tagged atoms."""
    print("Memory of the density: correlation of its modes between frames, all atoms in the box\n" + density_memory())
    for steps in (1, 3):
        tagged = float(np.median([draw.estimated for draw in study(200, steps, range(draws))]))
        found = study(1000, steps, range(draws), wrapped=True, diffusion=tagged)
        name = f"1000 wrapped, {FRAME * steps:g} ps"
        print(f"\nLinks by D = {tagged:.4f}, from 200 tagged atoms without labels, spread held")
        print(f"{estimate_table({name: found})}\n\nReliability\n{reliability_table(found)}\n", flush=True)


def density_memory(largest: float = 2.6, width: float = 0.4) -> str:
    """Correlation of density modes ρ_k between frames of the whole liquid, by wavenumber, with the value for independent moves.

    Independent Gaussian moves give exp(-k² D t) at every k. What two frames tell of D without labels is in such correlations;
    where all are 0, the places of one frame say nothing of those of the next.
    """
    positions, edges = read_positions()
    order = np.arange(-int(largest * edges[0] / (2 * np.pi)) - 1, int(largest * edges[0] / (2 * np.pi)) + 2)
    waves = np.stack(np.meshgrid(order, order, order, indexing="ij"), axis=-1).reshape(-1, 3)
    k = np.linalg.norm(2.0 * np.pi * waves / edges, axis=1)
    half = (waves @ [1e6, 1e3, 1.0] > 0) & (k < largest)  # of k and -k one is enough
    modes = np.empty((len(positions), int(half.sum())), dtype=complex)
    for row, frame in zip(modes, positions):
        factors = np.exp(2j * np.pi * frame[:, :, None] / edges[:, None] * order)
        modes_of_all = np.einsum("na,nb,nc->abc", *factors.transpose(1, 0, 2), optimize=True)
        row[:] = modes_of_all.ravel()[half] / np.sqrt(len(frame))
    lines = [
        f"{'k [1/Å]':>9}{'modes':>7}{'S(k)':>8}"
        + "".join(f"{f'{FRAME * s:g} ps':>9}{'± 1 s.e.':>10}{'indep.':>9}" for s in (1, 3))
    ]
    for low in np.arange(width, largest - 0.5 * width, width):
        chosen = (k[half] >= low) & (k[half] < low + width)
        structure = float((np.abs(modes[:, chosen]) ** 2).mean())
        middle = float(k[half][chosen].mean())
        cells = ""
        for steps in (1, 3):
            each = (modes[:-steps, chosen] * modes[steps:, chosen].conj()).real.mean(axis=1) / structure
            free = np.exp(-(middle**2) * DIFFUSION * FRAME * steps)
            cells += f"{each.mean():>9.4f}{each.std(ddof=1) / np.sqrt(each.size):>10.4f}{free:>9.4f}"
        lines.append(f"{middle:>9.2f}{int(chosen.sum()):>7}{structure:>8.3f}{cells}")
    return "\n".join(lines)


def control(draws: int = 10) -> None:
    """Print the same for independent Gaussian moves from the same places: what holds when the prior does."""
    groups = {
        f"{count} {'wrapped' if wrapped else 'simulated'}, {FRAME * steps:g} ps": study(
            count, steps, range(repeats), wrapped=wrapped, independent=True
        )
        for count, steps, wrapped, repeats in ((200, 1, False, draws), (200, 3, False, draws), (1000, 1, True, 3))
    }
    print("Control: independent Gaussian moves from the same places")
    print(estimate_table(groups))
    pooled = [draw for draws in groups.values() for draw in draws]
    print(f"\nReliability, control ({len(pooled)} draws)\n{reliability_table(pooled)}\n", flush=True)


def main(arguments: list[str]) -> None:
    """Print one part, or all: few, argon, control, trap, timing; liquid is the last part of argon by itself."""
    parts = arguments or ["few", "argon", "control", "trap", "timing"]
    if "few" in parts:
        print(few_particles(), flush=True)
    if "argon" in parts:
        argon()
    if "liquid" in parts:
        liquid()
    if "control" in parts:
        control()
    if "trap" in parts:
        inside = trap_recovery(100)
        for name, held in inside.items():
            print(
                f"Trap, 300 unlabelled particles: the 95 % interval of {name} holds the truth in {sum(held)} of {len(held)}"
            )
    if "timing" in parts:
        timing(100)  # compiles
        for count in (5_000, 100_000):
            print(timing(count), flush=True)


if __name__ == "__main__":
    main(sys.argv[1:])
