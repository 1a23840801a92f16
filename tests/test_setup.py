"""The package as it is installed: version, entry points, scripts, and a light import."""

import importlib.metadata
import os
import re
import subprocess
import sys
import tomllib
from itertools import chain
from pathlib import Path

import pytest

import ensembles

ROOT = Path(__file__).resolve().parents[1]
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
SCRIPTS = ["scripts/setup", "scripts/demo", "scripts/test", ".ci/run"]


def test_the_version_is_the_same_everywhere():
    assert importlib.metadata.version("ensembles") == ensembles.__version__
    assert re.fullmatch(r"\d+\.\d+\.\d+", ensembles.__version__)


def test_the_console_script_leads_to_a_function():
    points = importlib.metadata.entry_points(group="console_scripts", name="ensembles")
    assert [point.value for point in points] == [PROJECT["scripts"]["ensembles"]]
    assert all(callable(point.load()) for point in points)


@pytest.mark.parametrize(
    "requirement", list(chain(PROJECT["dependencies"], *PROJECT["optional-dependencies"].values()))
)
def test_every_dependency_has_a_lower_bound_and_no_other(requirement):
    assert re.fullmatch(r"ensembles\[[\w,]+\]|[\w.-]+(\[\w+\])?>=[\d.]+", requirement)


@pytest.mark.parametrize("name", SCRIPTS)
def test_scripts_can_be_run(name):
    script = ROOT / name
    assert os.access(script, os.X_OK)
    lines = script.read_text(encoding="utf-8").splitlines()
    assert lines[0] == "#!/usr/bin/env bash" and "set -euo pipefail" in lines
    subprocess.run(["bash", "-n", str(script)], check=True)


def test_setup_refuses_an_old_python(tmp_path):
    old = tmp_path / "old-python"
    old.write_text('#!/bin/sh\nif [ "$1" = --version ]; then echo "Python 3.8.1"; else exit 1; fi\n')
    old.chmod(0o755)
    (tmp_path / "scripts").mkdir()
    (tmp_path / "ensembles").mkdir()
    for name in ("scripts/setup", "pyproject.toml", "ensembles/__init__.py"):
        (tmp_path / name).write_bytes((ROOT / name).read_bytes())
    environment = {**os.environ, "PYTHON": str(old)}
    run = subprocess.run(["bash", "scripts/setup"], cwd=tmp_path, env=environment, capture_output=True, text=True)
    assert run.returncode == 1
    assert "Python 3.11 or newer is needed" in run.stderr and "Python 3.8.1" in run.stderr
    assert not (tmp_path / ".venv").exists()


def test_the_top_level_is_fixed():
    run = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True)
    if run.returncode:
        pytest.skip("not a git checkout")
    top = {line.split("/")[0] for line in run.stdout.splitlines()}
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "ensembles", "tests", "scripts", "data"}
    assert {name for name in top if not name.startswith(".")} <= allowed


@pytest.mark.parametrize("statement", ["import ensembles", "import ensembles; dir(ensembles); ensembles.Brownian(1.0)"])
def test_import_is_light(statement):
    code = f"{statement}\nimport sys\nprint(*sorted({{'matplotlib', 'numba', 'pandas'}} & set(sys.modules)))"
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert run.stdout.split() == []


def test_every_public_name_can_be_had():
    for name in ensembles.__all__:
        assert getattr(ensembles, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'brigde'"):
        _ = ensembles.brigde
    assert set(ensembles.__all__) <= set(dir(ensembles))
