"""Small versions of scripts/smooth_ends: the bar of every part, at sizes that take seconds."""

import numpy as np
import pytest
import smooth_ends_shapes as shapes
import smooth_ends_study as study
from exact_pairs import cbw_uvp, exact_pair

import ensembles


@pytest.mark.parametrize(("dimension", "epsilon"), [(2, 1.0), (16, 0.1), (16, 10.0)])
def test_exact_pairs(dimension, epsilon):
    """With 8,000 points the error may be 12.5 times what 100,000 are held to, half of the published best (see the study)."""
    cell = study.run_cell(dimension, epsilon, 0, 8000)
    print(study.HEADING, cell.text(), sep="\n")
    assert cell.mixture < 12.5 * 0.5 * study.published(dimension, epsilon)
    assert cell.mixture < 0.25 * cell.atoms  # fitted to a quarter as many
    assert 3 <= cell.components <= 8
    assert 90.0 < cell.mean < 110.0
    assert cell.floor < 2.0


def test_full_covariances_are_worth_it_where_the_truth_has_them():
    pair = exact_pair(4, 1.0, 0, "full")
    rng = np.random.default_rng(0)
    series, starts = pair.series(3000, rng), pair.starts(200, rng)
    truth = pair.potential.given(pair.transition, starts)
    variance = float(series.clouds[1].var(axis=0).sum())
    scores = []
    for kind in ("diagonal", "low-rank", "full"):
        ends = ensembles.MixtureEnds(covariance=kind, rank=2, smooth_start=False)
        bridge = ensembles.fit_bridge(series, pair.prior, ends=ends, components=5)
        scores.append(cbw_uvp(bridge.conditional_end(starts), truth, variance))
    print("cBW-UVP, percent: diagonal, low-rank, full:", np.round(scores, 3))
    assert max(scores[1:]) < 0.8 * scores[0]


def test_error_falls_as_one_over_n():
    counts = [500, 2000, 8000]
    scores = study.efficiency(counts, 2, dimension=8)
    means = {kind: values.mean(axis=1) for kind, values in scores.items()}
    slopes = {kind: study.slope(np.array(counts, dtype=float), values) for kind, values in means.items()}
    print(means, slopes)
    # Two data sets at three sizes: each mean is known to some 30 percent, the slope to 0.2.
    assert -1.4 < slopes["mixture"] < -0.7
    assert (means["mixture"] < means["kernel"]).all()
    assert (means["mixture"][:2] < 0.6 * means["atoms"][:2]).all()


@pytest.mark.parametrize(("name", "count"), [("moons", 400), ("ring", 400), ("swirl", 400), ("tree", 400)])
def test_shapes_that_are_no_mixture(name, count):
    scores, _ = shapes.score_shape(shapes.SHAPES[name][0], count, 0.3)
    print(name, {kind: np.round(values, 4).tolist() for kind, values in scores.items()})
    mixture, gaussian, atoms = scores["mixture"], scores["one Gaussian"], scores["atoms"]
    assert mixture[1] > gaussian[1] + 1.0  # held-out log-density at the end; atoms have none
    assert mixture[0] > atoms[0] - 0.02
    assert mixture[0] > gaussian[0] + 0.1
    if name == "tree":  # 20 dimensions: atoms collapse, and round kernels are no match
        assert mixture[0] > atoms[0] + 1.0
        assert mixture[1] > scores["kernel"][1] + 1.0
    else:
        assert max(mixture[3], scores["kernel"][3]) < gaussian[3]


def test_held_out_cells():
    rows = shapes.held_out_cells(5, 0.1, draws=300)
    print({name: np.round(values, 2).tolist() for name, values in rows.items()})
    # Every bridge is nearer to 24 h than the earlier cloud, and few cells are left to the particles by the automatic choice.
    for kind in shapes.KINDS:
        assert rows[kind][0] < 0.5 * rows["earlier cloud"][0]
        assert rows[kind][1] < rows["earlier cloud"][1]
    assert "auto: atoms" in rows


def test_evaluation_runs_at_any_size():
    assert min(study.evaluation_seconds(500, 5, 4)) > 0.0
