"""The picture of links: what is drawn, for one dimension, several gaps, many particles and periodic axes."""

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure

import ensembles
from ensembles.report.figures.links import draw_links


def drawn(clouds, box=None, diffusion=0.5):
    units = {"time": "s", "length": "µm"}
    series = ensembles.SnapshotSeries.from_arrays(np.arange(float(len(clouds))), clouds, units=units)
    links = ensembles.link_particles(series, ensembles.Brownian(diffusion=diffusion, box=box))
    figure = Figure(layout="constrained")
    canvas = FigureCanvasAgg(figure)
    caption = draw_links(figure, series, links, box)
    canvas.draw()
    return figure, caption, links


def segments(ax):
    return [s for c in ax.collections if isinstance(c, LineCollection) for s in c.get_segments()]


@pytest.mark.parametrize("dimension", [1, 2, 3])
def test_every_probable_link_is_drawn_once(dimension):
    rng = np.random.default_rng(dimension)
    start = 12.0 * rng.random((20, dimension))
    figure, caption, links = drawn([start, rng.permutation(start + rng.normal(size=start.shape))])
    probable = links[0].probabilities >= 0.1
    assert len(segments(figure.axes[0])) == probable.sum()
    assert ("first two coordinates" in caption) == (dimension == 3)
    assert "(s)" in figure.axes[0].get_xlabel() if dimension == 1 else "(µm)" in figure.axes[0].get_xlabel()
    assert f"{links[0].expected_right_links / 20:.3g}" in caption


def test_many_particles_and_gaps_are_cut_down_and_said_so():
    rng = np.random.default_rng(0)
    cloud = 60.0 * rng.random((100, 2))
    clouds = [cloud]
    for _ in range(4):
        clouds.append(rng.permutation(clouds[-1] + rng.normal(size=cloud.shape)))
    figure, caption, _ = drawn(clouds)
    assert len(figure.axes) == 6
    assert "40 particles around the middle" in caption and "1 further gap(s) are in links.csv" in caption


def test_links_across_a_periodic_edge_are_short():
    box = ensembles.Box(np.zeros(2), np.full(2, 10.0))
    start = np.array([[0.2, 5.0], [9.8, 2.0], [5.0, 5.0]])
    end = box.fold(start + [-0.5, 0.0])
    figure, _, _ = drawn([start, end], box, 0.1)
    lengths = [float(np.linalg.norm(s[1] - s[0])) for s in segments(figure.axes[0])]
    assert len(lengths) == 3 and max(lengths) < 0.6


def test_later_places_are_drawn_without_any_probable_link():
    rng = np.random.default_rng(4)
    clouds = 10.0 * rng.random((2, 35, 2))
    with pytest.warns(RuntimeWarning, match="next to no information"):
        figure, _, links = drawn(list(clouds), diffusion=5e3)
    assert links[0].probabilities.max() < 0.1 and not segments(figure.axes[0])
    points = np.concatenate([c.get_offsets() for c in figure.axes[0].collections if len(c.get_offsets()) > 1])
    assert len(points) >= 35 + 30
