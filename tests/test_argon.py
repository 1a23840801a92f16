"""Real data with hidden truth: argon atoms, their labels discarded, and the cloud half-way. scripts/argon prints it."""

import numpy as np
import pytest
from argon_study import (
    DIFFUSION,
    MIDDLE,
    NOTES,
    SLAB,
    Study,
    average_table,
    fit,
    nine_slabs,
    read_slab,
    straight_line,
    study,
    table,
)
from numpy.testing import assert_allclose
from scipy.optimize import linear_sum_assignment
from scipy.spatial.distance import cdist


@pytest.fixture(scope="module")
def middle_slab() -> Study:
    result = study()
    print(table(result))
    return result


@pytest.fixture(scope="module")
def averages():
    result = nine_slabs()
    print(average_table(result))
    return result


def test_the_slab_is_chosen_at_time_0_and_labels_are_gone():
    slab = read_slab(axis=0)
    assert 240 < len(slab.start) == len(slab.middle) == len(slab.end) < 300
    edge = 36.014  # Å, box_A[0] of the data file
    assert np.ptp(slab.start[:, 0]) < SLAB * edge
    # Selected at time 0 only: later clouds reach beyond the slab by several Å, √(2 D t) = 6.4 Å at 100 ps.
    assert np.ptp(slab.end[:, 0]) > SLAB * edge + 12
    # Row by row the frames are strangers across the two wide directions: their correlation is that of random pairs.
    for later in (slab.middle, slab.end):
        for axis in (1, 2):
            assert abs(np.corrcoef(slab.start[:, axis], later[:, axis])[0, 1]) < 4 / np.sqrt(len(later))


def test_the_order_of_rows_does_not_matter():
    first, second = (fit(read_slab(seed=seed), DIFFUSION) for seed in (0, 1))
    for one, other in zip(first.moments(MIDDLE), second.moments(MIDDLE)):
        # Both couplings have L1 errors below 1e-6 and the clouds are about 40 Å wide.
        assert_allclose(one, other, atol=40**2 * 1e-5)


def test_the_straight_line_baseline_is_the_optimal_matching():
    slab = read_slab()
    rows, columns = linear_sum_assignment(cdist(slab.start, slab.end, "sqeuclidean"))
    # Atoms sit at random places, so the optimum is unique.
    assert_allclose(straight_line(slab), 0.5 * (slab.start[rows] + slab.end[columns]), rtol=1e-12)


def test_the_bridge_is_at_the_floor(middle_slab):
    bridge = middle_slab.rows["bridge"]
    for value, floor in ((bridge.across, middle_slab.across_floor), (bridge.space, middle_slab.space_floor)):
        assert value < floor.mean() + 2 * floor.std(ddof=1)
    # Two-sided: the true cloud scores like the clouds that the bridge makes itself.
    expected = middle_slab.across_expected
    assert abs(bridge.across - expected.mean()) < 3 * expected.std(ddof=1)


def test_mean_and_variance_across_the_slab(middle_slab):
    bridge = middle_slab.rows["bridge"]
    assert abs(bridge.mean - middle_slab.mean) < 3 * middle_slab.mean_error
    assert abs(bridge.variance - middle_slab.variance) < 3 * middle_slab.variance_error
    for name in ("earlier snapshot", "later snapshot"):
        assert abs(middle_slab.rows[name].variance - middle_slab.variance) > 5 * middle_slab.variance_error


@pytest.mark.parametrize(("name", "least"), [("earlier snapshot", 8), ("later snapshot", 3), ("bridge, 10 x D", 20)])
def test_others_lie_above_the_floor(middle_slab, name, least):
    assert middle_slab.floors_above(name) > least
    assert middle_slab.rows[name].lead > 0


@pytest.mark.parametrize(("name", "least"), [("earlier snapshot", 10), ("later snapshot", 5), ("bridge, 10 x D", 20)])
def test_over_nine_slabs_the_bridge_leads_by_many_standard_errors(averages, name, least):
    assert averages[name].lead > least * averages[name].lead_error


def test_over_nine_slabs_only_the_bridge_has_the_right_variance(averages):
    assert abs(averages["bridge"].excess) < 3 * averages["bridge"].excess_error
    for name in ("earlier snapshot", "later snapshot", "straight line", "bridge, 10 x D"):
        assert abs(averages[name].excess) > 5 * averages[name].excess_error


def test_the_notes_hold(middle_slab, averages):
    assert "cannot tell the straight line from the bridge" in NOTES
    assert abs(averages["straight line"].lead) < 4 * averages["straight line"].lead_error
    assert "cannot tell the later snapshot" in NOTES
    space = middle_slab.space_floor
    assert abs(middle_slab.rows["later snapshot"].space - space.mean()) < 2 * space.std(ddof=1)
    # "is too large for that reason": nine slabs scatter less than the bootstrap of one says.
    assert averages["later snapshot"].lead_error * np.sqrt(9) < middle_slab.rows["later snapshot"].lead_error
