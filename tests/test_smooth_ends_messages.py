"""Every refusal of smooth ends: what is wrong, the value and where it stands, what to do."""

import numpy as np
import pytest

import ensembles
from ensembles.endpoints.covariance import parametrisation
from ensembles.endpoints.mixture import gaussian_mixture_potential

PRIOR = ensembles.Brownian(diffusion=0.5)
RNG = np.random.default_rng(0)
START = RNG.standard_normal((30, 2))
END = RNG.standard_normal((25, 2)) + 1.0


def series(start=START, end=END):
    return ensembles.SnapshotSeries.from_arrays([0, 2], [start, end])


def fit(ends="mixture", components=None, **clouds):
    return ensembles.fit_bridge(series(**clouds), PRIOR, ends=ends, components=components)


@pytest.fixture(scope="module")
def smooth():
    return fit(components=1)


def test_more_components_than_particles():
    with pytest.raises(
        ensembles.InputError,
        match=r"more components than particles; components = 26 for 25 .* snapshot t = 2; .*at most 25",
    ):
        fit(components=26)
    with pytest.raises(ensembles.InputError, match="more components than particles; components = 26"):
        fit("kernel", components=26)


def test_duplicated_particles_do_not_count_twice():
    twice = np.concatenate([END[:4], END[:4]])
    with pytest.raises(
        ensembles.InputError, match=r"components = 5 for 4 different .*\(row 4 repeats an earlier one\)"
    ):
        fit(components=5, end=twice)
    assert np.isfinite(fit(components=2, end=twice).log_density(2.0, END)).all()


def test_particles_at_one_place():
    with pytest.raises(
        ensembles.InputError,
        match=r"covariance of snapshot t = 2 is singular; its 3 .* one place, \[1.0, 2.0\]; .*atoms",
    ):
        fit(end=[[1.0, 2.0]] * 3)
    with pytest.raises(ensembles.InputError, match="its 1 particle.* at one place"):
        fit("kernel", end=[[1.0, 2.0]])


def test_a_constant_column_is_named():
    flat = END.copy()
    flat[:, 1] = 3.5
    with pytest.raises(
        ensembles.InputError,
        match="covariance of snapshot t = 2 is singular; the column y is constant, 3.5; leave y out",
    ):
        fit(end=flat)
    with pytest.raises(ensembles.InputError, match="snapshot t = 0 is singular; the column x is constant"):
        fit("kernel", start=START * [0.0, 1.0])
    # A start of particles may be flat.
    ends = ensembles.MixtureEnds(smooth_start=False)
    assert np.isfinite(fit(ends, 1, start=START * [0.0, 1.0]).log_density(1.0, END)).all()


def test_dependent_columns_are_named_for_full_covariances():
    tied = np.column_stack([END[:, 0], 2.0 * END[:, 0], END[:, 1]])
    start = RNG.standard_normal((30, 3))
    with pytest.raises(
        ensembles.InputError, match=r"t = 2 is singular; its smallest eigenvalue .* along x, y; leave a column"
    ):
        fit(ensembles.MixtureEnds(covariance="full"), 1, start=start, end=tied)
    assert np.isfinite(fit(ensembles.MixtureEnds(), 1, start=start, end=tied).log_density(1.0, start)).all()


@pytest.mark.parametrize(("bandwidth", "said"), [(0.0, "it is 0"), (-1.0, "it is -1"), (np.nan, "it is nan")])
def test_a_bandwidth_of_zero(bandwidth, said):
    with pytest.raises(ensembles.InputError, match=f"bandwidth must be positive and finite; {said}; .*ends='atoms'"):
        ensembles.KernelEnds(bandwidth=bandwidth)


def test_centres_of_another_dimension():
    with pytest.raises(ensembles.InputError, match="centres have the wrong dimension; 3 coordinate.* series has 2"):
        fit(ensembles.KernelEnds(centres=np.zeros((4, 3))))
    with pytest.raises(ensembles.InputError, match="centres must be finite"):
        ensembles.KernelEnds(centres=[[0.0, np.nan]])


def test_unknown_words():
    with pytest.raises(
        ensembles.InputError, match=r"unknown ends; 'mixtures' \(did you mean 'mixture'\?\); use one of: atoms"
    ):
        fit("mixtures")
    with pytest.raises(ensembles.InputError, match=r"unknown covariance; 'ful' \(did you mean 'full'\?\)"):
        ensembles.MixtureEnds(covariance="ful")
    with pytest.raises(ensembles.InputError, match="unknown begin; 'random'"):
        ensembles.MixtureEnds(begin="random")


def test_numbers_out_of_range():
    with pytest.raises(ensembles.InputError, match="components must be a whole number of at least 1; it is 0"):
        fit(components=0)
    with pytest.raises(ensembles.InputError, match="atoms have no components; components = 2"):
        fit("atoms", components=2)
    with pytest.raises(ensembles.InputError, match=r"rank does not fit the dimension; rank = 3 in 2 coordinate\(s\)"):
        fit(ensembles.MixtureEnds(covariance="low-rank", rank=3))
    with pytest.raises(ensembles.InputError, match="rank does not fit"):
        parametrisation("low-rank", 1, 2, 0)
    with pytest.raises(ensembles.InputError, match="repeats must be a whole number"):
        ensembles.MixtureEnds(repeats=0)


def test_a_start_of_another_kind(smooth):
    atoms = ensembles.fit_bridge(series(), PRIOR)
    with pytest.raises(ensembles.InputError, match="start does not fit; it has atoms ends .* where mixture ends"):
        ensembles.fit_bridge(series(), PRIOR, ends="mixture", start=atoms)
    with pytest.raises(ensembles.InputError, match="smooth ends do not couple particles"):
        ensembles.fit_bridge(series(), PRIOR, start=smooth)


def test_no_coupling_between_particles(smooth):
    with pytest.raises(
        ensembles.InputError, match=r"smooth ends do not couple particles; .*t = 0 and t = 2 are a mixture; ask "
    ):
        smooth.coupling(0)
    with pytest.raises(ensembles.InputError, match="no such gap; gap 1"):
        smooth.coupling(1)


def test_what_atoms_cannot_say():
    atoms = ensembles.fit_bridge(series(), PRIOR)
    with pytest.raises(
        ensembles.InputError, match="relative entropy to the prior is infinite with atoms; gap 0 ends in 25"
    ):
        atoms.relative_entropy()
    with pytest.raises(ensembles.InputError, match="no density; its components are atoms"):
        atoms.conditional_end(START).log_density(START)
    with pytest.raises(ensembles.InputError, match="atoms have no density at a snapshot; 30 point"):
        atoms.gaps[0].terminal.log_value(START)


def test_nothing_follows_the_last_snapshot(smooth):
    with pytest.raises(ensembles.InputError, match="nothing follows the last snapshot; start = 2"):
        smooth.conditional_end(START, start=2.0)
    with pytest.raises(ensembles.InputError, match="a path does not exist at the last snapshot"):
        smooth.sample_paths_from(START, 2.0, [2.0])
    with pytest.raises(ensembles.InputError, match="time lies outside the series; t = 3"):
        smooth.conditional_end(START, start=3.0)
    law = smooth.conditional_end(START)
    with pytest.raises(ensembles.InputError, match="y must have a row for every given point; it has 25 for 30"):
        law.log_density(END)


def test_a_given_potential_is_checked():
    step = PRIOR.transition(1.0, 2)
    with pytest.raises(ensembles.InputError, match=r"covariances do not fit the means; their shape is \(2, 2\)"):
        gaussian_mixture_potential([1.0], [[0.0, 0.0]], [[1.0, 1.0], [1.0, 1.0]], step)
    with pytest.raises(ensembles.InputError, match=r"covariances\[0\] must be positive definite"):
        gaussian_mixture_potential([1.0], [[0.0, 0.0]], [[1.0, -1.0]], step)
    with pytest.raises(ensembles.InputError, match="weights must be non-negative"):
        gaussian_mixture_potential([-1.0], [[0.0, 0.0]], [[1.0, 1.0]], step)
