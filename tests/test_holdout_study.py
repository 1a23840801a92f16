"""Real data, small versions of scripts/holdout: argon at the floor, D where it is, cells against all baselines."""

import numpy as np
import pytest
from holdout_study import (
    DIFFUSION,
    LAST,
    argon_hold_out,
    argon_profile,
    argon_slab,
    floors_above,
    myoblast_study,
    myoblasts,
    score_table,
)


@pytest.mark.parametrize("frames", [3, 5, 9])
def test_every_left_out_argon_cloud_is_at_the_floor_and_not_with_ten_times_the_noise(frames):
    right, wrong = (floors_above(argon_hold_out(frames, factor, repeats=60)) for factor in (1.0, 10.0))
    print(right.round(3), wrong.round(3), sep="\n")
    assert len(right) == frames - 2
    # Two standard deviations of the floor for one time; the largest of seven may reach three.
    assert (right["above"] < 3).all()
    assert right["above"].mean() < 1
    assert (wrong["energy distance"].to_numpy() > right["energy distance"].to_numpy()).all()
    # With nine frames neighbours pin the cloud within 25 ps, and a wrong D costs less.
    assert wrong["above"].mean() > (8 if frames == 3 else 2)


def test_argon_frames_are_chosen_over_the_whole_span():
    for frames in (3, 5, 9):
        series = argon_slab(frames)
        assert series.times[0] == 0 and series.times[-1] == LAST
        assert len(series) == frames
        # Evenly spaced as far as frames 10 ps apart allow.
        assert np.ptp(np.diff(series.times)) <= 10


def test_the_profile_finds_the_diffusion_of_argon():
    found = argon_profile(3, repeats=20)
    low, high = found.interval["diffusion"]
    print(found.to_frame().round(4), found)
    assert low < DIFFUSION < high
    # Negative control: it says something: ten times as much is refused.
    assert high < 10 * DIFFUSION


@pytest.mark.parametrize("components", [2])
def test_cells_have_a_table_a_profile_and_a_verdict(components):
    noise, held = myoblast_study(components, repeats=20)
    print(noise, score_table(held), held, sep="\n")
    assert myoblasts(components).counts.tolist() == [69, 74, 79, 49]
    table = score_table(held)
    assert set(table["time"]) == {24.0, 48.0}
    assert set(table["prediction"]) == {"bridge", "earlier", "later", "straight", "independent", "prior", "floor"}
    assert len(held.verdict) == 3
    # At 24 h the cells are far from where they were at 0 h, and hardly from where they are at 48 h: the later snapshot
    # is the better prediction, and the verdict must say so.
    bridge, later = (held.value(24.0, name, "energy_distance").value for name in ("bridge", "later"))
    assert later < bridge
    assert "worse than the later snapshot" in held.verdict[0] or "no better than" in held.verdict[0]
