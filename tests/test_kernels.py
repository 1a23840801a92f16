"""Every kernel against plain numpy log-sums, at ordinary and at extreme potentials."""

from importlib import import_module
from pkgutil import walk_packages

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy.special import logsumexp

from ensembles.kernels.base import Kernel
from ensembles.kernels.cached import CachedKernel
from ensembles.kernels.choose import gaussian_kernel
from ensembles.kernels.dense import DenseKernel
from ensembles.kernels.streamed import StreamedKernel
from ensembles.kernels.truncated import TruncatedKernel
from ensembles.logspace import birkhoff_diameter

# Kernel class -> how to make it between two clouds, and the error its sums may have.
KERNELS = {
    DenseKernel: (DenseKernel.between, 1e-12),
    StreamedKernel: (StreamedKernel, 1e-12),
    CachedKernel: (lambda u, v: CachedKernel(StreamedKernel(u, v)), 5e-7),
    TruncatedKernel: (TruncatedKernel, 2e-9),
}
every_kernel = pytest.mark.parametrize("kind", KERNELS, ids=lambda kind: kind.__name__)


def clouds(n, m, dimension, spread=1.0, seed=0):
    """Two whitened clouds (n, d) and (m, d), and the exact log k (n, m)."""
    rng = np.random.default_rng([seed, n, m, dimension])
    u, v = spread * rng.normal(size=(n, dimension)), spread * rng.normal(size=(m, dimension)) + 0.5
    return u, v, -0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=-1)


def reference_sweep(log_kernel, log_f, q, log_a, relaxation):
    """What `Kernel.sweep` must return, in plain numpy."""
    excess = log_f + logsumexp(log_kernel + q, axis=1)
    new_f = log_f - relaxation * excess
    return new_f, excess, logsumexp(log_kernel + (log_a + new_f)[:, None], axis=0)


def test_every_kernel_is_tried():
    package = import_module("ensembles.kernels")
    for module in walk_packages(package.__path__, "ensembles.kernels."):
        import_module(module.name)
    pending, found = [Kernel], set()
    while pending:
        children = pending.pop().__subclasses__()
        found.update(child for child in children if child.__module__.startswith("ensembles."))
        pending += children
    assert found == set(KERNELS)


def test_the_chosen_kernel_is_one_of_them():
    u, v, _ = clouds(300, 200, 3)
    assert isinstance(gaussian_kernel(u[:9], v[:9]), StreamedKernel)
    assert isinstance(gaussian_kernel(u, v), CachedKernel)
    assert isinstance(gaussian_kernel(u, v, memory=1000.0), StreamedKernel)


@every_kernel
@pytest.mark.parametrize(
    ("n", "m", "dimension"), [(1, 1, 1), (7, 5, 1), (3, 40, 2), (33, 9, 3), (21, 27, 7), (10, 600, 12)]
)
def test_log_sums(kind, n, m, dimension):
    u, v, log_kernel = clouds(n, m, dimension)
    kernel = KERNELS[kind][0](u, v)
    assert kernel.shape == (n, m)
    rng = np.random.default_rng(1)
    for scale in (0.0, 1.0, 300.0):
        p, q = scale * rng.normal(size=n), scale * rng.normal(size=m)
        assert_allclose(kernel.log_sum_targets(q), logsumexp(log_kernel + q, axis=1), rtol=1e-13, atol=1e-13)
        assert_allclose(kernel.log_sum_sources(p), logsumexp(log_kernel + p[:, None], axis=0), rtol=1e-13, atol=1e-13)


@every_kernel
def test_log_weights_of_minus_infinity_are_weights_of_zero(kind):
    u, v, log_kernel = clouds(6, 8, 2)
    q = np.zeros(8)
    q[[0, 5]] = -np.inf
    assert_allclose(KERNELS[kind][0](u, v).log_sum_targets(q), logsumexp(log_kernel + q, axis=1), rtol=1e-13)
    assert_array_equal(KERNELS[kind][0](u, v).log_sum_targets(np.full(8, -np.inf)), np.full(6, -np.inf))


@every_kernel
@pytest.mark.parametrize("relaxation", [0.0, 1.0, 1.3, 1.9])
@pytest.mark.parametrize("dimension", [1, 2, 3, 6, 9])
def test_sweep(kind, relaxation, dimension):
    make, error = KERNELS[kind]
    u, v, log_kernel = clouds(23, 18, dimension)
    kernel = make(u, v)
    rng = np.random.default_rng(2)
    log_a = np.log(rng.dirichlet(np.ones(23)))
    log_f, q = rng.normal(size=23), rng.normal(size=18) - 3.0
    for _ in range(6):  # a kernel with a memory is swept several times, at potentials that move
        expected = reference_sweep(log_kernel, log_f, q, log_a, relaxation)
        sweep = kernel.sweep(log_f, q, log_a, relaxation)
        for one, other in zip((sweep.log_f, sweep.row_excess, sweep.column_log_sums), expected):
            assert_allclose(one, other, rtol=error, atol=error)
        log_f, q = sweep.log_f + 0.3 * rng.normal(size=23), q + 0.3 * rng.normal(size=18)


@every_kernel
@pytest.mark.parametrize("relaxation", [0.0, 1.0, 1.5])
@pytest.mark.parametrize("scale", [100.0, 400.0, 900.0])
def test_sweep_survives_over_and_underflow(kind, relaxation, scale):
    # Row sums from exp(-2000) to exp(2000): far outside what a double holds, and columns that only a lost row reaches.
    make, error = KERNELS[kind]
    u, v, log_kernel = clouds(20, 15, 2, spread=8.0)
    kernel = make(u, v)
    rng = np.random.default_rng(3)
    for _ in range(40):
        log_f, q = scale * rng.normal(size=20), scale * rng.normal(size=15)
        log_a = np.log(rng.dirichlet(np.ones(20)))
        expected = reference_sweep(log_kernel, log_f, q, log_a, relaxation)
        sweep = kernel.sweep(log_f, q, log_a, relaxation)
        for one, other in zip((sweep.log_f, sweep.row_excess, sweep.column_log_sums), expected):
            assert_allclose(one, other, rtol=error, atol=error)


def test_dense_sweep_with_zeros():
    log_kernel = np.array([[0.0, -np.inf, -1.0], [-np.inf, -np.inf, -np.inf], [-2.0, -np.inf, -700.0]])
    sweep = DenseKernel(log_kernel).sweep(np.zeros(3), np.zeros(3), np.log(np.full(3, 1 / 3)), 1.0)
    assert_array_equal(sweep.row_excess[1], -np.inf)
    assert_array_equal(sweep.column_log_sums[1], -np.inf)
    assert_allclose(sweep.row_excess[[0, 2]], [np.log1p(np.exp(-1)), -2.0], rtol=1e-14)
    assert np.isfinite(sweep.log_f).all()


@every_kernel
def test_entries(kind):
    make, error = KERNELS[kind]
    u, v, log_kernel = clouds(14, 11, 3, spread=2.0)
    kernel = make(u, v)
    rng = np.random.default_rng(4)
    log_a = np.full(14, -np.log(14))
    for _ in range(4):
        q = rng.normal(size=11) - np.log(11)
        log_f = -logsumexp(log_kernel + q, axis=1)
        kernel.sweep(log_f, q, log_a, 1.0)
        full = np.exp(log_kernel + (log_a + log_f)[:, None] + q)
        cutoff = np.quantile(full, 0.4)
        sparse = kernel.entries(log_a + log_f, q, cutoff, 10_000)
        assert_allclose(sparse.toarray(), np.where(full > cutoff, full, 0.0), rtol=2 * error, atol=1e-300)
        assert kernel.entries(log_a + log_f, q, cutoff, sparse.nnz - 1) is None
        assert kernel.entries(log_a + log_f, q, cutoff, sparse.nnz).nnz == sparse.nnz


@every_kernel
def test_costs_restriction_and_scale(kind):
    u, v, log_kernel = clouds(13, 17, 4, spread=1.5)
    kernel = KERNELS[kind][0](u, v)
    assert_allclose(kernel.nearest_costs(), -log_kernel.max(axis=0), rtol=1e-13)
    assert kernel.largest_cost() >= -log_kernel.min() * (1 - 1e-12)
    assert 0.2 * -log_kernel.mean() < kernel.mean_cost() <= -log_kernel.mean() * (1 + 1e-12)
    rows, columns = np.array([0, 3, 12]), np.array([1, 2, 16, 9])
    q = np.arange(4.0)
    part = kernel.restrict(rows, columns)
    assert part.shape == (3, 4)
    assert_allclose(part.log_sum_targets(q), logsumexp(log_kernel[np.ix_(rows, columns)] + q, axis=1), rtol=1e-13)
    wide = kernel.at_scale(7.0).log_sum_targets(np.zeros(17))
    assert_allclose(wide, logsumexp(log_kernel / 7.0, axis=1), rtol=1e-12)
    assert_array_equal(kernel.exact.log_sum_targets(np.zeros(17)), kernel.log_sum_targets(np.zeros(17)))


@every_kernel
@pytest.mark.parametrize("dimension", [1, 2, 5])
def test_diameter_bound_is_one(kind, dimension):
    u, v, log_kernel = clouds(30, 25, dimension)
    exact = birkhoff_diameter(log_kernel)
    bound = KERNELS[kind][0](u, v).diameter_bound()
    assert bound >= exact * (1 - 1e-12)
    assert bound < 8 * exact
    if dimension == 1:
        assert_allclose(bound, exact, rtol=1e-10)


def test_diameter_bound_of_a_tall_matrix_and_of_zeros():
    _, _, log_kernel = clouds(260, 6, 2)
    exact = birkhoff_diameter(log_kernel)
    assert exact * (1 - 1e-12) <= DenseKernel(log_kernel).diameter_bound() <= 2 * exact * (1 + 1e-12)
    log_kernel[3, 2] = -np.inf
    assert DenseKernel(log_kernel).diameter_bound() == np.inf
    assert DenseKernel(log_kernel[:9]).diameter_bound() == np.inf
