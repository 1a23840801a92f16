"""Every refusal of snapshots and their files: what is wrong; the value and where it stands; what to do."""

import re
import sys

import numpy as np
import pandas
import pytest
from test_snapshots import three_snapshots

from ensembles import InputError, SnapshotSeries, read_snapshots
from ensembles.snapshots.files import write_snapshots
from ensembles.snapshots.summary import displacement

from_arrays = SnapshotSeries.from_arrays
NAN, INF = float("nan"), float("inf")


def refuse(call, *parts):
    """Call and expect an InputError that holds `parts` in this order and is made of three parts."""
    with pytest.raises(InputError, match="(?s)" + ".*".join(map(re.escape, parts))) as caught:
        call()
    assert str(caught.value).count("; ") >= 2, str(caught.value)
    assert caught.value.__suppress_context__ or caught.value.__context__ is None


ARRAYS = {
    "none": (lambda: from_arrays([], []), ["at least two snapshots", "there is none"]),
    "one": (lambda: from_arrays([3], [[1, 2]]), ["at least two snapshots", "one time only, t = 3"]),
    "repeated": (lambda: from_arrays([0, 0], [[1], [2]]), ["times must increase", "times[0] = 0"]),
    "falling": (lambda: from_arrays([0, 2, 1], [[1], [2], [3]]), ["times must increase", "times[1] = 2"]),
    "time nan": (lambda: from_arrays([0, NAN], [[1], [2]]), ["times must be finite", "times[1] = nan"]),
    "clouds": (lambda: from_arrays([0, 1], [[1]]), ["clouds", "1 entries for 2 snapshots"]),
    "clouds kind": (lambda: from_arrays([0, 1], 5), ["clouds", "it is 5"]),
    "dimension": (
        lambda: from_arrays([0, 3], [[[1, 2]], [[1, 2, 3]]]),
        ["one dimension", "3 coordinate(s) in snapshot t = 3", "2 in snapshot t = 0"],
    ),
    "ragged": (lambda: from_arrays([0, 3], [[1], [[1, 2], [3]]]), ["positions in snapshot t = 3 must be numbers"]),
    "empty": (lambda: from_arrays([0, 3], [[1], []]), ["(0, 1) in snapshot t = 3", "leave the snapshot out"]),
    "nan": (
        lambda: from_arrays([0, 3], [[[1, 2]], [[1, 2], [3, NAN]]]),
        ["finite", "row 1, coordinate 1", "is nan in snapshot t = 3"],
    ),
    "infinite": (lambda: from_arrays([0, 3], [[1, -INF], [1]]), ["row 1", "is -inf in snapshot t = 0"]),
    "negative weight": (
        lambda: from_arrays([0, 3], [[1], [2] * 18], [None, [1.0] * 17 + [-0.2]]),
        ["weights must be non-negative; weights[17] = -0.2 in snapshot t = 3; drop that particle or set it to 0"],
    ),
    "zero weights": (
        lambda: from_arrays([0, 3], [[1], [2, 3]], [[1], [0, 0]]),
        ["must not all be zero", "2 value(s)", "in snapshot t = 3"],
    ),
    "nan weight": (lambda: from_arrays([0, 3], [[1], [2]], [[NAN], [1]]), ["weights[0] = nan in snapshot t = 0"]),
    "huge weights": (
        lambda: from_arrays([0, 3], [[1, 2], [2]], [[1e308, 1e308], [1]]),
        ["finite sum", "1e+308 in snapshot t = 0"],
    ),
    "weight count": (
        lambda: from_arrays([0, 3], [[1], [2]], [[1], [1, 1]]),
        ["one number a particle", "(2,) for 1 particle(s) in snapshot t = 3"],
    ),
    "weight lists": (lambda: from_arrays([0, 3], [[1], [2]], [[1]]), ["weights", "1 entries for 2 snapshots"]),
    "label count": (
        lambda: from_arrays([0, 3], [[1], [2]], labels=[["a"], ["b", "c"]]),
        ["labels", "(2,) for 1 particle(s) in snapshot t = 3"],
    ),
    "label text": (lambda: from_arrays([0, 3], [[1], [2]], labels=["a", "b"]), ["labels must be a list", "'a'"]),
    "feature count": (
        lambda: from_arrays([0, 3], [[1], [2]], features={"g": [[1], []]}),
        ["feature 'g'", "(0,) for 1 particle(s) in snapshot t = 3"],
    ),
    "identical": (
        lambda: from_arrays([0, 3], [[[1, 2]] * 3, [[1, 2]]]),
        ["positions must differ", "all 4 particles", "[1.0, 2.0]", "nothing to bridge"],
    ),
    "names": (
        lambda: from_arrays([0, 3], [[1], [2]], position_names=["x", "y"]),
        ["position_names", "['x', 'y'] for 1 coordinate(s)"],
    ),
    "unit key": (lambda: from_arrays([0, 3], [[1], [2]], units={"lenght": "um"}), ["'lenght'", "'length'"]),
    "unit value": (lambda: from_arrays([0, 3], [[1], [2]], units={"time": 3}), ["units['time'] = 3"]),
    "subset range": (lambda: three_snapshots().subset([0, 3]), ["3 is not one of the 3 snapshots"]),
    "subset order": (lambda: three_snapshots().subset([1, 0]), ["indices must increase", "[1, 0]"]),
    "subset one": (lambda: three_snapshots().subset([1]), ["at least two snapshots", "1 is left"]),
    "gap": (lambda: displacement(three_snapshots(), 2), ["number of a gap", "2 for 2 gap(s)"]),
}


@pytest.mark.parametrize("name", ARRAYS)
def test_arrays(name):
    refuse(ARRAYS[name][0], *ARRAYS[name][1])


def frame(**columns):
    return pandas.DataFrame({"t": [0, 0, 3, 3], "x": [1.0, 2, 3, 4], "w": [1.0, 1, 1, 1]} | columns)


FRAMES = {
    "kind": ({"t": [0]}, {}, ["pandas DataFrame", "dict"]),
    "missing": (frame(), {"position": ["X_um"]}, ["missing column in the frame", "'X_um'", "use one of: t, x, w"]),
    "nearest": (frame(speed=1), {"position": ["sped"]}, ["'sped'", "did you mean 'speed'"]),
    "twice": (frame(), {"position": ["x", "x"]}, ["'x' is named 2 times"]),
    "none": (frame(), {"position": []}, ["position is an empty list"]),
    "ambiguous": (pandas.concat([frame(), frame()], axis=1), {}, ["2 columns are named 't'"]),
    "no rows": (frame().iloc[:0], {}, ["no particles", "0 rows"]),
    "one time": (frame(t=7), {}, ["at least two snapshots", "column 't' holds one time only, 7"]),
    "text": (frame(x=[1, 2, "much", 4]), {}, ["column 'x'", "row 2 (counted from 0) holds the text 'much'"]),
    "text number": (frame(x=["1", "2", "3", "4"]), {}, ["row 0 (counted from 0) holds the text '1'"]),
    "dates": (frame(t=pandas.to_datetime(["2020-01-01"] * 4)), {}, ["column 't'", "Timestamp", "2020-01-01"]),
    "boolean": (frame(x=[True, False, True, True]), {}, ["column 'x'", "bool", "True"]),
    "nan": (frame(x=[1, NAN, 3, NAN]), {}, ["'x'", "row 1 (counted from 0) is empty or NaN (2 such rows)"]),
    "none value": (frame(x=[1, 2, None, "a"]).iloc[:3], {}, ["'x'", "row 2 (counted from 0) is empty or NaN"]),
    "infinite": (frame(t=[0, 1, 2, INF]), {}, ["'t'", "row 3 (counted from 0) is inf"]),
    "negative": (
        frame(w=[1, 1, -0.2, 1]),
        {"weight": "w"},
        ["weights must be non-negative", "column 'w', row 2 (counted from 0) = -0.2 in snapshot t = 3", "drop"],
    ),
    "zero": (frame(w=[1, 1, 0, 0]), {"weight": "w"}, ["must not all be zero", "in snapshot t = 3"]),
    "identical": (frame(x=5.0), {}, ["positions must differ", "[5.0]"]),
    "large times": (
        frame(t=[2**60, 2**60, 2**60 + 1, 2**60 + 1]),
        {},
        ["too large to be told apart", "1.152921504606847e+18"],
    ),
}


@pytest.mark.parametrize("name", FRAMES)
def test_frames(name):
    data, arguments, parts = FRAMES[name]
    refuse(lambda: SnapshotSeries.from_frame(data, **({"time": "t", "position": ["x"]} | arguments)), *parts)


TEXTS = {
    "empty": ("", {}, ["empty file", "0 bytes"]),
    "blank": ("\n \n", {}, ["empty file", "blank lines only"]),
    "header only": ("t,x\n", {}, ["no particles", "0 rows"]),
    "column": ("t,x_um\n0,1\n1,2\n", {"position": "x_u"}, ["missing column", "'x_u'", "did you mean 'x_um'"]),
    "label": ("t,x\n0,1\n1,2\n", {"label": "kind"}, ["missing column", "'kind'", "use one of: t, x"]),
    "same name": ("t,x,x\n0,1,2\n1,2,3\n", {}, ["2 columns are named 'x'"]),
    "semicolons": ("t;x\n0;1\n1;2\n", {}, ["one column", "'t;x'", "commas"]),
    "text": ("t,x\n" + "0,1\n" * 15 + "1,two\n", {}, ["column 'x'", "line 17 holds the text 'two'"]),
    "text after blank": ("\nt,x\n0,1\n\n \n1,two\n", {}, ["column 'x'", "line 6 holds the text 'two'"]),
    "after a long label": ('t,x,kind\n0,1,"a\nb"\n1,two,c\n', {}, ["line 4 holds the text 'two'"]),
    "underscore": ("t,x\n0,1\n1,1_000\n", {}, ["line 3 holds the text '1_000'"]),
    "boolean": ("t,x\n0,True\n1,False\n", {}, ["line 2 holds the bool 'True'"]),
    "empty cell": ("t,x\n0,1\n1,\n", {}, ["column 'x'", "line 3 is empty or NaN"]),
    "nan": ("t,x\n0,1\nNaN,2\n1,2\n", {}, ["column 't'", "line 3 is empty or NaN"]),
    "infinite": ("t,x\n0,1\n1,inf\n", {}, ["column 'x'", "line 3 is inf"]),
    "short line": ("t,x\n0,1\n1\n", {}, ["column 'x'", "line 3 is empty or NaN"]),
    "long line": ("t,x\n0,1\n1,2,5\n", {}, ["more cells than the header", "line 3", "has 3 where 2"]),
    "all lines long": ("t,x\n0,1,5\n1,2,5\n", {}, ["more cells than the header", "line 2", "has 3 where 2"]),
    "open quote": ('t,x\n0,1\n1,"2\n', {}, ["cannot be read", "correct that line"]),
    "negative": ("t,x,w\n0,1,1\n3,2,-2\n", {"weight": "w"}, ["column 'w', line 3 = -2 in snapshot t = 3"]),
    "one time": ("t,x\n4,1\n4,2\n", {}, ["at least two snapshots", "column 't' holds one time only, 4"]),
}


@pytest.mark.parametrize("name", TEXTS)
def test_text_files(name, tmp_path):
    text, arguments, parts = TEXTS[name]
    (tmp_path / "s.csv").write_text(text)
    refuse(lambda: read_snapshots(tmp_path / "s.csv", **({"time": "t", "position": "x"} | arguments)), *parts)


def test_files_that_are_none(tmp_path):
    refuse(lambda: read_snapshots(tmp_path / "no.csv", time="t", position="x"), "missing file", "no.csv")
    (tmp_path / "folder.csv").mkdir()
    refuse(lambda: read_snapshots(tmp_path / "folder.csv"), "folder.csv", "is a folder")
    (tmp_path / "s.xlsx").write_text("x")
    refuse(lambda: read_snapshots(tmp_path / "s.xlsx"), "unsupported", "'.xlsx'", ".csv, .tsv, .parquet, .npz")
    refuse(lambda: write_snapshots(three_snapshots(), tmp_path / "s.txt"), "unsupported", "'.txt'", ".npz")
    refuse(lambda: write_snapshots(three_snapshots(), tmp_path / "no" / "s.npz"), "folder", "does not exist")
    (tmp_path / "s.csv").write_bytes(b"t,x\n0,\xff\n")
    refuse(lambda: read_snapshots(tmp_path / "s.csv", time="t", position="x"), "not UTF-8", "position 6")
    refuse(lambda: read_snapshots(tmp_path / "s.csv", position="x"), "must be named", "time is not given")
    (tmp_path / "s.parquet").write_bytes(b"PAR1 nothing of the kind")
    refuse(lambda: read_snapshots(tmp_path / "s.parquet", time="t", position="x"), "not a whole Parquet file")


def test_parquet_columns_and_rows(tmp_path):
    frame(x=[1, 2, NAN, 4]).to_parquet(tmp_path / "s.parquet")
    refuse(lambda: read_snapshots(tmp_path / "s.parquet", time="t", position="y"), "missing column", "'y'", "t, x, w")
    refuse(lambda: read_snapshots(tmp_path / "s.parquet", time="t", position="x"), "'x'", "row 2 (counted from 0)")


def test_parquet_without_pyarrow(tmp_path, monkeypatch):
    frame().to_parquet(tmp_path / "s.parquet")
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    monkeypatch.delitem(sys.modules, "pyarrow.parquet", raising=False)
    refuse(
        lambda: read_snapshots(tmp_path / "s.parquet", time="t", position="x"),
        "pyarrow",
        'pip install "ensembles[parquet]"',
    )


def test_a_feature_may_not_take_the_name_of_another_column():
    series = from_arrays([0, 1], [[1], [2]], features={"x": [[1], [2]]})
    refuse(series.to_frame, "different names", "'x'", "rename")


GOOD = {
    "format": "ensembles-snapshots",
    "version": 1,
    "times": [0, 3],
    "positions_0": [[1.0], [2.0]],
    "positions_1": [[3.0]],
    "weights_0": [0.5, 0.5],
    "weights_1": [1.0],
}
ARCHIVES = {
    "foreign": ({"format": None, "version": None}, {}, ["no array 'format'", "it holds times"]),
    "other format": ({"format": "beads"}, {}, ["not an archive of snapshots", "'beads'"]),
    "version": ({"version": 99}, {}, ["another version", "99", "version 1"]),
    "version text": ({"version": "new"}, {}, ["another version", "new"]),
    "no times": ({"times": None}, {}, ["no 'times'"]),
    "no cloud": ({"positions_1": None}, {}, ["no 'positions_1'"]),
    "cloud more": ({"positions_2": [[3.0]]}, {}, ["2 time(s)", "'positions_2'"]),
    "weights": ({"weights_1": None}, {}, ["no 'weights_1'"]),
    "negative": ({"weights_0": [-1, 1]}, {}, ["non-negative", "weights[0] = -1 in snapshot t = 0"]),
    "masses": ({"masses": [1.0]}, {}, ["masses", "(1,) for 2 snapshot(s)"]),
    "mass": ({"masses": [1.0, -2.0]}, {}, ["masses must be positive", "masses[1] = -2"]),
    "sum": ({"masses": [1.0, 1.0], "weights_0": [1, 1]}, {}, ["must have the sum 1", "weights_0", "sum 2"]),
    "rows": ({"rows_0": [0], "rows_1": [1]}, {}, ["row numbers", "rows_0", "(1,) for 2 particle(s)"]),
    "names": ({"position_names": ["x", "y"]}, {}, ["position_names", "for 1 coordinate(s)"]),
    "objects": ({"positions_0": np.array([{}], dtype=object)}, {}, ["plain arrays", "allow_pickle"]),
    "nan": ({"positions_0": [[1.0], [NAN]]}, {}, ["row 1, coordinate 0", "nan in snapshot t = 0"]),
    "coordinate": ({}, {"position": ["y"]}, ["unknown coordinate", "'y'", "use one of: x"]),
    "no coordinate": ({}, {"position": []}, ["named once", "[]"]),
    "time": ({}, {"time": "t"}, ["named 'time', not 't'"]),
    "feature": (
        {"feature_names": ["gene"], "feature_0_0": [1, 2], "feature_0_1": [3]},
        {"features": ["gen"]},
        ["'gene'"],
    ),
    "weight name": ({}, {"weight": "w"}, ["its own weights", "weight = 'w'"]),
}


@pytest.mark.parametrize("name", ARCHIVES)
def test_archives(name, tmp_path):
    changes, arguments, parts = ARCHIVES[name]
    np.savez(tmp_path / "s.npz", **{key: value for key, value in (GOOD | changes).items() if value is not None})
    refuse(lambda: read_snapshots(tmp_path / "s.npz", **arguments), *parts)


def test_the_archive_that_the_others_spoil_is_read(tmp_path):
    np.savez(tmp_path / "s.npz", **GOOD)
    assert read_snapshots(tmp_path / "s.npz").counts.tolist() == [2, 1]


@pytest.mark.parametrize("kept", [0.0, 0.1, 0.5, 0.9, 0.99])
def test_truncated_archive(tmp_path, kept):
    write_snapshots(three_snapshots(), tmp_path / "whole.npz")
    whole = (tmp_path / "whole.npz").read_bytes()
    (tmp_path / "s.npz").write_bytes(whole[: int(kept * len(whole))])
    refuse(
        lambda: read_snapshots(tmp_path / "s.npz"), "empty file" if kept == 0 else "not a whole .npz archive", "again"
    )


def test_damaged_archive(tmp_path):
    write_snapshots(three_snapshots(), tmp_path / "whole.npz")
    whole = bytearray((tmp_path / "whole.npz").read_bytes())
    start = whole.index(b"positions_1.npy") + 40
    whole[start : start + 20] = bytes(20)
    (tmp_path / "s.npz").write_bytes(bytes(whole))
    refuse(lambda: read_snapshots(tmp_path / "s.npz"), "not a whole .npz archive", "again")
