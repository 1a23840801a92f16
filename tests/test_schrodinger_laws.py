"""Laws of the static problem on random small problems, and agreement with POT."""

import numpy as np
import ot
import pytest
from generators import Clouds, random_clouds
from hypothesis import assume, given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.special import logsumexp

import ensembles
from ensembles.kernels.cached import CachedKernel
from ensembles.kernels.dense import DenseKernel
from ensembles.kernels.streamed import StreamedKernel
from ensembles.logspace import hilbert_distance
from ensembles.schrodinger.iteration import Strategy, solver_states
from ensembles.schrodinger.solution import Outcome
from ensembles.schrodinger.solve import solve


def tight(problem: Clouds) -> float:
    """A tolerance near what rounding of the exponents (up to 1e5) lets any solver reach."""
    return 1e-12 + 1e-15 * float(problem.cost.max()) / problem.epsilon


@st.composite
def problems(draw, lowest=-4.0, highest=0.5):
    """Two small weighted clouds; ε from 10^lowest to 10^highest of the mean squared distance."""
    n, m = draw(st.integers(1, 14)), draw(st.integers(1, 14))
    dimension = draw(st.integers(1, 5))
    noise = 10.0 ** draw(st.floats(lowest, highest))
    return random_clouds(draw(st.integers(0, 10**6)), n, m, dimension, noise, weighted=draw(st.booleans()))


def kernel_of(problem: Clouds) -> StreamedKernel:
    """The unit kernel between the whitened clouds."""
    root = np.sqrt(problem.epsilon)
    return StreamedKernel(problem.x / root, problem.y / root)


def coupling_of(problem: Clouds, solution) -> np.ndarray:
    """π from the potentials, in plain numpy."""
    with np.errstate(divide="ignore"):
        log_a, log_b = np.log(problem.a), np.log(problem.b)
    return np.exp((log_a + solution.log_f)[:, None] + log_b + solution.log_g - problem.cost / problem.epsilon)


def solved(problem: Clouds, **options) -> np.ndarray:
    """The coupling at a tight tolerance; fails unless it converged."""
    solution = solve(kernel_of(problem), (problem.a, problem.b), **{"tolerance": tight(problem), **options})
    assert solution.outcome is Outcome.CONVERGED, solution.message
    return coupling_of(problem, solution)


@given(problems(), st.sampled_from([1e-3, 1e-6, 1e-9, 1e-12]), st.sampled_from(["streamed", "dense", "cached"]))
def test_marginals_are_met_to_the_tolerance(problem, tolerance, kind):
    kernel = kernel_of(problem)
    if kind == "dense":
        kernel = DenseKernel(-problem.cost / problem.epsilon)
    elif kind == "cached":
        kernel = CachedKernel(kernel)
    solution = solve(kernel, (problem.a, problem.b), tolerance=tolerance)
    assert solution.outcome is Outcome.CONVERGED, solution.message
    coupling = coupling_of(problem, solution)
    rows = np.abs(coupling.sum(axis=1) - problem.a).sum()
    columns = np.abs(coupling.sum(axis=0) - problem.b).sum()
    # Exponents of 1e4 to 1e5 are rounded to 1e-11 here and there, differently in numpy.
    rounding = 1e-15 * (problem.cost.max() / problem.epsilon + 100)
    assert max(rows, columns) <= tolerance + rounding
    assert_allclose([rows, columns], [solution.certificate.row_error, solution.certificate.column_error], atol=rounding)
    assert solution.certificate.marginal_error == max(solution.certificate.row_error, solution.certificate.column_error)
    assert_allclose(problem.a @ solution.log_f, problem.b @ solution.log_g, rtol=1e-9, atol=1e-9)


@given(problems(lowest=-2.5))
def test_agrees_with_pot(problem):
    # POT's `reg` is on the cost that is passed: ½|x - y|² and ε.
    expected, log = ot.sinkhorn(
        problem.a, problem.b, problem.cost, problem.epsilon, method="sinkhorn_log", numItermax=100_000, stopThr=1e-13,
        log=True, warn=False,
    )  # fmt: skip
    assume(log["err"][-1] < 1e-11)  # POT arrived; hypothesis objects if it does so too seldom
    assert_allclose(solved(problem), expected, atol=1e-8)


def test_pot_arrives_on_the_hard_ones_that_are_compared():
    for seed in range(4):
        problem = random_clouds(seed, 12, 10, 2, 0.01)
        expected = ot.sinkhorn(
            problem.a, problem.b, 2 * problem.cost, 2 * problem.epsilon, method="sinkhorn_log", numItermax=100_000,
            stopThr=1e-13,
        )  # fmt: skip
        assert np.abs(expected.sum(axis=0) - problem.b).sum() < 1e-11
        assert_allclose(solved(problem), expected, atol=1e-8)


def brownian(problem: Clouds, duration: float = 1.0, **options):
    """The fitted bridge of the problem over `duration`, at its ε = 2 D T."""
    prior = ensembles.Brownian(diffusion=0.5 * problem.epsilon / duration)
    return ensembles.fit_bridge(problem.series(duration), prior, **{"tolerance": tight(problem), **options})


@given(problems(), st.integers(0, 1000))
def test_rigid_motions_change_nothing(problem, seed):
    rng = np.random.default_rng(seed)
    d = problem.x.shape[1]
    turn, _ = np.linalg.qr(rng.normal(size=(d, d)))
    shift = 5 * rng.normal(size=d)
    moved = Clouds(problem.x @ turn + shift, problem.y @ turn + shift, problem.a, problem.b, problem.epsilon)
    assert_allclose(solved(moved), solved(problem), atol=1e-9)


@given(problems(), st.floats(-6, 6), st.floats(-6, 6))
def test_a_change_of_units_changes_nothing(problem, length, time):
    length, time = 10.0**length, 10.0**time
    other = Clouds(problem.x * length, problem.y * length, problem.a, problem.b, problem.epsilon * length**2)
    one, two = brownian(problem), brownian(other, duration=time)
    assert_allclose(two.coupling().matrix(), one.coupling().matrix(), atol=1e-9)
    x = problem.x[:3] + 0.1
    expected = one.drift(0.4, x) * length / time
    assert_allclose(two.drift(0.4 * time, x * length), expected, rtol=1e-6, atol=1e-6 * np.abs(expected).max())
    d = problem.x.shape[1]
    densities = two.log_density(0.4 * time, x * length) + d * np.log(length)
    assert_allclose(densities, one.log_density(0.4, x), rtol=1e-7, atol=1e-6)


@given(problems(lowest=-2.0))  # below, particles may pair off, and rounding decides the drift between the pairs
def test_time_reversal_swaps_everything(problem):
    one = brownian(problem)
    two = brownian(Clouds(problem.y, problem.x, problem.b, problem.a, problem.epsilon))
    assert_allclose(two.coupling().matrix(), one.coupling().matrix().T, atol=1e-9)
    x = np.concatenate([problem.x[:2] + 0.1, problem.y[:2] - 0.1])
    speed = np.abs(one.drift(0.3, x)).max() + np.abs(one.backward_drift(0.3, x)).max()
    assert_allclose(two.backward_drift(0.7, x), -one.drift(0.3, x), atol=1e-6 * speed)
    assert_allclose(two.drift(0.7, x), -one.backward_drift(0.3, x), atol=1e-6 * speed)
    assert_allclose(two.current_velocity(0.7, x), -one.current_velocity(0.3, x), atol=1e-6 * speed)
    assert_allclose(two.log_density(0.7, x), one.log_density(0.3, x), rtol=1e-7, atol=1e-6)


@pytest.mark.parametrize("noise", [1.0, 0.05])
def test_time_reversal_swaps_the_potentials(noise):
    problem = random_clouds(3, 9, 12, 2, noise)
    one = brownian(problem).solutions[0]
    two = brownian(Clouds(problem.y, problem.x, problem.b, problem.a, problem.epsilon)).solutions[0]
    assert_allclose(two.log_f, one.log_g, atol=1e-8)
    assert_allclose(two.log_g, one.log_f, atol=1e-8)


@given(problems(), st.randoms(use_true_random=False))
def test_the_order_of_particles_does_not_matter(problem, random):
    rows, columns = list(range(len(problem.a))), list(range(len(problem.b)))
    random.shuffle(rows)
    random.shuffle(columns)
    mixed = Clouds(problem.x[rows], problem.y[columns], problem.a[rows], problem.b[columns], problem.epsilon)
    assert_allclose(solved(mixed), solved(problem)[np.ix_(rows, columns)], atol=1e-9)


@given(problems())
def test_a_duplicated_particle_is_a_doubled_weight(problem):
    x, a = np.vstack([problem.x, problem.x[:1]]), np.append(problem.a, problem.a[0])
    doubled = problem.a.copy()
    doubled[0] *= 2
    twice = solved(Clouds(x, problem.y, a / a.sum(), problem.b, problem.epsilon))
    once = solved(Clouds(problem.x, problem.y, doubled / doubled.sum(), problem.b, problem.epsilon))
    assert_allclose(twice[0] + twice[-1], once[0], atol=1e-9)
    assert_allclose(twice[1:-1], once[1:], atol=1e-9)


@given(problems(lowest=-1.5))  # below, sweeps alone may contract by less than 1 % in a thousand
def test_every_way_to_iterate_gives_the_same_coupling(problem):
    expected = solved(problem)
    for options in (
        {"newton": False}, {"relaxation": False}, {"ladder_top": np.inf}, {"ladder_factor": 2.0, "level_sweeps": 3},
        {"newton_after": 0.0}, {"entry_limit": 0},
    ):  # fmt: skip
        assert_allclose(solved(problem, strategy=Strategy(**options)), expected, atol=1e-8)


@given(problems())
def test_potentials_satisfy_the_system(problem):
    solution = solve(kernel_of(problem), (problem.a, problem.b), tolerance=tight(problem))
    log_kernel = -problem.cost / problem.epsilon
    size = 1e-13 * (1 + np.abs(log_kernel).max())
    log_f = -logsumexp(log_kernel + np.log(problem.b) + solution.log_g, axis=1)
    assert_allclose(log_f, solution.log_f, atol=1e-9 + size)


@given(problems())
def test_a_warm_start_arrives_at_once(problem):
    first = solve(kernel_of(problem), (problem.a, problem.b), tolerance=1e-10)
    again = solve(kernel_of(problem), (problem.a, problem.b), tolerance=1e-9, start=(first.log_f, first.log_g))
    assert again.outcome is Outcome.CONVERGED
    assert again.iterations == 1
    bridge = brownian(problem, tolerance=1e-10)
    assert brownian(problem, tolerance=1e-9, start=bridge).solutions[0].iterations == 1


def test_a_warm_start_from_a_neighbouring_noise_saves_sweeps():
    problem = random_clouds(7, 60, 60, 2, 0.005)
    other = Clouds(problem.x, problem.y, problem.a, problem.b, 1.05 * problem.epsilon)
    far = Clouds(problem.x, problem.y, problem.a, problem.b, 100 * problem.epsilon)
    cold = brownian(other, tolerance=1e-8)
    warm = brownian(other, tolerance=1e-8, start=brownian(problem))
    assert warm.solutions[0].iterations < cold.solutions[0].iterations
    assert_allclose(warm.coupling().matrix(), cold.coupling().matrix(), atol=1e-7)
    assert brownian(
        far, tolerance=1e-8, start=brownian(problem)
    ).converged  # too far to help: the closed form starts it


# The certificate.


@given(problems(lowest=-0.7, highest=1.0), st.sampled_from([1e-1, 1e-2, 1e-4]))
def test_the_certificate_bounds_the_potentials(problem, tolerance):
    exact = solve(kernel_of(problem), (problem.a, problem.b), tolerance=1e-15, sweep_limit=500)
    for strategy in (Strategy(), Strategy(relaxation=False, newton=False)):
        solution = solve(kernel_of(problem), (problem.a, problem.b), tolerance=tolerance, strategy=strategy)
        certificate = solution.certificate
        assert certificate.contraction_bound <= 1.0
        distance = hilbert_distance(solution.log_g, exact.log_g)
        assert distance <= certificate.potential_error_bound * (1 + 1e-9) + 1e-12
        if np.isfinite(certificate.contraction_observed):
            assert certificate.contraction_observed <= certificate.contraction_bound + 1e-5


def test_the_bound_says_something():
    problem = random_clouds(5, 10, 12, 2, 1.0)
    solution = solve(kernel_of(problem), (problem.a, problem.b), tolerance=1e-3, strategy=Strategy(newton=False))
    exact = solve(kernel_of(problem), (problem.a, problem.b), tolerance=1e-14)
    distance = hilbert_distance(solution.log_g, exact.log_g)
    assert 0 < distance <= solution.certificate.potential_error_bound < 1.0
    assert solution.certificate.hilbert_step < solution.certificate.potential_error_bound
    assert solution.certificate.potential_error_estimate <= solution.certificate.potential_error_bound


def test_states_can_be_watched_and_abandoned():
    problem = random_clouds(6, 40, 40, 2, 0.003)
    seen = []

    def watch(state):
        seen.append(state)
        return state.sweep >= 7

    solution = solve(kernel_of(problem), (problem.a, problem.b), observe=watch)
    assert solution.outcome is Outcome.ITERATION_LIMIT
    assert [state.sweep for state in seen] == list(range(1, 8))
    assert solution.iterations == 7
    assert solution.history.shape == (7, 4)
    assert_allclose(solution.history[:, 0], [state.scale for state in seen])
    assert seen[-1].scale > 1.0  # still on the ladder: the potentials are carried to the problem's own noise,
    cold = solve(kernel_of(problem), (problem.a, problem.b), sweep_limit=1, strategy=Strategy(ladder_top=np.inf))
    assert solution.certificate.marginal_error < cold.certificate.marginal_error  # where they beat a start from nothing


def test_states_are_a_stream():
    problem = random_clouds(8, 15, 15, 2, 0.05)
    kernel = kernel_of(problem)
    start = (np.zeros(15), np.zeros(15))
    states = solver_states(kernel, (problem.a, problem.b), 1e-9, lambda scale: start, Strategy())
    scales, errors = [], []
    for state in states:
        scales.append(state.scale)
        errors.append(state.error)
        assert state.log_f.shape == state.log_g.shape == (15,)
    assert errors[-1] <= 1e-9 and min(errors[:-1]) > 1e-9
    assert (np.diff(scales) <= 0).all() and scales[-1] == 1.0
    assert not start[0].any() and not start[1].any()  # what was given is left as it was
