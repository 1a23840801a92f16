"""Every refusal of priors, solver and bridges: what is wrong, the value and its place, what to do."""

import numpy as np
import pytest
from generators import random_clouds
from numpy.testing import assert_allclose

import ensembles
from ensembles.bridges.coupling import Coupling
from ensembles.bridges.fit import SolverOptions
from ensembles.checks import ComputationError, InputError
from ensembles.kernels.streamed import StreamedKernel
from ensembles.priors.registry import build_prior
from ensembles.schrodinger.solution import ConvergenceError, Outcome
from ensembles.schrodinger.solve import solve

Brownian, Trap = ensembles.Brownian, ensembles.OrnsteinUhlenbeck

PRIOR_MISTAKES = [
    (lambda: Brownian(diffusion=0.0), "diffusion must be positive; diffusion = 0; give the diffusion coefficient"),
    (lambda: Brownian(diffusion=-2.0), "diffusion must be positive; diffusion = -2"),
    (lambda: Brownian(diffusion=[1.0, 0.0]), r"diffusion must be positive; diffusion\[1\] = 0"),
    (lambda: Brownian(diffusion=np.nan), "diffusion must be finite; diffusion = nan"),
    (lambda: Brownian(diffusion=[1.0, np.inf]), r"diffusion must be finite; diffusion\[1\] = inf"),
    (lambda: Brownian(diffusion="fast"), "diffusion must be numbers; it holds str"),
    (lambda: Brownian(diffusion=[]), r"a number, d numbers or a d by d matrix; its shape is \(0,\)"),
    (lambda: Brownian(diffusion=np.ones((2, 2, 2))), r"its shape is \(2, 2, 2\); reshape it"),
    (lambda: Brownian(diffusion=[[1.0, 2.0]]), r"must be a square matrix; its shape is \(1, 2\)"),
    (
        lambda: Brownian(diffusion=[[1, 0.5], [0.4, 1]]),
        r"symmetric; diffusion\[0, 1\] = 0.5 but diffusion\[1, 0\] = 0.4",
    ),
    (lambda: Brownian(diffusion=[[1, 2], [2, 1]]), "positive definite; its smallest eigenvalue is -1; every direction"),
    (lambda: Brownian(diffusion=[[1, 1], [1, 1]]), "positive definite; its smallest eigenvalue is"),
    (lambda: Brownian(1.0, drift=[1.0, np.nan]), r"drift must be finite; drift\[1\] = nan"),
    (lambda: Brownian(1.0, drift=[[1.0]]), r"drift must be a number or d numbers; its shape is \(1, 1\)"),
    (lambda: Trap(rate=1.0), "diffusion is missing; an Ornstein-Uhlenbeck prior needs it beside the rate"),
    (lambda: Trap(rate=np.inf, diffusion=1.0), "rate must be finite; rate = inf .*give it in 1/time"),
    (lambda: Trap(rate=[[1.0, 2.0]], diffusion=1.0), r"rate must be a number, .*its shape is \(1, 2\)"),
    (lambda: Trap(rate=[], diffusion=1.0), r"rate must be a number, .*its shape is \(0,\)"),
    (lambda: Trap(rate=1.0, centre="middle", diffusion=1.0), "centre must be numbers; it holds str"),
    (lambda: Trap(rate=1.0, centre=[np.nan], diffusion=1.0), r"centre must be finite; centre\[0\] = nan"),
    (
        lambda: build_prior("brownain", {}),
        r"unknown prior; 'brownain' \(did you mean 'brownian'\?\); use one of: brownian",
    ),
    (lambda: build_prior("brownian", {"rate": 1}), "parameters of the prior 'brownian' do not fit; .*'rate'"),
]
TRANSITION_MISTAKES = [
    (lambda: Brownian(1.0).transition(0.0, 2), "duration must be positive and finite; it is 0; give the later time"),
    (lambda: Brownian(1.0).transition(-1.5, 2), "duration must be positive and finite; it is -1.5"),
    (lambda: Brownian(1.0).transition(np.nan, 2), "duration must be positive and finite; it is nan"),
    (lambda: Brownian(1.0).transition("long", 2), "duration must be a number; it is 'long'"),
    (lambda: Brownian(1.0).transition(1.0, 0), "dimension must be a whole number of at least 1; it is 0"),
    (lambda: Brownian([1.0, 2.0]).transition(1.0, 3), r"diffusion has the wrong dimension; .*2 coordinate\(s\), .*3; give"),
    (lambda: Brownian(1.0, drift=[1.0]).transition(1.0, 2), "drift has the wrong dimension"),
    (lambda: Trap(rate=np.eye(3), diffusion=1.0).transition(1.0, 2), "rate has the wrong dimension"),
    (lambda: Trap(rate=1.0, centre=[0, 0], diffusion=1.0).transition(1.0, 1), "centre has the wrong dimension"),
    (lambda: Brownian(1.0).transition(1.0, 2).sample([[1.0]], 0), r"points has the wrong dimension; it has 1"),
    (lambda: Brownian(1.0).transition(1.0, 1).sample([[1.0]], None), "rng must be a whole number or .*; it is None"),
    (lambda: Brownian(1.0).transition(1.0, 1).log_density([[1.0]], [[np.nan]]), r"y must be finite; y\[0, 0\] = nan"),
]  # fmt: skip


@pytest.mark.parametrize(("mistake", "words"), PRIOR_MISTAKES + TRANSITION_MISTAKES)
def test_priors_refuse(mistake, words):
    with pytest.raises(InputError, match=words):
        mistake()


@pytest.mark.parametrize("rate", [-1.0, [[-1.0, 0.3], [0.2, -0.5]]])
def test_an_unstable_prior_over_a_long_duration_overflows(rate):
    with pytest.raises(
        ComputationError, match="overflows over the duration 2000; its drift is unstable; use a shorter gap"
    ):
        Trap(rate=rate, diffusion=1.0).transition(2000.0, 2)


def test_a_covariance_that_is_singular_in_floating_point():
    # Unstable along (1, -1), at rest along (1, 1): variances e^80 and 2, of which a double keeps the first alone.
    step = Trap(rate=[[-20.0, 20.0], [20.0, -20.0]], diffusion=1.0).transition(1.0, 2)
    with pytest.raises(
        ComputationError, match="singular in floating point; its smallest eigenvalue is .*; use more even"
    ):
        step.whiten_targets(np.ones((1, 2)))


# Fitting.


def series(dimension=2, shift=0.0):
    """Two small clouds at t = 1 and t = 3."""
    rng = np.random.default_rng(0)
    clouds = [rng.normal(size=(12, dimension)), rng.normal(size=(9, dimension)) + shift]
    return ensembles.SnapshotSeries.from_arrays([1.0, 3.0], clouds)


def test_fit_refuses_what_is_no_prior():
    for fit in (
        lambda: ensembles.fit_bridge(series(), 0.5),
        lambda: ensembles.gaussian_bridge(0, 1, 0, 1, 0.5, 1.0),
    ):
        with pytest.raises(
            InputError, match="prior must be a prior of this package; it is float; use Brownian or Ornstein"
        ):
            fit()


@pytest.mark.parametrize("tolerance", [0.0, -1e-6, np.nan, "tight"])
def test_fit_refuses_a_tolerance(tolerance):
    with pytest.raises(InputError, match="tolerance must be .*; it is .*; give the L1 error allowed, such as 1e-6"):
        ensembles.fit_bridge(series(), Brownian(1.0), tolerance=tolerance)


@pytest.mark.parametrize("limit", [0, -3, 2.5, True])
def test_fit_refuses_a_sweep_limit(limit):
    with pytest.raises(InputError, match="sweep_limit must be a whole number of at least 1; it is"):
        ensembles.fit_bridge(series(), Brownian(1.0), options=SolverOptions(sweep_limit=limit))


def test_fit_refuses_a_prior_of_another_dimension():
    with pytest.raises(InputError, match="diffusion has the wrong dimension"):
        ensembles.fit_bridge(series(), Brownian([1.0, 1.0, 1.0]))


@pytest.mark.parametrize(
    ("make", "read"),
    [
        (lambda d: Brownian(diffusion=d), float),
        (lambda d: Trap(rate=0.5, centre=1.0, diffusion=d), float),
        (lambda d: Brownian(diffusion=d * np.array([[1.0, 0.2], [0.2, 3.0]])), lambda w: float(w[1:].split(",")[0])),
    ],
    ids=["brownian", "trap", "matrix"],
)  # fmt: skip
def test_noise_too_small_names_the_smallest_usable_diffusion_and_that_works(make, read):
    data = series(shift=2.0)
    with pytest.raises(
        InputError, match=r"the noise is too small .* between t = 1 and t = 3; .*at least 1e-06"
    ) as refusal:
        ensembles.fit_bridge(data, make(1e-11))
    named = read(str(refusal.value).split("the smallest usable diffusion here is ")[1].split(" (")[0].split(" on")[0])
    with pytest.raises(InputError, match="the noise is too small"):
        ensembles.fit_bridge(data, make(0.9 * named))
    bridge = ensembles.fit_bridge(data, make(1.01 * named), tolerance=1e-5)
    assert bridge.converged
    assert_allclose(bridge.coupling().matrix().sum(axis=0), np.full(9, 1 / 9), atol=1e-5)


def test_a_fit_that_misses_its_tolerance_carries_its_solution():
    problem = random_clouds(1, 30, 30, 2, 0.001)
    prior = Brownian(problem.epsilon / 2)
    words = r"did not converge between t = 0 and t = 1; iteration limit; L1 error .* after 3 sweep\(s\); .*allow more sweeps"
    with pytest.raises(ConvergenceError, match=words) as failure:
        ensembles.fit_bridge(problem.series(), prior, options=SolverOptions(sweep_limit=3))
    assert isinstance(failure.value, ComputationError)
    assert failure.value.solution.outcome is Outcome.ITERATION_LIMIT
    assert failure.value.solution.iterations == 3
    assert np.isfinite(failure.value.solution.log_g).all()


def test_a_far_particle_of_small_weight_is_unreachable_by_number():
    clouds = [np.zeros((2, 1)), np.array([[0.0], [1.0], [1e9]])]
    data = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], clouds, [None, [1.0, 1.0, 1e-14]])
    with pytest.raises(ConvergenceError, match=r"unreachable; target row\(s\) 2; .*drop the rows named") as failure:
        ensembles.fit_bridge(data, Brownian(0.5), options=SolverOptions(allow_unconverged=True))
    assert failure.value.solution.unreachable == (2,)


def test_a_start_from_other_snapshots_is_refused():
    bridge = ensembles.fit_bridge(series(), Brownian(1.0))
    other = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [np.ones((4, 2)), np.zeros((9, 2))])
    with pytest.raises(
        InputError, match=r"start is a bridge through other snapshots; they hold \[12, 9\] .* \[4, 9\] are"
    ):
        ensembles.fit_bridge(other, Brownian(1.0), start=bridge)
    with pytest.raises(InputError, match=r"start potentials do not fit; log_f has shape \(3,\) for 2 particle"):
        solve(
            StreamedKernel(np.zeros((2, 1)), np.ones((2, 1))),
            (np.ones(2), np.ones(2)),
            start=(np.zeros(3), np.zeros(2)),
        )


# Asking a bridge.

BRIDGE_MISTAKES = [
    (lambda b: b.log_density(0.5, [[0, 0]]), "time lies outside the series; t = 0.5 with snapshots from 1 to 3; a bridge says"),
    (lambda b: b.drift(np.nan, [[0, 0]]), "time lies outside the series; t = nan"),
    (lambda b: b.drift("noon", [[0, 0]]), "the time must be a number; it is 'noon'; give one time of the series"),
    (lambda b: b.moments(None), "the time must be a number; it is None"),
    (lambda b: b.log_density(1.0, [[0, 0]]), "the density does not exist at a snapshot; t = 1 is one"),
    (lambda b: b.current_velocity(3.0, [[0, 0]]), "the current velocity does not exist at a snapshot; t = 3 is one"),
    (lambda b: b.drift(3.0, [[0, 0]]), "the forward drift does not exist at the last snapshot; t = 3, .*earlier time"),
    (lambda b: b.backward_drift(1, [[0, 0]]), "the backward drift does not exist at the first snapshot; t = 1, .*later time"),
    (lambda b: b.sample_paths_from([[0, 0]], 3.0, [3.0]), "a path does not exist at the last snapshot"),
    (lambda b: b.drift(2.0, [[0.0]]), r"points has the wrong dimension; it has 1 coordinate\(s\) where 2 are expected"),
    (lambda b: b.drift(2.0, [[0.0, np.inf]]), r"points must be finite; points\[0, 1\] = inf"),
    (lambda b: b.drift(2.0, np.empty((0, 2))), "points is empty"),
    (lambda b: b.sample(2.0, 0), "count must be a whole number of at least 1; it is 0"),
    (lambda b: b.sample(2.0, 5, rng=None), "rng must be a whole number or a numpy Generator; it is None; give a seed"),
    (lambda b: b.sample_paths(2.5, [2.0]), "count must be a whole number of at least 1; it is 2.5"),
    (lambda b: b.sample_paths(2, [2.0, 1.5]), r"times must increase; times\[0\] = 2 is followed by times\[1\] = 1.5; sort"),
    (lambda b: b.sample_paths(2, [2.0, 3.5]), "time lies outside the series; t = 3.5"),
    (lambda b: b.sample_paths(2, []), "times holds too few times; 0 where 1 are needed"),
    (lambda b: b.sample_paths_from([[0, 0]], 2.0, [1.5, 2.5]), r"times begin before .*; times\[0\] = 1.5 and .* 2; leave"),
    (lambda b: b.coupling(1), r"no such gap; gap 1 of a bridge with 1 gap\(s\); use 0 to 0"),
    (lambda b: b.coupling(-1), "no such gap; gap -1"),
    (lambda b: b.coupling(True), "no such gap; gap True"),
    (lambda b: b.coupling().row(12), "no such row; row 12 of a coupling with 12 sources; use 0 to 11"),
    (lambda b: b.coupling().top_links(0), "count must be a whole number of at least 1; it is 0"),
]  # fmt: skip


@pytest.fixture(scope="module")
def bridge():
    """A bridge in the plane from t = 1 to t = 3."""
    return ensembles.fit_bridge(series(), Brownian(0.5))


@pytest.mark.parametrize(("mistake", "words"), BRIDGE_MISTAKES)
def test_bridges_refuse(bridge, mistake, words):
    with pytest.raises(InputError, match=words) as refusal:
        mistake(bridge)
    assert str(refusal.value).count(";") >= 2  # what is wrong; the value and its place; what to do


def test_a_time_may_come_as_any_number(bridge):
    expected = bridge.drift(2.0, [[0.0, 1.0]])
    for t in (2, np.float32(2.0), np.int64(2), "2.0"):
        assert_allclose(bridge.drift(t, [[0.0, 1.0]]), expected, rtol=0)


def test_a_huge_coupling_is_not_made_a_matrix():
    rng = np.random.default_rng(0)
    kernel = StreamedKernel(rng.normal(size=(20_001, 1)), rng.normal(size=(10_000, 1)))
    coupling = Coupling(kernel, np.zeros(20_001), np.zeros(10_000), 0, 1)
    with pytest.raises(InputError, match=r"too large for one matrix; it has 20001 x 10000 entries; use row\(i\)"):
        coupling.matrix()
    assert coupling.row(3).shape == (10_000,)


GAUSSIAN_MISTAKES = [
    (lambda: ensembles.gaussian_bridge(0, 0, 0, 1, Brownian(1.0), 1.0), "cov_start must be positive definite"),
    (lambda: ensembles.gaussian_bridge(0, 1, 0, [[1, 2], [0, 1]], Brownian(1.0), 1.0), "cov_end must be symmetric"),
    (lambda: ensembles.gaussian_bridge([0, 1], 1, 0, 1, Brownian(1.0), 1.0), r"cov_start does not fit; it is \(1, 1\) beside"),
    (lambda: ensembles.gaussian_bridge([0], 1, [0, 1], 1, Brownian(1.0), 1.0), "means of 1 and 2 coordinate"),
    (lambda: ensembles.gaussian_bridge([[0]], 1, 0, 1, Brownian(1.0), 1.0), r"mean_start must be .*its shape is \(1, 1\)"),
    (lambda: ensembles.gaussian_bridge(0, 1, np.nan, 1, Brownian(1.0), 1.0), "mean_end must be finite"),
    (lambda: ensembles.gaussian_bridge(0, 1, 0, 1, Brownian(1.0), 0.0), "duration must be positive and finite; it is 0"),
    (lambda: ensembles.gaussian_bridge(0, 1, 0, 1, Brownian(1.0), 2.0).moments(2.1), "t = 2.1 in a bridge from 0 to 2; give"),
    (lambda: ensembles.gaussian_bridge(0, 1, 0, 1, Brownian(1.0), 2.0).drift(1.0, [[0, 0]]), "points has the wrong dimension"),
]  # fmt: skip


@pytest.mark.parametrize(("mistake", "words"), GAUSSIAN_MISTAKES)
def test_gaussian_bridges_refuse(mistake, words):
    with pytest.raises(InputError, match=words):
        mistake()
