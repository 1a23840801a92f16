"""Links between frames of the same particles: laws, enumeration, missed and new particles, chains, refusals."""

import warnings
from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.optimize import linear_sum_assignment

import ensembles
from ensembles.links import link
from ensembles.links.candidates import LinkOptions
from ensembles.links.law import link_law
from ensembles.schrodinger.exact_assignment import exact_assignment


def frames(count, noise, seed=0, dimension=2, steps=1):
    """Frames at one particle a unit volume, shuffled; and for each frame the row of every particle of the first one."""
    rng = np.random.default_rng(seed)
    clouds, own = [rng.random((count, dimension)) * count ** (1 / dimension)], [np.arange(count)]
    current = clouds[0]
    for _ in range(steps):
        current = current + noise * rng.standard_normal(current.shape)
        order = rng.permutation(count)
        clouds.append(current[order])
        own.append(np.argsort(order))
    return ensembles.SnapshotSeries.from_arrays(np.arange(steps + 1.0), clouds), own


def prior(noise):
    return ensembles.Brownian(diffusion=0.5 * noise**2)


@pytest.mark.parametrize("count", [2, 7, 12])
def test_few_particles_are_enumerated(count):
    series, _ = frames(count, 0.5, seed=count)
    links = ensembles.link_particles(series, prior(0.5))[0]
    step = prior(0.5).transition(1.0, 2)
    log_weights = np.array([step.log_density(x[None], series.clouds[1]) for x in series.clouds[0]])
    log_total, expected, _, _ = exact_assignment(log_weights)
    assert links.method == "enumeration"
    assert_allclose(links.matrix(), expected, atol=1e-8)
    assert_allclose(links.log_evidence, log_total, atol=1e-8)
    assert links.log_evidence_error == 0.0


def test_the_most_probable_assignment_is_least_squares():
    series, own = frames(80, 0.3)
    links = ensembles.link_particles(series, prior(0.3))[0]
    squares = ((series.clouds[0][:, None] - series.clouds[1][None]) ** 2).sum(axis=2)
    assert_allclose(links.assignment, linear_sum_assignment(squares)[1])
    assert_allclose(links.matrix().sum(axis=0), 1.0, atol=1e-3)
    assert_allclose(links.matrix().sum(axis=1), 1.0, atol=1e-3)
    p = links.matrix()
    rows = np.arange(80)
    assert_allclose(links.expected_right_links, p[rows, links.assignment].sum(), rtol=1e-12)
    best = links.expected_assignment
    assert sorted(best) == list(range(80))
    assert p[rows, best].sum() >= links.expected_right_links - 1e-9
    right = (best == own[1]).sum()
    assert abs(right - p[rows, best].sum()) < 6 * np.sqrt((p[rows, best] * (1 - p[rows, best])).sum() + 1)


def test_entropy_and_alternatives():
    series, _ = frames(60, 0.5, seed=3)
    links = ensembles.link_particles(series, prior(0.5))[0]
    p = links.matrix()
    expected = -np.where(p > 0, p * np.log(np.where(p > 0, p, 1.0)), 0.0).sum(axis=1)
    assert_allclose(links.entropy, expected, atol=1e-12)
    table = links.top_alternatives(2)
    assert list(table.columns) == ["source", "rank", "target", "probability"]
    assert_allclose(table.loc[table["rank"] == 1, "probability"], p.max(axis=1))
    second = np.sort(p, axis=1)[:, -2]
    assert_allclose(table.loc[table["rank"] == 2, "probability"], second)


def test_sparse_and_dense_graphs_agree():
    series, _ = frames(300, 0.35, seed=5)
    law = link_law(prior(0.35), 1.0, series.clouds)
    alone = (np.full(300, -np.inf), np.full(300, -np.inf))
    options = LinkOptions(tolerance=1e-5)
    from ensembles.links import candidates

    matrix, left = candidates._from_matrix(law, alone, options, None)
    trees, left_trees = candidates._from_trees(law, alone, options)
    assert max(left, left_trees) < 1e-6
    whole = np.zeros((300, 300)), np.zeros((300, 300))
    for table, found in zip(whole, (matrix, trees)):
        table[found.graph.rows, found.graph.columns] = found.probabilities
    assert trees.graph.edges < 0.5 * 300**2
    assert_allclose(whole[0], whole[1], atol=2e-4)


def test_a_periodic_box_links_across_its_face():
    box = ensembles.Box([0.0, 0.0], [10.0, 10.0])
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [[[9.9, 5.0], [5.0, 5.0]], [[5.1, 5.0], [0.1, 5.0]]])
    links = ensembles.link_particles(series, ensembles.Brownian(0.05, box=box))[0]
    assert links.assignment.tolist() == [1, 0]
    assert links.matrix()[0, 1] > 0.999


def test_a_box_in_trees_and_in_matrices_is_the_same():
    rng = np.random.default_rng(0)
    box = ensembles.Box([0.0, 0.0], [20.0, 20.0], ["periodic", "reflecting"])
    start = rng.random((250, 2)) * 20
    end = box.fold(start + 0.4 * rng.standard_normal(start.shape))
    law = link_law(ensembles.Brownian(0.08, box=box), 1.0, (start, end))
    from ensembles.links import candidates

    alone = (np.full(250, -np.inf), np.full(250, -np.inf))
    found = [f(law, alone, LinkOptions(tolerance=1e-5), *extra)[0] for f, extra in (
        (candidates._from_matrix, (None,)), (candidates._from_trees, ()))]  # fmt: skip
    assert_allclose(found[0].log_evidence, found[1].log_evidence, atol=1e-3)


def test_missed_and_new_particles():
    rng = np.random.default_rng(2)
    truth = rng.random((150, 2)) * 40.0
    later = truth + 0.5 * rng.standard_normal(truth.shape)
    seen = [rng.random(150) < 0.8 for _ in range(2)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [truth[seen[0]], later[seen[1]]])
    links = ensembles.link_particles(series, prior(0.5), detection=0.8)[0]
    assert_allclose(links.matrix().sum(axis=1) + links.probability_left, 1.0, atol=1e-3)
    assert_allclose(links.matrix().sum(axis=0) + links.probability_new, 1.0, atol=1e-3)
    gone, fresh = ~seen[1][seen[0]], ~seen[0][seen[1]]
    # Particles that left are told from those that stayed: 6 standard errors of a difference of means are below 0.5.
    assert links.probability_left[gone].mean() > links.probability_left[~gone].mean() + 0.5
    assert links.probability_new[fresh].mean() > links.probability_new[~fresh].mean() + 0.5
    variance = (links.probability_left * (1 - links.probability_left)).sum()
    assert abs(gone.sum() - links.probability_left.sum()) < 6 * np.sqrt(variance + 1)
    number = np.cumsum(seen[1]) - 1
    own = np.where(seen[1], number, -1)[seen[0]]
    assert (links.assignment == own).mean() > 0.9
    assert (links.assignment[gone] == -1).mean() > 0.7


def test_few_missed_particles_against_enumeration():
    rng = np.random.default_rng(4)
    start, end = rng.normal(size=(5, 1)) * 3, rng.normal(size=(7, 1)) * 3
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [start, end])
    q, density = 0.7, 0.2
    links = ensembles.link_particles(series, prior(1.0), detection=q, birth_density=density)[0]
    step = prior(1.0).transition(1.0, 1)
    log_weights = np.array([step.log_density(x[None], end) for x in start]) + np.log(q)
    exact = exact_assignment(log_weights, (np.full(5, np.log(1 - q)), np.full(7, np.log(density))))
    assert_allclose(links.log_evidence, exact[0], atol=1e-7)
    assert_allclose(links.matrix(), exact[1], atol=1e-7)
    assert_allclose(links.probability_left, exact[2], atol=1e-7)
    assert_allclose(links.probability_new, exact[3], atol=1e-7)


def test_localisation_error_adds_to_the_variance():
    series, _ = frames(10, 0.5)
    blurred = ensembles.link_particles(series, ensembles.Brownian(0.1), localisation=0.3)[0]
    wider = ensembles.link_particles(series, ensembles.Brownian(0.1 + 0.3**2))[0]
    assert_allclose(blurred.matrix(), wider.matrix(), atol=1e-10)


def chain_of(series, noise):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        return ensembles.chain_links(series, prior(noise), ensembles.link_particles(series, prior(noise)))


def test_chained_links_are_the_sum_over_all_pairs_of_permutations():
    series, _ = frames(5, 0.6, steps=2)
    chain = chain_of(series, 0.6)
    first, second = (links.matrix() for links in chain.links)
    assert_allclose(chain.probabilities(0, 2).toarray(), first @ second, atol=1e-12)
    through = chain.through(1, 2, 3)
    assert_allclose(through, first[2] * second[:, 3] / (first[2] @ second[:, 3]), atol=1e-12)
    assert_allclose(chain.through(0, 2, 3), np.eye(5)[2], atol=1e-12)


def test_sampled_identities_and_paths_follow_the_chain():
    series, _ = frames(6, 0.5, steps=3)
    chain = chain_of(series, 0.5)
    count = 12_000
    members = chain.sample_identities(np.zeros(count, dtype=int), rng=1)
    for k in (1, 3):
        found = np.bincount(members[:, k], minlength=6) / count
        expected = chain.probabilities(0, k).toarray()[0]
        assert (np.abs(found - expected) < 6 * np.sqrt(expected * (1 - expected) / count) + 1e-9).all()
    paths = chain.sample_paths(60, np.linspace(0, 3, 13), rng=2)
    assert np.bincount(paths.members[:, 0]).tolist() == [10] * 6
    for k in range(4):
        assert_allclose(paths.positions[:, 4 * k], series.clouds[k][paths.members[:, k]], atol=1e-12)
    # Between two frames the prior is pinned: variance 2 D s (1 - s) a coordinate.
    many = chain.sample_paths(6000, [0.5], rng=3)
    middle = 0.5 * (series.clouds[0][many.members[:, 0]] + series.clouds[1][many.members[:, 1]])
    spread = (many.positions[:, 0] - middle).var()
    assert_allclose(spread, 0.25 * 0.25, rtol=6 * np.sqrt(2 / 12_000))


def test_paths_in_a_box_are_wrapped_and_unwrapped():
    box = ensembles.Box([0.0], [1.0])
    law = ensembles.Brownian(0.02, box=box)
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], [[[0.9], [0.4]], [[0.1], [0.5]], [[0.3], [0.6]]])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        chain = ensembles.chain_links(series, law, ensembles.link_particles(series, law))
    times = np.linspace(0, 2, 41)
    loose, folded = (chain.sample_paths(50, times, rng=0, unwrap=u) for u in (True, False))
    assert np.abs(np.diff(loose.positions, axis=1)).max() < 8 * np.sqrt(0.04 / 20)
    assert_allclose(box.fold(loose.positions), folded.positions)
    assert loose.positions.max() > 1.0


def test_particles_that_leave_end_their_paths():
    rng = np.random.default_rng(1)
    cloud = rng.random((20, 2)) * 20
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [cloud, cloud[:14] + 0.01])
    links = ensembles.link_particles(series, ensembles.Brownian(0.01), detection=0.7)
    chain = ensembles.chain_links(series, ensembles.Brownian(0.01), links)
    paths = chain.sample_paths(20, [0.0, 0.5, 1.0], rng=0)
    left = paths.members[:, 1] < 0
    assert sorted(paths.members[left, 0]) == list(range(14, 20))
    assert np.isnan(paths.positions[left, 1:]).all() and np.isfinite(paths.positions[~left]).all()


def test_ambiguous_chains_and_empty_links_are_said_to_be_so():
    series, _ = frames(30, 1.0, steps=2)
    links = ensembles.link_particles(series, prior(1.0))
    with pytest.warns(RuntimeWarning) as caught:
        ensembles.chain_links(series, prior(1.0), links)
    said = " ".join(str(w.message) for w in caught)
    assert "are ambiguous: the best link" in said and "identities are lost over the whole series" in said
    with pytest.warns(RuntimeWarning, match=r"next to no information; the mean entropy 3\.\d+ is near log 30 = 3.40"):
        ensembles.link_particles(series.subset([0, 1]), prior(100.0))


def test_links_that_did_not_converge_say_so():
    series, _ = frames(100, 0.5)
    with pytest.warns(RuntimeWarning, match="not certified.*after 5 rounds"):
        ensembles.link_particles(series, prior(0.5), options=LinkOptions(iteration_limit=5, tolerance=1e-9))


def series_of(*clouds, weights=None):
    return ensembles.SnapshotSeries.from_arrays(np.arange(float(len(clouds))), clouds, weights)


@pytest.mark.parametrize(
    ("series", "keywords", "message"),
    [
        (series_of([[0.0], [1.0]], [[0.0]]), {}, "there are 2 at t = 0 and 1 at t = 1; give a detection probability"),
        (
            series_of([[0.0], [1.0], [0.0]], [[0.0], [1.0], [2.0]]),
            {},
            "two particles are at one position; particles 0 and 2",
        ),
        (series_of([[0.0], [1.0]], [[0.0], [2.0]], weights=[[1, 2], None]), {}, "must all count alike"),
        (series_of([[0.0], [1.0]], [[0.0], [2.0]]), {"detection": 1.5}, "detection must be a probability; it is 1.5"),
        (series_of([[0.0], [1.0]], [[0.0], [2.0]]), {"birth_density": 1.0}, "needs a detection probability"),
        (series_of([[0.0], [1.0]], [[0.0], [2.0]]), {"localisation": -1.0}, "localisation must not be negative"),
    ],
)
def test_bad_input(series, keywords, message):
    with pytest.raises(ensembles.InputError, match=message):
        ensembles.link_particles(series, ensembles.Brownian(1.0), **keywords)


def test_wrapped_positions_without_their_box_give_numbers_and_a_warning():
    # Particles that crossed the edge are 20 away: messages differ by factors of e^90, which sums over clusters must survive.
    rng = np.random.default_rng(5)
    start = rng.random((300, 2)) * [20, 10]
    end = rng.permutation((start + rng.normal(0, 0.05**0.5, start.shape)) % [20, 10])
    series = ensembles.SnapshotSeries.from_arrays([0.0, 0.05], [start, end])
    with pytest.warns(RuntimeWarning, match="move [0-9.e+]+ times as far, in the mean of squares, .* a missing box"):
        links = ensembles.link_particles(series, ensembles.Brownian(diffusion=0.5))[0]
    assert links.spread > 2.0
    assert np.isfinite(links.probabilities).all() and (links.probabilities >= 0.0).all()
    assert_allclose(np.asarray(links.sparse().sum(axis=1)).ravel(), 1.0, atol=0.01)
    assert links.entropy.min() >= 0.0


@pytest.mark.parametrize(("factor", "warned"), [(0.1, True), (0.8, False), (1.0, False), (1.25, False)])
def test_a_prior_that_the_links_contradict_is_said_so(factor, warned):
    rng = np.random.default_rng(1)
    start = rng.random((200, 2)) * 40.0
    end = rng.permutation(start + rng.normal(size=start.shape))
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, end])
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        links = ensembles.link_particles(series, ensembles.Brownian(diffusion=0.5 * factor))[0]
    assert any("times as far" in str(w.message) for w in caught) == warned
    assert (links.spread > 1.0) == (factor < 1.0) or factor == 1.0
    if factor == 1.0:
        assert abs(links.spread - 1.0) < 4.0 * np.sqrt(2.0 / 400)


def test_probabilities_that_are_no_numbers_are_never_handed_on(monkeypatch):
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [[[0.0], [5.0]], [[0.1], [5.2]]])
    own = link.link_sums

    def broken(posterior, options):
        sums = own(posterior, options)
        return replace(sums, probabilities=np.full_like(sums.probabilities, np.nan))

    monkeypatch.setattr(link, "link_sums", broken)
    with pytest.raises(ensembles.ComputationError, match="not numbers; those of gap 0 left the range .*cluster=0"):
        ensembles.link_particles(series, ensembles.Brownian(diffusion=0.5))
