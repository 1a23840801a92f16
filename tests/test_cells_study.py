"""Real cells (data/README.md): fates with error bars, genes along the way, contaminants shed where they stand apart."""

import cells_study
import numpy as np
import pytest
from numpy.testing import assert_allclose

import ensembles


@pytest.fixture(scope="module")
def bridges():
    return cells_study.hsmm_bridges()


def test_labels_are_those_of_the_genes(bridges):
    series = bridges[0].series
    counts = [dict(zip(*np.unique(labels, return_counts=True))) for labels in series.labels]
    # Counted in the table itself, PDGFRA and SPHK1 above 2: none at 0 h; 4, 3 and 11 later.
    assert [int(count.get("contaminant", 0)) for count in counts] == [0, 4, 3, 11]
    assert ensembles.label_flows(bridges[0])["mass"].sum() == pytest.approx(3.0)


def test_genes_along_the_way_to_myotubes(bridges):
    trends = ensembles.feature_trends(bridges[0], ["log2tpm_MYH3", "log2tpm_CDK1"], times=[0, 24, 48, 72], paths=100)
    tubes = trends[trends["label"] == "myotube"].set_index(["feature", "time"])["mean"]
    assert (np.diff(tubes["log2tpm_MYH3"]) > 0).all()
    # CDK1 falls from the growing cells of 0 h to the differentiating ones; MYH3 ends as in the cells themselves.
    assert tubes["log2tpm_CDK1"][0] > 2 * tubes["log2tpm_CDK1"][24]
    series = bridges[0].series
    own = series.features["log2tpm_MYH3"][3][series.labels[3] == "myotube"].mean()
    assert_allclose(tubes["log2tpm_MYH3"][72], own, rtol=1e-5)


def test_fates_of_proliferating_cells_have_error_bars(bridges):
    quantity = ensembles.LineageProbabilities(by="label")
    table = ensembles.lineage_errors(bridges[0], quantity, repeats=20).set_index(["label", "to"])
    row = table.loc[("proliferating", "myotube")]
    assert 0.05 < row["estimate"] < 0.9
    # 34 such cells and 49 later ones: a share has a standard error of some hundredths to a tenth.
    assert 0.01 < row["standard_error"] < 0.3
    assert_allclose(table.groupby("label")["estimate"].sum(), 1.0)


def test_contaminants_are_shed_where_they_stand_apart(bridges):
    assert bridges[1].converged
    own, rest = cells_study.weight_kept(bridges[1]).T
    assert (own < 0.8 * rest).all()
    # In few components they lie among the others: at 24 h nothing is shed there, and the table of the study says so.
    few = cells_study.weight_kept(cells_study.hsmm_bridges(5, 0.1)[1])
    assert few[0, 0] > 1.0
    assert few[2, 0] < few[2, 1]


def test_the_summary_by_label_shows_what_is_shed_and_what_is_forced(bridges):
    placed, shed = (ensembles.label_summary(bridge).set_index(["time", "label"]) for bridge in bridges)
    late = placed.index.get_level_values("time") > 0
    # Every cell placed: all keep their weight, and all are further from their ancestors than the prior goes by itself.
    assert_allclose(placed.loc[late, "kept"], 1.0)
    assert (placed.loc[late, "displacement"] > 1.3).all()
    # Shed: the contaminants of every time keep less, and nothing has to come as far as before.
    assert (shed.xs("contaminant", level="label")["kept"] < 0.8).all()
    assert (shed.loc[late, "displacement"] < placed.loc[late, "displacement"]).all()


def test_smooth_growth_says_that_it_stands_for_movement_here():
    # Under a prior without drift, differentiation is taken for growth: the estimate says so, and sheds no contaminant at 24 h.
    bridge, found = cells_study.estimated_bridge()
    assert len(found.warnings) == 1
    own, rest = cells_study.weight_kept(bridge).T
    assert own[0] > 0.9 and (own[1:] < 0.8 * rest[1:]).all()
