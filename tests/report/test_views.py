import numpy as np
import pytest
from made_report import bare_graph, made_content, made_graph, one_tube
from matplotlib.collections import PolyCollection

from ramulus.report.views import image_views, shown_segments


def outline_of(figure, view):
    """Return the band of the first vessel, as closed by the drawing."""
    axes = figure.axes["zyx".index(view)]
    (drawn,) = [c for c in axes.collections if isinstance(c, PolyCollection)]
    return drawn.get_paths()[0].vertices


def area_of(polygon):
    """The shoelace formula."""
    x, y = polygon.T
    return abs(np.dot(x, np.roll(y, 1)) - np.dot(y, np.roll(x, 1))) / 2


@pytest.fixture
def tube_content():
    return made_content(graph=one_tube(5.0), projections={})


@pytest.mark.parametrize("view", ["z", "y"])
def test_a_vessel_is_drawn_at_its_true_width_and_length(tube_content, view):
    polygon = outline_of(image_views(tube_content, with_graph=True), view)
    # A tube 10 um wide and 40 um long, seen from its side.
    assert area_of(polygon) == pytest.approx(10 * 40)
    assert np.ptp(polygon, axis=0) == pytest.approx([40, 10])


def test_a_vessel_along_the_line_of_sight_is_a_disc(tube_content):
    polygon = outline_of(image_views(tube_content, with_graph=True), "x")
    assert np.ptp(polygon, axis=0) == pytest.approx([10, 10])
    assert polygon.max(axis=0) == pytest.approx([25, 25])
    # A disc's area, as a polygon of 24 corners.
    assert area_of(polygon) == pytest.approx(12 * 25 * np.sin(np.pi / 12))


def test_all_views_share_one_scale():
    figure = image_views(made_content(), with_graph=True)
    inches = figure.get_size_inches()
    scales = []
    for axes in figure.axes[:3]:
        place = axes.get_position()
        scales.append(place.width * inches[0] / np.ptp(axes.get_xlim()))
        scales.append(place.height * inches[1] / np.ptp(axes.get_ylim()))
    assert scales == pytest.approx([scales[0]] * 6)


def test_voxels_lie_at_index_times_spacing():
    content = made_content()
    figure = image_views(content, with_graph=False)
    spacing = content.graph.spacing_um
    seen = [content.projections["z"], content.projections["y"], content.projections["x"].T]
    for image, axes, across, down in zip(seen, figure.axes, (2, 2, 0), (1, 0, 1), strict=True):
        left, right, bottom, top = axes.images[0].get_extent()
        rows, columns = image.shape
        assert (left, top) == (-spacing[across] / 2, -spacing[down] / 2)
        assert (right - left) / columns == pytest.approx(spacing[across])
        assert (bottom - top) / rows == pytest.approx(spacing[down])


def test_without_an_image_the_graph_is_drawn_alone():
    content = bare_graph(made_content(), made_graph())
    assert image_views(content, with_graph=False) == "there is no image: the input was a graph"
    figure = image_views(content, with_graph=True)
    assert not figure.axes[0].images
    assert figure.axes[0].collections


def test_a_graph_without_segments_or_radii_gives_a_reason():
    graph = made_graph()
    none = graph.select_segments(np.zeros(graph.n_segments, dtype=bool))
    assert image_views(bare_graph(made_content(), none), with_graph=True) == (
        "the graph has no segment"
    )
    blank = graph.replace(point_radius_um=np.full(graph.n_points, np.nan))
    assert image_views(bare_graph(made_content(), blank), with_graph=True) == (
        "no segment has a radius"
    )


def test_the_widest_segments_are_shown_where_not_all_can_be():
    graph = made_graph(60)
    chosen = shown_segments(graph, 10)
    radius = graph.segment_radius_um()
    assert len(chosen) == 10
    assert radius[chosen].min() >= np.sort(radius)[-10]


def test_a_flat_graph_can_be_drawn():
    graph = one_tube(0.5, ends=((0, 0, 0), (0, 0, 50)))
    assert not isinstance(image_views(bare_graph(made_content(), graph), with_graph=True), str)
