"""The unbalanced problem: closed forms, the balanced limit, POT, certificates, killing at a constant rate."""

import numpy as np
import ot
import pytest
from numpy.testing import assert_allclose

import ensembles
from ensembles.kernels.dense import DenseKernel
from ensembles.kernels.streamed import StreamedKernel
from ensembles.schrodinger.solution import Outcome
from ensembles.schrodinger.solve import solve
from ensembles.schrodinger.unbalanced import solve_unbalanced


def problem(seed, n=30, m=40, spread=1.0, d=2):
    rng = np.random.default_rng(seed)
    u, v = spread * rng.normal(size=(n, d)), spread * rng.normal(0.4, 1.2, size=(m, d))
    return u, v, rng.uniform(0.1, 1.0, n), rng.uniform(0.1, 1.0, m)


def coupling(u, v, a, b, found):
    cost = 0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=2)
    return a[:, None] * b[None] * np.exp(found.log_f[:, None] + found.log_g[None] - cost)


@pytest.mark.parametrize(
    ("a", "b", "cost", "strength", "noise"),
    [(1.0, 2.0, 1.0, 1.0, 0.5), (0.3, 5.0, 4.0, 10.0, 0.1), (2.0, 2.0, 0, 3, 1)],
)
def test_two_atoms(a, b, cost, strength, noise):
    found = solve_unbalanced(
        DenseKernel(np.array([[-cost / noise]])), (np.array([a]), np.array([b])), (strength / noise, strength / noise),
        tolerance=1e-12,
    )  # fmt: skip
    # Closed form, derived: stationarity of ε m log(m/(ab)) + c m + λ (m log(m/a) + m log(m/b)) and its linear terms.
    power = (strength + noise) / (2 * strength + noise)
    expected = (a * b) ** power * np.exp(-cost / (2 * strength + noise))
    assert_allclose(found.mass, expected, rtol=1e-10)
    if (a, b) == (1.0, 2.0):
        # The value listed with the closed form in the project's collection of checks: two atoms, a=1, b=2, c=λ=1, ε=½.
        assert_allclose(found.mass, 1.0160151986, rtol=1e-9)


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("strengths", [(0.5, 0.5), (2.0, 20.0), (50.0, 1.0)])
def test_agrees_with_pot(seed, strengths):
    # Source: POT's plain (not stabilised) sinkhorn_unbalanced, relative to a⊗b.
    u, v, a, b = problem(seed)
    found = solve_unbalanced(StreamedKernel(u, v), (a, b), strengths, tolerance=1e-11)
    cost = 0.5 * ot.dist(u, v)
    expected = ot.unbalanced.sinkhorn_unbalanced(
        a, b, cost, 1.0, strengths, method="sinkhorn", reg_type="kl", numItermax=100_000, stopThr=1e-13
    )
    assert found.outcome is Outcome.CONVERGED
    assert_allclose(coupling(u, v, a, b, found), expected, atol=1e-6 * expected.max())
    assert np.abs(coupling(u, v, a, b, found) - expected).sum() < 1e-6


def test_infinite_strength_is_the_balanced_problem():
    u, v, a, b = problem(1)
    a, b = a / a.sum(), b / b.sum()
    balanced = solve(StreamedKernel(u, v), (a, b), tolerance=1e-12)
    expected = coupling(u, v, a, b, balanced)
    infinite = solve_unbalanced(StreamedKernel(u, v), (a, b), (np.inf, np.inf), tolerance=1e-12)
    assert_allclose(coupling(u, v, a, b, infinite), expected, atol=1e-9, rtol=1e-9)
    # And the limit is reached: with half a marginal hard, and with both very strong.
    strong = solve_unbalanced(StreamedKernel(u, v), (a, b), (1e12, np.inf), tolerance=1e-11)
    assert np.abs(coupling(u, v, a, b, strong) - expected).sum() < 1e-9
    errors = []
    for strength in (1e2, 1e4):
        strong = solve_unbalanced(StreamedKernel(u, v), (a, b), (strength, strength), tolerance=1e-11)
        errors.append(np.abs(coupling(u, v, a, b, strong) / strong.mass - expected).sum())
    assert errors[1] < 0.02 * errors[0]


@pytest.mark.parametrize("spread", [1.0, 3.0])
def test_certificate_holds(spread):
    u, v, a, b = problem(3, spread=spread)
    strengths = (3.0, 7.0)
    found = solve_unbalanced(StreamedKernel(u, v), (a, b), strengths, tolerance=1e-10)
    assert found.outcome is Outcome.CONVERGED
    pi = coupling(u, v, a, b, found)
    missed = np.abs(pi.sum(axis=1) - a * np.exp(-found.log_f / 3.0)).sum()
    missed += np.abs(pi.sum(axis=0) - b * np.exp(-found.log_g / 7.0)).sum()
    assert_allclose(missed / pi.sum(), found.residual, atol=1e-12)
    assert 0 <= found.duality_gap < 1e-8

    def primal(x):
        reference = a[:, None] * b[None] * np.exp(-0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=2))
        kl = lambda p, q: np.sum(p * np.log(p / q) - p + q)  # noqa: E731
        return kl(x, reference) + 3.0 * kl(x.sum(axis=1), a) + 7.0 * kl(x.sum(axis=0), b)

    value = primal(pi)
    rng = np.random.default_rng(0)
    for size in (1e-3, 1e-1):
        assert primal(pi * np.exp(size * rng.normal(size=pi.shape))) > value


def test_gap_bounds_what_is_lost():
    u, v, a, b = problem(5)
    cost = 0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=2)
    reference = a[:, None] * b[None] * np.exp(-cost)

    def primal(x):
        kl = lambda p, q: np.sum(p * np.log(p / q) - p + q)  # noqa: E731
        return kl(x, reference) + 5.0 * kl(x.sum(axis=1), a) + 5.0 * kl(x.sum(axis=0), b)

    best = primal(coupling(u, v, a, b, solve_unbalanced(StreamedKernel(u, v), (a, b), (5.0, 5.0), tolerance=1e-12)))
    rough = solve_unbalanced(
        StreamedKernel(u, v), (a, b), (5.0, 5.0), tolerance=1e-9, start=np.zeros(40), sweep_limit=3
    )
    assert rough.outcome is Outcome.ITERATION_LIMIT
    lost = primal(coupling(u, v, a, b, rough)) - best
    assert 0 < lost <= rough.duality_gap


def test_constant_killing_leaves_the_coupling_and_takes_the_mass():
    # Killing at rate V multiplies k by exp(-V T). The shape of π stays; by stationarity the mass falls by
    # exp(-V T / (1 + 2 λ)), which is e^(-V T) where nothing is known of the marginals (λ → 0).
    rate, duration = 0.4, 1.5
    u, v, a, b = problem(7)
    log_kernel = -0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=2)
    for strength in (4.0, 1e-9):
        plain = solve_unbalanced(DenseKernel(log_kernel), (a, b), (strength, strength), tolerance=1e-12)
        killed = solve_unbalanced(
            DenseKernel(log_kernel - rate * duration), (a, b), (strength, strength), tolerance=1e-12
        )
        shapes = [coupling(u, v, a, b, found) for found in (plain, killed)]
        assert_allclose(shapes[1] / shapes[1].sum(), shapes[0] / shapes[0].sum(), rtol=1e-8)
        assert_allclose(killed.mass / plain.mass, np.exp(-rate * duration / (1 + 2 * strength)), rtol=1e-8)


def test_zero_weights_and_isolated_targets():
    u, v, a, b = problem(2)
    a[0] = b[3] = 0.0
    v[5] = 60.0
    found = solve_unbalanced(StreamedKernel(u, v), (a, b), (10.0, 1.0))
    assert found.outcome is Outcome.CONVERGED
    assert np.isfinite(found.log_f).all() and np.isfinite(found.log_g).all()
    assert found.source_marginal[0] == found.target_marginal[3] == 0.0
    # The isolated target is shed, the others are not.
    assert found.target_marginal[5] < 1e-100
    others = np.setdiff1d(np.flatnonzero(b), [5])
    assert (found.target_marginal[others] > 1e-4 * b[others]).all()


def test_refusals():
    u, v, a, b = problem(0)
    kernel = StreamedKernel(u, v)
    with pytest.raises(ensembles.InputError, match="strengths must be positive; that of the later marginal is 0.0"):
        solve_unbalanced(kernel, (a, b), (1.0, 0.0))
    with pytest.raises(ensembles.InputError, match="two hard marginals need one mass; they hold"):
        solve_unbalanced(kernel, (a, b), (np.inf, np.inf))
    with pytest.raises(ensembles.InputError, match="tolerance must be positive"):
        solve_unbalanced(kernel, (a, b), (1.0, 1.0), tolerance=0)
