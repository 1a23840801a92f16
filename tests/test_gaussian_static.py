"""The solver on discretised Gaussians reproduces their closed forms; the asymptotic rate of plain sweeps; ε_eff."""

import numpy as np
import pytest
from generators import GAUSSIAN_PLANE, GAUSSIAN_ROWS, grid_atoms, random_clouds
from numpy.testing import assert_allclose

import ensembles
from ensembles.kernels.streamed import StreamedKernel
from ensembles.schrodinger.gaussian_start import gaussian_potentials
from ensembles.schrodinger.iteration import Strategy
from ensembles.schrodinger.solution import Outcome
from ensembles.schrodinger.solve import solve


def solved(x, a, y, b, epsilon, **options):
    """The solution between atoms (n,) or (n, d) at noise variance ε, and its coupling."""
    root = np.sqrt(epsilon)
    u, v = np.reshape(x, (len(x), -1)) / root, np.reshape(y, (len(y), -1)) / root
    solution = solve(StreamedKernel(u, v), (a, b), **options)
    log_kernel = -0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=-1)
    density = np.exp(solution.log_f[:, None] + solution.log_g + log_kernel)
    return solution, a[:, None] * b * density, density


@pytest.mark.parametrize("row", GAUSSIAN_ROWS, ids=lambda row: f"{row.a:g} to {row.b:g} at {row.epsilon:g}")
@pytest.mark.parametrize("shift", [0.0, 1.0])
def test_discretised_row(row, shift):
    # The trapezoidal rule on a Gaussian converges beyond any power; the noise must span a few steps of the grid.
    count = 901 if row.epsilon < 0.1 else 121
    x, a = grid_atoms(row.a, count)
    y, b = grid_atoms(row.b, count, mean=shift)
    solution, coupling, density = solved(x, a, y, b, row.epsilon, tolerance=1e-12)
    assert solution.outcome is Outcome.CONVERGED
    assert_allclose(x @ coupling @ (y - shift), row.cross, atol=2e-9)
    assert_allclose(np.sum(coupling * np.log(np.maximum(density, 1e-300))), row.information, atol=1e-8)
    squared = 0.5 * (x[:, None] - y) ** 2
    cost = np.sum(coupling * squared) + row.epsilon * np.sum(coupling * np.log(np.maximum(density, 1e-300)))
    assert_allclose(cost, row.cost + 0.5 * shift**2, atol=1e-8)


def plane_atoms(count, cut):
    """Trapezoidal atoms of N(0, I) in the plane, without those of negligible mass."""
    nodes, weights = grid_atoms(1.0, count, width=8.0)
    grid = np.stack(np.meshgrid(nodes, nodes, indexing="ij"), axis=-1).reshape(-1, 2)
    mass = np.outer(weights, weights).ravel()
    kept = mass > cut
    return grid[kept], mass[kept] / mass[kept].sum()


def test_discretised_plane():
    grid, mass = plane_atoms(45, 1e-15)
    x = grid @ np.linalg.cholesky(GAUSSIAN_PLANE["a"]).T
    y = grid @ np.linalg.cholesky(GAUSSIAN_PLANE["b"]).T
    solution, coupling, density = solved(x, mass, y, mass, GAUSSIAN_PLANE["epsilon"], tolerance=1e-11)
    assert_allclose(x.T @ coupling @ y, GAUSSIAN_PLANE["cross"], atol=1e-8)
    squared = 0.5 * ((x[:, None] - y[None]) ** 2).sum(axis=-1)
    cost = np.sum(coupling * (squared + GAUSSIAN_PLANE["epsilon"] * np.log(np.maximum(density, 1e-300))))
    assert_allclose(cost, GAUSSIAN_PLANE["cost"], atol=1e-8)
    # The dual value ε (Σ a f + Σ b g) is the same number.
    dual = GAUSSIAN_PLANE["epsilon"] * (mass @ solution.log_f + mass @ solution.log_g)
    assert_allclose(dual, GAUSSIAN_PLANE["cost"], atol=1e-8)


@pytest.mark.parametrize("dimension", [1, 2])
def test_gaussian_start_is_exact_for_gaussian_atoms(dimension):
    nodes, weights = grid_atoms(1.0, 61, width=8.5)
    if dimension == 1:
        grid, mass = nodes[:, None], weights
        first, second = np.array([[1.7]]), np.array([[0.9]])
    else:
        grid, mass = plane_atoms(49, 1e-16)
        first, second = GAUSSIAN_PLANE["a"], GAUSSIAN_PLANE["b"]
    u = grid @ np.linalg.cholesky(first).T
    v = grid @ np.linalg.cholesky(second).T + 1.5
    start = gaussian_potentials(u, v, mass, mass)
    exact = solve(StreamedKernel(u, v), (mass, mass), tolerance=1e-9, start=start)
    assert exact.outcome is Outcome.CONVERGED
    assert exact.iterations <= 3
    plain = solve(StreamedKernel(u, v), (mass, mass), tolerance=1e-9, strategy=Strategy(newton=False, relaxation=False))
    assert plain.iterations > 10
    assert_allclose(mass @ exact.log_f + mass @ exact.log_g, mass @ plain.log_f + mass @ plain.log_g, atol=1e-8)


@pytest.mark.parametrize(("shift", "power"), [(1.0, 2), (0.0, 4)])
def test_plain_sweeps_contract_as_the_correlation_says(shift, power):
    # Asymptotic L1 ratio per sweep ρ² when the means differ, ρ⁴ when they agree (from memory; ρ = c/√(ab) = ½ here): the
    # linear and the quadratic Hermite mode of the coupling's conditional expectation.
    row = GAUSSIAN_ROWS[0]
    x, a = grid_atoms(row.a, 101)
    y, b = grid_atoms(row.b, 101, mean=shift)
    plain = Strategy(relaxation=False, newton=False, ladder_top=np.inf)
    solution, _, _ = solved(x, a, y, b, row.epsilon, tolerance=1e-11, strategy=plain)
    errors = solution.history[:, 2]
    ratios = errors[1:] / errors[:-1]
    late = ratios[(errors[1:] < 1e-5) & (errors[1:] > 1e-9)]
    assert late.size >= 3
    assert_allclose(late, 0.5**power, rtol=2e-3)


@pytest.mark.parametrize("dimension", [1, 2, 4])
@pytest.mark.parametrize("rate", [0.3, 1.7, -0.8])
def test_ornstein_uhlenbeck_coupling_is_the_brownian_one_at_the_effective_noise(dimension, rate):
    # Own derivation: the transition's cross term is x·y κ/(σ² sinh κT), everything else depends on one end alone.
    problem = random_clouds(dimension + 10, 25, 31, dimension, 0.2)
    duration, diffusion = 1.4, 0.5 * problem.epsilon
    effective = 2 * diffusion * np.sinh(rate * duration) / rate
    series = problem.series(duration)
    trapped = ensembles.OrnsteinUhlenbeck(rate=rate, centre=3.0, diffusion=diffusion)
    free = ensembles.Brownian(diffusion=0.5 * effective / duration)
    one, other = (ensembles.fit_bridge(series, prior, tolerance=1e-13).coupling().matrix() for prior in (trapped, free))
    assert_allclose(one, other, rtol=1e-9, atol=1e-13)


@pytest.mark.parametrize("name", ["centre", "drift"])
def test_centre_and_constant_drift_leave_the_coupling(name):
    # Both add terms of one end alone to log k, which the potentials absorb.
    problem = random_clouds(21, 20, 26, 2, 0.3)
    diffusion = 0.5 * problem.epsilon
    if name == "centre":
        priors = [ensembles.OrnsteinUhlenbeck(rate=0.9, centre=c, diffusion=diffusion) for c in (0.0, [2.0, -1.0])]
    else:
        priors = [ensembles.Brownian(diffusion=diffusion, drift=v) for v in (0.0, [1.0, -0.5])]
    one, other = (ensembles.fit_bridge(problem.series(), p, tolerance=1e-13).coupling().matrix() for p in priors)
    assert_allclose(one, other, rtol=1e-9, atol=1e-13)
