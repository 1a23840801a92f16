"""The examples in the README run as they stand."""

import re
from pathlib import Path

import numpy as np

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
