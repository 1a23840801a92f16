"""Particles that move with their neighbours: the correlation from unlabelled frames, and links that allow for it."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.spatial.distance import cdist

import ensembles
from ensembles.checks import InputError

COUNT, SPACING = 250, 2.5  # particles in the plane, and their spacing in lengths of the noise
PRIOR = ensembles.Brownian(diffusion=0.5)  # unit variance over unit time


def frames(correlation, seed, reach=12.0):
    """Two frames whose displacements have unit variance and the correlation exp(-r²/2 reach²) times the given one."""
    rng = np.random.default_rng(seed)
    start = rng.random((COUNT, 2)) * SPACING * np.sqrt(COUNT)
    covariance = correlation * np.exp(-0.5 * cdist(start, start, "sqeuclidean") / reach**2)
    covariance += (1.0 - correlation + 1e-9) * np.eye(COUNT)
    end = start + np.linalg.cholesky(covariance) @ rng.normal(size=(COUNT, 2))
    order = rng.permutation(COUNT)
    return ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, end[order]]), np.argsort(order)


def measured(series, **options):
    links = ensembles.link_particles(series, PRIOR)[0]
    return ensembles.neighbour_correlation(links, series, PRIOR, **options)


@pytest.mark.parametrize("correlation", [0.0, 0.3, 0.6])
def test_the_correlation_is_found_without_labels(correlation):
    found = [measured(frames(correlation, seed)[0]) for seed in range(8)]
    values, errors = np.array([[one.value, one.standard_error] for one in found]).T
    # A field of one reach in a window of three has few independent parts: its own scatter is added to the errors.
    scatter = np.hypot(values.std(ddof=1), np.sqrt(np.mean(errors**2))) / np.sqrt(values.size)
    assert abs(values.mean() - correlation) < 4.0 * scatter + 0.03  # the nearest are not at distance 0: up to 2 % less
    # The control: the error is small enough to tell the three cases apart.
    assert 4.0 * scatter + 0.03 < 0.3


def test_pairs_that_cannot_be_exchanged_do_not_count():
    # Motion is shared over a short distance only: what all neighbours share is less than what the nearest do.
    found = []
    for seed in range(8):
        series, own = frames(0.8, seed, reach=2.0)
        start = series.clouds[0]
        moved = series.clouds[1][own] - start
        apart = cdist(start, start)
        near = (apart > 0.0) & (apart <= 2.0)
        labelled = float((moved @ moved.T)[near].mean() / 2.0)
        found.append((labelled, measured(series).value, measured(series, reach=100.0).value))
    labelled, near, far = np.array(found).T
    assert abs((near - labelled).mean()) < 4.0 * (near - labelled).std(ddof=1) / np.sqrt(8.0) + 0.03
    assert (near - far).mean() > 4.0 * (near - far).std(ddof=1) / np.sqrt(8.0)
    assert near.mean() > far.mean() + 0.05


def test_independent_particles_stay_within_their_errors():
    z = np.array([(one := measured(frames(0.0, seed)[0])).value / one.standard_error for seed in range(20, 36)])
    assert np.abs(z).max() < 4.5
    assert abs(z.mean()) < 4.0 / np.sqrt(z.size)


def reliability_and_score(correlation_used, seeds, correlation):
    said, so, score = [], [], []
    for seed in seeds:
        series, own = frames(correlation, seed)
        used = measured(series).value if correlation_used is None else correlation_used
        options = ensembles.LinkOptions(correlation=max(used, 0.0))
        table = ensembles.link_particles(series, PRIOR, options=options)[0].matrix()
        middle = (table > 0.4) & (table < 0.9)
        said.append(table[middle])
        so.append((own[:, None] == np.arange(COUNT))[middle])
        score.append(np.log(np.maximum(table[np.arange(COUNT), own], 1e-4)).mean())
    said, so = np.concatenate(said), np.concatenate(so)
    return float(so.mean() - said.mean()), float(np.sqrt(np.mean(said * (1 - said)) / said.size)), float(np.mean(score))


def test_links_that_allow_for_it_are_reliable_and_the_others_too_unsure():
    departure, error, score = reliability_and_score(None, range(8), 0.6)
    assert abs(departure) < 4.0 * error
    blind, blind_error, blind_score = reliability_and_score(0.0, range(8), 0.6)
    assert blind > 5.0 * blind_error
    assert score > blind_score


def test_a_correlation_is_less_variance_for_links_and_nothing_else():
    series, _ = frames(0.3, 3)
    told = ensembles.link_particles(series, PRIOR, options=ensembles.LinkOptions(correlation=0.36))[0]
    with pytest.warns(RuntimeWarning, match="times as far"):  # as they do: the prior says less than there was
        less = ensembles.link_particles(series, ensembles.Brownian(diffusion=0.5 * 0.64))[0]
    assert_allclose(told.matrix(), less.matrix(), atol=1e-12)
    # A shift that all share leaves links alone. (Which particles go into a cluster may depend on it.)
    moved = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [series.clouds[0], series.clouds[1] + [0.7, -0.4]])
    options = ensembles.LinkOptions(tolerance=1e-9, cluster=0)
    still, shifted = (ensembles.link_particles(s, PRIOR, options=options)[0].matrix() for s in (series, moved))
    assert_allclose(shifted, still, atol=1e-5)


def test_periodic_frames_give_the_same_answer_wrapped():
    series, _ = frames(0.4, 5)
    side = SPACING * np.sqrt(COUNT)
    box = ensembles.Box(
        np.full(2, -20.0), np.full(2, side + 40.0)
    )  # the clouds keep clear of its edge: nothing changes
    prior = ensembles.Brownian(diffusion=0.5, box=box)
    found = ensembles.neighbour_correlation(ensembles.link_particles(series, prior)[0], series, prior)
    assert_allclose(found.value, measured(series).value, atol=2e-3)
    # Moved by half a period they cross the edge, and no distance changes.
    clouds = [box.fold(cloud + 0.5 * (side + 40.0)) for cloud in series.clouds]
    wrapped = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], clouds)
    again = ensembles.neighbour_correlation(ensembles.link_particles(wrapped, prior)[0], wrapped, prior)
    assert_allclose(again.value, found.value, atol=2e-3)


def test_messages():
    with pytest.raises(InputError, match=r"correlation must lie in \[0, 1\); it is 1.0; use 0"):
        ensembles.LinkOptions(correlation=1.0)
    with pytest.raises(InputError, match="move independently; links.correlation is 0.2; give it to link_particles"):
        ensembles.EstimateOptions(links=ensembles.LinkOptions(correlation=0.2))
    with pytest.raises(InputError, match="move independently; links.hold_spread is 1; give it to link_particles"):
        ensembles.EstimateOptions(links=ensembles.LinkOptions(hold_spread=True))
    with pytest.raises(
        InputError, match="hold_spread chooses the variance of links by itself; correlation is 0.2; leave"
    ):
        ensembles.LinkOptions(correlation=0.2, hold_spread=True)
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [np.arange(14.0)[:, None], np.arange(14.0)[:, None]])
    links = ensembles.link_particles(series, PRIOR)[0]
    with pytest.raises(InputError, match=r"too few neighbours; \d+ pair\(s\) of linked particles where 40 are needed"):
        ensembles.neighbour_correlation(links, series, PRIOR, neighbours=2)
    with pytest.raises(InputError, match=r"too few neighbours; 0 pair\(s\)"):
        ensembles.neighbour_correlation([], series, PRIOR)
