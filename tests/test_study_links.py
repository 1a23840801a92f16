"""Study files about the same particles: identity, boxes, units; what `solve` then writes."""

import json
import subprocess
import sys

import numpy as np
import pandas
import pytest
from numpy.testing import assert_allclose
from typer.testing import CliRunner

import ensembles
from ensembles.cli import app
from ensembles.study import read_study


def write_study(folder, *, identity="same", diffusion='"0.2 um^2/s"', box="", links="", seed=0, counts=(40, 40)):
    rng = np.random.default_rng(seed)
    start = rng.random((40, 2)) * 20.0
    end = start + np.sqrt(2 * 0.2 * 0.5) * rng.standard_normal(start.shape)
    rows = [(0.0, *x) for x in start[: counts[0]]] + [
        (0.5, *np.clip(x, 0, 20)) for x in rng.permutation(end)[: counts[1]]
    ]
    pandas.DataFrame(rows, columns=["t_s", "x", "y"]).to_csv(folder / "data.csv", index=False)
    study = folder / "study.toml"
    study.write_text(
        f"""
[study]
title = "Tracers"
identity = "{identity}"
[data]
file = "data.csv"
time = "t_s"
position = ["x", "y"]
[units]
time = "s"
length = "µm"
[prior]
kind = "brownian"
diffusion = {diffusion}
{box}
{links}
""",
        encoding="utf-8",
    )
    return study


def run(study, out):
    return CliRunner().invoke(app, ["solve", str(study), "--out", str(out)])


def test_solve_links_the_same_particles(tmp_path):
    result = run(write_study(tmp_path), tmp_path / "out")
    assert result.exit_code == 0, result.output
    out = tmp_path / "out"
    assert sorted(p.name for p in out.iterdir()) == [
        "estimate.csv", "links.csv", "links.png", "particles.csv", "paths.csv", "profile.png", "report.html", "study.toml",
        "summary.json",
    ]  # fmt: skip
    links = pandas.read_csv(out / "links.csv")
    assert {"moved_x [µm]", "moved_y [µm]", "probability", "assigned"} <= set(links.columns)
    assert links.groupby("source_row")["probability"].sum().max() <= 1 + 1e-6
    assert links.loc[links["assigned"], "target_row"].is_unique
    estimate = pandas.read_csv(out / "estimate.csv")
    assert estimate["unit"].tolist() == ["µm²/s"]
    assert estimate["lower"][0] < 0.2 < estimate["upper"][0]
    particles = pandas.read_csv(out / "particles.csv")
    assert len(particles) == 40 and "entropy [nats]" in particles
    summary = json.loads((out / "summary.json").read_text(encoding="utf-8"))
    assert summary["links"][0]["certificate"]["converged"]
    assert_allclose(summary["prior"]["parameters"]["diffusion"], 0.2)
    page = (out / "report.html").read_text(encoding="utf-8")
    assert "The same particles in 2 frames" in page and "By the evidence of the frames" in page
    assert all(sentence in page for sentence in summary["cautions"])
    assert all(f'href="{name}"' in page for name in ("links.csv", "particles.csv", "estimate.csv", "summary.json"))
    assert 'src="links.png"' in page and "not observed tracks" in page
    expected = summary["links"][0]["expected_right_links"]
    assert f"({expected / 40:.3g})" in page  # the dashed line of the picture


def test_displacements_in_a_periodic_box_are_the_shortest(tmp_path):
    study = write_study(tmp_path, box="[box]\nlower = [0, 0]\nupper = [20, 20]")
    assert run(study, tmp_path / "out").exit_code == 0
    links = pandas.read_csv(tmp_path / "out" / "links.csv")
    places = pandas.read_csv(tmp_path / "data.csv")[["x", "y"]].to_numpy()
    raw = places[links["target_row"]] - places[links["source_row"]]
    moved = links[["moved_x [µm]", "moved_y [µm]"]].to_numpy()
    assert np.abs(raw).max() > 10.0  # some links cross the edge
    assert_allclose(moved, (raw + 10.0) % 20.0 - 10.0, atol=1e-9)


def test_a_page_on_crowded_particles_says_not_to_quote_the_estimate(tmp_path):
    rng = np.random.default_rng(0)
    lattice = np.stack(np.meshgrid(np.arange(12.0), np.arange(12.0)), axis=-1).reshape(-1, 2)
    rows = [
        (t, *place) for t in (0.0, 0.5) for place in (lattice + 0.08 * rng.normal(size=lattice.shape) + 0.7 * t) % 12.0
    ]
    study = write_study(tmp_path, box="[box]\nlower = [0, 0]\nupper = [12, 12]")
    pandas.DataFrame(rows, columns=["t_s", "x", "y"]).to_csv(tmp_path / "data.csv", index=False)
    result = run(study, tmp_path / "out")
    assert result.exit_code == 0, result.output
    summary = json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))
    assert summary["estimate"]["identified"] is False
    page = (tmp_path / "out" / "report.html").read_text(encoding="utf-8")
    assert "do not quote the values" in page and "the particles keep apart and are crowded" in page


def test_a_correlation_of_neighbours_is_handed_on(tmp_path):
    found = {}
    for name, line in (("own", ""), ("shared", "correlation = 0.3")):
        (tmp_path / name).mkdir()
        # A larger diffusion than the true one, so that neighbours come into question.
        study = write_study(tmp_path / name, diffusion='"4 um^2/s"', links=f"[links]\n{line}")
        result = run(study, tmp_path / name / "out")
        assert result.exit_code == 0, result.output
        gap = json.loads((tmp_path / name / "out" / "summary.json").read_text(encoding="utf-8"))["links"][0]
        found[name] = gap["variance_factor"], gap["mean_entropy_nats"]
    assert found["own"][0] == 1.0 and found["shared"][0] == 0.7
    assert found["shared"][1] < found["own"][1]


def test_clear_links_cannot_be_held_to_another_spread(tmp_path):
    study = write_study(tmp_path, diffusion='"0.3 um^2/s"', links="[links]\nhold_spread = true")
    result = run(study, tmp_path / "out")
    assert result.exit_code == 1
    assert "cannot be held to the prior's spread" in result.output
    assert not (tmp_path / "out").exists()


def test_a_box_and_the_estimated_prior(tmp_path):
    box = '[box]\nlower = [0, "0 um"]\nupper = [20, 20.0]\nboundary = "reflecting"'
    study = write_study(tmp_path, box=box, links='[links]\nprior = "estimated"\ndetection = 0.9')
    assert read_study(study).build_prior().box.boundary == ("reflecting", "reflecting")
    result = run(study, tmp_path / "out")
    assert result.exit_code == 0, result.output
    summary = json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))
    assert summary["prior"]["taken"] == "estimated"
    assert summary["prior"]["parameters"]["box"]["upper"] == [20.0, 20.0]


def test_a_box_in_the_population_bridge(tmp_path):
    study = write_study(tmp_path, identity="lost", box='[box]\nlower = [0, 0]\nupper = [20, 20]\nboundary = "periodic"')
    result = run(study, tmp_path / "out")
    assert result.exit_code == 0, result.output
    assert (tmp_path / "out" / "bridge.npz").is_file()
    assert ensembles.load_bridge(tmp_path / "out" / "bridge.npz").prior.box.boundary == ("periodic", "periodic")


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"diffusion": '"0.2 um/s"'}, "prior.the unit of diffusion does not match its quantity; it is '0.2 um/s'"),
        ({"diffusion": '"0.2 foo"'}, "unit that is not known"),
        ({"identity": "other"}, "identity"),
        ({"box": "[box]\nlower = [0, 0]"}, "a box needs both edges"),
        ({"box": "[box]\nlower = [0]\nupper = [20]"}, "the box has the wrong dimension"),
        ({"box": '[box]\nlower = [0, 0]\nupper = [20, 20]\nboundary = "periodc"'}, "unknown boundary"),
        ({"box": "[box]\nlower = [0, 0]\nupper = [10, 10]"}, "positions must lie in the box"),
        ({"links": "[links]\ndetecton = 0.5"}, "detection"),
        ({"counts": (40, 38)}, "the same particles must be in every frame; there are 40 at t = 0 and 38"),
    ],
)
def test_bad_study_files(tmp_path, changes, message):
    result = run(write_study(tmp_path, **changes), tmp_path / "out")
    assert result.exit_code == 2
    assert message in result.output.replace("\n", " ")
    assert not (tmp_path / "out").exists()


def test_what_the_page_warns_of_stands_on_stderr_too(tmp_path):
    # Links by a diffusion of a tenth move much farther than it says.
    study = write_study(tmp_path, diffusion='"0.02 um^2/s"')
    result = run(study, tmp_path / "out")
    assert result.exit_code == 0, result.output
    summary = json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))
    assert any("times as far" in sentence for sentence in summary["warnings"])
    assert "warning: the links between t = 0 and t = 0.5 move" in result.output
    assert "the links between t = 0 and t = 0.5 move" in (tmp_path / "out" / "report.html").read_text(encoding="utf-8")


def test_left_out_snapshots_and_links_do_not_mix(tmp_path):
    study = write_study(tmp_path)
    result = CliRunner().invoke(app, ["holdout", str(study), "--out", str(tmp_path / "out")])
    assert result.exit_code == 2
    assert "judge the bridge of a population; the study has identity = 'same'; use solve" in result.output
    lost = write_study(tmp_path, identity="lost", links="[links]\ndetection = 0.5")
    with pytest.raises(
        ensembles.InputError, match=r"\[links\] is for the same particles in every frame; identity is 'lost'"
    ):
        read_study(lost)


def test_a_terminated_run_leaves_nothing_behind(tmp_path):
    study = write_study(tmp_path)
    # Held where it draws, with its hidden folder half full.
    code = (
        "import time, ensembles.link_results as r, ensembles.cli as c\n"
        "def wait(*a, **k):\n    print('drawing', flush=True)\n    time.sleep(60)\n"
        f"r._save_figures = wait\nc.main(['solve', {str(study)!r}, '--out', {str(tmp_path / 'out.1')!r}])\n"
    )
    process = subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stdout.readline() == "drawing\n"
    assert any(".partial" in path.name for path in tmp_path.iterdir())
    process.terminate()
    _, said = process.communicate(timeout=30)
    assert process.returncode == 143 and "interrupted; nothing was written" in said
    assert sorted(path.name for path in tmp_path.iterdir()) == ["data.csv", "study.toml"]


def test_look_judges_linked_particles_by_their_neighbours_and_their_box(tmp_path):
    look = ["look", str(write_study(tmp_path))]
    said = CliRunner().invoke(app, look)
    assert said.exit_code == 0, said.output
    places = pandas.read_csv(tmp_path / "data.csv").query("t_s == 0")[["x", "y"]].to_numpy()
    apart = np.linalg.norm(places[:, None] - places[None], axis=2) + 1e9 * np.eye(len(places))
    near, noise = apart.min(axis=1).mean(), np.sqrt(2 * 0.2 * 0.5)
    assert (
        f"the noise length {noise:.3g} is {noise / near:.2g} of the mean distance to the nearest neighbour"
        in said.output
    )
    assert "several particles compete" in said.output and "of the right order" not in said.output
    write_study(tmp_path, box="[box]\nlower = [0, 0]\nupper = [2, 2]")
    refused = CliRunner().invoke(app, look)
    assert refused.exit_code == 2 and "positions must lie in the box" in refused.output


def test_one_position_needs_no_list(tmp_path):
    study = write_study(tmp_path, identity="lost")
    study.write_text(study.read_text(encoding="utf-8").replace('["x", "y"]', '"x"'), encoding="utf-8")
    assert read_study(study).read_series().position_names == ("x",)
