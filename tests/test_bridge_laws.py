"""The bridge in between: mass, moments, drifts, continuity, reversal, and splitting a gap."""

import numpy as np
import pytest
from generators import random_clouds
from numpy.testing import assert_allclose

import ensembles
from ensembles.priors.pinned import pin

PRIORS = {
    "brownian": lambda d, diffusion: ensembles.Brownian(diffusion=diffusion, drift=0.4),
    "brownian matrix": lambda d, diffusion: ensembles.Brownian(diffusion=diffusion * (np.eye(d) + 0.3)),
    "trap": lambda d, diffusion: ensembles.OrnsteinUhlenbeck(rate=0.9, centre=0.5, diffusion=diffusion),
    "rotation": lambda d, diffusion: ensembles.OrnsteinUhlenbeck(
        rate=0.4 * np.eye(d) + 1.3 * (np.eye(d, k=1) - np.eye(d, k=-1)), centre=0.2, diffusion=diffusion
    ),
    "unstable": lambda d, diffusion: ensembles.OrnsteinUhlenbeck(rate=-0.5, centre=0.0, diffusion=diffusion),
}
every_prior = pytest.mark.parametrize("name", PRIORS)
every_plane = pytest.mark.parametrize("dimension", [1, 2])
START, END = 1.0, 2.5


def fitted(name, dimension, noise=0.15, seed=1):
    """A bridge between weighted clouds at t = 1 and 2.5, one particle of each without weight."""
    problem = random_clouds(seed, 9, 7, dimension, noise)
    a, b = problem.a.copy(), problem.b.copy()
    a[2], b[0] = 0.0, 0.0
    series = ensembles.SnapshotSeries.from_arrays([START, END], [problem.x, problem.y], [a, b])
    prior = PRIORS[name](dimension, 0.5 * problem.epsilon / (END - START))
    return ensembles.fit_bridge(series, prior, tolerance=1e-13)


def lattice(bridge, t, count=121, width=7.0):
    """A lattice over all of ρ_t (`width` spreads beyond every pinned mean), and the volume of its cells."""
    law, (starts, ends) = bridge.gaps[0].pinned(t), bridge.series.clouds
    means = law.mean(np.repeat(starts, len(ends), axis=0), np.tile(ends, (len(starts), 1)))
    reach = width * np.sqrt(np.diag(law.covariance))
    axes = [np.linspace(m.min() - r, m.max() + r, count) for m, r in zip(means.T, reach)]
    points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, len(axes))
    return points, np.prod([axis[1] - axis[0] for axis in axes])


@every_prior
@every_plane
def test_mass_and_moments_by_quadrature(name, dimension):
    bridge = fitted(name, dimension)
    for t in (1.15, 1.7, 2.4):
        points, cell = lattice(bridge, t, count=801 if dimension == 1 else 181)
        density = np.exp(bridge.log_density(t, points)) * cell
        assert_allclose(density.sum(), 1.0, rtol=1e-9)
        mean, covariance = bridge.moments(t)
        assert_allclose(density @ points, mean, rtol=1e-8, atol=1e-9)
        centred = points - mean
        assert_allclose((centred.T * density) @ centred, covariance, rtol=1e-7, atol=1e-9)


@every_prior
@every_plane
def test_density_is_the_mixture_of_pinned_priors(name, dimension):
    # ρ_t(z) = Σ_ij π_ij N(z | pinned mean, pinned covariance): another road to the same density.
    bridge, t = fitted(name, dimension), 1.6
    coupling = bridge.coupling().matrix()
    before, after = bridge.prior.transition(t - START, dimension), bridge.prior.transition(END - t, dimension)
    law = pin(before, after)
    points = bridge.series.clouds[0][:4] + 0.05
    factor = np.linalg.cholesky(law.covariance)
    total = np.zeros(4)
    for i, x in enumerate(bridge.series.clouds[0]):
        for j, y in enumerate(bridge.series.clouds[1]):
            z = np.linalg.solve(factor, (points - law.mean(x[None], y[None])).T)
            total += coupling[i, j] * np.exp(-0.5 * (z**2).sum(axis=0)) / np.prod(np.sqrt(2 * np.pi) * np.diag(factor))
    assert_allclose(np.exp(bridge.log_density(t, points)), total, rtol=1e-9)


@every_prior
def test_at_the_ends_the_moments_are_those_of_the_clouds(name):
    bridge = fitted(name, 2)
    for k, (t, near) in enumerate(((START, START + 1e-9), (END, END - 1e-9))):
        mean, covariance = bridge.moments(t)
        cloud, weights = bridge.series.clouds[k], bridge.series.weights[k]
        assert_allclose(mean, weights @ cloud, rtol=1e-14)
        assert_allclose(covariance, np.cov(cloud.T, aweights=weights, ddof=0), rtol=1e-12)
        assert_allclose(bridge.moments(near)[0], mean, atol=1e-7)
        assert_allclose(bridge.moments(near)[1], covariance, atol=1e-7)


def log_potentials(bridge, t, points):
    """log φ_t and log φ̂_t (m,) by plain sums over the particles with scipy-free Gaussians."""
    sides = []
    gap, solution = bridge.gaps[0], bridge.solutions[0]
    whole = bridge.prior.transition(END - START, points.shape[1])
    with np.errstate(divide="ignore"):
        log_p = np.log(gap.weights[0]) + solution.log_f
        log_q = np.log(gap.weights[1]) + solution.log_g - whole.log_normaliser
    after, before = (
        bridge.prior.transition(END - t, points.shape[1]),
        bridge.prior.transition(t - START, points.shape[1]),
    )
    for log_weights, term in (
        (log_q, lambda z, j: after.log_density(z[None], gap.clouds[1][j : j + 1])[0]),
        (log_p, lambda z, i: before.log_density(gap.clouds[0][i : i + 1], z[None])[0]),
    ):
        sides.append([np.logaddexp.reduce([w + term(z, k) for k, w in enumerate(log_weights)]) for z in points])
    return np.array(sides)


def slopes(function, points, h=1e-5):
    """Gradient of function(points) (..., m) by central differences, (..., m, d)."""
    steps = h * np.eye(points.shape[1])
    return np.stack([(function(points + e) - function(points - e)) / (2 * h) for e in steps], axis=-1)


@every_prior
@every_plane
def test_drifts_are_gradients_of_the_potentials(name, dimension):
    bridge = fitted(name, dimension)
    points = np.concatenate([bridge.series.clouds[0][:2] + 0.1, bridge.series.clouds[1][:2] - 0.2])
    doubled = 2 * bridge.prior.diffusion_matrix(dimension)
    for t in (1.2, 2.2):
        ahead, behind = log_potentials(bridge, t, points)
        assert_allclose(ahead + behind, bridge.log_density(t, points), rtol=1e-10, atol=1e-10)
        up, down = slopes(lambda z, t=t: log_potentials(bridge, t, z), points)
        base = bridge.prior.drift(points)
        scale = np.abs(bridge.drift(t, points)).max() + np.abs(bridge.backward_drift(t, points)).max()
        assert_allclose(bridge.drift(t, points), base + up @ doubled, atol=1e-6 * scale)
        assert_allclose(bridge.backward_drift(t, points), base - down @ doubled, atol=1e-6 * scale)
        middle = 0.5 * (bridge.drift(t, points) + bridge.backward_drift(t, points))
        assert_allclose(bridge.current_velocity(t, points), middle, rtol=1e-12)


@every_prior
@every_plane
def test_continuity_equation(name, dimension):
    # ∂ρ/∂t + ∇·(ρ v) = 0, divided by ρ: ∂ log ρ/∂t + ∇·v + v·∇log ρ = 0.
    bridge, h = fitted(name, dimension), 1e-4
    points = np.concatenate([bridge.series.clouds[0][:3] + 0.1, bridge.series.clouds[1][:3] - 0.2])
    for t in (1.3, 1.75, 2.2):
        change = (bridge.log_density(t + h, points) - bridge.log_density(t - h, points)) / (2 * h)
        velocity = bridge.current_velocity(t, points)
        steps = h * np.eye(dimension)
        divergence = sum(
            (bridge.current_velocity(t, points + e)[:, k] - bridge.current_velocity(t, points - e)[:, k]) / (2 * h)
            for k, e in enumerate(steps)
        )
        score = slopes(lambda z, t=t: bridge.log_density(t, z), points, h)
        terms = np.stack([change, divergence, (velocity * score).sum(axis=1)])
        assert_allclose(terms.sum(axis=0), 0.0, atol=1e-5 * np.abs(terms).max())
        # Negative control: the forward drift alone does not transport the density.
        wrong = terms[0] + terms[1] + (bridge.drift(t, points) * score).sum(axis=1)
        assert np.abs(wrong).max() > 1e-2 * np.abs(terms).max()


@every_prior
def test_a_gap_split_at_an_intermediate_time_is_the_same_bridge(name):
    # The bridge from ρ_s to the later cloud is the later part of the bridge: ρ_s on a fine lattice as a snapshot.
    bridge, split = fitted(name, 1), 1.8
    points, cell = lattice(bridge, split, count=1201)
    mass = np.exp(bridge.log_density(split, points)) * cell
    kept = mass > 1e-14
    middle = ensembles.SnapshotSeries.from_arrays(
        [START, split, END], [bridge.series.clouds[0], points[kept], bridge.series.clouds[1]],
        [bridge.series.weights[0], mass[kept], bridge.series.weights[1]],
    )  # fmt: skip
    chain = ensembles.fit_bridge(middle, bridge.prior, tolerance=1e-11)
    for t in (1.3, 2.1):
        z = np.sqrt(bridge.moments(t)[1]) * np.linspace(-1.5, 1.5, 7)[:, None] + bridge.moments(t)[0]
        z = z[bridge.log_density(t, z) > -8.0]  # farther out, mass that was cut off above begins to show
        assert len(z) >= 4
        assert_allclose(chain.log_density(t, z), bridge.log_density(t, z), atol=1e-7)
        assert_allclose(chain.drift(t, z), bridge.drift(t, z), atol=1e-6 * np.abs(bridge.drift(t, z)).max())
        assert_allclose(chain.backward_drift(t, z), bridge.backward_drift(t, z), atol=1e-5)
    through = chain.coupling(0).matrix() @ (chain.coupling(1).matrix() / chain.series.weights[1][:, None])
    assert_allclose(through, bridge.coupling().matrix(), atol=1e-8)


def test_mass_one_through_a_chain():
    rng = np.random.default_rng(0)
    clouds = [rng.normal(size=(n, 1)) + k for k, n in enumerate((5, 1, 8))]
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0, 3.0], clouds)
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.2), tolerance=1e-12)
    x = np.linspace(-12, 14, 20_001)
    for t in (0.02, 0.5, 0.999, 1.001, 2.0, 2.98):
        assert_allclose(np.exp(bridge.log_density(t, x)).sum() * (x[1] - x[0]), 1.0, rtol=1e-9)
        mean, _ = bridge.moments(t)
        assert_allclose(np.exp(bridge.log_density(t, x)) @ x * (x[1] - x[0]), mean[0], rtol=1e-8, atol=1e-9)
