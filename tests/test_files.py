"""Files of snapshots: nothing is lost on the way through a file, and nothing half written stands under its name."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from test_snapshots import series_strategy, three_snapshots

from ensembles import SnapshotSeries, read_snapshots
from ensembles.snapshots import archive
from ensembles.snapshots.files import write_snapshots

TABLES = [".csv", ".tsv", ".parquet"]


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    return tmp_path_factory.mktemp("files")


@given(series_strategy())
@settings(deadline=None, max_examples=40)
def test_archive_keeps_every_bit(folder, series):
    write_snapshots(series, folder / "series.npz")
    assert read_snapshots(folder / "series.npz").fingerprint() == series.fingerprint()


@pytest.mark.parametrize("suffix", TABLES)
@given(series=series_strategy())
@settings(deadline=None, max_examples=40)
def test_table_keeps_times_and_positions_bit_by_bit_and_weights_to_rounding(folder, suffix, series):
    path = folder / f"series{suffix}"
    write_snapshots(series, path)
    weighted = "weight" in series.to_frame()
    again = read_snapshots(path, time="time", position=series.position_names, weight="weight" if weighted else None)
    assert_array_equal(again.times, series.times)
    for k in range(len(series)):
        assert_array_equal(again.clouds[k], series.clouds[k])
        assert_allclose(again.weights[k], series.weights[k], rtol=1e-14)
    assert weighted or again.fingerprint() == series.fingerprint()


@pytest.mark.parametrize("suffix", TABLES)
@given(
    labels=st.lists(
        st.text(st.characters(codec="utf-8", categories=["L", "N", "P", "S", "Zs"])), min_size=3, max_size=3
    )
)
@settings(deadline=None, max_examples=40)
def test_table_keeps_any_label(folder, suffix, labels):
    series = SnapshotSeries.from_arrays([0, 1], [[0, 1], [2]], labels=[labels[:2], labels[2:]])
    write_snapshots(series, folder / f"labels{suffix}")
    again = read_snapshots(folder / f"labels{suffix}", time="time", position="x", label="label")
    assert [array.tolist() for array in again.labels] == [labels[:2], labels[2:]]


def test_archive_keeps_names_units_labels_features_and_rows(tmp_path):
    series = three_snapshots(position_names=["u", "v"]).subset([0, 2])
    write_snapshots(series, tmp_path / "s.npz")
    again = read_snapshots(tmp_path / "s.npz")
    for name in ("position_names", "time_name", "time_unit", "length_unit"):
        assert getattr(again, name) == getattr(series, name)
    assert [rows.tolist() for rows in again.rows] == [[0, 1, 2], [4, 5]]
    assert [labels.tolist() for labels in again.labels] == [["a", "b", "a"], ["", "a"]]
    assert_array_equal(again.features["gene"][0], series.features["gene"][0])
    assert again.features["batch"][1].tolist() == ["q", "q"]


def test_archive_gives_chosen_coordinates_features_and_units(tmp_path):
    write_snapshots(three_snapshots(), tmp_path / "s.npz")
    again = read_snapshots(tmp_path / "s.npz", time="time", position=["y"], features=["gene"], units={"length": "mm"})
    assert again.clouds[0].tolist() == [[1], [3], [5]]
    assert again.position_names == ("y",)
    assert list(again.features) == ["gene"]
    assert (again.time_unit, again.length_unit) == ("h", "mm")


def test_archive_by_another_program_needs_only_the_documented_minimum(tmp_path):
    np.savez(
        tmp_path / "s.npz",
        format="ensembles-snapshots",
        version=1,
        times=[0, 2],
        positions_0=np.array([1, 2]),
        positions_1=np.array([3.0]),
        weights_0=[1, 3],
        weights_1=[5],
    )
    series = read_snapshots(tmp_path / "s.npz")
    assert series.weights[0].tolist() == [0.25, 0.75]
    assert series.masses.tolist() == [4, 5]
    assert series.position_names == ("x",)


@pytest.mark.parametrize("suffix", TABLES)
def test_table_keeps_labels_and_features(tmp_path, suffix):
    series = three_snapshots()
    write_snapshots(series, tmp_path / f"s{suffix}")
    again = read_snapshots(
        tmp_path / f"s{suffix}", time="time", position=["x", "y"], label="label", features=["gene", "batch"]
    )
    assert [labels.tolist() for labels in again.labels] == [["a", "b", "a"], ["c"], ["", "a"]]
    assert_array_equal(again.features["gene"][0], [1, np.nan, 2])
    assert again.features["batch"][0].tolist() == ["p", "q", "p"]


def test_csv_as_other_programs_write_it(tmp_path):
    path = tmp_path / "s.csv"
    text = '\ufeffkind,"t s",x,score\r\n01,0,1e-3,NaN\r\n\r\nNA,0,-2.5,1\r\n"a,b",7,3,2\r\n\r\n'
    path.write_bytes(text.encode())
    series = read_snapshots(path, time="t s", position=["x"], label="kind", features=["score", "kind"])
    assert series.times.tolist() == [0, 7]
    assert series.clouds[0].tolist() == [[0.001], [-2.5]]
    assert [labels.tolist() for labels in series.labels] == [["01", "NA"], ["a,b"]]
    assert_array_equal(series.features["score"][0], [np.nan, 1])


def test_decimal_digits_are_read_to_the_last_bit(tmp_path):
    values = np.random.default_rng(1).normal(size=2000) * 10.0 ** np.random.default_rng(2).integers(-300, 300, 2000)
    path = tmp_path / "s.csv"
    path.write_text("t,x\n" + "".join(f"{i % 2},{value!r}\n" for i, value in enumerate(values.tolist())))
    series = read_snapshots(path, time="t", position="x")
    assert_array_equal(series.clouds[0][:, 0], values[::2])


def test_rows_lead_back_to_the_table(tmp_path):
    path = tmp_path / "s.csv"
    path.write_text("t,x\n3,10\n1,11\n3,12\n")
    series = read_snapshots(path, time="t", position="x")
    assert [rows.tolist() for rows in series.rows] == [[1], [0, 2]]


def test_parquet_index_is_left_aside(tmp_path):
    frame = three_snapshots().to_frame().set_index("time")
    frame.to_parquet(tmp_path / "s.parquet")
    series = read_snapshots(tmp_path / "s.parquet", time="time", position=["x"])
    assert series.times.tolist() == [0, 1.5, 4]
    assert series.rows[2].tolist() == [4, 5]


def test_a_failed_write_leaves_the_old_file_and_nothing_else(tmp_path, monkeypatch):
    path = tmp_path / "s.npz"
    write_snapshots(three_snapshots(), path)
    before = path.read_bytes()

    def broken(file, **arrays):
        file.write_bytes(b"half")
        raise OSError("disk full")

    monkeypatch.setattr(archive.np, "savez_compressed", broken)
    with pytest.raises(OSError, match="disk full"):
        write_snapshots(three_snapshots(), path)
    assert [file.name for file in tmp_path.iterdir()] == ["s.npz"]
    assert path.read_bytes() == before
