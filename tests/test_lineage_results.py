"""What `solve` writes where a study names labels, growth or scaling, from a table and from an AnnData file."""

import json

import anndata
import numpy as np
import pandas as pd
import pytest
from numpy.testing import assert_allclose
from typer.testing import CliRunner

import ensembles
from ensembles import cli
from ensembles.report.figures.lineage import save_lineage_figures

STUDY = """\
[data]
file = "{file}"
time = "{time}"
position = {position}
label = "kind"
features = ["gene", "net"]
{more}
[prior]
kind = "brownian"
diffusion = {diffusion}

[output]
paths = 5
path_times = 4
intermediate = 2
repeats = {repeats}
"""


def table(seed=0):
    rng = np.random.default_rng(seed)
    parts = []
    for k, n in enumerate((30, 35, 25)):
        x = rng.normal(0.5 * k, 1.0, (n, 3))
        kind = np.where(x[:, 0] > 0.3 * k, "right", "left") if k else np.full(n, "seed")
        parts.append(pd.DataFrame({"t": float(k), "x": x[:, 0], "y": 10 * x[:, 1], "z": x[:, 2], "kind": kind,
                                   "gene": x[:, 0] + rng.normal(size=n), "net": 0.3 * x[:, 0]}))  # fmt: skip
    return pd.concat(parts, ignore_index=True)


def solved(folder, frame=None, **options):
    frame = table() if frame is None else frame
    settings = {
        "file": "points.csv",
        "time": "t",
        "position": '["x", "y", "z"]',
        "more": "",
        "diffusion": 0.5,
        "repeats": 3,
    }
    settings |= options
    if settings["file"].endswith(".csv"):
        frame.to_csv(folder / "points.csv", index=False)
    (folder / "study.toml").write_text(STUDY.format(**settings), encoding="utf-8")
    found = CliRunner().invoke(cli.app, ["solve", str(folder / "study.toml"), "--out", str(folder / "out"), "--force"])
    return found, folder / "out"


def test_tables_and_pictures_of_a_labelled_study(tmp_path):
    found, out = solved(tmp_path)
    assert found.exit_code == 0, found.stderr
    written = {path.name for path in out.iterdir()}
    assert written >= {"descendants.csv", "ancestors.csv", "descendants_errors.csv", "ancestors_errors.csv", "flows.csv",
                       "trends.csv", "early_features.csv", "flow.png", "trends.png"}  # fmt: skip
    assert not written & {"growth.csv", "cells.h5ad", "scaling.json"}
    bridge = ensembles.load_bridge(out / "bridge.npz")
    descendants = pd.read_csv(out / "descendants.csv")
    assert len(descendants) == 65
    assert_allclose(descendants.loc[:29, "P(right)"], ensembles.descendants(bridge)["right"], rtol=1e-9)
    assert_allclose(descendants[["P(left)", "P(right)"]].sum(axis=1), 1.0)
    summary = json.loads((out / "summary.json").read_text(encoding="utf-8"))
    assert "label 'seed' is seen at t = 0 only" in summary["notes"]
    assert any("shows a cause" in note for note in summary["notes"])
    page = (out / "report.html").read_text(encoding="utf-8")
    labels = pd.read_csv(out / "labels.csv")
    assert labels[["time", "label"]].to_numpy().tolist() == [
        [0.0, "seed"], [1.0, "left"], [1.0, "right"], [2.0, "left"], [2.0, "right"]
    ]  # fmt: skip
    assert_allclose(labels["kept"][1:], 1.0)
    assert "Labels: what was shed, and what was forced" in page and "<td>seed</td>" in page
    assert "flow.png" in page and "descendants_errors.csv" in page and "not observed lineages" in page


def test_growth_and_scaling(tmp_path):
    more = '[growth]\nrate = "net"\nuncertainty = 0.3\nlater = 0.2\n[scaling]\nkind = "standardise"\nfit = [0.0, 1.0]\n'
    found, out = solved(tmp_path, more=more, diffusion=0.3, repeats=0)
    assert found.exit_code == 0, found.stderr
    written = {path.name for path in out.iterdir()}
    assert written >= {"growth.csv", "kept.csv", "masses.csv", "growth.png", "scaling.json"}
    assert "descendants_errors.csv" not in written
    growth = pd.read_csv(out / "growth.csv")
    assert {"given", "implied", "row"} <= set(growth) and len(growth) == 65
    scaling = ensembles.Scaling.from_mapping(json.loads((out / "scaling.json").read_text(encoding="utf-8")))
    frame = table()
    first = frame[frame["t"] < 1.5][["x", "y", "z"]]
    assert_allclose(scaling.centre, first.mean(), rtol=1e-10)
    cautions = json.loads((out / "summary.json").read_text(encoding="utf-8"))["cautions"]
    assert any("birth and death are as the study" in text for text in cautions)


def test_anndata_in_and_out(tmp_path):
    frame = table()
    cells = anndata.AnnData(
        obs=frame[["t", "kind", "net"]]
        .assign(day=[f"day {t:.0f}" for t in frame["t"]])
        .set_index(frame.index.astype(str)),
        X=frame[["gene"]].to_numpy(),
        var=pd.DataFrame(index=["gene"]),
        obsm={"X_pca": frame[["x", "z"]].to_numpy()},
    )
    cells.write_h5ad(tmp_path / "cells.h5ad")
    found, out = solved(tmp_path, file="cells.h5ad", time="day", position='["X_pca"]')
    assert found.exit_code == 0, found.stderr
    marked = anndata.read_h5ad(out / "cells.h5ad")
    assert marked.n_obs == 90
    assert (marked.obs["ensembles_fate"][65:] == frame["kind"][65:].to_numpy()).all()


def test_labels_at_one_time_only_are_said(tmp_path):
    frame = table()
    frame["kind"] = np.where(frame["t"] == 2, frame["kind"], "")
    found, out = solved(tmp_path, frame)
    assert found.exit_code == 0, found.stderr
    assert "labels are missing at all times but one" in (out / "summary.json").read_text(encoding="utf-8")
    assert not (out / "descendants.csv").exists()
    frame = table()
    frame["kind"] = np.where(frame["t"] == 1, "", frame["kind"])
    found, out = solved(tmp_path, frame)
    assert found.exit_code == 0, found.stderr
    assert (out / "descendants.csv").exists() and not (out / "flow.png").exists()


@pytest.mark.parametrize(
    ("more", "message"),
    [
        ('[growth]\nrate = "nett"\n', "there is no column 'nett' (did you mean 'net'"),
        ("[growth]\nrate = 900.0\n", "growth makes the mass of a snapshot overflow"),
        ("[growth]\nuncertainty = -1.0\n", "growth.uncertainty"),
        ("[growth]\nspeed = 1.0\n", "unknown key"),
        ('[scaling]\nkind = "pca"\ncomponents = 7\n', "too many components; 7 of 3 coordinate(s)"),
        ('[scaling]\nkind = "pca"\nfit = [5.0]\n', "no snapshot to fit the scaling on; scaling.fit holds 5"),
        ('[scaling]\nkind = "log"\n', "scaling.kind"),
    ],
)
def test_bad_tables_are_refused(tmp_path, more, message):
    found, out = solved(tmp_path, more=more)
    assert found.exit_code == 2
    assert message in found.stderr
    assert not out.exists()


def test_pictures_with_many_labels_and_features(tmp_path):
    rng = np.random.default_rng(0)
    names = np.array([f"kind {k}" for k in range(11)])
    series = ensembles.SnapshotSeries.from_arrays(
        [0, 1], [rng.normal(size=(60, 2)) for _ in range(2)], labels=[rng.choice(names, 60) for _ in range(2)],
        features={f"g{k}": [rng.normal(size=60) for _ in range(2)] for k in range(8)},
    )  # fmt: skip
    bridge = ensembles.fit_bridge(series.with_growth(ensembles.Growth(0.1, uncertainty=0.5)), ensembles.Brownian(0.5))
    trends = ensembles.feature_trends(bridge, paths=50, times=[0.0, 0.5, 1.0])
    saved = save_lineage_figures(
        tmp_path,
        series,
        flows=ensembles.label_flows(bridge),
        trends=trends,
        growth=ensembles.implied_growth(bridge),
        dpi=40,
    )
    captions = dict(saved)
    assert "The 4 rarest labels are drawn as one" in captions["flow.png"]
    assert "2 further features" in captions["trends.png"] and "3 further labels" in captions["trends.png"]
    assert "the labels, since one rate was given" in captions["growth.png"]
    assert all((tmp_path / name).stat().st_size > 1000 for name in captions)
