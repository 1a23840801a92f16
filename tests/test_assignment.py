"""Sums over one-to-one assignments: enumeration against permutations, belief propagation and clusters against enumeration."""

from dataclasses import replace
from itertools import permutations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from ensembles.checks import ComputationError, InputError
from ensembles.schrodinger.assignment import AssignmentGraph, propagate_beliefs
from ensembles.schrodinger.clusters import scale_edges, sum_clusters
from ensembles.schrodinger.exact_assignment import exact_assignment

NOISES = (0.1, 0.3, 1.0, 3.0)  # in units of the spacing


def problem(rng, noise, count=None):
    """Log-weights of particles that moved by a Gaussian step, at one particle a unit area."""
    n = int(rng.integers(2, 9)) if count is None else count
    start = rng.random((n, 2)) * np.sqrt(n)
    end = start + noise * rng.standard_normal((n, 2))
    return -0.5 * ((start[:, None] - end[None]) ** 2).sum(axis=2) / noise**2


def test_enumeration_against_permutations():
    rng = np.random.default_rng(0)
    weights = rng.random((6, 6))
    total, links = 0.0, np.zeros((6, 6))
    for order in permutations(range(6)):
        value = np.prod(weights[np.arange(6), order])
        total += value
        links[np.arange(6), order] += value
    log_total, found, alone_rows, alone_columns = exact_assignment(np.log(weights))
    assert_allclose(log_total, np.log(total), rtol=1e-13)
    assert_allclose(found, links / total, atol=1e-14)
    assert_allclose(alone_rows, 0.0, atol=1e-14)
    assert_allclose(alone_columns, 0.0, atol=1e-14)


def test_enumeration_with_loners_against_subsets():
    rng = np.random.default_rng(1)
    w, u, v = rng.random((3, 4)), rng.random(3), rng.random(4)
    total, links = 0.0, np.zeros((3, 4))
    for order in np.ndindex(5, 5, 5):  # 4 means alone
        used = [j for j in order if j < 4]
        if len(set(used)) < len(used):
            continue
        value = np.prod([w[i, j] if j < 4 else u[i] for i, j in enumerate(order)])
        value *= np.prod([v[j] for j in range(4) if j not in used])
        total += value
        for i, j in enumerate(order):
            if j < 4:
                links[i, j] += value
    log_total, found, alone_rows, alone_columns = exact_assignment(np.log(w), (np.log(u), np.log(v)))
    assert_allclose(log_total, np.log(total), rtol=1e-13)
    assert_allclose(found, links / total, atol=1e-14)
    assert_allclose(alone_rows, 1 - links.sum(axis=1) / total, atol=1e-14)
    assert_allclose(alone_columns, 1 - links.sum(axis=0) / total, atol=1e-14)


def test_permanent_of_ones_is_a_factorial():
    assert_allclose(exact_assignment(np.zeros((12, 12)))[0], np.log(479001600.0), rtol=1e-14)


@pytest.mark.parametrize("noise", NOISES)
def test_bethe_permanent_is_a_bound_and_clusters_are_exact(noise):
    rng = np.random.default_rng(int(10 * noise))
    for _ in range(50):
        log_weights = problem(rng, noise)
        n = len(log_weights)
        exact, links, _, _ = exact_assignment(log_weights)
        posterior = propagate_beliefs(AssignmentGraph.dense(log_weights), tolerance=1e-6)
        # Gurvits 2011; Anari and Rezaei 2019: Bethe ≤ permanent ≤ 2^{n/2} Bethe.
        slack = 1e-6 + posterior.certificate.evidence_difference
        assert posterior.log_evidence <= exact + slack
        assert exact <= posterior.log_evidence + 0.5 * n * np.log(2.0) + slack
        assert_allclose(sum_clusters(posterior, limit=12).probabilities, links.ravel(), atol=1e-7)


def test_bethe_permanent_of_ones():
    # Stationary at β = 1/n: log Z_B = n log n + n (n - 1) log(1 - 1/n), from the Bethe free energy by hand.
    for n in (2, 5, 30):
        posterior = propagate_beliefs(AssignmentGraph.dense(np.zeros((n, n))))
        assert_allclose(posterior.log_evidence, n * np.log(n) + n * (n - 1) * np.log1p(-1 / n), atol=1e-9)
        assert_allclose(posterior.probabilities, 1 / n, atol=1e-10)


def test_permanent_of_the_beliefs_restores_the_permanent():
    # perm(w) = Z_B perm(β (1 - β)) / Π (1 - β): Watanabe and Chertkov 2010, from memory.
    rng = np.random.default_rng(3)
    for _ in range(10):
        log_weights = rng.normal(size=(6, 6))
        posterior = propagate_beliefs(AssignmentGraph.dense(log_weights), tolerance=1e-12)
        b = posterior.probabilities.reshape(6, 6)
        restored = posterior.log_evidence + exact_assignment(np.log(b * (1 - b)))[0] - np.log1p(-b).sum()
        assert_allclose(restored, exact_assignment(log_weights)[0], rtol=1e-9)


def test_two_formulas_for_the_evidence_agree_and_sums_are_one():
    log_weights = problem(np.random.default_rng(5), 0.8, 60)
    posterior = propagate_beliefs(AssignmentGraph.dense(log_weights), tolerance=1e-9)
    certificate = posterior.certificate
    assert certificate.converged
    assert certificate.evidence_difference < 1e-6
    assert max(certificate.row_error, certificate.column_error) < 1e-9
    rough = propagate_beliefs(AssignmentGraph.dense(log_weights), iteration_limit=3, tolerance=1e-9).certificate
    assert not rough.converged
    assert rough.evidence_difference > 1e-4
    assert rough.message_change > 1e-3


def test_damping_changes_the_way_not_the_end():
    graph = AssignmentGraph.dense(problem(np.random.default_rng(6), 1.0, 20))
    plain, damped = (propagate_beliefs(graph, damping=d, tolerance=1e-9) for d in (0.0, 0.5))
    assert damped.certificate.iterations != plain.certificate.iterations
    assert damped.certificate.converged and plain.certificate.converged
    assert_allclose(damped.probabilities, plain.probabilities, atol=1e-8)


def test_scaling_of_weights_and_order_do_not_matter():
    rng = np.random.default_rng(7)
    log_weights = problem(rng, 0.7, 15)
    order = rng.permutation(15)
    plain = propagate_beliefs(AssignmentGraph.dense(log_weights), tolerance=1e-9)
    moved = propagate_beliefs(
        AssignmentGraph.dense(log_weights[:, order] + rng.normal(size=(15, 1)) * 50), tolerance=1e-9
    )
    assert_allclose(moved.probabilities.reshape(15, 15), plain.probabilities.reshape(15, 15)[:, order], atol=1e-7)


def test_loners_against_enumeration():
    rng = np.random.default_rng(8)
    for _ in range(30):
        n, m = rng.integers(1, 7, 2)
        log_weights = 2.0 * rng.normal(size=(n, m))
        alone = rng.normal(size=n) - 1.0, rng.normal(size=m) - 1.0
        exact, links, rows, columns = exact_assignment(log_weights, alone)
        posterior = propagate_beliefs(AssignmentGraph.dense(log_weights, alone))
        assert posterior.log_evidence <= exact + 1e-9
        sums = sum_clusters(posterior, limit=12)
        assert_allclose(sums.probabilities.reshape(n, m), links, atol=1e-8)
        assert_allclose(sums.alone_rows, rows, atol=1e-8)
        assert_allclose(sums.alone_columns, columns, atol=1e-8)
        assert_allclose(posterior.log_evidence + sums.log_evidence_correction, exact, atol=1e-6)


def test_small_clusters_come_close():
    rng = np.random.default_rng(9)
    worst = {"propagation": 0.0, "clusters": 0.0}
    for _ in range(20):
        log_weights = problem(rng, 0.3, 11)
        _, links, _, _ = exact_assignment(log_weights)
        posterior = propagate_beliefs(AssignmentGraph.dense(log_weights), tolerance=1e-6)
        for name, found in (("propagation", posterior), ("clusters", sum_clusters(posterior, limit=6))):
            worst[name] = max(worst[name], float(np.abs(found.probabilities - links.ravel()).max()))
    assert worst["clusters"] < 0.1
    assert worst["propagation"] > 2 * worst["clusters"]


def test_two_on_their_own_are_where_propagation_fails_and_clusters_do_not():
    # Permanent of [[3, 1], [1, 2]]: 7, of which 6 is the diagonal; the Bethe optimum is the diagonal itself.
    posterior = propagate_beliefs(AssignmentGraph.dense(np.log([[3.0, 1.0], [1.0, 2.0]])))
    assert_allclose(posterior.probabilities, [1, 0, 0, 1], atol=1e-6)
    assert_allclose(sum_clusters(posterior).probabilities, [6 / 7, 1 / 7, 1 / 7, 6 / 7], atol=1e-9)


def test_scaled_edges_are_doubly_stochastic():
    # Nathanson 2019: [[3, 1, 1], [1, 1, 1], [1, 1, 1]] scales to rows (1/2, 1/4, 1/4), (1/4, 3/8, 3/8) twice.
    graph = AssignmentGraph.dense(np.log([[3.0, 1, 1], [1, 1, 1], [1, 1, 1]]))
    edges, _, _ = scale_edges(graph, graph.log_weights, (graph.log_alone_rows, graph.log_alone_columns))
    assert_allclose(edges, [1 / 2, 1 / 4, 1 / 4, 1 / 4, 3 / 8, 3 / 8, 1 / 4, 3 / 8, 3 / 8], atol=1e-9)


def test_what_cannot_be_assigned():
    graph = AssignmentGraph.dense(np.array([[0.0, -np.inf], [0.0, -np.inf]]))
    with pytest.raises(ComputationError, match="a column can neither be linked nor stay alone; column 1"):
        propagate_beliefs(graph)
    with pytest.raises(InputError, match="no one-to-one assignment is possible"):
        exact_assignment(np.array([[0.0, -np.inf], [0.0, -np.inf]]))
    with pytest.raises(InputError, match="too many particles to enumerate; 13 x 13"):
        exact_assignment(np.zeros((13, 13)))


@pytest.mark.parametrize("factor", [-300.0, -90.0, 90.0, 300.0])
def test_messages_up_to_a_factor_give_the_same_clusters(factor):
    # Without loners messages to rows times c and messages to columns over c are the same beliefs.
    rng = np.random.default_rng(2)
    places = rng.random((40, 2)) * 6.0
    squares = ((places[:, None] - (places + 0.6 * rng.normal(size=places.shape))[None]) ** 2).sum(axis=2)
    posterior = propagate_beliefs(AssignmentGraph.dense(-0.5 * squares / 0.36), tolerance=1e-8)
    scaled = replace(
        posterior,
        to_row=posterior.to_row + factor,
        to_column=posterior.to_column - factor,
        log_row_sums=posterior.log_row_sums + factor,
        log_column_sums=posterior.log_column_sums - factor,
    )
    own, other = (sum_clusters(p, limit=6) for p in (posterior, scaled))
    assert own.probabilities.min() >= 0.0
    assert_allclose(other.probabilities, own.probabilities, atol=1e-9)
    assert_allclose(other.log_evidence_correction, own.log_evidence_correction, atol=1e-7)
