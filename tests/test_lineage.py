"""Descendants, ancestors, flows, features along time: against the dense coupling, on exact cases, and refusals."""

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy import stats

import ensembles
from ensembles.bridges.histories import draw_histories
from ensembles.lineage.chain import ancestor_weights
from ensembles.lineage.fates import flow_matrix
from ensembles.lineage.labels import UNLABELLED, label_notes


def made_bridge(seed=0, counts=(40, 55, 30), zero=False, tolerance=1e-10):
    rng = np.random.default_rng(seed)
    clouds = [rng.normal(0.5 * k, 1.0, (n, 3)) for k, n in enumerate(counts)]
    weights = [rng.uniform(0.2, 1.0, n) for n in counts]
    if zero:
        for w in weights:
            w[:2] = 0.0
    labels = [rng.choice(["a", "b", "c", ""][: k + 2], n).tolist() for k, n in enumerate(counts)]
    features = {"gene": [rng.normal(k, 1.0, n) for k, n in enumerate(counts)], "name": [["x"] * n for n in counts]}
    series = ensembles.SnapshotSeries.from_arrays([0.0, 1.0, 3.0], clouds, weights, labels=labels, features=features)
    return ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.3), tolerance=tolerance)


@pytest.fixture(scope="module", params=[False, True], ids=["weights", "zero weights"])
def bridge(request):
    return made_bridge(zero=request.param)


def conditional(bridge, gap, backward=False):
    """The conditional table from the streamed parts, dense: also for particles of weight 0, as a limit."""
    coupling = bridge.coupling(gap)
    u, v = coupling.kernel.sources, coupling.kernel.targets
    logs = -0.5 * ((u[:, None] - v[None]) ** 2).sum(axis=2)
    logs = logs + (coupling.log_p[:, None] if backward else coupling.log_q[None])
    table = np.exp(logs - logs.max(axis=0 if backward else 1, keepdims=True))
    return (table / table.sum(axis=0)).T if backward else table / table.sum(axis=1, keepdims=True)


def indicators(labels):
    names = np.unique(labels)
    return np.array(labels)[:, None] == names


def test_descendants_are_the_dense_sums(bridge):
    found = ensembles.descendants(bridge, 0, 1)
    expected = conditional(bridge, 0) @ indicators(bridge.series.labels[1])
    assert_allclose(found.to_numpy(), expected, atol=1e-12)
    assert_allclose(found.sum(axis=1), 1.0, rtol=1e-14)
    assert list(found.columns) == ["a", "b", "c"]


def test_ancestors_are_the_dense_sums(bridge):
    found = ensembles.ancestors(bridge, 1, 2)
    expected = conditional(bridge, 1, backward=True) @ indicators(bridge.series.labels[1])
    assert_allclose(found.to_numpy(), expected, atol=1e-12)
    assert len(found) == 30


def test_two_gaps_are_the_composition_of_two(bridge):
    both = ensembles.descendants(bridge, 0, 2)
    second = ensembles.descendants(bridge, 1, 2)
    assert_allclose(both.to_numpy(), conditional(bridge, 0) @ second.to_numpy(), atol=1e-12)
    back = ensembles.ancestors(bridge)
    first = ensembles.ancestors(bridge, 0, 1)
    assert_allclose(back.to_numpy(), conditional(bridge, 1, backward=True) @ first.to_numpy(), atol=1e-12)
    assert UNLABELLED in both.columns


def test_both_directions_tell_of_one_joint_law():
    # P(label at start, label at end) from the earlier particles and from the later ones; chains meet to the tolerance.
    bridge = made_bridge()
    series = bridge.series
    early, late = indicators(series.labels[0]), indicators(series.labels[2])
    forward = (early * series.weights[0][:, None]).T @ ensembles.descendants(bridge).to_numpy()
    backward = ensembles.ancestors(bridge).to_numpy().T @ (late * series.weights[2][:, None])
    assert_allclose(forward, backward, atol=1e-8)


def test_commitment():
    bridge = made_bridge()
    table = ensembles.descendants(bridge)
    found = ensembles.commitment(table)
    assert_allclose(found["entropy"], stats.entropy(table.to_numpy(), axis=1), atol=1e-12)
    assert (found["probability"] == table.max(axis=1)).all()
    assert found["effective_labels"].between(1.0 - 1e-12, table.shape[1] + 1e-12).all()


def test_flows_sum_the_coupling():
    bridge = made_bridge()
    flows = ensembles.label_flows(bridge)
    assert_allclose(flows.groupby("gap")["mass"].sum(), 1.0, rtol=1e-12)
    assert_allclose(flows.groupby(["gap", "earlier_label"])["probability"].sum(), 1.0, rtol=1e-12)
    assert_allclose(flows.groupby(["gap", "later_label"])["origin"].sum(), 1.0, rtol=1e-12)
    mass, _, _ = flow_matrix(bridge, 1)
    early, late = (indicators(bridge.series.labels[k]).astype(float) for k in (1, 2))
    assert_allclose(mass, early.T @ bridge.coupling(1).matrix() @ late, atol=1e-9)


def test_histories_have_the_weights_of_the_ancestors():
    bridge = made_bridge()
    weights = np.zeros((30, 1))
    weights[:7] = 1.0 / 7.0
    expected = ancestor_weights(bridge, weights, 0, 2)
    rng = np.random.default_rng(1)
    count = 40_000
    members = draw_histories(bridge, rng.integers(7, size=count), 0, 2, rng)
    for k, table in enumerate(expected):
        seen = np.bincount(members[:, k], minlength=len(table)) / count
        error = np.sqrt(np.maximum(table[:, 0] * (1 - table[:, 0]), 1e-9) / count)
        assert (np.abs(seen - table[:, 0]) < 6 * error).all(), k
    # Negative control: uniform ancestors would not pass.
    assert (np.abs(1 / 40 - expected[0][:, 0]) > 6 * np.sqrt(1 / 40 / count)).any()


def test_trends_are_exact_at_snapshots_and_linear_between():
    bridge = made_bridge()
    series = bridge.series
    found = ensembles.feature_trends(bridge, times=[0.0, 1.0, 2.0, 3.0], paths=4000)
    assert set(found["feature"]) == {"gene"}
    chosen = np.array(series.labels[2]) == "a"
    weights = (series.weights[2] * chosen)[:, None]
    expected = [w[:, 0] @ series.features["gene"][k] for k, w in enumerate(ancestor_weights(bridge, weights, 0, 2))]
    mine = found[found["label"] == "a"]
    assert_allclose(mine["mean"].to_numpy()[[0, 1, 3]], expected, atol=1e-12)
    assert_allclose(mine["mean"].to_numpy()[2], 0.5 * (expected[1] + expected[2]), atol=1e-12)
    assert (mine["lower"] <= mine["median"]).all() and (mine["median"] <= mine["upper"]).all()
    last = np.repeat(series.features["gene"][2][chosen], 1)
    assert last.min() <= mine["lower"].iloc[-1] and mine["upper"].iloc[-1] <= last.max()


def test_early_features_find_what_was_planted():
    rng = np.random.default_rng(4)
    x = rng.normal(size=200)
    late = rng.normal(size=200)
    features = {"planted": [x + 0.1 * rng.normal(size=200), late]}
    features |= {f"idle_{k}": [rng.normal(size=200), late] for k in range(20)}
    series = ensembles.SnapshotSeries.from_arrays(
        [0, 1], [x, late], labels=[["early"] * 200, np.where(late > 0, "up", "down")], features=features
    )
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.05))
    found = ensembles.early_features(bridge)
    assert set(found["feature"][:2]) == {"planted"}
    planted = found[(found["feature"] == "planted") & (found["label"] == "up")].iloc[0]
    assert planted["correlation"] > 0.9 and planted["effect"] > 0.8
    assert (found["q_value"] >= found["p_value"]).all()
    # Benjamini-Hochberg by its definition: the smallest p n / rank among the rows at least as unlikely.
    p = np.sort(found["p_value"].to_numpy())
    expected = np.minimum.accumulate((p * p.size / np.arange(1, p.size + 1))[::-1])[::-1]
    assert_allclose(np.sort(found["q_value"]), np.minimum(expected, 1.0), rtol=1e-12)
    assert "p-values" in found.attrs["caveat"]


def small(labels, features=None, times=(0, 1)):
    series = ensembles.SnapshotSeries.from_arrays(
        list(times), [[0.0, 1.0], [0.5, 2.0]], labels=labels, features=features
    )
    return ensembles.fit_bridge(series, ensembles.Brownian(diffusion=1.0))


def test_refusals():
    with pytest.raises(ensembles.InputError, match="the series has no labels; labels is None; read it with label="):
        ensembles.descendants(small(None))
    missing = small([["a", "b"], ["", ""]])
    with pytest.raises(
        ensembles.InputError, match=r"labels are missing at one time; all 2 particle\(s\) of snapshot t = 1"
    ):
        ensembles.descendants(missing)
    with pytest.raises(ensembles.InputError, match="labels are missing at one time"):
        ensembles.label_flows(missing)
    assert ensembles.ancestors(missing).shape == (2, 2)
    labelled = small([["a", "b"], ["a", "c"]], {"gene": [[1.0, np.nan], [1.0, 2.0]], "word": [["x", "y"], ["x", "y"]]})
    with pytest.raises(ensembles.InputError, match="no such snapshot; end = 2 of a series of 2; use -2 to 1"):
        ensembles.descendants(labelled, 0, 2)
    with pytest.raises(ensembles.InputError, match="start must come before end; start = 1 is snapshot 1"):
        ensembles.ancestors(labelled, 1, 0)
    with pytest.raises(ensembles.InputError, match=r"unknown feature of the series; 'genes' \(did you mean 'gene'"):
        ensembles.feature_trends(labelled, ["genes"])
    with pytest.raises(ensembles.InputError, match=r"gene must be finite; gene\[1\] = nan in snapshot t = 0"):
        ensembles.feature_trends(labelled, ["gene"])
    with pytest.raises(
        ensembles.InputError, match="a feature along time must be numbers; 'word' holds texts such as 'x'"
    ):
        ensembles.feature_trends(labelled, "word")
    with pytest.raises(ensembles.InputError, match="there is no feature to follow; the series has"):
        ensembles.feature_trends(labelled)
    with pytest.raises(ensembles.InputError, match="times lie outside the histories; they run from 0 to 4"):
        ensembles.feature_trends(small([["a", "b"], ["a", "c"]], {"gene": [[1.0, 2.0], [1.0, 2.0]]}), times=[0.0, 4.0])
    with pytest.raises(ensembles.InputError, match="too few particles for a rank correlation; 2 at t = 0 where 8"):
        ensembles.early_features(labelled, ["gene"])
    smooth = made_bridge().series
    bridge = ensembles.fit_bridge(smooth, ensembles.Brownian(diffusion=0.3), ends="mixture", components=1)
    with pytest.raises(ensembles.InputError, match="smooth ends do not couple particles"):
        ensembles.descendants(bridge)


def test_labels_seen_once_are_said():
    assert label_notes(small([["a", "b"], ["a", "c"]]).series) == (
        "label 'b' is seen at t = 0 only",
        "label 'c' is seen at t = 1 only",
    )


def test_lineage_in_a_box():
    rng = np.random.default_rng(2)
    clouds = [rng.random((n, 2)) for n in (12, 15)]
    labels = [["a"] * 6 + ["b"] * 6, ["c"] * 5 + ["d"] * 10]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], clouds, labels=labels)
    box = ensembles.Box([0.0, 0.0], [1.0, 1.0])
    bridge = ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.05, box=box))
    table = bridge.coupling(0).matrix()
    expected = (table / table.sum(axis=0)).T @ indicators(labels[0])
    assert_allclose(ensembles.ancestors(bridge).to_numpy(), expected, rtol=1e-12)
    members = draw_histories(bridge, np.zeros(20_000, dtype=int), 0, 1, rng)[:, 0]
    share = table[:, 0] / table[:, 0].sum()
    seen = np.bincount(members, minlength=12) / 20_000
    assert (np.abs(seen - share) < 6 * np.sqrt(share / 20_000) + 1e-12).all()
