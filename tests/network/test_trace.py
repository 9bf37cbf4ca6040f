import networkx as nx
import numba
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis.extra.numpy import arrays

from ramulus.errors import UnusableInputError
from ramulus.image.mask import Mask, Skeleton
from ramulus.image.thin import thin, without_corners
from ramulus.image.topology import betti_numbers
from ramulus.network.graph import NODE_KINDS, CentrelineGraph
from ramulus.network.trace import end_kinds, trace

SMALL = numba.config.DISABLE_JIT


def skeleton_of(
    voxels, shape, *, spacing_um=(1.0, 1.0, 1.0), origin_um=(0.0, 0.0, 0.0), radius=1.0
):
    voxels = np.unique(np.array(voxels, dtype=np.int64), axis=0)
    radii = np.full(len(voxels), radius, dtype=np.float32)
    return Skeleton(voxels, radii, shape, spacing_um, origin_um)


def kinds(graph):
    return sorted(NODE_KINDS[k] for k in graph.node_kind)


def loops_and_parts(graph):
    view = graph.to_networkx()
    parts = nx.number_connected_components(view)
    return graph.n_segments - graph.n_nodes + parts, parts


def test_a_straight_line_is_one_segment_in_um_with_the_origin():
    line = [(2, 3, x) for x in range(4, 12)]
    graph = trace(
        skeleton_of(line, (6, 8, 20), spacing_um=(5.0, 1.0, 0.5), origin_um=(100.0, 10.0, 1.0))
    )
    assert graph.n_segments == 1
    assert graph.segment_length_um().tolist() == [3.5]
    np.testing.assert_allclose(graph.point_position_um[0], [110.0, 13.0, 3.0])
    assert graph.extent_um == (30.0, 8.0, 10.0)
    assert kinds(graph) == ["end", "end"]


def test_a_tee_has_one_junction_at_its_cluster():
    arms = [(4, 10, x) for x in range(3, 18)] + [(4, y, 10) for y in range(11, 17)]
    graph = trace(skeleton_of(arms, (9, 20, 20)))
    assert kinds(graph) == ["end", "end", "end", "junction"]
    junction = graph.node_position_um[graph.node_degree() == 3][0]
    assert np.abs(junction - (4, 10, 10)).max() <= 1
    assert graph.n_segments == 3


def test_junctions_lie_at_the_mean_of_their_voxels_weighted_by_distance():
    from scipy import ndimage as ndi

    noise = np.random.default_rng(6).random((18, 18, 18)) < 0.09
    skeleton = without_corners(thin(Mask(np.pad(noise, 1), (1.0, 1.0, 1.0))))
    volume, weight = np.zeros(skeleton.shape), np.zeros(skeleton.shape)
    volume[tuple(skeleton.voxels.T)] = 1
    weight[tuple(skeleton.voxels.T)] = skeleton.distance_um
    neighbours = ndi.convolve(volume, np.ones((3, 3, 3)), mode="constant") - volume
    clusters, count = ndi.label((volume > 0) & (neighbours >= 3), structure=np.ones((3, 3, 3)))
    expected = ndi.center_of_mass(weight, clusters, range(1, count + 1))
    graph = trace(skeleton)
    found = graph.node_position_um[graph.node_degree() >= 3]
    assert count > 10
    for place in found:
        assert np.abs(np.array(expected) - place).max(axis=1).min() < 1e-6


def test_a_ring_gets_one_node_and_a_loop_from_it_to_itself():
    angle = np.linspace(0, 2 * np.pi, 200)
    ring = np.rint(np.stack([4 + 0 * angle, 12 + 8 * np.cos(angle), 12 + 8 * np.sin(angle)], 1))
    graph = trace(skeleton_of(ring, (9, 25, 25)))
    assert (graph.n_nodes, graph.n_segments) == (1, 1)
    assert graph.segment_nodes.tolist() == [[0, 0]]
    np.testing.assert_array_equal(graph.point_position_um[0], graph.point_position_um[-1])
    assert loops_and_parts(graph) == (1, 1)


def test_parallel_segments_and_self_loops_are_kept():
    # An eye with a tail at each corner, one of which ends in a ring.
    eye = [(4, 10, 6), (4, 10, 26)]
    eye += [(4, 10 - min(x - 6, 4, 26 - x), x) for x in range(6, 27)]
    eye += [(4, 10 + min(x - 6, 4, 26 - x), x) for x in range(6, 27)]
    tail = [(4, 10, x) for x in range(1, 7)] + [(4, 10, x) for x in range(26, 31)]
    ring = [(4, 10 + y, 31 + abs(y)) for y in range(-3, 4)]
    ring += [(4, 10 + y, 37 - abs(y)) for y in range(-3, 4)]
    graph = trace(skeleton_of(eye + tail + ring, (9, 21, 40)))
    ends = [tuple(sorted(pair)) for pair in graph.segment_nodes.tolist()]
    assert loops_and_parts(graph) == (2, 1)
    assert len(ends) - len(set(ends)) == 1  # one pair of parallel segments
    assert sum(a == b for a, b in ends) == 1


def test_two_touching_voxels_are_a_segment_and_a_lone_voxel_is_a_node():
    graph = trace(skeleton_of([(2, 2, 2), (2, 2, 3), (5, 5, 5)], (8, 8, 8)))
    assert (graph.n_nodes, graph.n_segments) == (3, 1)
    assert sorted(graph.node_degree().tolist()) == [0, 1, 1]


def test_map_radius_runs_along_and_is_the_largest_at_a_junction():
    arms = [(4, 10, x) for x in range(3, 18)] + [(4, y, 10) for y in range(11, 17)]
    skeleton = skeleton_of(arms, (9, 20, 20))
    lean = without_corners(skeleton)
    radii = (1 + np.arange(len(lean.voxels)) / 10).astype(np.float32)
    graph = trace(Skeleton(lean.voxels, radii, lean.shape, lean.spacing_um))
    at_ends = graph.point_radius_map_um[graph.point_offsets[:-1]]
    assert np.isfinite(graph.point_radius_map_um).all()
    assert set(np.round(graph.point_radius_map_um, 4)) <= set(np.round(radii.astype(float), 4))
    assert at_ends.min() >= 1


# Reference: the topology of the skeleton as counted by `image.topology`, itself checked against
# scikit-image; clusters of junction voxels may close a loop of a few voxels only.
@settings(max_examples=8 if SMALL else 50, deadline=None)
@given(arrays(np.bool_, (6, 7, 8)).filter(lambda inside: inside.any() and not inside.all()))
def test_graph_has_the_parts_of_any_mask(inside):
    skeleton = thin(Mask(np.pad(inside, 1), (1.0, 1.0, 1.0)))
    if len(skeleton.voxels) < 2:
        return
    try:
        graph = trace(skeleton)
    except UnusableInputError:
        return
    assert loops_and_parts(graph)[1] == betti_numbers(inside).components


# A simple cubic grid of 3 x 3 x 3 nodes has 54 edges, so 54 - 27 + 1 = 28 loops; its eight corners
# have three edges each.
@pytest.mark.parametrize("width", [1, 2, 3, 4])
def test_a_cubic_grid_of_bars_has_its_28_loops(width):
    inside = np.zeros((30, 30, 30), dtype=bool)
    for a in (4, 13, 22):
        for b in (4, 13, 22):
            for axis in range(3):
                bar = np.moveaxis(inside, axis, 0)
                bar[4 : 22 + width, a : a + width, b : b + width] = True
    graph = trace(thin(Mask(inside, (1.0, 1.0, 1.0))))
    assert loops_and_parts(graph) == (28, 1)
    assert (graph.node_degree() >= 3).all()


def test_segments_join_their_nodes_point_by_point():
    noise = np.random.default_rng(3).random((12, 12, 12)) < 0.3
    graph = trace(thin(Mask(np.pad(noise, 1), (2.0, 1.0, 1.0))))
    first, last = graph.point_offsets[:-1], graph.point_offsets[1:] - 1
    for side, end in ((0, first), (1, last)):
        np.testing.assert_array_equal(
            graph.point_position_um[end], graph.node_position_um[graph.segment_nodes[:, side]]
        )


def test_the_same_skeleton_gives_the_same_bytes():
    noise = np.random.default_rng(5).random((14, 14, 14)) < 0.35
    mask = Mask(np.pad(noise, 1), (1.0, 1.0, 1.0))
    one, two = trace(thin(mask)), trace(thin(mask))
    assert one.point_position_um.tobytes() == two.point_position_um.tobytes()
    assert one.segment_nodes.tobytes() == two.segment_nodes.tobytes()


def test_a_skeleton_without_a_line_is_refused():
    with pytest.raises(UnusableInputError, match="none of its 1 voxels form a line"):
        trace(skeleton_of([(1, 1, 1)], (3, 3, 3)))


def line_graph(start, stop, radius=2.0, **fields):
    points = np.linspace(start, stop, 30)
    return CentrelineGraph.from_polylines(
        points[[0, -1]], [[0, 1]], [points], [np.full(30, radius)],
        **{"spacing_um": (1.0, 1.0, 1.0), "extent_um": (40.0, 40.0, 40.0), **fields},
    )  # fmt: skip


@pytest.mark.parametrize(
    ("stop", "kind"),
    [
        ((20, 20, 39), "border"),  # on the face
        ((20, 20, 37), "border"),  # within a radius and a voxel of it, towards it
        ((20, 20, 33), "end"),  # too far
        ((38, 20, 20), "border"),  # another face
    ],
)
def test_an_end_is_cut_where_its_vessel_meets_a_face(stop, kind):
    graph = line_graph((20, 20, 8), stop)
    assert [NODE_KINDS[k] for k in end_kinds(graph)] == ["end", kind]


def test_an_end_that_runs_along_a_face_is_not_cut_by_it():
    graph = line_graph((2.5, 20, 8), (2.5, 20, 30))
    assert kinds(graph.replace(node_kind=end_kinds(graph))) == ["end", "end"]


def test_faces_are_where_the_origin_puts_them():
    shifted = line_graph((120, 20, 8), (138, 20, 8))
    plain = end_kinds(shifted, origin_um=(100.0, 0.0, 0.0))
    assert [NODE_KINDS[k] for k in plain] == ["end", "border"]


def test_without_an_extent_no_end_is_cut():
    graph = line_graph((20, 20, 8), (20, 20, 39), extent_um=(0.0, 0.0, 0.0))
    assert kinds(graph.replace(node_kind=end_kinds(graph))) == ["end", "end"]
