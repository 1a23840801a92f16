"""Laws of every smooth end under every prior: mass, moments, both drifts, the conditional law, draws, the file."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

import ensembles
from ensembles.endpoints.pair import PairLaw
from ensembles.endpoints.quadratic import QuadraticMixture

TIMES = (0.0, 0.3, 1.0, 1.5, 2.0)
PRIORS = {
    "Brownian": ensembles.Brownian(diffusion=0.3),
    "anisotropic": ensembles.Brownian(diffusion=[[0.4, 0.15], [0.15, 0.3]], drift=[0.5, -0.2]),
    "rotating": ensembles.OrnsteinUhlenbeck(rate=[[0.4, 0.5], [-0.3, 0.2]], centre=[0.5, 0.0], diffusion=0.3),
}
ENDS = {
    "diagonal": (ensembles.MixtureEnds(most=4), 3),
    "full": (ensembles.MixtureEnds(covariance="full", most=3), 2),
    "low-rank": (ensembles.MixtureEnds(covariance="low-rank", rank=1, most=3), 2),
    "kernel": (ensembles.KernelEnds(bandwidth=0.5), 25),
    "particles at the start": (ensembles.MixtureEnds(most=3, smooth_start=False), 3),
}


def clouds():
    rng = np.random.default_rng(4)
    start = rng.standard_normal((90, 2)) * [1.0, 0.6]
    halves = rng.integers(2, size=(110, 1))
    end = 0.6 * rng.standard_normal((110, 2)) @ [[1.0, 0.5], [0.0, 0.8]] + np.where(halves, [2.0, 1.0], [-1.5, 0.5])
    return ensembles.SnapshotSeries.from_arrays([0.0, 2.0], [start, end], [None, 1.0 + rng.random(110)])


def fitted(prior, ends):
    options, components = ENDS[ends]
    return ensembles.fit_bridge(clouds(), PRIORS[prior], ends=options, components=components)


@pytest.fixture(scope="module", params=[(p, e) for p in PRIORS for e in ENDS], ids="-".join)
def bridge(request):
    return fitted(*request.param)


def usable_times(bridge):
    return TIMES if bridge.gaps[0].initial.smooth else TIMES[1:]


def plane(bridge, t, width=9.0, count=301):
    """Points of a grid around the population at t, and the area of a cell."""
    mean, covariance = bridge.moments(t)
    sides = [mean[i] + np.sqrt(covariance[i, i]) * np.linspace(-width, width, count) for i in (0, 1)]
    points = np.stack(np.meshgrid(*sides, indexing="ij"), axis=-1).reshape(-1, 2)
    return points, np.prod([side[1] - side[0] for side in sides])


def test_the_density_has_mass_one_and_the_stated_moments(bridge):
    for t in usable_times(bridge):
        points, area = plane(bridge, t)
        density = np.exp(bridge.log_density(t, points)) * area
        # Grid spacing 0.06 standard deviations of the population, against components an order of magnitude narrower.
        assert_allclose(density.sum(), 1.0, atol=2e-3 if t == 0.0 else 1e-4)
        mean, covariance = bridge.moments(t)
        assert_allclose(density @ points, mean, atol=6e-3)
        assert_allclose((points.T * density) @ points - np.outer(mean, mean), covariance, atol=2e-2)


def test_the_mass_is_one_exactly_where_it_is_a_closed_form(bridge):
    gap = bridge.gaps[0]
    if gap.initial.smooth:
        masses = PairLaw(gap.initial, gap.terminal, gap.transition).log_masses
        assert_allclose(np.exp(masses).sum(), 1.0, rtol=1e-9)


def test_drifts_are_the_gradients_of_the_potentials(bridge):
    points = np.random.default_rng(0).standard_normal((6, 2))
    step = 1e-5
    for t in usable_times(bridge):
        score = np.empty_like(points)
        for axis in (0, 1):
            shift = step * np.eye(2)[axis]
            rise = bridge.log_density(t, points + shift) - bridge.log_density(t, points - shift)
            score[:, axis] = rise / (2 * step)
        # forward - backward = 2 D ∇ log ρ
        expected = 2.0 * score @ bridge.prior.diffusion_matrix(2)
        assert_allclose(bridge.drift(t, points) - bridge.backward_drift(t, points), expected, rtol=1e-4, atol=1e-4)
        middle = 0.5 * (bridge.drift(t, points) + bridge.backward_drift(t, points))
        assert_allclose(bridge.current_velocity(t, points), middle, atol=1e-10)


def test_the_potential_is_carried_by_the_prior(bridge):
    """φ at 0.3 is the mean of φ at 1.5 over the prior's transition: Gauss-Hermite quadrature, not the formula."""
    gap, prior = bridge.gaps[0], bridge.prior
    nodes, weights = np.polynomial.hermite_e.hermegauss(60)
    pairs = np.stack(np.meshgrid(nodes, nodes), axis=-1).reshape(-1, 2)
    shares = np.outer(weights, weights).ravel() / weights.sum() ** 2
    step = prior.transition(1.2, 2)
    for x in np.random.default_rng(1).standard_normal((3, 2)):
        later = step.mean(x[None]) + pairs @ step.cholesky.T
        ahead = np.exp(gap.ahead(1.5, later)[0]) @ shares
        assert_allclose(ahead, np.exp(gap.ahead(0.3, x[None])[0][0]), rtol=1e-6)


def test_the_start_potential_is_carried_forward_by_the_prior(bridge):
    """∂/∂t at fixed ends: ρ at 1.5 integrated from φ̂ at 0.3 over the prior, on a grid."""
    gap, prior = bridge.gaps[0], bridge.prior
    points, area = plane(bridge, 0.3, 12.0, 241)
    behind = np.exp(gap.behind(0.3, points)[0])
    step = prior.transition(1.2, 2)
    for y in bridge.sample(1.5, 3, rng=0):
        reached = np.exp(step.log_density(points, y[None])) @ behind * area
        assert_allclose(reached, np.exp(gap.behind(1.5, y[None])[0][0]), rtol=1e-3)


def test_the_law_of_the_end_is_what_bayes_says(bridge):
    gap, prior = bridge.gaps[0], bridge.prior
    x = np.array([[0.4, -0.3]])
    points, area = plane(bridge, 2.0, 8.0, 401)
    for t in (0.0, 1.5):
        law = bridge.conditional_end(x, start=t)
        direct = prior.transition(2.0 - t, 2).log_density(x, points) + gap.terminal.log_value(points)[0]
        direct = np.exp(direct - direct.max())
        direct /= direct.sum()
        many = bridge.conditional_end(np.repeat(x, len(points), axis=0), start=t)
        assert_allclose(np.exp(many.log_density(points)) * area, direct, atol=2e-5)
        assert_allclose(law.mean()[0], direct @ points, atol=2e-3)
        centred = points - direct @ points
        assert_allclose(law.covariance()[0], (centred.T * direct) @ centred, atol=4e-3)
        assert_allclose(np.einsum("mk,mkd->md", law.weights, law.means), law.mean(), atol=1e-10)


def test_draws_have_the_moments(bridge):
    count = 20_000
    paths = bridge.sample_paths(count, [0.0, 1.0, 2.0], rng=7)
    for k, t in enumerate((0.0, 1.0, 2.0)):
        mean, covariance = bridge.moments(t)
        for drawn in (paths.positions[:, k], bridge.sample(t, count, rng=8)):
            # Six standard errors.
            assert (np.abs(drawn.mean(axis=0) - mean) < 6 * np.sqrt(np.diag(covariance) / count)).all()
            assert_allclose(np.cov(drawn.T), covariance, atol=6 * 3 * np.diag(covariance).max() / np.sqrt(count))
    begin = np.repeat([[0.7, 0.1]], count, axis=0)
    fresh = bridge.sample_paths_from(begin, 0.5, [0.5, 2.0], rng=9).positions[:, 1]
    law = bridge.conditional_end(begin[:1], start=0.5)
    error = np.sqrt(np.diag(law.covariance()[0]) / count)
    assert (np.abs(fresh.mean(axis=0) - law.mean()[0]) < 6 * error).all()
    assert (paths.members[:, 1] == -1).all()


def test_the_joint_law_of_both_ends_is_in_the_paths(bridge):
    count = 20_000
    paths = bridge.sample_paths(count, [0.0, 2.0], rng=11)
    _, _, start, cross, end = bridge.gaps[0].joint_moments
    x, y = (paths.positions[:, k] - paths.positions[:, k].mean(axis=0) for k in (0, 1))
    allowed = 6 * 3 * np.sqrt(np.diag(start).max() * np.diag(end).max() / count)
    assert_allclose(x.T @ y / count, cross, atol=allowed)


def test_saved_and_loaded_it_is_the_same(bridge, tmp_path):
    bridge.save(tmp_path / "bridge.npz")
    again = ensembles.load_bridge(tmp_path / "bridge.npz")
    points = np.random.default_rng(2).standard_normal((5, 2))
    for t in usable_times(bridge):
        assert_array_equal(again.log_density(t, points), bridge.log_density(t, points))
        assert_array_equal(again.drift(t, points), bridge.drift(t, points))
    assert again.ends == bridge.ends
    assert again.notes == bridge.notes
    assert repr(again) == repr(bridge)
    assert_array_equal(again.sample(1.0, 5, rng=3), bridge.sample(1.0, 5, rng=3))


def test_atoms_are_the_same_contract_with_covariance_0():
    series = clouds()
    bridge = ensembles.fit_bridge(series, PRIORS["rotating"])
    law = bridge.conditional_end(series.clouds[0])
    rows = bridge.coupling(0).matrix()
    rows /= rows.sum(axis=1, keepdims=True)
    assert_allclose(law.weights, rows, atol=1e-12)
    assert_allclose(law.mean(), rows @ series.clouds[1], atol=1e-12)
    assert not law.covariances.any()
    assert "110 atoms" in repr(law)
    middle = rows[3] @ series.clouds[1]
    assert_allclose(
        law.covariance()[3], (series.clouds[1].T * rows[3]) @ series.clouds[1] - np.outer(middle, middle), atol=1e-12
    )
    assert {tuple(row) for row in law.sample(rng=0)} <= {tuple(row) for row in series.clouds[1]}


def test_a_kernel_of_no_width_is_atoms():
    """With the end points as centres and a bandwidth far below their distances, the weights are Sinkhorn's."""
    rng = np.random.default_rng(3)
    series = ensembles.SnapshotSeries.from_arrays(
        [0, 1], [rng.standard_normal((30, 2)), 2 * rng.standard_normal((20, 2))]
    )
    prior = ensembles.Brownian(diffusion=0.5)
    atoms = ensembles.fit_bridge(series, prior, tolerance=1e-10)
    kernel = ensembles.fit_bridge(
        series, prior, ends=ensembles.KernelEnds(centres=series.clouds[1], bandwidth=1e-4, smooth_start=False)
    )
    points = rng.standard_normal((5, 2))
    assert_allclose(kernel.conditional_end(points).mean(), atoms.conditional_end(points).mean(), atol=2e-2)


def test_a_transition_longer_than_the_gap_is_refused_where_the_potential_grows():
    growing = QuadraticMixture(np.zeros(1), np.zeros((1, 1)), np.array([[-0.9]]))
    with pytest.raises(ensembles.ComputationError, match="grows faster.*longer than the gap"):
        growing.carried(np.array([1.2]))
    with pytest.raises(ensembles.ComputationError, match="grows faster"):
        growing.full().carried(np.array([[1.2]]))


def test_far_points_are_finite_or_named_never_nan(bridge):
    far = np.array([[1e3, -1e3], [1e6, 1e6]])
    assert np.isfinite(bridge.drift(1.0, far)).all()
    assert np.isfinite(bridge.log_density(1.0, far)).all()
    with pytest.raises(ensembles.ComputationError, match="row 1 of the points"):
        bridge.drift(1.0, np.array([[0.0, 0.0], [1e200, 0.0]]))
