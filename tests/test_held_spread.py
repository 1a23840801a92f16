"""Links whose mean squared displacement is held to the prior's, and particles that are crowded and keep apart."""

import warnings

import links_study
import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.optimize import brentq

import ensembles
from ensembles.checks import ComputationError
from ensembles.schrodinger.exact_assignment import exact_assignment

HELD = ensembles.LinkOptions(hold_spread=True)


def frames(count, side, seed, box=None, dimension=2):
    """Independent particles that move by one noise length between two frames."""
    rng = np.random.default_rng(seed)
    start = side * rng.random((count, dimension))
    end = rng.permutation(start + rng.normal(size=start.shape))
    return ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, end if box is None else box.fold(end)])


@pytest.mark.parametrize("boundary", [None, "periodic", "reflecting"])
def test_at_the_largest_evidence_nothing_is_left_to_hold(boundary):
    box = None if boundary is None else ensembles.Box(np.zeros(2), np.full(2, 15.0), boundary)
    series = frames(80, 15.0, 1, box)
    prior = ensembles.estimate_prior(series, "brownian", box=box).prior
    links = ensembles.link_particles(series, prior, options=HELD)[0]
    assert_allclose(links.variance_factor, 1.0, atol=0.02)
    free = ensembles.link_particles(series, prior)[0]
    assert free.variance_factor == 1.0
    assert_allclose(links.matrix(), free.matrix(), atol=0.02)


def test_few_particles_against_enumeration():
    series = frames(7, 2.5, 3)
    squares = ((series.clouds[0][:, None] - series.clouds[1][None]) ** 2).sum(axis=2)

    def mean_square(factor, diffusion):
        return (exact_assignment(-0.25 * squares / (factor * diffusion))[1] * squares).sum() / 7

    diffusion = mean_square(1.4, 0.5) / 4.0  # one that a factor within reach brings about: 2 d D t = mean square
    factor = brentq(lambda s: mean_square(s, diffusion) - 4.0 * diffusion, 0.5, 2.0)
    links = ensembles.link_particles(series, ensembles.Brownian(diffusion=diffusion), options=HELD)[0]
    assert abs(factor - 1.0) > 0.05
    assert_allclose(links.variance_factor, factor, rtol=2e-3)
    assert_allclose((links.matrix() * squares).sum() / 7, 4.0 * diffusion, rtol=2e-3)


def test_every_gap_has_its_own_factor_and_the_localisation_error_is_left_alone():
    rng = np.random.default_rng(5)
    clouds = [8.0 * rng.random((60, 2))]
    for length in (1.0, 1.3):
        clouds.append(rng.permutation(clouds[-1] + length * rng.normal(size=(60, 2))))
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0, 2.0], clouds)
    options = {"localisation": 0.3, "options": HELD}
    first, second = ensembles.link_particles(series, ensembles.Brownian(diffusion=0.55), **options)
    assert first.variance_factor != second.variance_factor
    alone = ensembles.link_particles(series.subset([1, 2]), ensembles.Brownian(diffusion=0.55), **options)[0]
    assert_allclose(alone.variance_factor, second.variance_factor, rtol=1e-12)


@pytest.mark.parametrize(("diffusion", "word"), [(5.0, "less"), (0.02, "more")])
def test_a_diffusion_that_the_frames_contradict_is_refused(diffusion, word):
    series = frames(60, 60.0, 2)
    with pytest.raises(
        ComputationError, match=f"between t = 0 and t = 1 cannot be held .* still move {word} than it says"
    ):
        ensembles.link_particles(series, ensembles.Brownian(diffusion=diffusion), options=HELD)


def test_links_of_a_whole_liquid_are_reliable_when_held():
    # Real data: data/README.md. D = 0.217 Å²/ps is the labelled mean of these frames at 10 ps; scripts/links liquid takes it
    # from tagged atoms without labels, and prints ten draws.
    draws = []
    for hold in (True, False):
        looks = [links_study.two_frames(1000, 1, seed, wrapped=True) for seed in range(3)]
        said, so = [], []
        for look in looks:
            prior = ensembles.Brownian(diffusion=0.205, box=look.box)
            options = ensembles.LinkOptions(hold_spread=hold)
            table = ensembles.link_particles(look.series, prior, options=options)[0].matrix()
            sure = table > 0.3
            said.append(table[sure])
            so.append((look.own[:, None] == np.arange(1000))[sure])
        said, so = np.concatenate(said), np.concatenate(so)
        draws.append((said.mean() - so.mean(), np.sqrt((said * (1 - said)).mean() / said.size)))
    (held, error), (free, free_error) = draws
    assert abs(held) < max(3.0 * error, 0.05)
    assert free > held + error and free > 2.0 * free_error


def test_crowding_is_told_from_independent_moves():
    # A jittered lattice in both frames keeps apart; the same lattice moved independently does not in the second frame.
    rng = np.random.default_rng(0)
    box = ensembles.Box(np.zeros(2), np.full(2, 14.0))
    lattice = np.stack(np.meshgrid(np.arange(14.0), np.arange(14.0)), axis=-1).reshape(-1, 2)
    start, kept, moved = (box.fold(lattice + size * rng.normal(size=lattice.shape)) for size in (0.08, 0.08, 0.6))
    with pytest.warns(RuntimeWarning, match="keep apart and are crowded; .* LinkOptions\\(hold_spread=True\\)"):
        series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, rng.permutation(kept + 0.35) % 14.0])
        crowded = ensembles.estimate_prior(series, "brownian", box=box)
    assert crowded.crowded and crowded.has_maximum and not crowded.identified
    assert "NOT identified" in repr(crowded)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, rng.permutation(moved)])
        free = ensembles.estimate_prior(series, "brownian", box=box)
    assert free.identified
    low, high = free.interval("diffusion", 0.999)
    assert low < 0.6**2 / 2 < high


def test_displacements_to_the_nearest_image():
    box = ensembles.Box([0.0, 0.0, 0.0], [10.0, 4.0, 3.0], ["periodic", "reflecting", "open"])
    assert_allclose(box.shortest([[9.0, 3.0, -7.0], [-5.5, 0.0, 0.0]]), [[-1.0, 3.0, -7.0], [4.5, 0.0, 0.0]])
