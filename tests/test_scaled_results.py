"""Studies with a [scaling] table: what `solve` and `holdout` write is in the file's own units, or says that it is not."""

import json

import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose
from test_lineage_results import solved, table
from typer.testing import CliRunner

import ensembles
from ensembles import cli
from ensembles.report.coordinates import Coordinates

NAMES = ["x", "y", "z"]
UNITS = '[units]\ntime = "d"\nlength = "mm"\n'
DIFFUSION = 0.3


def scaled_study(folder, kind, **more):
    lines = "".join(f"{name} = {value}\n" for name, value in more.items())
    found, out = solved(folder, more=f'[scaling]\nkind = "{kind}"\n{lines}{UNITS}', diffusion=DIFFUSION, repeats=0)
    assert found.exit_code == 0, found.stderr
    return out


def moments_of_data(frame, t):
    cloud = frame[frame["t"] == t][NAMES]
    return cloud.mean().to_numpy(), np.cov(cloud.T, ddof=0)


def written_moments(out, t):
    row = pd.read_csv(out / "moments.csv").set_index("t").loc[t]
    covariance = np.diag([row[f"variance_{name} [mm²]"] for name in NAMES])
    for i, j in ((0, 1), (0, 2), (1, 2)):
        covariance[i, j] = covariance[j, i] = row[f"covariance_{NAMES[i]}_{NAMES[j]} [mm²]"]
    return np.array([row[f"mean_{name} [mm]"] for name in NAMES]), covariance


@pytest.mark.parametrize(("kind", "more"), [("standardise", {}), ("pca", {}), ("whiten", {"components": 3})])
def test_tables_are_in_the_units_of_the_file(tmp_path, kind, more):
    out, frame = scaled_study(tmp_path, kind, **more), table()
    for t in (0.0, 1.0, 2.0):
        for found, expected in zip(written_moments(out, t), moments_of_data(frame, t)):
            assert_allclose(found, expected, rtol=1e-5, atol=1e-6)
    links, paths = pd.read_csv(out / "links.csv"), pd.read_csv(out / "paths.csv")
    for side in ("source", "target"):
        positions = links[[f"{side}_{name}" for name in NAMES]].to_numpy()
        assert_allclose(positions, frame.loc[links[f"{side}_row"], NAMES].to_numpy(), rtol=1e-9)
    through = paths[paths["row"].notna()]
    assert len(through) == 15
    assert_allclose(through[NAMES].to_numpy(), frame.loc[through["row"].astype(int), NAMES].to_numpy(), rtol=1e-8)
    summary = json.loads((out / "summary.json").read_text(encoding="utf-8"))
    assert_allclose(summary["snapshots"][1]["mean"], moments_of_data(frame, 1.0)[0], rtol=1e-12)
    assert summary["units"]["length"] == "mm" and summary["columns"]["position"] == NAMES
    assert not any("in the plane of" in note for note in summary["notes"])
    page = (out / "report.html").read_text(encoding="utf-8")
    assert "<th>y (mm)</th>" in page and "The prior lives in scaled coordinates" in page
    for name in ("links", "paths", "clouds", "drift", "moments"):
        header = (out / f"{name}.csv").read_text(encoding="utf-8").splitlines()[0]
        assert "standardised" not in header and "PC1" not in header and "s.d." not in header
    # Negative control: the bridge itself is in scaled coordinates, whose moments are others.
    bridge = ensembles.load_bridge(out / "bridge.npz")
    assert np.abs(bridge.moments(1.0)[0] - moments_of_data(frame, 1.0)[0]).max() > 0.1
    assert bridge.series.length_unit == ("mm" if kind == "pca" else "s.d.")


def test_a_standardised_study_is_one_with_a_diffusion_for_each_axis(tmp_path):
    (tmp_path / "plain").mkdir()
    out = scaled_study(tmp_path, "standardise")
    spread = table()[NAMES].std(ddof=0).to_numpy()
    found, plain = solved(tmp_path / "plain", more=UNITS, diffusion=(DIFFUSION * spread**2).tolist(), repeats=0)
    assert found.exit_code == 0, found.stderr
    moments = [pd.read_csv(folder / "moments.csv") for folder in (out, plain)]
    assert list(moments[0]) == list(moments[1])
    assert_allclose(moments[0].to_numpy(), moments[1].to_numpy(), rtol=1e-4, atol=1e-5)
    drift = pd.read_csv(out / "drift.csv")
    bridge = ensembles.load_bridge(plain / "bridge.npz")
    for t, part in drift.groupby("t"):
        points = part[NAMES].to_numpy()
        for name, expected in (("drift", bridge.drift(t, points)), ("added_drift", bridge.drift(t, points)),
                               ("current_velocity", bridge.current_velocity(t, points))):  # fmt: skip
            values = part[[f"{name}_{axis} [mm/d]" for axis in NAMES]].to_numpy()
            assert_allclose(values, expected, rtol=1e-3, atol=1e-3)
    # Negative control: y is ten times as wide, and so are its velocities.
    assert drift["drift_y [mm/d]"].std() > 5 * drift["drift_x [mm/d]"].std()


def test_fewer_components_say_what_is_left_out(tmp_path):
    out, frame = scaled_study(tmp_path, "pca", components=2), table()
    scaling = ensembles.Scaling.from_mapping(json.loads((out / "scaling.json").read_text(encoding="utf-8")))
    cloud = frame[frame["t"] == 1.0][NAMES].to_numpy()
    kept = scaling.restore(scaling.apply(cloud))
    mean, covariance = written_moments(out, 1.0)
    assert_allclose(mean, kept.mean(axis=0), rtol=1e-6, atol=1e-6)
    assert_allclose(covariance, np.cov(kept.T, ddof=0), rtol=1e-5, atol=1e-6)
    assert np.linalg.eigvalsh(covariance)[0] < 1e-9  # flat out of the plane
    notes = json.loads((out / "summary.json").read_text(encoding="utf-8"))["notes"]
    assert any("in the plane of the 2 component(s) kept; what the cells vary out of it" in note for note in notes)
    # Particles stand where they were measured, in the plane or not.
    links = pd.read_csv(out / "links.csv")
    assert_allclose(links["source_z"].to_numpy(), frame.loc[links["source_row"], "z"].to_numpy(), rtol=1e-12)


def test_what_cannot_be_taken_back_says_so(tmp_path):
    scaled_study(tmp_path, "whiten")
    run = CliRunner().invoke
    found = run(cli.app, ["holdout", str(tmp_path / "study.toml"), "--out", str(tmp_path / "held")])
    assert found.exit_code == 0, found.stderr
    assert "are in scaled coordinates: 3 principal component(s) of variance 1, in standard deviations (s.d.)" in (
        tmp_path / "held" / "verdict.txt"
    ).read_text(encoding="utf-8")
    looked = run(cli.app, ["look", str(tmp_path / "study.toml")])
    assert "PC1 (s.d.)" in looked.stdout and "s.d.²/d" in looked.stdout
    scaled_study(tmp_path, "standardise")
    assert "standardised_x (s.d.)" in run(cli.app, ["look", str(tmp_path / "study.toml")]).stdout


def test_vectors_and_points_go_back_differently():
    rng = np.random.default_rng(0)
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(5, 2, (9, 2)) for _ in range(2)])
    back = Coordinates(series, ensembles.fit_scaling(series, "whiten"))
    points = back.scaling.apply(series.clouds[0])
    assert_allclose(back.points(points), series.clouds[0])
    assert_allclose(back.vectors(points[1:] - points[:-1]), np.diff(series.clouds[0], axis=0))
    assert_allclose(back.covariance(np.cov(points.T)), np.cov(series.clouds[0].T))
    assert Coordinates(series).points(points) is points


def test_growth_is_estimated_where_the_study_asks(tmp_path):
    more = "[growth]\nestimate = true\n"
    found, out = solved(tmp_path, more=more, repeats=0)
    assert found.exit_code == 0, found.stderr
    notes = json.loads((out / "summary.json").read_text(encoding="utf-8"))["notes"]
    assert any(
        note.startswith("growth was estimated from the snapshots under the prior: GrowthEstimate") for note in notes
    )
    bridge = ensembles.load_bridge(out / "bridge.npz")
    assert bridge.series.growth == ensembles.Growth("estimated_rate")
    assert_allclose(pd.read_csv(out / "growth.csv")["given"], ensembles.implied_growth(bridge)["given"], rtol=1e-9)
