"""Nothing half written stands under its final name, and nothing of the user's is lost."""

import json
import os

import numpy as np
import pandas as pd
import pytest
from pandas.testing import assert_frame_equal

from ensembles import writing
from ensembles.checks import InputError


class Broken(Exception):
    """Something that goes wrong halfway."""


def test_a_failed_file_leaves_the_old_one(tmp_path):
    path = tmp_path / "a.txt"
    writing.write_text(path, "old")
    with pytest.raises(Broken, match="halfway"), writing.atomic_path(path) as temporary:
        temporary.write_text("half")
        assert temporary.parent == tmp_path and temporary.suffix == ".txt"
        raise Broken("halfway")
    assert path.read_text() == "old"
    assert os.listdir(tmp_path) == ["a.txt"]


def test_numpy_writes_to_the_name_it_is_given(tmp_path):
    with writing.atomic_path(tmp_path / "a.npz") as temporary:
        np.savez(temporary, x=np.arange(3))
    assert os.listdir(tmp_path) == ["a.npz"]


def test_a_file_gets_the_usual_permissions(tmp_path):
    writing.write_bytes(tmp_path / "a", b"x")
    (tmp_path / "b").write_bytes(b"x")
    assert (tmp_path / "a").stat().st_mode == (tmp_path / "b").stat().st_mode


def test_places_that_cannot_be_written(tmp_path):
    with pytest.raises(InputError, match="the folder to write into does not exist; .*none"):
        writing.write_text(tmp_path / "none" / "a.txt", "x")
    with pytest.raises(InputError, match="the file to write is a folder"):
        writing.write_text(tmp_path, "x")


def test_json_has_no_nan(tmp_path):
    content = {"a": np.array([1.0, np.inf]), "b": (np.float32(0.5), float("nan")), "c": np.int64(3), "µ": None}
    writing.write_json(tmp_path / "a.json", content)
    text = (tmp_path / "a.json").read_text(encoding="utf-8")
    assert json.loads(text) == {"a": [1.0, None], "b": [0.5, None], "c": 3, "µ": None}
    assert "µ" in text
    with pytest.raises(TypeError, match="set cannot be written"):
        writing.write_json(tmp_path / "b.json", {"a": {1}})
    assert os.listdir(tmp_path) == ["a.json"]


@pytest.mark.parametrize("name", ["a.csv", "a.tsv", "a.parquet"])
def test_tables_come_back_to_the_last_digit(tmp_path, name):
    frame = pd.DataFrame({"n": [1, 2, 3], "x": [0.1, 1 / 3, 1e-300], "who": ["a", "b,c", "d\te"]})
    writing.write_table(tmp_path / name, frame)
    readers = {
        "a.csv": lambda path: pd.read_csv(path, float_precision="round_trip"),
        "a.tsv": lambda path: pd.read_csv(path, float_precision="round_trip", sep="\t"),
        "a.parquet": pd.read_parquet,
    }
    assert_frame_equal(readers[name](tmp_path / name), frame, check_exact=True)


def test_another_table_format_is_refused(tmp_path):
    with pytest.raises(InputError, match="unknown table format; '.xls'"):
        writing.write_table(tmp_path / "a.xls", pd.DataFrame())


def test_an_output_folder_appears_when_it_is_complete(tmp_path):
    out = tmp_path / "deep" / "out"
    with writing.output_folder(out) as folder:
        (folder / writing.MARKER).write_text("{}")
        assert not out.exists() and folder.parent == out.parent
    assert os.listdir(out) == [writing.MARKER]
    assert os.listdir(out.parent) == ["out"]


def test_a_failed_output_folder_leaves_nothing(tmp_path):
    with pytest.raises(Broken, match="halfway"), writing.output_folder(tmp_path / "out") as folder:
        (folder / "a").write_text("half")
        raise Broken("halfway")
    assert os.listdir(tmp_path) == []


def test_force_replaces_an_earlier_output_only_at_the_end(tmp_path):
    out = tmp_path / "out"
    with writing.output_folder(out) as folder:
        (folder / writing.MARKER).write_text("old")
        (folder / "extra").write_text("old")
    with pytest.raises(InputError, match="the output folder exists; .*--force"), writing.output_folder(out):
        pass
    with pytest.raises(Broken, match="halfway"), writing.output_folder(out, force=True):
        raise Broken("halfway")
    assert (out / writing.MARKER).read_text() == "old"
    with writing.output_folder(out, force=True) as folder:
        (folder / writing.MARKER).write_text("new")
        assert (out / writing.MARKER).read_text() == "old"
    assert (out / writing.MARKER).read_text() == "new"
    assert os.listdir(out) == [writing.MARKER] and os.listdir(tmp_path) == ["out"]


def test_force_spares_what_is_no_output(tmp_path):
    (tmp_path / "thesis.txt").write_text("years")
    with pytest.raises(InputError, match="something else than an earlier output"):
        writing.require_free_folder(tmp_path, force=True)
    with pytest.raises(InputError, match="the output folder is a file"):
        writing.require_free_folder(tmp_path / "thesis.txt", force=True)
    with pytest.raises(InputError, match="the output folder cannot be made; .*thesis.txt"):
        writing.require_free_folder(tmp_path / "thesis.txt" / "out", force=False)


def test_an_empty_folder_needs_force_too(tmp_path):
    (tmp_path / "out").mkdir()
    with pytest.raises(InputError, match="exists"):
        writing.require_free_folder(tmp_path / "out", force=False)
    with writing.output_folder(tmp_path / "out", force=True) as folder:
        (folder / "a").write_text("x")
    assert os.listdir(tmp_path / "out") == ["a"]


def test_a_link_to_an_output_stays_a_link(tmp_path):
    with writing.output_folder(tmp_path / "first") as folder:
        (folder / writing.MARKER).write_text("old")
    (tmp_path / "latest").symlink_to(tmp_path / "first")
    with writing.output_folder(tmp_path / "latest", force=True) as folder:
        (folder / writing.MARKER).write_text("new")
    assert (tmp_path / "latest").is_symlink()
    assert (tmp_path / "first" / writing.MARKER).read_text() == "new"
