"""Boxes: image sums against theta functions and cosine series, bridges in a box, and paths that stay in it."""

import mpmath
import numpy as np
import pytest
from numpy.testing import assert_allclose

import ensembles
from ensembles.bridges.boxed import gap_kernel
from ensembles.bridges.images import BoxLaw, draw_images
from ensembles.kernels.images import AxisWalls, axis_log_kernel

NOISES = [0.02, 0.3, 1.0, 4.0]  # standard deviation in a box of length 2


def theta_density(x: float, y: float, sigma: float, length: float) -> float:
    """Density of wrapped Brownian motion by Jacobi's third theta function: θ₃(π z/L, exp(-2 π² σ²/L²)) / L."""
    nome = mpmath.exp(-2 * mpmath.pi**2 * mpmath.mpf(sigma) ** 2 / length**2)
    return mpmath.jtheta(3, mpmath.pi * (mpmath.mpf(y) - x) / length, nome) / length


def cosine_density(x: float, y: float, sigma: float, length: float) -> float:
    """Reflected Brownian motion on [0, L]: 1/L + 2/L Σ exp(-k²π²σ²/(2L²)) cos(kπx/L) cos(kπy/L) (heat equation)."""
    total = mpmath.mpf(1) / length
    for k in range(1, 4000):
        factor = mpmath.exp(-((k * mpmath.pi * sigma / length) ** 2) / 2)
        total += (
            2
            / mpmath.mpf(length)
            * factor
            * mpmath.cos(k * mpmath.pi * x / length)
            * mpmath.cos(k * mpmath.pi * y / length)
        )
        if factor < mpmath.mpf(10) ** -45:
            break
    return total


@pytest.mark.parametrize("sigma", NOISES)
@pytest.mark.parametrize(("boundary", "reference"), [("periodic", theta_density), ("reflecting", cosine_density)])
def test_image_sums_against_series(sigma, boundary, reference):
    length = 2.0
    rng = np.random.default_rng(1)
    starts = rng.uniform(0, length, 12)
    ends = np.clip(starts + sigma * rng.uniform(-4, 4, 12), 0.0, length)
    with mpmath.workdps(60):
        expected = [float(mpmath.log(reference(x, y, sigma, length))) for x, y in zip(starts, ends)]
    found, _ = axis_log_kernel(AxisWalls(boundary, length / sigma), starts / sigma, ends / sigma)
    assert_allclose(
        found - np.log(sigma * np.sqrt(2 * np.pi)), expected, rtol=0, atol=1e-12 * max(1.0, np.abs(expected).max())
    )


@pytest.mark.parametrize("boundary", ["periodic", "reflecting", "open"])
def test_slopes_of_image_sums(boundary):
    walls = AxisWalls(boundary, 3.0)
    u, v, h = np.array([0.2, 1.4, 2.9]), np.array([2.8, 1.0, 0.1]), 1e-6
    value, slope = axis_log_kernel(walls, u, v)
    numeric = (axis_log_kernel(walls, u + h, v)[0] - axis_log_kernel(walls, u - h, v)[0]) / (2 * h)
    assert np.isfinite(value).all()
    assert_allclose(slope, numeric, atol=1e-8)


def clouds(box, rng, sizes=(40, 50)):
    return [rng.uniform(box.lower, box.upper, (size, box.dimension)) for size in sizes]


def boxed_bridge(boundary, diffusion=0.3, dimension=2, seed=0):
    box = ensembles.Box(np.full(dimension, -1.0), np.full(dimension, 1.5), boundary)
    start, end = clouds(box, np.random.default_rng(seed))
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, end])
    return box, series, ensembles.fit_bridge(series, ensembles.Brownian(diffusion, box=box), tolerance=1e-9)


@pytest.mark.parametrize("boundary", ["periodic", "reflecting"])
def test_a_boxed_coupling_has_its_marginals_and_mass_one(boundary):
    _, _, bridge = boxed_bridge(boundary)
    coupling = bridge.coupling(0).matrix()
    assert_allclose(coupling.sum(axis=1), 1 / 40, atol=1e-10)
    assert_allclose(coupling.sum(axis=0), 1 / 50, atol=1e-10)
    assert_allclose(bridge.coupling(0).row(3), coupling[3], rtol=1e-12)
    # Midpoint rule: exact to rounding for a smooth periodic function, and for one mirrored at the walls.
    edges = (np.arange(80) + 0.5) / 80 * 2.5 - 1.0
    grid = np.stack(np.meshgrid(edges, edges), axis=-1).reshape(-1, 2)
    density = np.exp(bridge.log_density(0.4, grid))
    assert_allclose(density.sum() * (2.5 / 80) ** 2, 1.0, atol=1e-8)
    assert np.isneginf(bridge.log_density(0.4, [[1.6, 0.0]])).all()


def test_a_wide_box_changes_nothing():
    rng = np.random.default_rng(4)
    start, end = rng.normal(size=(30, 2)), rng.normal(size=(25, 2)) + 0.5
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0], [start, end])
    box = ensembles.Box([-60.0, -60.0], [60.0, 60.0], ["periodic", "reflecting"])
    inside = ensembles.fit_bridge(series, ensembles.Brownian(0.4, box=box), tolerance=1e-10)
    free = ensembles.fit_bridge(series, ensembles.Brownian(0.4), tolerance=1e-10)
    assert_allclose(inside.coupling(0).matrix(), free.coupling(0).matrix(), atol=1e-10)
    points = rng.normal(size=(7, 2))
    assert_allclose(inside.log_density(0.3, points), free.log_density(0.3, points), atol=1e-7)
    assert_allclose(inside.drift(0.3, points), free.drift(0.3, points), atol=1e-7)
    assert_allclose(inside.current_velocity(0.3, points), free.current_velocity(0.3, points), atol=1e-7)


@pytest.mark.parametrize("boundary", ["periodic", "reflecting"])
def test_the_drift_is_the_gradient_of_the_potential(boundary):
    _, _, bridge = boxed_bridge(boundary)
    gap = bridge.gaps[0]
    points, h = np.array([[0.1, 1.45], [-0.95, 0.3]]), 1e-5
    for which in (gap.ahead, gap.behind):
        numeric = np.column_stack([
            (which(0.6, points + h * step)[0] - which(0.6, points - h * step)[0]) / (2 * h) for step in np.eye(2)
        ])  # fmt: skip
        assert_allclose(which(0.6, points)[1], numeric, atol=1e-6)


def test_no_flux_through_a_reflecting_wall():
    _, _, bridge = boxed_bridge("reflecting")
    wall = np.array([[-1.0, 0.2], [1.5, -0.4]])
    assert_allclose(bridge.current_velocity(0.5, wall)[:, 0], 0.0, atol=1e-9)


@pytest.mark.parametrize("boundary", ["periodic", "reflecting"])
def test_paths_are_continuous_unwrapped_and_distributed_like_the_density(boundary):
    box, series, bridge = boxed_bridge(boundary, diffusion=1.0)
    count = 6000
    paths = bridge.sample_paths(count, np.linspace(0, 1, 41), rng=2)
    steps = np.diff(paths.positions, axis=1)
    assert np.abs(steps).max() < 8 * np.sqrt(2 * 1.0 / 40)  # no jump over the box
    folded = box.fold(paths.positions)
    assert (folded >= box.lower).all() and (folded <= box.upper).all()
    ends = series.clouds[1][paths.members[:, 1]]
    assert_allclose(folded[:, -1], ends, atol=1e-9)
    assert (np.abs(paths.positions[:, -1] - ends).max(axis=1) > 1e-6).mean() > 0.05  # some went round or were mirrored
    # Marginal at 0.5 against the closed form, in 8 bins of the first axis: 6 standard errors.
    edges = (np.arange(80) + 0.5) / 80 * 2.5 - 1.0
    grid = np.stack(np.meshgrid(edges, edges, indexing="ij"), axis=-1).reshape(-1, 2)
    share = np.exp(bridge.log_density(0.5, grid)).reshape(8, 10, 80).sum(axis=(1, 2)) * (2.5 / 80) ** 2
    for drawn in (folded[:, 20, 0], bridge.sample(0.5, count, rng=3)[:, 0]):
        found = np.histogram(drawn, bins=8, range=(-1.0, 1.5))[0] / count
        assert (np.abs(found - share) < 6 * np.sqrt(share / count)).all()


def test_images_are_drawn_with_their_probabilities():
    box = ensembles.Box([0.0], [1.0], "reflecting")
    step = ensembles.Brownian(0.2).transition(1.0, 1)
    start = np.full((20_000, 1), 0.9)
    drawn = draw_images(box, step, start, np.full((20_000, 1), 0.7), np.random.default_rng(0))[:, 0]
    images = np.array([0.7, 1.3, -0.7, 2.7, -1.3])
    density = np.exp(-0.5 * (images - 0.9) ** 2 / 0.4)
    share = [(np.abs(drawn - image) < 1e-9).mean() for image in images]
    expected = density / density.sum()
    assert_allclose(share, expected, atol=6 * np.sqrt(0.25 / 20_000))


def test_a_chain_in_a_box_goes_on_from_where_it_was():
    box = ensembles.Box([0.0], [1.0], "periodic")
    rng = np.random.default_rng(5)
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], [rng.random((15, 1)) for _ in range(3)])
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(0.5, box=box))
    paths = bridge.sample_paths(400, np.linspace(0, 2, 81), rng=0)
    assert np.abs(np.diff(paths.positions, axis=1)).max() < 8 * np.sqrt(2 * 0.5 * 2 / 80)
    assert np.ptp(paths.positions[:, -1]) > 2.0


def test_the_kernel_of_a_large_noise_is_flat():
    box = ensembles.Box([0.0, 0.0], [1.0, 2.0], ["periodic", "reflecting"])
    prior = ensembles.Brownian(20.0, box=box)
    rng = np.random.default_rng(0)
    start, end = clouds(box, rng, (5, 6))
    step = prior.transition(1.0, 2)
    density = np.exp(gap_kernel(prior, step, start, end).log_kernel + step.log_normaliser)
    assert_allclose(density, 0.5, rtol=1e-10)  # 1 / area


def test_whitened_coordinates_start_at_the_lower_wall():
    box = ensembles.Box([2.0], [5.0], "reflecting")
    law = BoxLaw(box, ensembles.Brownian(0.5).transition(1.0, 1))
    assert_allclose(law.sources(np.array([[2.0]])), 0.0)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: ensembles.Box([0.0], [0.0]), "upper edge"),
        (lambda: ensembles.Box([0.0], [np.nan]), "finite"),
        (lambda: ensembles.Box([0.0, 0.0], [1.0]), "d numbers each"),
        (lambda: ensembles.Box([0.0], [1.0], "periodc"), "unknown boundary.*periodic"),
        (lambda: ensembles.Brownian([[1.0, 0.2], [0.2, 1.0]], box=ensembles.Box([0, 0], [1, 1])), "independent"),
        (
            lambda: ensembles.Brownian(1.0, drift=[0.0, 1.0], box=ensembles.Box([0, 0], [1, 1], "reflecting")),
            "no images",
        ),
        (lambda: ensembles.Brownian(1.0, box={"lower": [0], "uper": [1]}), "unknown key of a box.*upper"),
    ],
)
def test_bad_boxes(make, message):
    with pytest.raises(ensembles.InputError, match=message):
        make()


def test_positions_outside_the_box_are_refused():
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [[[0.2], [0.4]], [[0.1], [1.2]]])
    prior = ensembles.Brownian(1.0, box=ensembles.Box([0.0], [1.0]))
    with pytest.raises(
        ensembles.InputError, match=r"positions must lie in the box; particle 1 has 1.2.*snapshot t = 1"
    ):
        ensembles.fit_bridge(series, prior)
    with pytest.raises(ensembles.InputError, match="positions must lie in the box"):
        ensembles.link_particles(series, prior)


def test_a_box_is_saved_with_its_bridge(tmp_path):
    box, series, bridge = boxed_bridge("periodic")
    bridge.save(tmp_path / "bridge.npz")
    again = ensembles.load_bridge(tmp_path / "bridge.npz")
    assert again.prior.box.boundary == box.boundary
    assert_allclose(again.log_density(0.3, series.clouds[0]), bridge.log_density(0.3, series.clouds[0]))


def test_folding_never_gives_the_upper_edge_of_a_periodic_axis():
    box = ensembles.Box([0.0, -3.0], [35.8, 4.0])
    points = np.array([[-1e-18, -3.0 - 1e-18], [-3e-15, 4.0], [35.8, 11.0], [71.6, -10.0]])
    folded = box.fold(points)
    assert (folded >= box.lower).all() and (folded < box.upper).all()
    assert_allclose(box.shortest(folded - points), 0.0, atol=1e-9)
