"""What a reader meets in the pictures: names and units at the axes, texts that do not overlap, marks told apart in grey."""

import itertools

import numpy as np
import pandas as pd
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import to_rgb
from matplotlib.figure import Figure

import ensembles
from ensembles.assessment.quantities import Moments
from ensembles.report.figures import FIGURES
from ensembles.report.figures.bands import draw_bands
from ensembles.report.figures.holdout import draw_hold_out
from ensembles.report.figures.lineage import draw_flow, draw_trends
from ensembles.report.figures.noise import draw_noise
from ensembles.report.figures.prior_check import draw_prior_check
from ensembles.report.figures.profile import draw_profiles
from ensembles.report.figures.scene import Scene
from ensembles.report.figures.style import polish, with_error

UNITS = {"time": "h", "length": "µm"}
PRIOR = ensembles.Brownian(diffusion=0.5)


def finished(draw, *arguments):
    """The figure as it is saved, and its caption."""
    figure = Figure(layout="constrained")
    FigureCanvasAgg(figure)
    caption = draw(figure, *arguments)
    polish(figure)
    figure.canvas.draw()
    return figure, caption


def labels_of_axes(figure):
    """What is named: axes, titles, the names that panels share."""
    named = [figure._supxlabel, figure._supylabel]
    for ax in figure.axes:
        named += [
            ax.xaxis.label,
            ax.yaxis.label,
            ax._left_title,
            ax.xaxis.get_offset_text(),
            ax.yaxis.get_offset_text(),
        ]
        named += ax.texts
    return [text for text in named if text is not None and text.get_text().strip() and text.get_visible()]


def require_readable(figure):
    """No name of an axis, title or note over another, none beyond the edge of the picture."""
    boxes = [(text.get_text(), text.get_window_extent()) for text in labels_of_axes(figure)]
    width, height = figure.canvas.get_width_height()
    for words, box in boxes:
        assert box.x0 > -1 and box.y0 > -1 and box.x1 < width + 1 and box.y1 < height + 1, f"{words!r} is cut off"
    for (first, a), (second, b) in itertools.combinations(boxes, 2):
        across = min(a.x1, b.x1) - max(a.x0, b.x0)
        along = min(a.y1, b.y1) - max(a.y0, b.y0)
        assert across < 1 or along < 1, f"{first!r} lies over {second!r}"


def lightness(colour):
    return float(np.dot(to_rgb(colour), (0.299, 0.587, 0.114)))


def spreading(snapshots=6, count=30, dimension=2):
    rng = np.random.default_rng(0)
    return ensembles.SnapshotSeries.from_arrays(
        np.arange(float(snapshots)), [rng.normal(k, 1.0, size=(count, dimension)) for k in range(snapshots)],
        units=UNITS, position_names=["x_um", "y_um", "z_um"][:dimension],
    )  # fmt: skip


@pytest.fixture(scope="module", params=[1, 2])
def series(request):
    return spreading(dimension=request.param)


def test_held_out_scores_have_a_name_under_every_panel(series):
    figure, _ = finished(draw_hold_out, ensembles.hold_out(series, PRIOR, repeats=3), series)
    top, below = figure.axes[:4], figure.axes[4:]
    assert [ax.get_xlabel().replace("\n", " ") for ax in top] == ["energy distance (µm)"] * 4
    assert [ax.get_xlabel() for ax in below] == ["x (µm)"] * 4
    assert top[0].get_title(loc="left") == "left out: time = 1 h"
    require_readable(figure)


def test_prior_check_names_gaps_and_its_clouds_differ_in_grey(series):
    found = ensembles.prior_check(series, PRIOR, simulations=19, with_entropy=False)
    figure, _ = finished(draw_prior_check, found, series)
    assert figure.axes[0].get_title(loc="left") == "time = 0 → 1 h"
    assert figure._supxlabel.get_text() == "energy distance to the prior's prediction (µm)"
    require_readable(figure)
    below = figure.axes[len(figure.axes) // 2]
    assert lightness(below.patches[0].get_facecolor()[:3]) - lightness(below.lines[0].get_color()) > 0.3
    if series.dimension == 2:
        observed, predicted = figure.axes[0].lines
        assert (observed.get_label(), predicted.get_label()) == ("observed", "prior")
        assert predicted.get_markerfacecolor() == "none"
        assert lightness(observed.get_markerfacecolor()) - lightness(predicted.get_markeredgecolor()) > 0.4


def test_bands_name_time_and_units(series):
    bridge = ensembles.fit_bridge(series, PRIOR)
    bands = ensembles.bootstrap(bridge, Moments([0.0, 0.5, 1.0]), repeats=3)
    figure, _ = finished(draw_bands, bands, series)
    assert figure._supxlabel.get_text() == "time (h)"
    columns = series.dimension
    assert [ax.get_ylabel() for ax in figure.axes[::columns]] == ["mean (µm)", "variance (µm²)"]
    assert figure.axes[0].get_title(loc="left") == "x"
    require_readable(figure)


def test_noise_says_what_lies_below_and_why_the_best_has_no_bar():
    series = spreading(snapshots=4)
    levels = [0.001, 0.003, 0.3, 0.6, 1.2, 2.4]
    noise = ensembles.choose_noise(series, PRIOR, levels, repeats=3)
    figure, caption = finished(draw_noise, noise, series)
    left, right = figure.axes
    assert [ax.get_xlabel() for ax in figure.axes] == ["diffusion (µm²/h)"] * 2
    assert right.get_ylabel().endswith("(µm)")
    hidden = [level.values["diffusion"] for level in noise.levels if level.log_score < left.get_ylim()[0]]
    assert len(hidden) == 2
    (marks,) = (line for line in left.lines if line.get_marker() == "v")
    assert marks.get_xdata().tolist() == hidden
    assert "2 of 6 levels lie below the axis" in left.get_title(loc="left")
    assert "2 of 6 levels lie below the axis" in caption
    assert "the best level (★), which has none" in left.get_title(loc="left")
    assert "best level (star), which therefore has no bar" in caption
    require_readable(figure)


def test_noise_of_two_parameters_has_both_units():
    series = spreading(snapshots=4)
    prior = ensembles.OrnsteinUhlenbeck(rate=0.5, centre=0.0, diffusion=0.5)
    noise = ensembles.choose_noise(series, prior, {"rate": [0.2, 0.5, 1.0], "diffusion": [0.3, 0.6, 1.2]}, repeats=3)
    figure, _ = finished(draw_noise, noise, series)
    assert (figure.axes[0].get_xlabel(), figure.axes[0].get_ylabel()) == ("rate (1/h)", "diffusion (µm²/h)")
    # Numbers at the colours as one would write them, not 0.08511.
    ticks = [label.get_text() for label in figure.axes[1].get_yticklabels()]
    assert ticks and all(len(tick.replace("0.", "").strip("0")) <= 2 or "e" in tick for tick in ticks)


# Pictures of a bridge


def drawn(name, bridge):
    times = np.union1d(np.linspace(bridge.series.times[0], bridge.series.times[-1], 7), bridge.series.times)
    scene = Scene(bridge, bridge.sample_paths(5, times, rng=1))
    return finished(FIGURES[name], scene, np.random.default_rng(0))[0]


@pytest.fixture(scope="module")
def hard_bridge():
    """Little noise, so that the solver begins on a ladder of noise levels; a long run."""
    rng = np.random.default_rng(0)
    clouds = [rng.normal(size=(60, 4)) * [1.0, 1.0, 0.3, 0.3] + 2.0 * k for k in range(4)]
    series = ensembles.SnapshotSeries.from_arrays(np.arange(4.0), clouds, units={"time": "d"})
    return ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.02))


def test_steps_of_the_ladder_are_read_and_no_line_leaves_the_panel(hard_bridge):
    figure = drawn("convergence", hard_bridge)
    notes = [text.get_text() for ax in figure.axes for text in ax.texts]
    assert notes and all(note.startswith("noise ×") and note.endswith("×1") for note in notes)
    require_readable(figure)
    for ax in figure.axes:
        for line in ax.lines:
            if line.get_transform() == ax.transData:
                values = np.asarray(line.get_ydata(), dtype=float)
                assert not (values < ax.get_ylim()[0]).any(), line.get_label()


def test_the_key_of_the_drift_has_a_number_without_a_length_unit(hard_bridge):
    figure = drawn("drift", hard_bridge)
    (key,) = (child for ax in figure.axes for child in ax.get_children() if type(child).__name__ == "QuiverKey")
    assert key.label[0].isdigit() and key.label.endswith(" per d")
    assert float(key.label.split()[0]) == key.U


def test_the_key_of_the_drift_ends_inside_a_tall_picture():
    rng = np.random.default_rng(0)
    clouds = [rng.normal(size=(60, 2)) * [1.0, 4.0] + k for k in range(2)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1], clouds, units=UNITS)
    figure = drawn("drift", ensembles.fit_bridge(series, ensembles.Brownian(diffusion=0.3)))
    (ax,) = figure.axes
    (key,) = (child for child in ax.get_children() if type(child).__name__ == "QuiverKey")
    (arrow,) = (child for child in ax.get_children() if type(child).__name__ == "Quiver")
    # With scale_units "xy" an arrow of speed U is U / scale long in data.
    length = key.U / arrow.scale * (ax.transData.transform([1.0, 0.0])[0] - ax.transData.transform([0.0, 0.0])[0])
    width = figure.canvas.get_width_height()[0]
    assert key.X * width + length < width


def test_marks_of_many_snapshots_are_named_where_there_is_room():
    figure = drawn("density", ensembles.fit_bridge(spreading(snapshots=17, count=8, dimension=1), PRIOR))
    names = [label.get_window_extent() for label in figure.axes[1].get_yticklabels()]
    assert len(names) == 6
    assert all(upper.y0 > lower.y1 - 2 for upper, lower in itertools.pairwise(names))


@pytest.mark.parametrize("name", FIGURES)
def test_a_common_factor_is_no_larger_than_the_ticks_and_clear_of_the_title(name):
    rng = np.random.default_rng(0)
    clouds = [3e6 * (rng.normal(size=25) + k) for k in range(3)]
    series = ensembles.SnapshotSeries.from_arrays([0, 1, 2], clouds, units={"time": "s", "length": "nm"})
    figure = drawn(name, ensembles.fit_bridge(series, ensembles.Brownian(diffusion=3e12)))
    for ax in figure.axes:
        for axis in (ax.xaxis, ax.yaxis):
            assert axis.get_offset_text().get_fontsize() <= 8.0
    require_readable(figure)


# Others


def test_both_numbers_of_an_estimate_are_rounded_by_its_error():
    assert with_error(1.3684, 0.123) == "1.37 ± 0.12"
    assert with_error(-0.5, 0.0996) == "-0.50 ± 0.10"
    assert with_error(123456.0, 1234.0) == "123500 ± 1200"
    assert with_error(1.3684e-7, 0.123e-7) == "(1.37 ± 0.12)e-07"
    assert with_error(1.3684e9, 0.123e9) == "(1.37 ± 0.12)e+09"
    assert with_error(1.5, np.nan) == "1.5 ± nan"


def test_profiles_round_as_the_table_and_name_their_axes():
    values = np.linspace(1.0, 1.7, 9)
    rows, profiles = [], {}
    for name, factor, unit in (("diffusion", 1.0, "µm²/s"), ("rate", 1e-6, "1/s"), ("drift[0]", 1e6, "µm/s")):
        profiles[name] = pd.DataFrame({"value": values * factor, "below_maximum": (values - 1.37) ** 2 / 0.03})
        rows.append({"parameter": name, "value": 1.37 * factor, "standard_error": 0.123 * factor,
                     "lower": 1.13 * factor, "upper": 1.6 * factor, "unit": unit})  # fmt: skip
    figure, _ = finished(draw_profiles, profiles, pd.DataFrame(rows), 1.92)
    assert [ax.get_title(loc="left") for ax in figure.axes] == [
        "diffusion = 1.37 ± 0.12", "rate = (1.37 ± 0.12)e-06", "drift[0] = 1370000 ± 120000"
    ]  # fmt: skip
    assert [ax.get_xlabel() for ax in figure.axes] == ["diffusion (µm²/s)", "rate (1/s)", "drift[0] (µm/s)"]
    require_readable(figure)


def labelled_bridge():
    rng = np.random.default_rng(0)
    series = ensembles.SnapshotSeries.from_arrays(
        [0, 1], [rng.normal(size=(40, 2)) for _ in range(2)], labels=[["stem"] * 40, ["left", "right"] * 20],
        features={"marker": [rng.normal(size=40) for _ in range(2)]}, units=UNITS,
    )  # fmt: skip
    return ensembles.fit_bridge(series, PRIOR)


def test_bands_of_two_fates_differ_without_colour():
    bridge = labelled_bridge()
    trends = ensembles.feature_trends(bridge, paths=30, times=[0.0, 0.5, 1.0])
    figure, _ = finished(draw_trends, trends, bridge.series)
    (ax,) = figure.axes
    hatches = [band.get_hatch() for band in ax.collections]
    assert len(hatches) == 2 and len(set(hatches)) == 2
    means = [line for line in ax.lines if not line.get_label().startswith("_")]
    assert len({str(line.get_linestyle()) for line in means}) == 2
    assert len({line.get_marker() for line in means}) == 2


def test_flow_says_what_its_heights_are():
    bridge = labelled_bridge()
    figure, _ = finished(draw_flow, ensembles.label_flows(bridge), bridge.series)
    assert figure._supylabel.get_text() == "share of the snapshot"
    require_readable(figure)


def test_words_over_one_another_are_found():
    """The control: what the checks above must not let through."""
    figure = Figure()
    FigureCanvasAgg(figure)
    ax = figure.subplots()
    ax.text(0.5, 0.5, "first")
    ax.text(0.51, 0.5, "second")
    with pytest.raises(AssertionError, match="lies over"):
        require_readable(figure)
    ax.texts[1].set_position((1.5, 0.5))
    with pytest.raises(AssertionError, match="cut off"):
        require_readable(figure)
