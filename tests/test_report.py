"""The report: tables against the bridge they show, every picture for every kind of series, the page."""

import json
import re
import warnings
from html.parser import HTMLParser

import numpy as np
import pytest
from numpy.testing import assert_allclose

import ensembles
from ensembles import SolverOptions
from ensembles.report import tables
from ensembles.report.figures import FIGURES, save_figures
from ensembles.report.figures.coupling import effective_targets, label_flow
from ensembles.report.figures.scene import Scene
from ensembles.report.figures.style import quantity
from ensembles.report.page import report_html, write_page
from ensembles.report.wording import CAUTIONS, gap_sentence, intermediate_times, time_text, warning_sentences

PNG = b"\x89PNG\r\n\x1a\n"
UNITS = {"time": "h", "length": "µm"}


def cloud_series(dimension, counts, *, labels=False, units=None, weights=False, names=None, seed=0):
    rng = np.random.default_rng(seed)
    clouds = [rng.normal(size=(n, dimension)) + 0.8 * k for k, n in enumerate(counts)]
    kinds = np.array(["stem", "left", "right", ""])
    return ensembles.SnapshotSeries.from_arrays(
        np.arange(len(counts)) * 1.5,
        clouds,
        [rng.uniform(0.2, 1.0, n) * (np.arange(n) != 1) for n in counts] if weights else None,
        labels=[kinds[rng.integers(0, min(1 + 2 * k, 4), n)] for k, n in enumerate(counts)] if labels else None,
        units=units,
        position_names=names,
    )


def fitted(series, diffusion=0.4):
    return ensembles.fit_bridge(series, ensembles.Brownian(diffusion=diffusion))


@pytest.fixture(scope="module")
def bridge():
    """Three labelled, weighted snapshots in the plane, with units."""
    return fitted(
        cloud_series(2, (12, 15, 9), labels=True, units=UNITS, weights=True, names=["x_um", "y_um"]),
    )


def drawn(bridge, folder, paths=6, dpi=40):
    times = np.union1d(np.linspace(bridge.series.times[0], bridge.series.times[-1], 7), bridge.series.times)
    return save_figures(bridge, folder, paths=bridge.sample_paths(paths, times, rng=1), rng=2, dpi=dpi)


# Tables


def test_links_are_the_largest_entries_of_the_coupling(bridge):
    table = tables.links_table(bridge, 2)
    series = bridge.series
    assert list(table.columns) == [
        "gap", "source_row", "target_row", "probability", "mass", "source_time", "target_time",
        "source_x_um", "source_y_um", "target_x_um", "target_y_um", "source_label", "target_label",
    ]  # fmt: skip
    assert len(table) == 2 * (12 + 15)
    everything = series.to_frame()
    for gap in (0, 1):
        part = table[table["gap"] == gap]
        matrix = bridge.coupling(gap).matrix()
        source, target = part["source_row"] - series.rows[gap][0], part["target_row"] - series.rows[gap + 1][0]
        assert_allclose(part["mass"], matrix[source, target], rtol=1e-9, atol=1e-300)
        heavy = part["mass"] > 0
        given = (matrix / np.maximum(matrix.sum(axis=1), 1e-300)[:, None])[source, target]
        assert_allclose(part["probability"][heavy], given[heavy], rtol=1e-9)
        assert_allclose(part["mass"].to_numpy()[::2], matrix.max(axis=1), rtol=1e-9, atol=1e-300)
        # Row numbers are those of the whole table, not of the snapshot.
        assert_allclose(part["target_y_um"], everything["y_um"][part["target_row"]])
        assert part["source_label"].tolist() == everything["label"][part["source_row"]].tolist()
        assert set(part["target_time"]) == {series.times[gap + 1]}


def test_paths_name_the_particle_at_every_snapshot(bridge):
    paths = bridge.sample_paths(5, [0.0, 0.7, 1.5, 3.0], rng=3)
    table = tables.paths_table(bridge, paths)
    assert list(table.columns) == ["time", "x_um", "y_um", "path", "row"]
    assert table["row"].isna().tolist() == [False, True, False, False] * 5
    at = table[table["row"].notna()]
    everything = bridge.series.to_frame()
    assert_allclose(at[["x_um", "y_um"]], everything.loc[at["row"].astype(int), ["x_um", "y_um"]])
    assert_allclose(table["x_um"].to_numpy().reshape(5, 4), paths.positions[:, :, 0])


def test_paths_that_begin_later_have_no_particle_before(bridge):
    paths = bridge.sample_paths_from(np.zeros((2, 2)), 1.6, [1.6, 3.0], rng=3)
    assert tables.paths_table(bridge, paths)["row"].isna().tolist() == [True, False, True, False]


def test_drift_table_adds_up(bridge):
    times, clouds = [0.5, 2.0], [bridge.sample(t, n, rng=n) for t, n in ((0.5, 4), (2.0, 3))]
    table = tables.drift_table(bridge, times, clouds)
    assert len(table) == 7
    assert "added_drift_x_um [µm/h]" in table.columns
    second = table[table["time"] == 2.0]
    expected = bridge.drift(2.0, clouds[1])
    assert_allclose(second[["drift_x_um [µm/h]", "drift_y_um [µm/h]"]], expected)
    assert_allclose(second[["added_drift_x_um [µm/h]", "added_drift_y_um [µm/h]"]], expected)  # this prior has no drift
    assert_allclose(second["current_velocity_y_um [µm/h]"], bridge.current_velocity(2.0, clouds[1])[:, 1])
    assert_allclose(tables.clouds_table(bridge, times, clouds)["y_um"], np.concatenate(clouds)[:, 1])


def test_added_drift_is_what_the_prior_does_not_do():
    prior = ensembles.OrnsteinUhlenbeck(rate=0.5, centre=1.0, diffusion=0.4)
    bridge = ensembles.fit_bridge(cloud_series(1, (8, 8)), prior)
    points = np.array([[0.0], [3.0]])
    table = tables.drift_table(bridge, [0.5], [points])
    # The prior's drift is -0.5 (x - 1): 0.5 at 0 and -1 at 3.
    assert_allclose(table["drift_x"] - table["added_drift_x"], [0.5, -1.0], atol=1e-12)


def test_moments_table_is_exact(bridge):
    table = tables.moments_table(bridge, [0.0, 0.9, 3.0])
    mean, covariance = bridge.moments(0.9)
    row = table.iloc[1]
    assert_allclose(row[["mean_x_um [µm]", "mean_y_um [µm]"]].astype(float), mean)
    assert_allclose(row["covariance_x_um_y_um [µm²]"], covariance[0, 1])
    assert_allclose(row["variance_y_um [µm²]"], covariance[1, 1])


def test_certificate_table_repeats_the_certificates(bridge):
    table = tables.certificate_table(bridge)
    assert table["outcome"].tolist() == ["converged"] * 2
    assert table["from"].tolist() == [0.0, 1.5]
    assert table["row_error"].tolist() == [solution.certificate.row_error for solution in bridge.solutions]
    assert table["contraction_bound"].tolist() == [s.certificate.contraction_bound for s in bridge.solutions]


def test_a_coordinate_named_like_a_column_is_not_lost():
    bridge = fitted(cloud_series(2, (3, 4), names=["path", "time"]))
    paths = bridge.sample_paths(2, [0.0, 1.5])
    table = tables.paths_table(bridge, paths)
    assert list(table.columns) == ["time", "path", "time_", "path_", "row"]
    assert_allclose(table["time_"], paths.positions[:, :, 1].ravel())


def strict_json(value):
    return json.loads(json.dumps(value, allow_nan=False))


def test_summary_is_json_without_nan_where_a_bound_is_infinite():
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [np.linspace(0, 60, 9), np.linspace(5, 66, 9)])
    bridge = fitted(series, 0.2)
    assert np.isinf(bridge.solutions[0].certificate.potential_error_bound)
    found = strict_json(tables.summary(bridge))
    assert found["gaps"][0]["potential_error_bound"] is None
    assert found["converged"] is True
    assert found["snapshots"][1]["particles"] == 9
    assert found["prior"] == {
        "kind": "brownian", "parameters": {"diffusion": 0.2, "drift": 0.0}, "text": repr(bridge.prior)
    }  # fmt: skip
    assert found["cautions"] == list(CAUTIONS)


def test_a_gap_that_missed_its_tolerance_is_named():
    series = cloud_series(2, (20, 20), units=UNITS)
    with pytest.warns(RuntimeWarning, match="did not converge"):
        options = SolverOptions(sweep_limit=2, allow_unconverged=True)
        bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.05), tolerance=1e-9, options=options)
    assert not bridge.converged
    (sentence,) = warning_sentences(bridge)
    assert sentence.startswith("time = 0 → 1.5 h: not converged")
    assert "allow more sweeps" in sentence
    assert "iteration limit" in gap_sentence(bridge, 0)
    page = report_html(tables.summary(bridge), [])
    assert "Not every gap was solved" in page and "Warnings" in page


def test_words_and_units():
    series = cloud_series(1, (2, 2), units={"time": "s"})
    assert time_text(series, 1.5) == "time = 1.5 s"
    assert quantity(0.5, "µm/s") == "0.5 µm/s"
    assert quantity(0.5, "1/s") == "0.5 per s" and quantity(1.0, "1/d") == "1 per d"
    assert quantity(0.5, "") == "0.5"
    inside = intermediate_times(np.array([0.0, 1.0, 2.0, 9.0]), 5)
    assert len(inside) == 5 and not set(inside) & {0.0, 1.0, 2.0, 9.0}
    # More gaps than times: spread over all of them, not gathered in the first.
    many = intermediate_times(np.arange(31.0), 5)
    assert len(many) == 5 and many[0] < 6 and many[-1] > 24 and np.diff(many).max() <= 7
    assert_allclose(intermediate_times(np.array([0.0, 1.0, 2.0, 99.0]), 2), [2 + 97 / 3, 2 + 194 / 3])


# What the pictures compute


def test_effective_targets_are_the_exponential_of_the_entropy(bridge):
    given = bridge.coupling(0).matrix()[bridge.series.weights[0] > 0]
    given /= given.sum(axis=1, keepdims=True)
    entropy = -np.sum(np.where(given > 0, given * np.log(np.maximum(given, 1e-300)), 0.0), axis=1)
    assert_allclose(effective_targets(bridge, 0)[bridge.series.weights[0] > 0], np.exp(entropy), rtol=1e-9)


def test_label_flow_sums_the_coupling(bridge):
    flow = label_flow(bridge, 1)
    matrix = bridge.coupling(1).matrix()
    early, late = bridge.series.labels[1], bridge.series.labels[2]
    assert flow.names[0] == "stem"  # the first to appear
    for i, name in enumerate(flow.names):
        for j, other in enumerate(flow.names):
            asked = ("" if name == "no label" else name), ("" if other == "no label" else other)
            mass = matrix[np.ix_(early == asked[0], late == asked[1])].sum()
            share = bridge.series.weights[1][early == asked[0]].sum()
            if share > 0:
                assert_allclose(flow.probability[i, j], mass / share, atol=3e-6)  # the solver's tolerance is 1e-6
            else:
                assert np.isnan(flow.probability[i, j])


def test_many_labels_are_gathered():
    rng = np.random.default_rng(5)
    labels = [np.array([f"kind {k}" for k in rng.integers(0, 25, 60)]) for _ in range(2)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], [rng.normal(size=(60, 2))] * 2, labels=labels)
    flow = label_flow(fitted(series), 0)
    assert len(flow.names) == 10 and flow.names[-1] == "others"
    assert_allclose(flow.shares.sum(), 1.0, atol=1e-6)
    assert_allclose(np.nansum(flow.probability, axis=1), 1.0, atol=1e-12)


def test_above_two_dimensions_the_plane_holds_the_largest_spread():
    rng = np.random.default_rng(0)
    stretched = rng.normal(size=(400, 5)) * [0.1, 3.0, 0.1, 0.1, 1.0]
    bridge = fitted(ensembles.SnapshotSeries.from_arrays([0, 1], [stretched, stretched + 0.01]))
    plane = Scene(bridge, None).plane
    assert_allclose(np.abs(plane.axes.T), [[0, 1, 0, 0, 0], [0, 0, 0, 0, 1]], atol=0.05)
    assert_allclose(plane.axes.T @ plane.axes, np.eye(2), atol=1e-12)
    assert plane.names[0] == "principal axis 1, 90 % of variance"  # 9 of 9 + 1 + 3 · 0.01


# Pictures

SERIES = {
    "line": lambda: cloud_series(1, (20, 25), units=UNITS),
    "line of four": lambda: cloud_series(1, (9, 8, 7, 6)),
    "plane": lambda: cloud_series(2, (30, 30)),
    "plane of four, labelled": lambda: cloud_series(2, (12, 13, 14, 15), labels=True, units=UNITS),
    "eight dimensions": lambda: cloud_series(8, (30, 25, 20)),
    "eight dimensions, labelled": lambda: cloud_series(8, (15, 25), labels=True, units={"time": "d"}),
    "one particle on a line": lambda: ensembles.SnapshotSeries.from_arrays([0, 1], [[0.0], [1.0]]),
    "one particle in the plane": lambda: ensembles.SnapshotSeries.from_arrays(
        [0, 1, 2], [[[0, 0]], [[1, 2]], [[1, 1]]]
    ),
    "one particle in three dimensions": lambda: cloud_series(3, (1, 1)),
    "a channel": lambda: ensembles.SnapshotSeries.from_arrays(
        [0, 1], [np.c_[np.linspace(0, 400, 9), np.zeros(9)], np.c_[np.linspace(5, 300, 8), np.ones(8)]]
    ),
    "nine snapshots, weighted": lambda: cloud_series(2, (5,) * 9, weights=True),
    "names with dollars": lambda: cloud_series(2, (5, 6), names=["x_$1$", "$cost"], labels=True),
}


@pytest.mark.parametrize("name", SERIES)
def test_every_picture_draws_every_series(name, tmp_path, caplog):
    bridge = fitted(SERIES[name](), 400.0 if name == "a channel" else 0.4)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        figures = drawn(bridge, tmp_path)
    assert [file for file, _ in figures] == [f"{key}.png" for key in FIGURES]
    assert sorted(path.name for path in tmp_path.iterdir()) == sorted(file for file, _ in figures)
    for file, caption in figures:
        assert (tmp_path / file).read_bytes().startswith(PNG)
        assert caption.endswith(".") and ". " in caption
    assert not caplog.records  # matplotlib logs what it cannot lay out


def test_pictures_are_the_same_for_the_same_seed(bridge, tmp_path):
    folders = [tmp_path / name for name in ("first", "second")]
    for folder in folders:
        folder.mkdir()
        drawn(bridge, folder)
    for name in FIGURES:
        first, second = ((folder / f"{name}.png").read_bytes() for folder in folders)
        assert first == second, name


def test_drawing_changes_no_global_setting(bridge, tmp_path):
    import matplotlib

    before = dict(matplotlib.rcParams)
    drawn(bridge, tmp_path)
    assert dict(matplotlib.rcParams) == before


# The page


class Page(HTMLParser):
    def __init__(self, text):
        super().__init__()
        self.pictures, self.links, self.tags, self.words = [], [], [], []
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        found = dict(attributes)
        self.tags.append(tag)
        if tag == "img":
            self.pictures.append((found["src"], found["alt"]))
        if tag == "a":
            self.links.append(found["href"])

    def handle_data(self, data):
        self.words.append(data)


@pytest.fixture(scope="module")
def written(bridge, tmp_path_factory):
    folder = tmp_path_factory.mktemp("report")
    figures = drawn(bridge, folder)
    (folder / "links.csv").write_text("gap\n")
    summary = tables.summary(bridge) | {"study": {"title": "Beads & <b>bold</b> guesses", "file": "s.toml", "seed": 4}}
    return figures, write_page(folder, summary, figures).read_text(encoding="utf-8")


def test_page_shows_every_picture_with_words(written):
    figures, text = written
    page = Page(text)
    assert [source for source, _ in page.pictures] == [file for file, _ in figures]
    assert all(len(alt) > 20 for _, alt in page.pictures)
    words = " ".join(" ".join(page.words).split())
    for _, caption in figures:
        assert caption.partition(". ")[2] in words
    assert page.links == ["links.csv", "study.toml", "summary.json"]


def test_page_carries_cautions_and_certificates(written, bridge):
    words = " ".join(" ".join(Page(written[1]).words).split())
    for caution in CAUTIONS:
        assert caution in words
    assert "not observed lineages" in words and "clinical" in words
    for gap in range(2):
        assert gap_sentence(bridge, gap) in words


def test_page_escapes_what_comes_from_outside(written):
    text = written[1]
    assert "<title>Beads &amp; &lt;b&gt;bold&lt;/b&gt; guesses</title>" in text
    assert "<b>bold" not in text


def test_page_needs_nothing_from_outside(written):
    page = Page(written[1])
    assert not {"script", "link", "iframe", "object"} & set(page.tags)
    assert not re.search(r"https?://|url\(|@import", written[1])
