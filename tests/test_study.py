"""The study file: what it accepts, and that every mistake is named with its line."""

import re
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

from ensembles.checks import InputError
from ensembles.snapshots.demo import DEMOS, write_demo
from ensembles.study import read_study
from ensembles.study_problems import line_of

GOOD = """\
[study]
title = "two films"
seed = 7

[data]
file = "beads.csv"
time = "t_s"
position = ["x_um", "y_um"]

[prior]
kind = "brownian"
diffusion = 0.43
"""


def written(folder: Path, text: str) -> Path:
    path = folder / "study.toml"
    path.write_text(text, encoding="utf-8")
    return path


def message_of(folder: Path, text: str) -> str:
    with pytest.raises(InputError, match=r"study\.toml") as caught:
        read_study(written(folder, text))
    return str(caught.value)


def test_a_study_with_its_defaults(tmp_path):
    study = read_study(written(tmp_path, GOOD))
    assert (study.title, study.seed, study.data.position) == ("two films", 7, ("x_um", "y_um"))
    assert (study.solve.tolerance, study.solve.sweeps) == (1e-6, None)
    assert study.output.model_dump() == {
        "paths": 200,
        "path_times": 41,
        "intermediate": 5,
        "format": "csv",
        "links": 3,
        "repeats": 20,
    }
    assert study.data_file == tmp_path / "beads.csv"
    assert study.text == GOOD


def test_a_study_cannot_be_changed(tmp_path):
    study = read_study(written(tmp_path, GOOD))
    with pytest.raises(ValueError, match="frozen"):
        study.output.paths = 3
    with pytest.raises(AttributeError, match="cannot assign"):
        study.seed = 3


@pytest.mark.parametrize(
    ("prior", "covariance"),
    [
        # 2 D τ with τ = 0.5
        ('kind = "brownian"\ndiffusion = 2', [[2.0, 0.0], [0.0, 2.0]]),
        ('kind = "brownian"\ndiffusion = [1, 3.0]\ndrift = [1, 0]', [[1.0, 0.0], [0.0, 3.0]]),
        ('kind = "brownian"\ndiffusion = [[2, 0.5], [0.5, 1]]', [[2.0, 0.5], [0.5, 1.0]]),
        # D (1 - e^{-2κτ}) / κ with κ = 1: 1 - e^{-1}
        (
            'kind = "ornstein-uhlenbeck"\ndiffusion = 1.0\nrate = 1.0\ncentre = [1.0, 2.0]',
            np.eye(2) * -np.expm1(-1.0),
        ),
    ],
)
def test_every_form_of_a_prior(tmp_path, prior, covariance):
    text = GOOD.replace('kind = "brownian"\ndiffusion = 0.43', prior)
    built = read_study(written(tmp_path, text)).build_prior()
    assert_allclose(built.transition(0.5, 2).covariance, covariance, rtol=1e-12, atol=1e-15)


@pytest.mark.parametrize("name", DEMOS)
def test_the_demonstrations_are_good_studies(tmp_path, name):
    data, file = write_demo(name, tmp_path / name)
    study = read_study(file)
    series = study.read_series()
    assert len(series) == {"beads": 3, "cells": 4}[name]
    assert series.dimension == len(study.data.position) == {"beads": 2, "cells": 8}[name]
    assert series.counts.sum() == len(data.read_text(encoding="utf-8").splitlines()) - 1
    assert series.time_unit == {"beads": "s", "cells": "d"}[name]
    assert study.build_prior().transition(1.0, series.dimension).dimension == series.dimension
    assert (series.labels is None) == (name == "beads")


@pytest.mark.parametrize("name", DEMOS)
def test_the_optional_keys_that_a_demonstration_shows_exist(tmp_path, name):
    _, file = write_demo(name, tmp_path)
    shown = re.sub(r"^# (\w+ = |\[\w+\])", r"\1", file.read_text(encoding="utf-8"), flags=re.MULTILINE)
    shown = shown.replace("drift = [0.1, 0.0]", "# drift")  # said to be of the other kind
    study = read_study(written(tmp_path, shown))
    if name == "beads":
        assert (study.data.weight, study.data.label, study.data.features) == ("mass", "kind", ("brightness",))
        assert study.solve.sweeps == 1000
    else:
        assert (study.scaling.kind, study.scaling.components, study.growth.uncertainty) == ("pca", 5, 0.2)


def test_demonstrations_repeat_with_their_seed():
    for draw in DEMOS.values():
        first, again, other = (
            draw(np.random.default_rng(1)),
            draw(np.random.default_rng(1)),
            draw(np.random.default_rng(2)),
        )
        assert all((first[name] == again[name]).all() for name in first)
        assert any((first[name] != other[name]).any() for name in first)


def test_beads_follow_their_law():
    # Ornstein-Uhlenbeck from N(-6, 0.8²) with κ = 0.08/s, D = 0.43 µm²/s, over 12 s: mean -6 e^{-0.96} = -2.2974,
    # variance 0.64 e^{-1.92} + 0.43 (1 - e^{-1.92}) / 0.08 = 4.5869, by hand. Six standard errors of 405 beads.
    columns = DEMOS["beads"](np.random.default_rng(3))
    x = columns["x_um"][columns["t_s"] == 12.0]
    assert abs(x.mean() + 2.2974) < 6 * np.sqrt(4.5869 / x.size)
    assert abs(x.var() - 4.5869) < 6 * 4.5869 * np.sqrt(2 / x.size)
    assert abs(x.mean() + 6.0) > 20 * np.sqrt(4.5869 / x.size)


def test_cells_branch():
    columns = DEMOS["cells"](np.random.default_rng(0))
    first, last = columns["day"] == 0.0, columns["day"] == 7.0
    assert set(columns["type"][first]) == {"progenitor"}
    assert set(columns["type"][last]) == {"sheath", "core"}
    sheath = last & (columns["type"] == "sheath")
    core = last & (columns["type"] == "core")
    assert columns["C2"][sheath].mean() > 1.5 and columns["C2"][core].mean() < -1.5
    assert columns["marker_sheath"][sheath].mean() > columns["marker_sheath"][core].mean() + 1.0


@pytest.mark.parametrize(
    ("old", "new", "line", "expected"),
    [
        (
            "seed = 7",
            "sed = 7",
            3,
            r"unknown key in \[study\]; 'sed' \(did you mean 'seed'\?\); use one of: title, seed",
        ),
        (
            "diffusion = 0.43",
            "difusion = 0.43",
            12,
            r"unknown key in \[prior\]; 'difusion' \(did you mean 'diffusion'\?\)",
        ),
        (
            "seed = 7",
            "tolerance = 7",
            3,
            r"key in the wrong table; 'tolerance' stands in \[study\]; move it under \[solve\]",
        ),
        ("0.43", "0.43\nrate = 1", 13, r"key of another prior; 'rate' does not belong to kind 'brownian'; remove it"),
        ("[study]", "[studdy]", 1, r"unknown table; 'studdy' \(did you mean 'study'\?\)"),
        ("seed = 7", "seed = 7.5", 3, r"wrong value; study.seed = 7.5; it should be a whole number"),
        ("seed = 7", "seed = -7", 3, r"wrong value; study.seed = -7; it should be greater than or equal to 0"),
        ("seed = 7", 'seed = "7"', 3, r'wrong value; study.seed = "7"; it should be a whole number'),
        ("seed = 7", "seed = true", 3, r"wrong value; study.seed = true; it should be a whole number"),
        ('time = "t_s"', "time = 3", 7, r"wrong value; data.time = 3; it should be a text in quotes"),
        ('["x_um", "y_um"]', '["x_um", 2]', 8, r"wrong value; data.position\[1\] = 2; it should be a text in quotes"),
        ('["x_um", "y_um"]', "7", 8, r"wrong value; data.position = 7; it should be a list such as"),
        ('["x_um", "y_um"]', "[]", 8, r"wrong value; data.position = \[\]; it should hold at least one entry"),
        ('file = "beads.csv"\n', "", 5, r"missing key; \[data\] has no 'file'"),
        ('time = "t_s"\n', "", 5, r"missing key; \[data\] has no 'time'; add a line such as: time = \"t\""),
        ("diffusion = 0.43", "", 10, r"missing key; \[prior\] has no 'diffusion', which 'brownian' needs"),
        ('kind = "brownian"\n', "", 10, r"missing key; \[prior\] has no 'kind'"),
        ('"brownian"', '"brownain"', 11, r"unknown prior.kind; 'brownain' \(did you mean 'brownian'\?\)"),
        ('"brownian"', "3", 11, r"wrong value; prior.kind = 3; it should be a text in quotes"),
        ("0.43", "0", 12, r"prior.diffusion must be positive; diffusion = 0; give the diffusion coefficient"),
        ("0.43", "-0.43", 12, r"prior.diffusion must be positive; diffusion = -0.43"),
        ("0.43", '"0.43"', 12, r"wrong value; prior.diffusion = '0.43'; it should be a number or a list of numbers"),
        ("0.43", "true", 12, r"wrong value; prior.diffusion = True; it should be a number"),
        ("0.43", "nan", 12, r"prior.diffusion must be finite"),
        ("0.43", "[0.4, 0.4, 0.4]", 12, r"prior.diffusion has the wrong dimension; it is given for 3 coordinate"),
        ("0.43", "[[1, 2], [2, 1]]", 12, r"prior.diffusion must be positive definite; its smallest eigenvalue is -1"),
        ("0.43", "[[1, 2], [3]]", 12, r"prior.diffusion must be numbers"),
        ("diffusion = 0.43", "diffusion =", 12, r"not a TOML file; Invalid value \(at line 12"),
        ("seed = 7", "seed = 7\nseed = 8", 4, r"not a TOML file; Cannot overwrite a value"),
    ],
)
def test_a_mistake_is_named_with_its_line(tmp_path, old, new, line, expected):
    assert GOOD.count(old) == 1
    message = message_of(tmp_path, GOOD.replace(old, new))
    assert re.search(f"line {line}: {expected}", message), message
    assert message.count(";") >= 2, "three parts: what, value and place, remedy"


@pytest.mark.parametrize(
    ("added", "expected"),
    [
        ("[solve]\ntolerance = 0", "solve.tolerance = 0; it should be greater than 0"),
        ("[solve]\ntolerance = inf", "solve.tolerance = inf; it should be a finite number"),
        ("[solve]\nsweeps = 0", "solve.sweeps = 0; it should be greater than or equal to 1"),
        ("[output]\npath_times = 1", "output.path_times = 1; it should be greater than or equal to 2"),
        ('[output]\nformat = "xml"', "output.format = \"xml\"; it should be 'csv' or 'parquet'"),
    ],
)
def test_wrong_values_of_the_optional_tables(tmp_path, added, expected):
    message = message_of(tmp_path, f"{GOOD}{added}\n")
    assert "study.toml, line 14: " in message and expected in message


def test_missing_tables_are_named(tmp_path):
    message = message_of(tmp_path, "[study]\n")
    assert "has 2 problems" in message
    assert "missing table; [data] is not in the file; add it, with its keys: file, time, position" in message
    assert "missing table; [prior] is not in the file" in message


def test_a_table_written_as_a_value(tmp_path):
    message = message_of(tmp_path, "solve = 3\n" + GOOD)
    assert "study.toml, line 1: wrong value; solve = 3; it should be a table, written [name]" in message


def test_all_problems_come_at_once_in_the_order_of_their_lines(tmp_path):
    text = GOOD.replace("seed", "sede").replace('"t_s"', "1").replace("0.43", '"much"')
    message = message_of(tmp_path, text)
    assert message.splitlines()[0].endswith("study.toml has 3 problems:")
    assert [int(n) for n in re.findall(r"line (\d+):", message)] == [3, 7, 12]


def test_an_archive_names_its_own_columns(tmp_path):
    text = (
        GOOD.replace("beads.csv", "beads.npz")
        .replace('time = "t_s"\n', "")
        .replace('position = ["x_um", "y_um"]\n', "")
    )
    study = read_study(written(tmp_path, text))
    assert study.data.time is None and study.data.position is None


def test_missing_and_unreadable_files(tmp_path):
    with pytest.raises(InputError, match="study file not found; .*none.toml"):
        read_study(tmp_path / "none.toml")
    with pytest.raises(InputError, match="the study file is a folder"):
        read_study(tmp_path)
    foreign = tmp_path / "study.toml"
    foreign.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match="the study file is not text; .*UTF-8"):
        read_study(foreign)


def test_line_of_other_ways_to_write_a_key():
    text = 'study.seed = 1\n[ data ] # here\n"file" = "a"\n# time = "no"\n\n[prior]\n  kind="x"\n'
    assert line_of(text, ["study", "seed"]) == 1
    assert line_of(text, ["data"]) == 2
    assert line_of(text, ["data", "file"]) == 3
    assert line_of(text, ["data", "time"]) is None
    assert line_of(text, ["prior", "kind"]) == 7
