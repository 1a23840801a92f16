"""The command line from end to end: what it prints where, its exit status, and what it leaves behind."""

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest
from numpy.testing import assert_allclose
from typer.testing import CliRunner

import ensembles
from ensembles import cli, writing
from ensembles.checks import ComputationError

SMALL = """\
[study]
title = "small"

[data]
file = "points.csv"
time = "t"
position = ["x", "y"]

[units]
time = "s"
length = "µm"

[prior]
kind = "brownian"
diffusion = 0.5

[output]
paths = 6
path_times = 5
intermediate = 2
links = 2
"""
ROWS = [
    (0, 0.0, 0.1),
    (0, 0.4, 0.0),
    (0, 0.1, 0.7),
    (2, 1.0, 0.2),
    (2, 1.5, 0.9),
    (5, 2.0, 1.0),
    (5, 2.2, 0.3),
    (5, 3.1, 1.4),
]


def run(*arguments):
    return CliRunner().invoke(cli.app, [str(argument) for argument in arguments])


def table(rows, header="t,x,y"):
    return "\n".join([header, *(",".join(map(str, row)) for row in rows)]) + "\n"


@pytest.fixture
def small(tmp_path):
    """A study of eight points at three times."""
    (tmp_path / "points.csv").write_text(table(ROWS), encoding="utf-8")
    study = tmp_path / "study.toml"
    study.write_text(SMALL, encoding="utf-8")
    return study


def files_in(folder: Path) -> set[str]:
    return {str(path.relative_to(folder)) for path in folder.rglob("*")}


# ---- the program as a process -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "program", [[sys.executable, "-m", "ensembles"], [str(Path(sys.executable).parent / "ensembles")]]
)
def test_it_runs_as_a_module_and_as_a_script(program):
    found = subprocess.run([*program, "--version"], capture_output=True, text=True, check=True)
    assert found.stdout.strip() == f"ensembles {ensembles.__version__}"


def test_an_error_goes_to_stderr_without_a_traceback(tmp_path):
    program = [sys.executable, "-m", "ensembles", "look", "none.toml"]
    found = subprocess.run(program, capture_output=True, text=True, cwd=tmp_path)
    assert found.returncode == 2
    assert found.stdout == ""
    assert found.stderr == "input error: study file not found; 'none.toml'; check its path\n"


def test_a_terminal_without_greek_letters_is_no_reason_to_stop(small):
    environment = {**os.environ, "PYTHONIOENCODING": "ascii"}
    program = [sys.executable, "-m", "ensembles", "look", str(small)]
    found = subprocess.run(program, capture_output=True, text=True, env=environment)
    assert (found.returncode, found.stderr) == (0, "")
    assert "x (?m)" in found.stdout


def test_there_is_help_for_every_command():
    listed = run("--help")
    assert listed.exit_code == 0
    for command in ("demo", "look", "solve"):
        assert command in listed.stdout
        assert run(command, "--help").exit_code == 0


@pytest.mark.parametrize(
    "arguments",
    [
        [],
        ["nothing"],
        ["solve"],
        ["solve", "a.toml"],
        ["demo", "beads"],
        ["look", "a", "b"],
        ["demo", "beads", "x", "--seed", "-1"],
    ],
)
def test_wrong_usage_ends_with_2(arguments):
    assert run(*arguments).exit_code == 2


# ---- errors and their exit status -------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("error", "status", "expected"),
    [
        (ComputationError("it broke; here; do that"), 1, "computation failed: it broke; here; do that"),
        (MemoryError("8 GiB"), 1, "out of memory; 8 GiB"),
        (KeyboardInterrupt(), 130, "interrupted; nothing was written"),
        (PermissionError(13, "Permission denied", "x.csv"), 1, "[Errno 13] Permission denied: 'x.csv'"),
    ],
)
def test_exit_status_of_each_failure(small, monkeypatch, error, status, expected):
    def fail(path):
        raise error

    monkeypatch.setattr("ensembles.study.read_study", fail)
    found = run("look", small)
    assert found.exit_code == status
    assert expected in found.stderr
    assert len(found.stderr.strip().splitlines()) == 1
    assert found.stdout == ""


def test_an_error_of_the_program_itself_is_not_hidden(small, monkeypatch):
    def fail(path):
        raise ZeroDivisionError("a mistake of ours")

    monkeypatch.setattr("ensembles.study.read_study", fail)
    assert isinstance(run("look", small).exception, ZeroDivisionError)


# ---- demo -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["beads", "cells"])
def test_demo_writes_data_and_a_study_that_look_can_read(tmp_path, name):
    found = run("demo", name, tmp_path / "deep" / name)
    assert found.exit_code == 0, found.stderr
    assert files_in(tmp_path / "deep" / name) == {f"{name}.csv", "study.toml"}
    assert f"ensembles look {tmp_path / 'deep' / name / 'study.toml'}" in found.stdout
    looked = run("look", tmp_path / "deep" / name / "study.toml")
    assert looked.exit_code == 0, looked.stderr
    assert looked.stdout.count("the diffusion is of the right order") == {"beads": 2, "cells": 3}[name]


def test_demo_repeats_with_its_seed(tmp_path):
    for folder, seed in (("a", 1), ("b", 1), ("c", 2)):
        assert run("demo", "beads", tmp_path / folder, "--seed", seed).exit_code == 0
    first, again, other = ((tmp_path / folder / "beads.csv").read_bytes() for folder in "abc")
    assert first == again != other


def test_demo_spares_a_folder_that_holds_something(tmp_path):
    (tmp_path / "mine.txt").write_text("mine")
    found = run("demo", "beads", tmp_path)
    assert found.exit_code == 2 and "not empty" in found.stderr and "--force" in found.stderr
    assert files_in(tmp_path) == {"mine.txt"}
    assert run("demo", "beads", tmp_path, "--force").exit_code == 0
    assert files_in(tmp_path) == {"mine.txt", "beads.csv", "study.toml"}


def test_demo_offers_the_nearest_name(tmp_path):
    found = run("demo", "bead", tmp_path / "x")
    assert found.exit_code == 2
    assert "unknown demonstration; 'bead' (did you mean 'beads'?); use one of: beads, cells" in found.stderr
    assert not (tmp_path / "x").exists()


# ---- look -------------------------------------------------------------------------------------------------------


def test_look_shows_the_snapshots_and_the_gaps(small):
    found = run("look", small)
    assert found.exit_code == 0, found.stderr
    for expected in (
        "t (s)",
        "particles",
        "effective sample size",
        "duplicates",
        "x (µm)",
        "prior's spread (µm)",
        "equal at (µm²/s)",
    ):
        assert expected in found.stdout
    assert "1.25 ± 0.25" in found.stdout  # x of the second snapshot: 1.0 and 1.5
    assert files_in(small.parent) == {"points.csv", "study.toml"}


@pytest.mark.parametrize(
    ("diffusion", "verdict"), [("1e-4", "much too small"), ("0.5", "of the right order"), ("100.0", "much too large")]
)
def test_look_judges_the_noise(small, diffusion, verdict):
    small.write_text(SMALL.replace("diffusion = 0.5", f"diffusion = {diffusion}"), encoding="utf-8")
    found = run("look", small)
    assert found.stdout.count(verdict) == 2


def test_look_says_what_one_particle_makes_meaningless(small):
    (small.parent / "points.csv").write_text(table([*ROWS, (9, 3.0, 3.0)]), encoding="utf-8")
    found = run("look", small)
    assert found.exit_code == 0
    assert (
        "snapshot t = 9 has one particle: its spread, effective sample size and any error bar are meaningless"
        in found.stdout
    )


def test_a_title_is_printed_as_it_is(small):
    small.write_text(SMALL.replace('"small"', '"[bold]x[/nothing]"'), encoding="utf-8")
    assert "[bold]x[/nothing]" in run("look", small).stdout


# ---- bad input: a message, status 2, nothing written ------------------------------------------------------------

STUDY_CHANGES = [
    ('file = "points.csv"', 'file = "pionts.csv"', "missing file; there is no"),
    ('position = ["x", "y"]', 'position = ["x", "yy"]', "there is no column 'yy' (did you mean 'y'?)"),
    ('position = ["x", "y"]', 'position = ["x", "y"]\nweight = "w"', "there is no column 'w'"),
    ('time = "t"\n', "", "missing key; [data] has no 'time'"),
    ("paths = 6", "path = 6", "unknown key in [output]; 'path' (did you mean 'paths'?)"),
    ("diffusion = 0.5", "diffusion = [[1.0, 2.0], [2.0, 1.0]]", "prior.diffusion must be positive definite"),
    ("diffusion = 0.5", "diffusion = 0.0", "prior.diffusion must be positive; diffusion = 0"),
    ("diffusion = 0.5", "diffusion = [0.5, 0.5, 0.5]", "prior.diffusion has the wrong dimension"),
    ("diffusion = 0.5", "diffusion = 0.5\ndrift = [1.0]", "prior.drift has the wrong dimension"),
]
DATA_CHANGES = [
    (table([*ROWS[:3], (2, "much", 1.0), *ROWS[3:]]), ["'x'", "line 5", "much"]),
    (table([*ROWS, (5, "", 1.0)]), ["'x'", "line 10"]),
    (table([*ROWS, (5, "nan", 1.0)]), ["'x'", "line 10"]),
    (table([*ROWS, (5, "inf", 1.0)]), ["x", "inf"]),
    (table(ROWS[:3]), ["a series needs at least two snapshots; column 't' holds one time only, 0"]),
    (table([]), ["points.csv"]),
    ("", ["empty file"]),
    (table([(0, 1.0, 1.0), (1, 1.0, 1.0), (1, 1.0, 1.0)]), ["the positions must differ; all 3 particles"]),
]
WEIGHT_CHANGES = [
    ([1, 1, 1, -1, 1, 1, 1, 1], "weights must be non-negative"),
    ([1, 1, 1, 0, 0, 1, 1, 1], "weights must not all be zero"),
    ([1, 1, 1, "inf", 1, 1, 1, 1], "must be finite"),
]


def refused(study: Path, command: str):
    """The message of a refusal; asserts its status and that nothing was written."""
    before = files_in(study.parent)
    found = run("look", study) if command == "look" else run("solve", study, "--out", study.parent / "out")
    assert found.exit_code == 2, (found.exit_code, found.stderr, found.exception)
    assert found.stderr.startswith("input error: ") and "Traceback" not in found.stderr
    assert found.stderr.count(";") >= 2, "three parts: what, value and place, remedy"
    assert files_in(study.parent) == before
    return found.stderr


@pytest.mark.parametrize("command", ["look", "solve"])
@pytest.mark.parametrize(("old", "new", "expected"), STUDY_CHANGES)
def test_a_bad_study_is_refused(small, command, old, new, expected):
    assert SMALL.count(old) == 1
    small.write_text(SMALL.replace(old, new), encoding="utf-8")
    assert expected in refused(small, command)


@pytest.mark.parametrize("command", ["look", "solve"])
@pytest.mark.parametrize(("data", "expected"), DATA_CHANGES)
def test_bad_data_are_refused(small, command, data, expected):
    (small.parent / "points.csv").write_text(data, encoding="utf-8")
    message = refused(small, command)
    assert all(part in message for part in expected), message


@pytest.mark.parametrize(("values", "expected"), WEIGHT_CHANGES)
def test_bad_weights_are_refused(small, values, expected):
    rows = [(*row, value) for row, value in zip(ROWS, values)]
    (small.parent / "points.csv").write_text(table(rows, "t,x,y,w"), encoding="utf-8")
    small.write_text(SMALL.replace('time = "t"', 'time = "t"\nweight = "w"'), encoding="utf-8")
    assert expected in refused(small, "solve")


# ---- solve ------------------------------------------------------------------------------------------------------

# path_times = 5 between 0 and 5, and the snapshots themselves
SMALL_TIMES = {0.0, 1.25, 2.0, 2.5, 3.75, 5.0}
TABLES = {"links.csv", "paths.csv", "clouds.csv", "drift.csv", "moments.csv", "certificate.csv"}


@pytest.fixture(scope="module")
def solved(tmp_path_factory):
    """A small study, solved once; its folder holds the study and `out`."""
    folder = tmp_path_factory.mktemp("solved")
    (folder / "points.csv").write_text(table(ROWS), encoding="utf-8")
    (folder / "study.toml").write_text(SMALL, encoding="utf-8")
    found = run("solve", folder / "study.toml", "--out", folder / "out")
    assert found.exit_code == 0, (found.stderr, found.exception)
    assert found.stderr == ""
    return folder


def test_solve_writes_everything_and_nothing_else(solved):
    assert {path.name for path in solved.iterdir()} == {"points.csv", "study.toml", "out"}
    names = {path.name for path in (solved / "out").iterdir()}
    assert names >= TABLES | {"summary.json", "study.toml", "report.html", "bridge.npz"}
    assert len([name for name in names if name.endswith(".png")]) >= 5
    assert (solved / "out" / "study.toml").read_text(encoding="utf-8") == SMALL


def test_the_summary_says_what_was_done(solved):
    summary = json.loads((solved / "out" / "summary.json").read_text(encoding="utf-8"))
    assert summary["program"] == "ensembles"
    assert summary["versions"]["ensembles"] == ensembles.__version__
    assert summary["study"]["seed"] == 0 and summary["study"]["title"] == "small"
    series = ensembles.read_snapshots(solved / "points.csv", time="t", position=["x", "y"])
    assert summary["study"]["data"]["fingerprint"] == series.fingerprint()
    assert [text.split(":")[0] for text in summary["noise"]] == ["t = 0 → 2 s", "t = 2 → 5 s"]


def test_the_tables_hold_what_the_study_asks_for(solved):
    out = solved / "out"
    paths = pd.read_csv(out / "paths.csv")
    assert paths["path"].nunique() == 6
    assert SMALL_TIMES == set(paths["t"]) and set(paths.columns) >= {"x", "y"}
    assert pd.read_csv(out / "clouds.csv")["t"].nunique() == 2
    links = pd.read_csv(out / "links.csv")
    series = ensembles.read_snapshots(solved / "points.csv", time="t", position=["x", "y"])
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.5))
    assert len(links) == 2 * 3 + 2 * 2  # two links for each source of the two gaps
    expected = pd.concat([bridge.coupling(gap).top_links(2) for gap in range(2)])
    assert_allclose(links["probability"], expected["probability"], rtol=1e-9)
    assert_allclose(ensembles.load_bridge(out / "bridge.npz").solutions[1].log_g, bridge.solutions[1].log_g, rtol=1e-12)
    moments = pd.read_csv(out / "moments.csv")
    assert len(moments) == len(SMALL_TIMES)


def test_the_seed_decides(solved):
    for name, seed in (("same", 0), ("other", 1)):
        found = run("solve", solved / "study.toml", "--out", solved / "seeds" / name, "--seed", seed)
        assert found.exit_code == 0, found.stderr
    first, same, other = (solved / name for name in ("out", "seeds/same", "seeds/other"))
    for name in TABLES:
        assert (first / name).read_bytes() == (same / name).read_bytes()
    assert (first / "paths.csv").read_bytes() != (other / "paths.csv").read_bytes()
    assert (first / "links.csv").read_bytes() == (other / "links.csv").read_bytes()
    assert json.loads((other / "summary.json").read_text(encoding="utf-8"))["study"]["seed"] == 1
    shutil.rmtree(solved / "seeds")


def test_paths_as_parquet(small):
    small.write_text(SMALL + 'format = "parquet"\n', encoding="utf-8")
    assert run("solve", small, "--out", small.parent / "out").exit_code == 0
    assert pd.read_parquet(small.parent / "out" / "paths.parquet")["path"].nunique() == 6
    assert not (small.parent / "out" / "paths.csv").exists()


def test_an_existing_folder_is_kept_without_force_and_replaced_with_it(small):
    out = small.parent / "out"
    assert run("solve", small, "--out", out).exit_code == 0
    stamp = (out / "paths.csv").read_bytes()
    again = run("solve", small, "--out", out, "--seed", 5)
    assert again.exit_code == 2 and "the output folder exists" in again.stderr and "--force" in again.stderr
    assert (out / "paths.csv").read_bytes() == stamp
    (out / "left over.txt").write_text("old")
    assert run("solve", small, "--out", out, "--seed", 5, "--force").exit_code == 0
    assert (out / "paths.csv").read_bytes() != stamp
    assert not (out / "left over.txt").exists()
    assert {path.name for path in small.parent.iterdir()} == {"points.csv", "study.toml", "out"}


def test_force_does_not_replace_the_folder_of_the_data(small):
    found = run("solve", small, "--out", small.parent, "--force")
    assert found.exit_code == 2 and "something else than an earlier output" in found.stderr
    assert files_in(small.parent) == {"points.csv", "study.toml"}


@pytest.mark.parametrize("error", [RuntimeError("in the middle"), KeyboardInterrupt()])
def test_a_failure_in_the_middle_leaves_nothing(small, monkeypatch, error):
    def fail(*arguments, **options):
        raise error

    monkeypatch.setattr(writing, "write_json", fail)  # the last thing that is written
    found = run("solve", small, "--out", small.parent / "out")
    assert found.exit_code == (130 if isinstance(error, KeyboardInterrupt) else 1)
    assert files_in(small.parent) == {"points.csv", "study.toml"}


def test_too_few_sweeps_end_with_1(small):
    small.write_text(SMALL + "[solve]\nsweeps = 1\ntolerance = 1e-14\n", encoding="utf-8")
    found = run("solve", small, "--out", small.parent / "out")
    assert found.exit_code == 1
    assert "computation failed: the bridge did not converge between t = 0 and t = 2; iteration limit" in found.stderr
    assert files_in(small.parent) == {"points.csv", "study.toml"}


def test_noise_that_is_far_too_small_names_the_smallest_usable(small):
    small.write_text(SMALL.replace("diffusion = 0.5", "diffusion = 1e-9"), encoding="utf-8")
    message = refused(small, "solve")
    assert "the noise is too small" in message and "the smallest usable diffusion here is" in message


def test_one_particle_is_solved_with_a_note(small):
    (small.parent / "points.csv").write_text(table([*ROWS, (9, 3.0, 3.0)]), encoding="utf-8")
    found = run("solve", small, "--out", small.parent / "out")
    assert found.exit_code == 0, found.stderr
    summary = json.loads((small.parent / "out" / "summary.json").read_text(encoding="utf-8"))
    assert any("t = 9 has one particle" in note for note in summary["notes"])


def test_nothing_but_the_result_line_goes_into_a_pipe(small):
    program = [sys.executable, "-m", "ensembles", "solve", str(small), "--out", "out"]
    found = subprocess.run(program, capture_output=True, text=True, cwd=small.parent)
    assert (found.returncode, found.stderr) == (0, "")
    assert found.stdout.startswith("Wrote out: ") and len(found.stdout.splitlines()) == 1
