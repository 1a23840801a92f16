"""`ensembles holdout` from end to end."""

import json

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner

from ensembles import cli

STUDY = """\
[study]
title = "spreading"
seed = 5

[data]
file = "points.csv"
time = "t"
position = ["x", "y"]
features = ["plate"]

[units]
time = "s"
length = "µm"

[prior]
kind = "brownian"
diffusion = 0.5

[holdout]
draws = 200
repeats = 4
simulations = 19

[noise]
diffusion = [0.2, 0.5, 1.2]
"""


def run(*arguments):
    return CliRunner().invoke(cli.app, [str(argument) for argument in arguments])


@pytest.fixture
def study(tmp_path):
    rng = np.random.default_rng(0)
    parts = [
        pd.DataFrame(rng.normal(0.0, np.sqrt(1 + t), size=(30, 2)), columns=["x", "y"]).assign(
            t=t, plate=["a", "b"] * 15
        )
        for t in (0.0, 1.0, 2.0)
    ]
    pd.concat(parts).to_csv(tmp_path / "points.csv", index=False)
    path = tmp_path / "study.toml"
    path.write_text(STUDY, encoding="utf-8")
    return path


def test_it_writes_tables_pictures_and_a_verdict(study, tmp_path):
    found = run("holdout", study, "--out", tmp_path / "out")
    assert found.exit_code == 0, found.output
    assert {path.name for path in (tmp_path / "out").iterdir()} == {
        "bands.csv", "bands.png", "holdout.csv", "holdout.png", "noise.csv", "noise.png", "prior_check.csv", "prior_check.png",
        "effective_sizes.csv", "verdict.txt", "study.toml", "summary.json",
    }  # fmt: skip
    table = pd.read_csv(tmp_path / "out" / "holdout.csv")
    assert set(table["prediction"]) >= {"bridge", "earlier", "later", "straight", "independent", "prior", "floor"}
    summary = json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))
    assert summary["study"] == {"file": "study.toml", "title": "spreading", "seed": 5}
    assert summary["noise"]["best"]["diffusion"] in (0.2, 0.5, 1.2)
    verdict = (tmp_path / "out" / "verdict.txt").read_text(encoding="utf-8")
    assert "t = 1 s: the bridge's energy distance is" in verdict
    # The verdict is on the screen as well, sentence by sentence.
    assert all(sentence in found.stdout for sentence in summary["verdict"])


def test_one_seed_one_result_and_another_seed_another(study, tmp_path):
    tables = []
    for name, seed in (("a", 5), ("b", 5), ("c", 6)):
        assert run("holdout", study, "--out", tmp_path / name, "--seed", seed).exit_code == 0
        tables.append((tmp_path / name / "holdout.csv").read_text(encoding="utf-8"))
    assert tables[0] == tables[1] != tables[2]


def test_replicates_of_the_study_are_the_floor_and_no_levels_mean_no_profile(study, tmp_path):
    text = STUDY.replace("[holdout]", '[holdout]\nreplicates = "plate"').replace(
        "[noise]\ndiffusion = [0.2, 0.5, 1.2]\n", ""
    )
    study.write_text(text, encoding="utf-8")
    found = run("holdout", study, "--out", tmp_path / "out")
    assert found.exit_code == 0, found.output
    assert not (tmp_path / "out" / "noise.csv").exists()
    assert json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))["noise"] is None


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (
            ("diffusion = [0.2, 0.5, 1.2]", "rate = [0.2, 0.5, 1.2]"),
            "unknown parameter of the prior 'brownian'; 'rate'",
        ),
        (("[0.2, 0.5, 1.2]", "[-0.2, 0.5, 1.2]"), "levels of diffusion must be positive; levels[0] = -0.2"),
        (("repeats = 4", "repeats = 1"), "holdout.repeats = 1"),
        (("repeats = 4", "repeat = 4"), "did you mean 'repeats'?"),
        (("simulations = 19", "simulations = 3"), "holdout.simulations = 3"),
        (("[holdout]", '[holdout]\nreplicates = "plates"'), "'plates' (did you mean 'plate'?)"),
    ],
)
def test_bad_studies_end_with_status_2_and_leave_nothing(study, tmp_path, change, message):
    study.write_text(STUDY.replace(*change), encoding="utf-8")
    found = run("holdout", study, "--out", tmp_path / "out")
    assert found.exit_code == 2
    assert message in found.output
    assert sorted(path.name for path in tmp_path.iterdir()) == ["points.csv", "study.toml"]


def test_two_snapshots_are_refused_with_what_to_use_instead(study, tmp_path):
    points = pd.read_csv(tmp_path / "points.csv")
    points[points["t"] != 1].to_csv(tmp_path / "points.csv", index=False)
    found = run("holdout", study, "--out", tmp_path / "out")
    assert found.exit_code == 2
    assert "holding out needs three snapshots; the series has 2" in found.output
    assert "prior_check" in found.output
    assert not (tmp_path / "out").exists()


def test_an_existing_folder_is_kept_unless_forced(study, tmp_path):
    out = tmp_path / "out"
    assert run("holdout", study, "--out", out).exit_code == 0
    again = run("holdout", study, "--out", out)
    assert again.exit_code == 2
    assert "--force" in again.output
    assert run("holdout", study, "--out", out, "--force").exit_code == 0
