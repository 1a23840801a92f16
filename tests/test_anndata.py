"""AnnData files in and out, times in words, raw counts, scaling and the way back."""

import sys
from dataclasses import replace

import anndata
import numpy as np
import pandas as pd
import pytest
import scipy.sparse as sp
from numpy.testing import assert_allclose

import ensembles
from ensembles.snapshots.stages import stage_times

DAYS = np.repeat(["day 0", "day 2", "day 10"], [30, 40, 35])


def made(seed=0, sparse=False, **columns):
    rng = np.random.default_rng(seed)
    n = DAYS.size
    counts = rng.poisson(3.0, (n, 25)).astype(float)
    x = np.log1p(counts)
    obs = pd.DataFrame(
        {
            "stage": pd.Categorical(DAYS),
            "hours": np.repeat([0.0, 48.0, 240.0], [30, 40, 35]),
            "type": pd.Categorical(rng.choice(["stem", "bone"], n)),
            "growth": rng.normal(0.1, 0.02, n),
            "batch": rng.choice(["b1", "b2"], n),
            **columns,
        },
        index=[f"cell{i}" for i in range(n)],
    )
    cells = anndata.AnnData(
        X=sp.csr_matrix(x) if sparse else x,
        obs=obs.astype({"batch": object}),
        var=pd.DataFrame(index=[f"gene{k}" for k in range(25)]),
        obsm={"X_pca": rng.normal(size=(n, 4)), "counts": rng.poisson(np.exp(rng.normal(3, 2, (n, 3))))},
    )
    order = rng.permutation(n)
    return cells[order].copy()


@pytest.fixture
def file(tmp_path):
    path = tmp_path / "cells.h5ad"
    made().write_h5ad(path)
    return path


@pytest.mark.parametrize("sparse", [False, True])
def test_everything_is_read(tmp_path, sparse):
    cells, path = made(sparse=sparse), tmp_path / "cells.h5ad"
    cells.write_h5ad(path)
    series = ensembles.read_snapshots(
        path, time="stage", position="X_pca", label="type", features=["growth", "batch", "gene7"]
    )
    assert series.times.tolist() == [0.0, 2.0, 10.0] and series.time_unit == "d"
    assert series.position_names == ("PCA1", "PCA2", "PCA3", "PCA4")
    dense = cells.X.toarray() if sparse else cells.X
    for k, day in enumerate(["day 0", "day 2", "day 10"]):
        rows = np.flatnonzero(cells.obs["stage"] == day)
        assert (series.rows[k] == rows).all()
        assert_allclose(series.clouds[k], cells.obsm["X_pca"][rows], rtol=0)
        assert_allclose(series.features["gene7"][k], dense[rows, 7], rtol=0)
        assert (series.features["batch"][k] == cells.obs["batch"].iloc[rows]).all()
        assert (series.labels[k] == cells.obs["type"].iloc[rows]).all()
    numbers = ensembles.read_snapshots(path, time="hours", position=["X_pca"], units={"time": "h"})
    assert numbers.times.tolist() == [0.0, 48.0, 240.0] and numbers.time_unit == "h"


def test_only_what_is_named_is_read(tmp_path, monkeypatch):
    cells, path = made(sparse=True), tmp_path / "cells.h5ad"
    cells.write_h5ad(path)
    import anndata.io

    read, seen = anndata.io.read_elem, []
    monkeypatch.setattr(anndata.io, "read_elem", lambda element: (seen.append(element.name), read(element))[1])
    ensembles.read_snapshots(path, time="hours", position="X_pca", features=["gene3"])
    assert set(seen) == {"/obs/_index", "/obs/hours", "/obsm/X_pca", "/var/_index"}


@pytest.mark.parametrize("sparse", [False, True])
def test_components_made_here(tmp_path, sparse):
    from sklearn.decomposition import PCA

    cells, path = made(sparse=sparse), tmp_path / "cells.h5ad"
    cells.write_h5ad(path)
    series = ensembles.read_snapshots(path, time="stage", position="pca:3")
    dense = cells.X.toarray() if sparse else cells.X
    expected = np.abs(PCA(3, svd_solver="full").fit_transform(dense))
    found = np.empty_like(expected)
    for rows, cloud in zip(series.rows, series.clouds):
        found[rows] = np.abs(cloud)
    assert_allclose(found, expected, rtol=1e-6, atol=1e-8)


@pytest.mark.parametrize(
    ("texts", "numbers", "unit"),
    [
        (["day 0", "day 2"], [0, 2], "d"),
        (["0h", "72h"], [0, 72], "h"),
        (["E8.5", "E9"], [8.5, 9], "d"),
        (["D_3", "d-3"], [3, -3], "d"),
        (["1.5", "2"], [1.5, 2], ""),
        (["12 hpf", "24hpf"], [12, 24], "h"),
    ],
)
def test_times_in_words(texts, numbers, unit):
    if texts == ["D_3", "d-3"]:
        numbers = [3, 3]  # a dash after a word joins, it is no minus
    found, word = stage_times(np.array(texts, dtype=object), "stage")
    assert found.tolist() == numbers and word == unit


@pytest.mark.parametrize(
    ("texts", "message"),
    [
        (["day 0", "early"], "times must be numbers, or a number with a unit; column 'stage', cell 1 holds 'early'"),
        (["day 0", "stage 2"], "cell 1 holds 'stage 2'"),
        (["day 2 h", "day 1"], "cell 0 holds 'day 2 h'"),
        (["24h", "day 2"], "times must have one unit; column 'stage' holds '24h' and 'day 2'; convert them to one"),
        (["1", "day 2"], "times must have one unit; column 'stage' holds '1' and 'day 2'"),
    ],
)
def test_times_in_words_that_are_refused(texts, message):
    with pytest.raises(ensembles.InputError, match=message):
        stage_times(np.array(texts, dtype=object), "stage")


def test_own_files_lose_nothing(tmp_path):
    rng = np.random.default_rng(1)
    series = ensembles.SnapshotSeries.from_arrays(
        [0, 1.5],
        [rng.normal(size=(5, 2)), rng.normal(size=(4, 2))],
        [None, [1.0, 2.0, 3.0, 0.5]],
        labels=[["a", "b", "", "a", "c"], list("abcd")],
        features={"g": [np.arange(5), np.arange(4)], "t": [list("xyzxy"), list("xyzz")], "flag": [[True] * 5, [False] * 4],
                  "gap": [[0.0, np.nan, 1, 2, 3], [1.0] * 4]},
        units={"time": "d", "length": "µm"},
    ).with_growth(ensembles.Growth("g", uncertainty=0.1))  # fmt: skip
    path = tmp_path / "series.h5ad"
    ensembles.write_snapshots(series, path)
    again = ensembles.read_snapshots(path)
    assert again.fingerprint() == series.fingerprint()
    assert (again.growth, again.time_unit, again.length_unit) == (series.growth, "d", "µm")
    assert again.position_names == series.position_names
    for k in (0, 1):
        assert (again.labels[k] == series.labels[k]).all() and (again.rows[k] == series.rows[k]).all()
        for name, values in series.features.items():
            assert again.features[name][k].dtype == values[k].dtype
            np.testing.assert_array_equal(again.features[name][k], values[k])
    assert not list(tmp_path.glob("*tmp*"))


def test_results_go_back_and_nothing_is_lost(tmp_path, file):
    cells = anndata.read_h5ad(file)
    series = ensembles.read_snapshots(file, time="stage", position="X_pca", label="type", features=["growth"])
    bridge = ensembles.fit_bridge(
        series.with_growth(ensembles.Growth("growth", uncertainty=0.1)), ensembles.Brownian(0.2)
    )
    before = cells.copy()
    marked = ensembles.annotate_cells(bridge, cells)
    ensembles.save_cells(marked, tmp_path / "out.h5ad")
    again = anndata.read_h5ad(tmp_path / "out.h5ad")
    for name in before.obs:
        assert (again.obs[name] == before.obs[name]).all()
    assert_allclose(again.X, before.X, rtol=0)
    assert_allclose(again.obsm["X_pca"], before.obsm["X_pca"], rtol=0)
    assert list(cells.obs) == list(before.obs) and not list(cells.uns)
    table = ensembles.descendants(bridge)
    assert again.uns["ensembles"]["descendant_labels"].tolist() == list(table.columns)
    assert_allclose(again.obsm["ensembles_descendants"][series.rows[0]], table.to_numpy(), rtol=0)
    assert_allclose(again.obsm["ensembles_ancestors"][series.rows[2]], ensembles.ancestors(bridge).to_numpy(), rtol=0)
    implied = ensembles.implied_growth(bridge)
    assert_allclose(
        again.obs["ensembles_implied_growth"].to_numpy()[series.rows[1]], implied[implied["gap"] == 1]["implied"]
    )
    assert again.obs["ensembles_implied_growth"].isna().sum() == 35
    assert set(again.uns["ensembles"]["flows"]["gap"]) == {0, 1}
    with pytest.raises(ensembles.InputError, match="not those of the bridge; 95 of 105 names are missing, the first"):
        ensembles.annotate_cells(bridge, cells[:10].copy())
    # Cells are found by name, in whatever order they stand.
    order = np.random.default_rng(1).permutation(cells.n_obs)
    shuffled = ensembles.annotate_cells(bridge, cells[order].copy())
    assert shuffled.obs_names.tolist() == cells.obs_names[order].tolist()
    assert_allclose(shuffled.obsm["ensembles_descendants"], marked.obsm["ensembles_descendants"][order], rtol=0)
    assert (shuffled.obs["ensembles_fate"].to_numpy() == marked.obs["ensembles_fate"].to_numpy()[order]).all()
    # Without names rows count, and times must agree with them.
    nameless = replace(bridge, series=replace(bridge.series, names=None))
    assert_allclose(ensembles.annotate_cells(nameless, cells).obsm["ensembles_ancestors"],
                    marked.obsm["ensembles_ancestors"], rtol=0)  # fmt: skip
    with pytest.raises(
        ensembles.InputError, match="row [0-9]+ has stage = .* where the series has .* in the same order"
    ):
        ensembles.annotate_cells(nameless, cells[::-1].copy())
    with pytest.raises(ensembles.InputError, match="the cells are not those of the bridge; there are 10 where"):
        ensembles.annotate_cells(nameless, cells[:10].copy())
    with pytest.raises(ensembles.InputError, match=r"AnnData is saved as .h5ad; the name is 'x.csv'"):
        ensembles.save_cells(marked, tmp_path / "x.csv")


def test_refusals(tmp_path, file):
    read = ensembles.read_snapshots
    cases = [
        ({"time": "stages", "position": "X_pca"}, r"missing column in .obs .* 'stages' \(did you mean 'stage'.* hours"),
        ({"time": "stage", "position": "X_umap"}, r"missing key in .obsm .* no 'X_umap'.*the keys are: X_pca, counts"),
        (
            {"time": "stage", "position": "counts"},
            "raw counts where coordinates are expected; 'counts' .* whole numbers",
        ),
        ({"time": "stage", "position": "pca:many"}, "components to be made are named pca: and a number"),
        ({"time": "stage", "position": "pca:25"}, "too many components; 'pca:25' of a matrix of 105 cells by 25 genes"),
        ({"time": "stage", "position": ["X_pca", "counts"]}, "coordinates of an .h5ad file are one key of .obsm"),
        ({"time": "stage", "position": "X_pca", "features": ["gene99"]}, "missing feature in .* there is no 'gene99'"),
        ({"time": "stage", "position": "X_pca", "label": "kind"}, "missing column in .obs .* there is no 'kind'"),
        (
            {"time": "stage", "position": "X_pca", "units": {"time": "h"}},
            "the unit of time disagrees; column 'stage' says 'd'",
        ),
        ({"time": "type", "position": "X_pca"}, "times must be numbers, or a number with a unit; column 'type'"),
        ({"time": "stage", "position": None}, r"time and position must be named; .* the keys X_pca, counts in .obsm"),
    ]
    for arguments, message in cases:
        with pytest.raises(ensembles.InputError, match=message):
            read(file, **arguments)
    doubled = made()
    doubled.obs_names = ["same" if i < 3 else f"c{i}" for i in range(doubled.n_obs)]
    doubled.write_h5ad(tmp_path / "doubled.h5ad")
    with pytest.raises(
        ensembles.InputError, match=r"cell names must be unique; 'same' names 3 cells .* obs_names_make_unique"
    ):
        read(tmp_path / "doubled.h5ad", time="stage", position="X_pca")
    raw = made()
    raw.X = np.random.default_rng(0).poisson(np.exp(np.random.default_rng(1).normal(2, 2, raw.shape))).astype(float)
    raw.write_h5ad(tmp_path / "raw.h5ad")
    with pytest.raises(
        ensembles.InputError, match="raw counts where coordinates are expected; .X of .* take logarithms"
    ):
        read(tmp_path / "raw.h5ad", time="stage", position="pca:3")
    (tmp_path / "broken.h5ad").write_bytes(file.read_bytes()[:4000])
    with pytest.raises(ensembles.InputError, match="the file is not a whole .h5ad file"):
        read(tmp_path / "broken.h5ad", time="stage", position="X_pca")


def test_without_anndata_the_message_gives_the_command(file, monkeypatch):
    monkeypatch.setitem(sys.modules, "anndata", None)
    with pytest.raises(ensembles.InputError, match=r'not installed, .* pip install "ensembles\[cells\]"'):
        ensembles.read_snapshots(file, time="stage", position="X_pca")


def cloudy(seed=0):
    rng = np.random.default_rng(seed)
    mix = rng.normal(size=(4, 4))
    return ensembles.SnapshotSeries.from_arrays(
        [0, 1, 2], [3.0 + k + rng.normal(size=(n, 4)) @ mix for k, n in enumerate((40, 50, 30))],
        units={"length": "µm"},
    )  # fmt: skip


@pytest.mark.parametrize(("kind", "components"), [("none", None), ("standardise", None), ("pca", 4), ("whiten", None)])
def test_scaling_goes_back(kind, components):
    series = cloudy()
    scaling = ensembles.fit_scaling(series, kind, components=components)
    scaled = scaling.scale(series)
    for cloud, original in zip(scaled.clouds, series.clouds):
        assert_allclose(scaling.restore(cloud), original, rtol=1e-10)
    points = np.concatenate(scaled.clouds)
    if kind in ("standardise", "whiten"):
        assert_allclose(points.mean(axis=0), 0.0, atol=1e-12)
        assert_allclose(points.std(axis=0), 1.0, rtol=2e-2)
    if kind == "whiten":
        assert_allclose(np.cov(points.T), np.eye(4), atol=1e-10)
    assert scaled.length_unit == ("µm" if kind in ("none", "pca") else "s.d.")
    again = ensembles.Scaling.from_mapping(scaling.to_mapping())
    assert_allclose(again.apply(series.clouds[0]), scaled.clouds[0], rtol=0)


def test_scaling_keeps_what_it_says_and_fits_where_told():
    series = cloudy()
    scaling = ensembles.fit_scaling(series, "pca", components=2)
    points = np.concatenate(series.clouds)
    left = ((scaling.restore(scaling.apply(points)) - points) ** 2).sum() / ((points - points.mean(axis=0)) ** 2).sum()
    assert_allclose(1.0 - left, scaling.kept, rtol=1e-10)
    first = ensembles.fit_scaling(series, "standardise", snapshots=[0])
    assert_allclose(first.apply(series.clouds[0]).mean(axis=0), 0.0, atol=1e-12)
    assert np.abs(first.apply(series.clouds[2]).mean(axis=0)).max() > 0.1


def test_scaling_refusals():
    series = cloudy()
    fit = ensembles.fit_scaling
    flat = ensembles.SnapshotSeries.from_arrays([0, 1], [[[0.0, 1.0], [1.0, 1.0]], [[2.0, 1.0], [4.0, 1.0]]])
    rng = np.random.default_rng(0)
    counts = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.poisson(rng.gamma(0.3, 100, (20, 3))) for _ in range(2)])
    cases = [
        (lambda: fit(series, "standardize"), r"unknown kind of scaling; 'standardize' \(did you mean 'standardise'"),
        (lambda: fit(series, "standardise", components=2), "components belong to pca and whiten; components = 2"),
        (lambda: fit(series, "pca", components=9), r"too many components; 9 of 4 coordinate\(s\)"),
        (lambda: fit(series, "pca", snapshots=[3]), "no such snapshot to fit the scaling on; 3 of 3"),
        (lambda: fit(flat, "standardise"), "a coordinate does not vary; 'y' is 1 throughout"),
        (lambda: fit(flat, "whiten"), "a component does not vary; component 2"),
        (lambda: fit(counts, "pca"), "raw counts where coordinates are expected; the positions are whole numbers"),
    ]
    for case, message in cases:
        with pytest.raises(ensembles.InputError, match=message):
            case()
    assert any("like raw counts" in note for note in counts.notes())
    assert not any("counts" in note for note in series.notes())
