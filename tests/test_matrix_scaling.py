"""Matrix scaling: exact answers, R's tables, Hilbert's metric, zeros, and every outcome with its sentence."""

import numpy as np
import pytest
from generators import CHAIN, RAKING, nathanson, occupational_table, two_by_two
from numpy.testing import assert_allclose

from ensembles.checks import InputError
from ensembles.kernels.dense import DenseKernel
from ensembles.kernels.streamed import StreamedKernel
from ensembles.logspace import birkhoff_contraction, birkhoff_diameter, hilbert_distance, log_sum_exp
from ensembles.schrodinger.iteration import Strategy
from ensembles.schrodinger.solution import Outcome
from ensembles.schrodinger.solve import solve

PLAIN = Strategy(relaxation=False, newton=False, ladder_top=np.inf)


def log(matrix):
    """log of a table that may hold zeros."""
    with np.errstate(divide="ignore"):
        return np.log(np.asarray(matrix, dtype=float))


def scaled(log_matrix, a, b, **options):
    """The table with row sums a and column sums b (each divided by its total), and the solution."""
    solution = solve(DenseKernel(log_matrix), (a, b), **{"tolerance": 1e-14, **options})
    a, b = a / np.sum(a), b / np.sum(b)
    return a[:, None] * b * np.exp(solution.log_f[:, None] + solution.log_g + log_matrix), solution


@pytest.mark.parametrize("k", [3.0, 0.2, 50.0])
def test_nathanson(k):
    matrix, expected = nathanson(k)
    table, solution = scaled(np.log(matrix), np.ones(3), np.ones(3))
    assert solution.outcome is Outcome.CONVERGED
    assert_allclose(3 * table, expected, rtol=1e-12)
    if k == 3.0:  # as printed there
        assert_allclose(expected, [[1 / 2, 1 / 4, 1 / 4], [1 / 4, 3 / 8, 3 / 8], [1 / 4, 3 / 8, 3 / 8]], rtol=1e-14)


@pytest.mark.parametrize("matrix", [[[1.0, 2.0], [3.0, 4.0]], [[5.0, 1e-6], [0.3, 2.0]], [[1.0, 1e5], [7.0, 1.0]]])
def test_two_by_two(matrix):
    table, _ = scaled(np.log(matrix), np.ones(2), np.ones(2))
    assert_allclose(2 * table, two_by_two(np.array(matrix)), rtol=1e-9)


def test_raking():
    table, _ = scaled(np.log(RAKING["table"]), RAKING["rows"], RAKING["columns"])
    table = table * RAKING["rows"].sum()
    assert_allclose(table[0], RAKING["first_row"], atol=6e-11)
    assert_allclose(table.sum(axis=1), RAKING["rows"], rtol=1e-13)
    assert_allclose(table.sum(axis=0), RAKING["columns"], rtol=1e-13)


@pytest.mark.parametrize("epsilon", [8, 2])
def test_tables_fitted_by_r(epsilon):
    log_start, rows, columns, expected = occupational_table(epsilon)
    table, solution = scaled(log_start, rows, columns, tolerance=1e-15)
    assert solution.certificate.marginal_error < 1e-14
    assert_allclose(table, expected, rtol=1e-12)


def test_two_state_chain():
    step, start, end = CHAIN["step"], CHAIN["start"], CHAIN["end"]
    table, solution = scaled(np.log(step @ step), start, end)
    assert_allclose(table, CHAIN["coupling"], atol=6e-10)
    ahead = step @ (end * np.exp(solution.log_g))  # φ after one step
    behind = step.T @ (start * np.exp(solution.log_f))
    assert_allclose(ahead * behind, CHAIN["middle"], atol=6e-11)
    entropy = np.sum(table * (solution.log_f[:, None] + solution.log_g + np.log(end)))  # against start ⊗ step²
    assert_allclose(entropy, CHAIN["entropy"], atol=6e-11)


@pytest.mark.parametrize("epsilon", [0.03, 0.5, 4.0])
def test_two_points(epsilon):
    # By symmetry p11/p12 = exp(1/ε): p11 = ½ / (1 + e^{-1/ε}).
    table, _ = scaled(-np.array([[0.0, 1.0], [1.0, 0.0]]) / epsilon, np.ones(2), np.ones(2))
    assert_allclose(table[0, 0], 0.5 / (1 + np.exp(-1 / epsilon)), rtol=1e-12)


# Hilbert's metric and Birkhoff's contraction (Birkhoff 1957; Franklin, Lorenz 1989).


@pytest.mark.parametrize(
    ("matrix", "expected"), [([[1.0, 0.5], [0.5, 1.0]], 1 / 9), ([[1.0, 2.0], [3.0, 4.0]], 0.0102051443)]
)
def test_birkhoff_contraction_values(matrix, expected):
    assert_allclose(birkhoff_contraction(birkhoff_diameter(np.log(matrix))), expected, atol=6e-11)


def test_birkhoff_diameter_is_the_largest_cross_ratio():
    k = np.exp(np.random.default_rng(0).normal(size=(5, 7)))
    ratios = [
        k[i, p] * k[j, q] / (k[j, p] * k[i, q]) for i in range(5) for j in range(5) for p in range(7) for q in range(7)
    ]
    assert_allclose(birkhoff_diameter(np.log(k)), np.log(max(ratios)), rtol=1e-13)


def test_contraction_is_attained_by_symmetric_two_by_two():
    # The contraction is that of the derivative at the image's centre: the fixed point (½, ½) has it.
    q = 0.5
    _, solution = scaled(np.log([[1, q], [q, 1]]), np.ones(2), np.ones(2), start=(np.zeros(2), np.array([0.0, 1e-3])))
    assert_allclose(solution.certificate.contraction_bound, 1 / 9, rtol=1e-12)
    _, solution = scaled(
        np.log([[1, q], [q, 1]]), np.ones(2), np.ones(2), start=(np.zeros(2), np.array([0.0, 1e-2])),
        strategy=PLAIN, tolerance=1e-9,
    )  # fmt: skip
    assert_allclose(solution.certificate.contraction_observed, 1 / 9, rtol=1e-4)


def test_hilbert_distance_ignores_a_factor():
    x, y = np.array([0.3, -2.0, 5.0]), np.array([1.0, 0.0, 2.0])
    assert_allclose(hilbert_distance(x, y), 3.0 + 2.0, rtol=1e-15)  # differences -0.7, -2, 3
    assert_allclose(hilbert_distance(x + 7.0, y), hilbert_distance(x, y), rtol=1e-14)


def test_log_sum_exp_of_nothing_is_minus_infinity():
    values = np.array([[-np.inf, -np.inf], [0.0, -np.inf], [800.0, 800.0]])
    assert_allclose(log_sum_exp(values, axis=1), [-np.inf, 0.0, 800.0 + np.log(2.0)])
    assert_allclose(log_sum_exp(np.array([-1e4, -1e4])), -1e4 + np.log(2.0), rtol=1e-15)


# Zeros, weights of zero, and the outcomes.


def test_a_pattern_without_positive_scaling_is_reported():
    # [[1, 1], [1, 0]]: the only doubly stochastic matrix below this pattern has a zero at its first entry (Nathanson 2019).
    _, solution = scaled(log([[1, 1], [1, 0]]), np.ones(2), np.ones(2))
    assert solution.outcome is Outcome.UNREACHABLE
    assert solution.unreachable == (1,)
    assert "target row(s) 1" in solution.message
    assert np.isnan(solution.log_f).all() and np.isnan(solution.certificate.marginal_error)


def test_zeros_that_admit_a_scaling_are_served():
    # [[1, 1], [1, 0]] to rows (.7, .3) and columns (.6, .4): the zero leaves one answer.
    table, solution = scaled(log([[1, 1], [1, 0]]), np.array([0.7, 0.3]), np.array([0.6, 0.4]))
    assert solution.outcome is Outcome.CONVERGED
    assert_allclose(table, [[0.3, 0.4], [0.3, 0.0]], atol=1e-14)


def test_a_column_of_zeros_is_named():
    _, solution = scaled(log([[1, 0, 1, 0], [1, 0, 1, 0]]), np.ones(2), np.ones(4))
    assert solution.outcome is Outcome.UNREACHABLE
    assert solution.unreachable == (1, 3)


@pytest.mark.parametrize("share", [1e-3, 1e-6, 1e-8])
def test_a_row_of_little_weight_does_not_count_as_missing(share):
    kernel, weights = np.ones((3, 3)), np.array([share, 0.5, 0.5 - share])
    kernel[2, 0] = 0.0
    pi, solution = scaled(log(kernel), weights, np.ones(3))
    assert solution.outcome is Outcome.CONVERGED
    assert_allclose(pi.sum(axis=1), weights / weights.sum(), rtol=1e-5)
    # With nothing but the light row to fill a column, no scaling exists.
    kernel[1, 0] = 0.0
    assert scaled(log(kernel), weights, np.ones(3))[1].outcome is Outcome.UNREACHABLE


def test_many_unreachable_rows_are_counted():
    kernel = StreamedKernel(np.zeros((3, 2)), np.full((9, 2), 1e7))
    solution = solve(kernel, (np.ones(3), np.ones(9)))
    assert solution.unreachable == tuple(range(9))
    assert "target row(s) 0, 1, 2, 3, 4 and 4 more;" in solution.message
    assert solution.outcome.sentence in solution.message


def test_unreachable_rows_keep_their_number_beside_weights_of_zero():
    targets = np.array([[0.0], [0.5], [1e7], [1.0]])
    solution = solve(StreamedKernel(np.zeros((2, 1)), targets), (np.ones(2), np.array([0.0, 1.0, 1.0, 1.0])))
    assert solution.outcome is Outcome.UNREACHABLE
    assert solution.unreachable == (2,)


@pytest.mark.parametrize("kind", ["dense", "streamed"])
def test_weights_of_zero_change_nothing_and_get_extended_potentials(kind):
    rng = np.random.default_rng(2)
    u, v = rng.normal(size=(7, 2)), rng.normal(size=(6, 2))
    a, b = rng.dirichlet(np.ones(7)), rng.dirichlet(np.ones(6))
    a[[1, 4]], b[[0, 5]] = 0.0, 0.0
    make = DenseKernel.between if kind == "dense" else StreamedKernel
    full = solve(make(u, v), (a, b), tolerance=1e-13)
    rows, columns = np.flatnonzero(a), np.flatnonzero(b)
    small = solve(make(u[rows], v[columns]), (a[rows], b[columns]), tolerance=1e-13)
    assert_allclose(full.log_f[rows], small.log_f, atol=1e-11)
    assert_allclose(full.log_g[columns], small.log_g, atol=1e-11)
    # At every row, weightless or not, f = -log Σ_j b_j e^{g_j} k_ij, and likewise g.
    a, b = a / a.sum(), b / b.sum()
    log_kernel = -0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=-1)
    assert_allclose(full.log_f, -log_sum_exp(log_kernel + log(b) + full.log_g, axis=1), atol=1e-11)
    assert_allclose(full.log_g, -log_sum_exp(log_kernel + (log(a) + full.log_f)[:, None], axis=0), atol=1e-11)
    assert_allclose(a @ full.log_f, b @ full.log_g, atol=1e-13)


def test_iteration_limit_really_occurs():
    rng = np.random.default_rng(3)
    kernel = StreamedKernel(4 * rng.normal(size=(20, 2)), 4 * rng.normal(size=(20, 2)))
    solution = solve(kernel, (np.ones(20), np.ones(20)), sweep_limit=1)
    assert solution.outcome is Outcome.ITERATION_LIMIT
    assert solution.iterations == 1
    assert "iteration limit" in solution.message and "allow more sweeps" in solution.message
    assert solution.certificate.marginal_error > 1e-6


def test_stalling_really_occurs():
    rng = np.random.default_rng(4)
    kernel = StreamedKernel(rng.normal(size=(15, 2)), rng.normal(size=(17, 2)))
    weights = (rng.dirichlet(np.ones(15)), rng.dirichlet(np.ones(17)))
    solution = solve(kernel, weights, tolerance=1e-19)
    assert solution.outcome is Outcome.STALLED
    assert "no longer falls" in solution.message and "larger tolerance" in solution.message
    assert solution.certificate.marginal_error < 1e-13


@pytest.mark.parametrize("outcome", Outcome)
def test_every_outcome_is_a_sentence_with_a_remedy(outcome):
    what, remedy = outcome.sentence.split(";")
    assert what and remedy.strip().endswith(".")


@pytest.mark.parametrize(
    ("weights", "words"),
    [
        ((np.array([1.0, -0.2]), np.ones(2)), r"non-negative; source weights\[1\] = -0.2"),
        ((np.ones(2), np.zeros(2)), "must not all be zero; the 2 value"),
        ((np.ones(3), np.ones(2)), r"one number a particle; its shape is \(3,\) for 2"),
        ((np.ones(2), np.array([1.0, np.nan])), r"must be finite; target weights\[1\] = nan"),
    ],
)
def test_weights_are_checked(weights, words):
    with pytest.raises(InputError, match=words):
        solve(DenseKernel(np.zeros((2, 2))), weights)
