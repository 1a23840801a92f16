"""SnapshotSeries and its summary: what goes in comes out, and the numbers of `look` against independent sources."""

import dataclasses

import numpy as np
import ot
import pandas
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from numpy.testing import assert_allclose, assert_array_equal

from ensembles import SnapshotSeries
from ensembles.snapshots.columns import duplicate_count, text_array
from ensembles.snapshots.summary import describe_snapshots, displacement

COORDINATES = st.floats(-1e6, 1e6)


@st.composite
def series_strategy(draw):
    """Any small series: 2 to 4 snapshots, 1 to 3 dimensions, unequal sizes, with or without weights."""
    count = draw(st.integers(2, 4))
    dimension = draw(st.integers(1, 3))
    sizes = draw(st.lists(st.integers(1, 6), min_size=count, max_size=count))
    times = sorted(draw(st.lists(st.floats(-100, 100), min_size=count, max_size=count, unique=True)))
    clouds = [draw(hnp.arrays(float, (n, dimension), elements=COORDINATES)) for n in sizes]
    clouds[0][0] += 1 + np.abs(clouds[-1]).max() * 2  # never all at one place
    weights = draw(st.booleans())
    given_weights = [draw(hnp.arrays(float, n, elements=st.floats(1e-3, 1e3))) for n in sizes] if weights else None
    return SnapshotSeries.from_arrays(times, clouds, given_weights)


def three_snapshots(**arguments):
    return SnapshotSeries.from_arrays(
        [0, 1.5, 4],
        [[[0, 1], [2, 3], [4, 5]], [[6, 7]], [[8, 9], [1, 1]]],
        labels=[["a", "b", "a"], ["c"], ["", "a"]],
        features={"gene": [[1.0, np.nan, 2.0], [3.0], [4.0, 5.0]], "batch": [["p", "q", "p"], ["p"], ["q", "q"]]},
        units={"time": "h", "length": "um"},
        **arguments,
    )


def test_arrays_are_kept_read_only_and_the_input_is_left_alone():
    cloud, weight, label = np.array([[1, 2], [3, 4]]), np.array([1.0, 3.0]), np.array(["a", "b"])
    series = SnapshotSeries.from_arrays([0, 1], [cloud, cloud], [weight, None], labels=[label, label])
    for array in (*series.clouds, *series.weights, *series.labels, *series.rows, series.times, series.masses):
        assert not array.flags.writeable
    for array in series.clouds:
        assert array.dtype == np.float64
        assert array.flags.c_contiguous
    assert cloud.flags.writeable and weight.flags.writeable and label.flags.writeable
    cloud[0, 0] = 99
    assert series.clouds[0][0, 0] == 1
    with pytest.raises(dataclasses.FrozenInstanceError, match="times"):
        series.times = np.array([5.0, 6.0])


def test_shapes_masses_and_names():
    series = three_snapshots(weights=[[1, 2, 1], None, [0.5, 0]])
    assert (len(series), series.dimension) == (3, 2)
    assert_array_equal(series.counts, [3, 1, 2])
    assert_array_equal(series.durations, [1.5, 2.5])
    assert_array_equal(series.masses, [4, 1, 0.5])
    assert_array_equal(series.weights[0], [0.25, 0.5, 0.25])
    assert_array_equal(series.weights[2], [1, 0])
    assert [rows.tolist() for rows in series.rows] == [[0, 1, 2], [3], [4, 5]]
    assert series.position_names == ("x", "y")
    assert (series.time_name, series.time_unit, series.length_unit) == ("time", "h", "um")
    assert series.features["gene"][0].dtype == np.float64
    assert series.features["batch"][1].tolist() == ["p"]


def test_numbers_are_points_on_a_line():
    series = SnapshotSeries.from_arrays([0, 1], [[1, 2, 3], np.array([4.0])])
    assert [cloud.shape for cloud in series.clouds] == [(3, 1), (1, 1)]
    assert series.position_names == ("x",)


def test_four_dimensions_are_numbered():
    series = SnapshotSeries.from_arrays([0, 1], np.arange(16.0).reshape(2, 2, 4))
    assert series.position_names == ("x1", "x2", "x3", "x4")


@given(series_strategy())
def test_weights_of_every_snapshot_have_sum_one(series):
    for weights in series.weights:
        assert_allclose(weights.sum(), 1, rtol=1e-14)
        assert (weights > 0).all()


@given(series_strategy(), st.data())
def test_subset_keeps_the_chosen_snapshots_bit_by_bit(series, data):
    kept = sorted(data.draw(st.sets(st.integers(0, len(series) - 1), min_size=2)) | {0})
    chosen = series.subset(kept)
    assert_array_equal(chosen.times, series.times[kept])
    assert_array_equal(chosen.masses, series.masses[kept])
    for new, old in enumerate(kept):
        assert_array_equal(chosen.clouds[new], series.clouds[old])
        assert_array_equal(chosen.weights[new], series.weights[old])
        assert_array_equal(chosen.rows[new], series.rows[old])
    assert (chosen.fingerprint() == series.fingerprint()) == (len(kept) == len(series))


def test_subset_takes_labels_features_and_names_along():
    chosen = three_snapshots().subset([0, -1])
    assert chosen.labels[1].tolist() == ["", "a"]
    assert chosen.features["batch"][1].tolist() == ["q", "q"]
    assert (chosen.time_unit, chosen.length_unit) == ("h", "um")


def test_fingerprint_sees_times_positions_weights_and_the_split():
    prints = {
        SnapshotSeries.from_arrays(times, clouds, weights).fingerprint()
        for times, clouds, weights in [
            ([0, 1], [[1, 2], [3, 4]], None),
            ([0, 2], [[1, 2], [3, 4]], None),
            ([0, 1], [[2, 1], [3, 4]], None),
            ([0, 1], [[1, 2, 3], [4]], None),
            ([0, 1], [[1, 2], [3, 4]], [[1, 2], [1, 1]]),
            ([0, 1], [[1, 2], [3, 4]], [[2, 2], [1, 1]]),
            ([0, 1], [[[1, 2]], [[3, 4]]], None),
        ]
    }
    assert len(prints) == 7
    assert three_snapshots().fingerprint() == three_snapshots().fingerprint()


def test_frame_rows_are_grouped_by_exact_time_in_their_own_order():
    frame = pandas.DataFrame(
        {"t": [2, 0, 2, 0, 1], "x": [1.0, 2, 3, 4, 5], "w": [1, 1, 3, 1, 1], "kind": ["a", None, "b", "nan", 7]},
        index=[9, 9, 3, 1, 0],
    )
    before = frame.copy()
    series = SnapshotSeries.from_frame(frame, time="t", position=["x"], weight="w", label="kind", features=["w"])
    pandas.testing.assert_frame_equal(frame, before)
    assert_array_equal(series.times, [0, 1, 2])
    assert [cloud[:, 0].tolist() for cloud in series.clouds] == [[2, 4], [5], [1, 3]]
    assert [rows.tolist() for rows in series.rows] == [[1, 3], [4], [0, 2]]
    assert [labels.tolist() for labels in series.labels] == [["", "nan"], ["7"], ["a", "b"]]
    assert series.weights[2].tolist() == [0.25, 0.75]
    assert series.features["w"][2].tolist() == [1, 3]
    assert series.time_name == "t"


def test_frame_accepts_every_kind_of_number_column():
    frame = pandas.DataFrame(
        {
            "t": pandas.array([0, 0, 1], dtype="Int64"),
            "x": pandas.Series([1, 2, 3], dtype="float32"),
            "y": pandas.Series([1, 2.5, 3], dtype="object"),
            "z": pandas.Categorical([1, 2, 1]),
        }
    )
    series = SnapshotSeries.from_frame(frame, time="t", position=["x", "y", "z"])
    assert_array_equal(series.clouds[0], [[1, 1, 1], [2, 2.5, 2]])


@given(series_strategy())
def test_frame_round_trip(series):
    again = SnapshotSeries.from_frame(
        series.to_frame(),
        time="time",
        position=series.position_names,
        weight="weight" if "weight" in series.to_frame() else None,
    )
    assert_array_equal(again.times, series.times)
    for k in range(len(series)):
        assert_array_equal(again.clouds[k], series.clouds[k])
        assert_allclose(again.weights[k], series.weights[k], rtol=1e-14)
    assert_allclose(again.masses, series.masses, rtol=1e-14)


@pytest.mark.parametrize("missing", [None, float("nan"), np.float32("nan"), pandas.NA, pandas.NaT])
def test_only_what_is_missing_becomes_the_empty_label(missing):
    assert text_array(["a", missing, "NA", 3]).tolist() == ["a", "", "NA", "3"]


def test_notes_name_what_is_odd_and_nothing_else():
    assert three_snapshots().notes() == (
        "snapshot t = 1.5 has one particle: its spread, effective sample size and any error bar are meaningless",
        "snapshot t = 4 has 1 particle(s) without label",
    )
    odd = SnapshotSeries.from_arrays(
        [0, 0.1 + 0.2 - 0.3, 1], [[[1, 2], [1, 2], [3, 2]], [[1, 2], [5, 2]], [[2, 2], [4, 2]]], [None, [1, 0], None]
    )
    assert odd.notes() == (
        "snapshot t = 0 has 1 particle(s) at a position that an earlier row already holds",
        "snapshot t = 5.551115123125783e-17 has 1 particle(s) of weight 0: they take no part",
        "snapshots t = 0.0 and t = 5.551115123125783e-17 are almost one time: is the difference a rounding?",
        "coordinate y is 2 for every particle: it carries no information",
    )
    assert SnapshotSeries.from_arrays([0, 1], [[0, 1], [2, 3]]).notes() == ()


def test_text_and_html_are_short_and_escaped():
    many = SnapshotSeries.from_arrays(np.arange(30), np.arange(60.0).reshape(30, 2), position_names=["<x>"])
    lines = repr(many).splitlines()
    assert len(lines) == 13
    assert lines[-2:] == ["  ... 19 more", "  time = 29: 2 particles"]
    assert "&lt;x&gt;" in many._repr_html_()
    assert "<x>" not in many._repr_html_()
    assert "<td>1.5</td><td>1</td>" in three_snapshots()._repr_html_()
    assert repr(three_snapshots()).splitlines()[0] == "SnapshotSeries: 3 snapshots, 2 dimensions (x, y in um)"


@given(hnp.arrays(float, hnp.array_shapes(min_dims=2, max_dims=2, max_side=8), elements=st.integers(0, 2)))
def test_duplicates_are_rows_minus_distinct_rows(positions):
    assert duplicate_count(positions) == len(positions) - len({tuple(row) for row in positions.tolist()})


def test_description_against_numpy():
    rng = np.random.default_rng(5)
    cloud, weights = rng.normal(size=(40, 3)), rng.uniform(0.1, 2, 40)
    described = describe_snapshots(SnapshotSeries.from_arrays([0, 1], [cloud, cloud + 1], [weights, None]))
    assert_allclose(described[0].mean, np.average(cloud, axis=0, weights=weights), rtol=1e-12)
    covariance = np.cov(cloud.T, aweights=weights, ddof=0)
    assert_allclose(described[0].spread, np.sqrt(np.diag(covariance)), rtol=1e-12)
    assert_allclose(described[0].effective_sample_size, weights.sum() ** 2 / (weights**2).sum(), rtol=1e-12)
    assert_allclose(described[1].effective_sample_size, 40, rtol=1e-12)
    assert_allclose([row.mass for row in described], [weights.sum(), 40], rtol=1e-12)


@pytest.mark.parametrize("dimension", [1, 2, 5])
def test_displacement_against_an_independent_library(dimension):
    rng = np.random.default_rng(dimension)
    start, end = (
        rng.normal(size=(30, dimension)),
        rng.normal(1, 2, size=(25, dimension)) @ rng.normal(size=(dimension,) * 2),
    )
    moved = displacement(SnapshotSeries.from_arrays([1, 4], [start, end]), 0)
    # Reference: POT, ot.gaussian.bures_wasserstein_distance, and the exact coupling ot.emd2 for the bound.
    covariances = [np.atleast_2d(np.cov(cloud.T, ddof=0)) for cloud in (start, end)]
    reference = ot.gaussian.bures_wasserstein_distance(start.mean(0), end.mean(0), *covariances) ** 2
    assert_allclose(moved.squared_displacement, reference, rtol=1e-9)
    assert moved.squared_displacement <= ot.emd2([], [], ot.dist(start, end)) * (1 + 1e-9)
    assert moved.squared_displacement_per_axis.sum() <= moved.squared_displacement * (1 + 1e-12)
    assert_allclose(moved.mean_shift, end.mean(0) - start.mean(0), rtol=1e-12)
    assert_allclose(moved.matching_diffusion * 2 * dimension * 3, reference, rtol=1e-9)
    assert_allclose(moved.matching_diffusion_per_axis * 2 * 3, moved.squared_displacement_per_axis, rtol=1e-12)


def test_displacement_of_a_pure_shift_is_its_square():
    cloud = np.random.default_rng(0).normal(size=(50, 4)) @ np.diag([1, 10, 100, 0.01])
    shift = np.array([3e-7, 0, 0, 0])
    moved = displacement(SnapshotSeries.from_arrays([0, 1], [cloud, cloud + shift]), 0)
    # Spreads of 100 beside a shift of 3e-7: the subtraction of traces would leave no digit.
    assert_allclose(moved.squared_displacement, 9e-14, rtol=1e-6)


def test_displacement_with_fewer_particles_than_dimensions():
    start, end = np.zeros((1, 3)), np.array([[1.0, 0, 0], [1, 2, 0]])
    moved = displacement(SnapshotSeries.from_arrays([0, 1], [start, end]), 0)
    # By hand: mean shift (1, 1, 0), variance (0, 1, 0) against none: 2 + 1.
    assert_allclose(moved.squared_displacement, 3, rtol=1e-14)
    assert_allclose(moved.squared_displacement_per_axis, [1, 2, 0], rtol=1e-14)


def test_displacement_uses_the_weights():
    moved = displacement(SnapshotSeries.from_arrays([0, 1], [[0, 10], [4]], [[1, 0], None]), 0)
    assert_allclose(moved.squared_displacement, 16, rtol=1e-14)
