"""The examples in the README run as they stand."""

import re
import textwrap
from pathlib import Path

import numpy as np
from typer.testing import CliRunner

from ensembles.cli import app

README = Path(__file__).parents[1] / "README.md"


def test_the_python_example_runs(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    blocks = re.findall(r"```python\n(.*?)```", README.read_text(encoding="utf-8"), flags=re.S)
    assert blocks
    names: dict[str, object] = {}  # a later example goes on where the one before stopped
    for block in blocks:
        exec(compile(block, "README.md", "exec"), names)
    assert "converged" in capsys.readouterr().out
    assert (tmp_path / "bridge.npz").is_file()
    assert np.isfinite(names["added"]).all()


def test_every_file_that_the_readme_shows_exists():
    text = README.read_text(encoding="utf-8")
    pictures = re.findall(r"!\[[^\]]*\]\(([^)]+)\)", text)
    assert pictures
    for picture in pictures:
        assert (README.parent / picture).is_file()
    for script in re.findall(r"^    (scripts/\w+)", text, flags=re.M):
        assert (README.parent / script).is_file()


def test_the_study_of_the_same_particles_runs(tmp_path):
    block = re.search(r"^    \[study\]\n(?:    .*\n)+", README.read_text(encoding="utf-8"), flags=re.M)
    assert block
    (tmp_path / "study.toml").write_text(textwrap.dedent(block[0]), encoding="utf-8")
    rng = np.random.default_rng(0)
    start = 50.0 * rng.random((60, 2))
    end = (start + rng.normal(0.0, np.sqrt(2 * 0.43), start.shape)) % 50.0
    rows = np.concatenate(
        [np.column_stack([np.full(len(cloud), t), cloud]) for t, cloud in ((0, start), (1, end[:57]))]
    )
    np.savetxt(tmp_path / "frames.csv", rows, delimiter=",", header="t,x,y", comments="")
    found = CliRunner().invoke(app, ["solve", str(tmp_path / "study.toml"), "--out", str(tmp_path / "out")])
    assert found.exit_code == 0, found.output
    estimate = (tmp_path / "out" / "estimate.csv").read_text(encoding="utf-8").splitlines()[1].split(",")
    assert 0.25 < float(estimate[1]) < 0.7
