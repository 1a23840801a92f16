"""Sample paths: their law at every time, their members, new starts, seeds; the coupling in all its forms."""

import numpy as np
import pytest
from generators import random_clouds
from numpy.testing import assert_allclose, assert_array_equal
from scipy.stats import chi2

import ensembles
from ensembles.priors.pinned import pinned_steps

COUNT = 40_000


def chain(dimension=1, seed=2, noise=0.1):
    """A bridge through three weighted snapshots under a trap, at t = 0, 1 and 2.5."""
    one, two = random_clouds(seed, 8, 6, dimension, noise), random_clouds(seed + 1, 7, 6, dimension, noise)
    weights = [one.a, one.b, two.a]
    weights[1] = np.where(np.arange(6) == 2, 0.0, weights[1])
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0, 2.5], [one.x, one.y, two.x], weights)
    prior = ensembles.OrnsteinUhlenbeck(rate=0.4, centre=0.3, diffusion=0.5 * one.epsilon)
    return ensembles.fit_bridge(series, prior, tolerance=1e-12)


def statistic(sample, edges, probability):
    """Chi-square of a one-dimensional sample in bins that have these probabilities, and its degrees of freedom."""
    seen = np.histogram(sample, edges)[0]
    expected = probability * len(sample)
    assert expected.min() > 5
    return float(np.sum((seen - expected) ** 2 / expected)), len(expected) - 1


def binned(bridge, t, bins=30):
    """Edges of bins of nearly equal probability under ρ_t in one dimension, and the exact probabilities."""
    mean, variance = bridge.moments(t)[0][0], bridge.moments(t)[1][0, 0]
    x = np.linspace(mean - 12 * np.sqrt(variance), mean + 12 * np.sqrt(variance), 60_001)
    density = np.exp(bridge.log_density(t, x))
    below = np.concatenate([[0.0], np.cumsum(0.5 * (density[1:] + density[:-1]) * np.diff(x))])
    inner = np.searchsorted(below, np.arange(1, bins) / bins)
    edges = np.concatenate([[-np.inf], x[inner], [np.inf]])
    return edges, np.diff(np.concatenate([[0.0], below[inner], [1.0]]))


@pytest.mark.parametrize("t", [0.05, 0.6, 1.2, 2.4])
def test_paths_and_samples_follow_the_density(t):
    bridge = chain()
    edges, probability = binned(bridge, t)
    other_edges, other_probability = binned(bridge, t + 0.08)
    times = np.unique([0.0, 0.3, t, 1.0, 2.5])
    paths = bridge.sample_paths(COUNT, times, rng=11)
    for sample in (paths.positions[:, list(times).index(t), 0], bridge.sample(t, COUNT, rng=12)[:, 0]):
        value, freedom = statistic(sample, edges, probability)
        assert value < chi2.isf(1e-5, freedom)
        value, freedom = statistic(sample, other_edges, other_probability)
        assert value > chi2.isf(1e-5, freedom)  # negative control: the density a little later


def test_two_times_of_a_path_have_their_joint_law():
    # Characteristic function at (s, t): E exp(i(α X_s + β X_t)) from the coupling and the pinned law, against the paths.
    bridge, s, t = chain(), 0.3, 0.8
    gap, coupling = bridge.gaps[0], bridge.coupling(0).matrix()
    first, second = pinned_steps(bridge.prior, 0.0, 1.0, np.array([s, t]), 1)
    x, y = (np.ravel(cloud) for cloud in gap.clouds)
    paths = bridge.sample_paths(COUNT, [s, t], rng=13).positions[:, :, 0]
    q1, q2, slope = first.covariance[0, 0], second.covariance[0, 0], second.start_matrix[0, 0]
    for alpha, beta in ((1.0, 0.0), (0.7, -1.1), (2.0, 1.5)):
        early = first.start_matrix[0, 0] * x[:, None] + first.end_matrix[0, 0] * y + first.shift[0]
        late = slope * early + second.end_matrix[0, 0] * y + second.shift[0]
        spread = (alpha + beta * slope) ** 2 * q1 + beta**2 * q2
        exact = np.sum(coupling * np.exp(1j * (alpha * early + beta * late) - 0.5 * spread))
        seen = np.exp(1j * (alpha * paths[:, 0] + beta * paths[:, 1])).mean()
        assert abs(seen - exact) < 5.0 / np.sqrt(COUNT)
        independent = np.exp(1j * alpha * paths[:, 0]).mean() * np.exp(1j * beta * paths[:, 1]).mean()
        assert beta == 0.0 or abs(independent - exact) > 5.0 / np.sqrt(COUNT)  # negative control


def test_paths_pass_exactly_through_their_members():
    bridge = chain(dimension=3)
    paths = bridge.sample_paths(500, [0.0, 0.4, 1.0, 1.7, 2.5], rng=1)
    assert paths.positions.shape == (500, 5, 3)
    assert paths.members.shape == (500, 3)
    for k, column in ((0, 0), (1, 2), (2, 4)):
        assert_array_equal(paths.positions[:, column], bridge.series.clouds[k][paths.members[:, k]])
        assert (bridge.series.weights[k][paths.members[:, k]] > 0).all()


def test_members_follow_the_chain_of_couplings():
    bridge = chain()
    members = bridge.sample_paths(COUNT, [0.0], rng=3).members
    first, second = bridge.coupling(0).matrix(), bridge.coupling(1).matrix()
    with np.errstate(invalid="ignore"):
        onward = np.nan_to_num(second / second.sum(axis=1, keepdims=True))
    joint = first[:, :, None] * onward[None]
    seen = np.zeros_like(joint)
    np.add.at(seen, tuple(members.T), 1.0)
    big = joint * COUNT > 8

    def distance(expected):
        expected = expected * COUNT
        value = np.sum((seen[big] - expected[big]) ** 2 / expected[big])
        rest = expected[~big].sum()
        return value + (seen[~big].sum() - rest) ** 2 / rest

    limit = chi2.isf(1e-5, int(big.sum()))
    assert distance(joint) < limit
    assert distance(first.sum(axis=1)[:, None, None] * first.sum(axis=0)[None, :, None] * onward) > limit  # control


def test_paths_from_observed_starts_have_the_same_law():
    bridge, t = chain(), 1.8
    rng = np.random.default_rng(5)
    starts = bridge.sample(0.0, COUNT, rng=rng)
    edges, probability = binned(bridge, t)
    paths = bridge.sample_paths_from(starts, 0.0, [0.0, t, 2.5], rng=6)
    value, freedom = statistic(paths.positions[:, 1, 0], edges, probability)
    assert value < chi2.isf(1e-5, freedom)
    assert_array_equal(paths.positions[:, 0], starts)
    assert (paths.members[:, 0] == -1).all()
    assert_array_equal(paths.positions[:, 2], bridge.series.clouds[2][paths.members[:, 2]])
    # Also from starts drawn at a time in between: the process is Markov.
    paths = bridge.sample_paths_from(bridge.sample(0.5, COUNT, rng=7), 0.5, [t], rng=8)
    value, freedom = statistic(paths.positions[:, 0, 0], edges, probability)
    assert value < chi2.isf(1e-5, freedom)
    paths = bridge.sample_paths_from(bridge.sample(0.5, COUNT, rng=7) + 0.3, 0.5, [t], rng=8)
    value, freedom = statistic(paths.positions[:, 0, 0], edges, probability)
    assert value > chi2.isf(1e-5, freedom)  # negative control: starts moved aside


def test_paths_begin_with_the_drift():
    # Over a short time a new start moves by drift·h with variance 2D·h.
    bridge, h = chain(dimension=2), 1e-3
    start = np.repeat([[0.4, 0.1]], COUNT, axis=0)
    moved = bridge.sample_paths_from(start, 0.4, [0.4 + h], rng=9).positions[:, 0] - start
    spread = np.sqrt(2 * np.diag(bridge.prior.diffusion_matrix(2)) * h)
    drift = bridge.drift(0.4, start[:1])[0]
    assert np.abs((moved.mean(axis=0) - drift * h) / spread).max() < 5.0 / np.sqrt(COUNT)
    assert_allclose(moved.std(axis=0), spread, rtol=0.03)


def test_same_seed_same_paths(monkeypatch):
    bridge = chain(dimension=2)
    times = [0.2, 1.0, 2.0]
    one = bridge.sample_paths(200, times, rng=4)
    monkeypatch.setenv("ENSEMBLES_THREADS", "1")
    for rng in (4, np.int64(4), np.random.default_rng(4)):
        other = bridge.sample_paths(200, times, rng=rng)
        assert_array_equal(other.positions, one.positions)
        assert_array_equal(other.members, one.members)
    assert (bridge.sample_paths(200, times, rng=5).positions != one.positions).any()
    assert_array_equal(bridge.sample(0.7, 50, rng=1), bridge.sample(0.7, 50, rng=1))
    assert (bridge.sample(0.7, 50, rng=1) != bridge.sample(0.7, 50, rng=2)).any()


def test_paths_as_a_table():
    bridge = chain(dimension=2)
    paths = bridge.sample_paths(3, [0.5, 1.5], rng=0)
    frame = paths.to_frame()
    assert list(frame.columns) == ["path", "time", "x", "y"]
    assert_array_equal(frame["path"], [0, 0, 1, 1, 2, 2])
    assert_array_equal(frame.loc[frame["path"] == 2, ["x", "y"]], paths.positions[2])
    assert "3 paths at 2 times from 0.5 to 1.5" in repr(paths)


# The coupling.


def test_coupling_in_all_its_forms():
    bridge = chain(dimension=2)
    for gap in (0, 1):
        coupling = bridge.coupling(gap)
        matrix = coupling.matrix()
        assert coupling.shape == matrix.shape
        assert (coupling.source, coupling.target) == (gap, gap + 1)
        assert_allclose(matrix.sum(axis=1), bridge.series.weights[gap], atol=1e-11)
        assert_allclose(matrix.sum(axis=0), bridge.series.weights[gap + 1], atol=1e-11)
        for i in range(len(matrix)):
            assert_allclose(coupling.row(i), matrix[i], rtol=1e-12)
        assert_allclose(coupling.row(-1), matrix[-1], rtol=1e-12)
        values = np.random.default_rng(0).normal(size=(matrix.shape[1], 3))
        alive = bridge.series.weights[gap] > 0
        expected = (matrix[alive] @ values) / matrix[alive].sum(axis=1, keepdims=True)
        assert_allclose(coupling.expectation(values)[alive], expected, rtol=1e-11)
        assert_allclose(coupling.expectation(values[:, 0])[alive], expected[:, 0], rtol=1e-11)


def test_top_links_are_the_largest_entries():
    bridge = chain(dimension=2)
    coupling = bridge.coupling(1)  # particle 2 of snapshot 1 has no weight
    matrix = coupling.matrix()
    links = coupling.top_links(3)
    assert list(links.columns) == ["source", "target", "probability", "mass"]
    assert len(links) == 3 * matrix.shape[0]
    for i, group in links.groupby("source"):
        order = np.argsort(-matrix[i])[:3]
        if bridge.series.weights[1][i] > 0:
            assert_array_equal(group["target"], order)
            assert_allclose(group["probability"], matrix[i, order] / matrix[i].sum(), rtol=1e-11)
        assert_allclose(group["mass"], matrix[i, group["target"]], rtol=1e-11)
    # Every target that has weight, and never one that has none.
    links = bridge.coupling(0).top_links(99)
    assert set(links["target"]) == {0, 1, 3, 4, 5}
    assert len(links) == 5 * len(bridge.series.clouds[0])
    assert_allclose(links.groupby("source")["probability"].sum(), 1.0, rtol=1e-12)
