import json

import numpy as np
import pytest

from ramulus.errors import UnusableInputError
from ramulus.image.mask import Mask
from ramulus.image.thin import ThinSettings, thin
from ramulus.network.bridge import end_geometry, facing_ends
from ramulus.network.clean import CleanSettings, clean
from ramulus.network.contact import touching_vessels
from ramulus.network.graph import NODE_KINDS, CentrelineGraph
from ramulus.network.rewire import join_series, part_node
from ramulus.network.trace import end_kinds, trace

SPACING = (1.0, 1.0, 1.0)


def graph_of(nodes, pairs, lines=None, radius=3.0, extent=100.0):
    """A graph of polylines, straight by default, with the map's radius (one, or one a line)."""
    nodes = np.array(nodes, dtype=float)
    if lines is None:
        lines = [
            np.linspace(nodes[a], nodes[b], max(3, int(np.linalg.norm(nodes[b] - nodes[a])) + 1))
            for a, b in pairs
        ]
    radii = np.broadcast_to(radius, len(lines))
    graph = CentrelineGraph.from_polylines(
        nodes, pairs, lines,
        point_radius_map_um=np.concatenate(
            [np.full(len(line), float(r)) for line, r in zip(lines, radii, strict=True)]
        ),
        spacing_um=SPACING, extent_um=(extent, extent, extent),
    )  # fmt: skip
    return graph.replace(node_kind=end_kinds(graph))


def steps(edits):
    return [edit["step"] for edit in edits]


def trunk_with_branch(reach, *, branch_radius=1.5, tip=None):
    """A trunk of radius 3 along x with a branch along y at its middle."""
    tip = (50, 50 + reach, 50) if tip is None else tip
    nodes = [(50, 50, 20), (50, 50, 50), (50, 50, 80), tip]
    return graph_of(nodes, [(0, 1), (1, 2), (1, 3)], radius=[3.0, 3.0, branch_radius])


# ---------------------------------------------------------------------- spurs


@pytest.mark.parametrize(
    ("reach", "radius", "kept"),
    [
        (4.0, 1.5, False),  # 1 um beyond the wall, 2.5 with its own end: less than 3
        (5.0, 1.5, True),
        (5.5, 3.0, False),  # as wide as its parent: needs its own diameter of 6
        (6.5, 3.0, True),
    ],
)
def test_spurs_go_by_their_protrusion(reach, radius, kept):
    graph, edits = clean(trunk_with_branch(reach, branch_radius=radius))
    assert graph.n_segments == (3 if kept else 1)
    assert steps(edits) == ([] if kept else ["spur"])


def test_spur_rule_has_no_scale_of_its_own():
    for scale in (0.2, 7.0):
        for reach, kept in ((4.0, False), (5.0, True)):
            base = trunk_with_branch(reach)
            graph = base.replace(
                node_position_um=base.node_position_um * scale,
                point_position_um=base.point_position_um * scale,
                point_radius_map_um=base.point_radius_map_um * scale,
                spacing_um=(scale,) * 3, extent_um=(100 * scale,) * 3,
            )  # fmt: skip
            assert (clean(graph)[0].n_segments == 3) == kept


def test_an_end_that_a_face_cuts_is_no_spur():
    graph = trunk_with_branch(0, tip=(50, 54, 50)).replace(extent_um=(100.0, 54.5, 100.0))
    graph = graph.replace(node_kind=end_kinds(graph))
    assert NODE_KINDS[graph.node_kind[3]] == "border"
    assert clean(graph)[0].n_segments == 3


def test_a_bump_of_a_coarse_voxel_is_a_spur():
    graph = trunk_with_branch(0, tip=(62, 50, 50))
    assert clean(graph)[0].n_segments == 3
    coarse = graph.replace(spacing_um=(5.0, 1.0, 1.0))
    assert clean(coarse)[0].n_segments == 1


def test_of_two_spurs_at_one_place_the_longer_carries_the_vessel_on():
    nodes = [(50, 50, 20), (50, 50, 60), (50, 54, 64), (50, 45, 63)]
    graph, edits = clean(graph_of(nodes, [(0, 1), (1, 2), (1, 3)]))
    assert graph.n_segments == 1
    assert steps(edits) == ["spur"]
    assert [50, 45, 63] in graph.node_position_um.tolist()


# ---------------------------------------------------------------------- balls and rings


def test_junctions_inside_one_ball_become_one():
    nodes = [(50, 50, 20), (50, 50, 49), (50, 50, 51), (50, 20, 51), (50, 80, 49), (50, 50, 80)]
    graph = graph_of(nodes, [(0, 1), (1, 2), (2, 3), (1, 4), (2, 5)])
    cleaned, edits = clean(graph)
    assert steps(edits) == ["ball"]
    assert cleaned.n_segments == 4
    assert sorted(cleaned.node_degree().tolist()) == [1, 1, 1, 1, 4]
    assert clean(graph, settings=CleanSettings(merge_radii=0))[1] == []


def test_a_chain_of_junctions_is_not_swallowed_as_a_whole():
    # Junctions every 2.5 um on a vessel of radius 3: pairs merge, not the whole row.
    nodes = [(50, 50, 20), *[(50, 50, 40 + 2.5 * k) for k in range(5)], (50, 50, 80)]
    pairs = [(k, k + 1) for k in range(6)]
    for k in range(5):
        nodes.append((50, 80 if k % 2 else 20, 40 + 2.5 * k))
        pairs.append((k + 1, len(nodes) - 1))
    cleaned, edits = clean(graph_of(nodes, pairs))
    assert 2 <= (cleaned.node_degree() >= 3).sum() <= 3
    assert set(steps(edits)) == {"ball"}


def ring_on_trunk(size):
    """A trunk of radius 3 with a square detour of the given half width."""
    nodes = [(50, 50, 10), (50, 50, 50 - size), (50, 50, 50 + size), (50, 50, 90)]
    detour = [(50, 50 + s * size, 50 + z) for s in (1,) for z in np.linspace(-size, size, 12)]
    lines = [
        np.linspace(nodes[0], nodes[1], 30), np.linspace(nodes[1], nodes[2], 12),
        np.array([nodes[1], *detour, nodes[2]]), np.linspace(nodes[2], nodes[3], 30),
    ]  # fmt: skip
    return graph_of(nodes, [(0, 1), (1, 2), (1, 2), (2, 3)], lines, radius=[3, 3, 1, 3])


def test_a_ring_below_the_circumference_collapses_and_a_wider_one_stays():
    assert 2 * np.pi * 3 == pytest.approx(18.85, abs=0.01)
    small, edits = clean(ring_on_trunk(3.0))  # 6 + 12 um round
    assert small.n_segments == 1
    assert steps(edits) == ["ring"]
    assert edits[0]["length_um"] > 6  # the thinner side goes
    wide, edits = clean(ring_on_trunk(4.0))  # 8 + 16 um round
    assert wide.n_segments == 4
    assert edits == []


def test_a_loop_from_a_node_to_itself_goes_by_the_same_rule():
    nodes = [(50, 50, 10), (50, 50, 50), (50, 50, 90)]
    for size, kept in ((2.0, False), (9.0, True)):
        angle = np.linspace(0, 2 * np.pi, 30)
        circle = np.stack(
            [50 + 0 * angle, 50 + size - size * np.cos(angle), 50 + size * np.sin(angle)], 1
        )
        lines = [np.linspace(nodes[0], nodes[1], 30), circle, np.linspace(nodes[1], nodes[2], 30)]
        graph = graph_of(nodes, [(0, 1), (1, 1), (1, 2)], lines)
        assert (clean(graph)[0].n_segments == 3) == kept


# ---------------------------------------------------------------------- gaps


def gap(*, distance=8.0, angle_deg=0.0, radii=(2.0, 2.0)):
    """Two vessels of 30 um along x with a gap between; the second leans by an angle."""
    lean = np.radians(angle_deg)
    start = np.array([50.0, 50.0, 40.0 + distance])
    nodes = [
        (50, 50, 10),
        (50, 50, 40),
        start,
        start + 30 * np.array([0, np.sin(lean), np.cos(lean)]),
    ]
    return graph_of(nodes, [(0, 1), (2, 3)], radius=radii)


@pytest.mark.parametrize(
    ("changes", "bridged"),
    [
        ({}, True),
        ({"distance": 15.0}, True),  # 4 x (2 + 2) is the limit
        ({"distance": 17.0}, False),
        ({"angle_deg": 40.0}, True),
        ({"angle_deg": 50.0}, False),
        ({"radii": (2.0, 3.9)}, True),
        ({"radii": (1.0, 3.0)}, False),
    ],
)
def test_gaps_are_bridged_by_the_rule(changes, bridged):
    graph, edits = clean(gap(**changes))
    assert graph.n_segments == (1 if bridged else 2)
    assert steps(edits) == (["gap"] if bridged else [])
    if bridged:
        assert graph.segment_review.tolist() == ["bridged gap"]
        assert "gap of" in edits[0]["reason"]


def test_ends_that_do_not_face_each_other_stay_apart():
    nodes = [(50, 50, 10), (50, 50, 40), (50, 58, 10), (50, 58, 40)]  # side by side
    assert clean(graph_of(nodes, [(0, 1), (2, 3)], radius=2.0))[1] == []


def test_each_end_is_joined_to_the_best_one_only():
    nodes = [(50, 50, 10), (50, 50, 40), (50, 50, 48), (50, 50, 80), (50, 53, 50), (50, 70, 80)]
    graph, edits = clean(graph_of(nodes, [(0, 1), (2, 3), (4, 5)], radius=2.0))
    assert steps(edits) == ["gap"]
    assert edits[0]["position_um"] == [50.0, 50.0, 44.0]
    assert graph.n_segments == 2


def test_a_gap_is_not_bridged_across_another_vessel():
    base = gap(distance=12.0)
    nodes = [*base.node_position_um, (50, 20, 46), (50, 80, 46)]
    graph = graph_of(nodes, [(0, 1), (2, 3), (4, 5)], radius=2.0)
    assert clean(graph)[1] == []


@pytest.mark.parametrize(("inside", "bridged"), [(0.8, True), (0.1, False)])
def test_grey_values_decide_where_they_are_given(inside, bridged):
    def contrast_at(places_um):
        x = places_um[:, 2]
        return np.where((x > 41) & (x < 47), inside, 1.0)

    graph, edits = clean(gap(), contrast_at=contrast_at)
    assert (graph.n_segments == 1) == bridged
    if bridged:
        assert "grey at" in edits[0]["reason"]


def test_ends_cut_by_a_face_are_not_bridged():
    graph = gap().replace(extent_um=(100.0, 51.0, 100.0))
    graph = graph.replace(node_kind=np.full(4, NODE_KINDS.index("border"), dtype=np.int8))
    limits = {"radii": 4.0, "angle_deg": 45.0, "radius_ratio": 2.0, "grey": 0.3}
    assert facing_ends(graph, **limits, contrast_at=None) == []


def test_an_ends_axis_points_outwards():
    graph = gap()
    np.testing.assert_allclose(end_geometry(graph, 1).outward[0], [0, 0, 1], atol=1e-12)
    np.testing.assert_allclose(end_geometry(graph, 0).outward[1], [0, 0, -1], atol=1e-12)


# ---------------------------------------------------------------------- contacts


def touching(*, neck_radius=0.8, apart=6.0):
    """Two vessels of radius 3, one along x and one along y above it, and the contact between."""
    nodes = [
        (50, 50, 10), (50, 50, 50), (50, 50, 90), (50 + apart, 10, 50), (50 + apart, 50, 50),
        (50 + apart, 90, 50),
    ]  # fmt: skip
    graph = graph_of(nodes, [(0, 1), (1, 2), (3, 4), (4, 5), (1, 4)])
    radii = graph.point_radius_map_um.copy()
    points = graph.points_of(4)
    radii[points.start + 1 : points.stop - 1] = neck_radius
    return graph.replace(point_radius_map_um=radii)


def test_touching_vessels_are_parted_by_their_neck():
    graph, edits = clean(touching())
    assert steps(edits) == ["contact"]
    assert (graph.n_segments, graph.n_nodes) == (2, 4)
    assert "neck of 0.8 um" in edits[0]["reason"]


@pytest.mark.parametrize("changes", [{"neck_radius": 2.5}, {"apart": 14.0}])
def test_a_wide_or_a_long_connection_stays(changes):
    assert clean(touching(**changes))[0].n_segments == 5


def test_a_neck_without_a_grey_dip_stays():
    def bright(places_um):
        return np.ones(len(places_um))

    def dips(places_um):
        return np.where(np.abs(places_um[:, 0] - 53) < 1.5, 0.5, 1.0)

    assert clean(touching(), contrast_at=bright)[0].n_segments == 5
    assert clean(touching(), contrast_at=dips)[0].n_segments == 2


@pytest.mark.parametrize(("apart", "parted"), [(5.0, True), (1.0, False)])
def test_a_node_of_four_is_parted_where_the_axes_pass_one_another(apart, parted):
    node = (50, 50, 50)
    nodes = [(50, 50, 10), node, (50, 50, 90), (50 + apart, 10, 50), (50 + apart, 90, 50)]
    lines = [np.linspace(nodes[a], node, 41) for a in (0, 2)]
    for end in (3, 4):
        line = np.linspace(nodes[end], (50 + apart, 50, 50), 41)
        line[-3:, 0] = np.linspace(50 + apart, 50, 3)
        lines.append(line)
    graph = graph_of(nodes, [(0, 1), (2, 1), (3, 1), (4, 1)], lines)
    cleaned, edits = clean(graph)
    assert (cleaned.n_segments == 2) == parted
    assert steps(edits) == (["contact"] if parted else [])


def test_a_true_fork_is_no_contact():
    assert (
        touching_vessels(trunk_with_branch(20.0), neck=0.7, angle_deg=150, contrast_at=None) == []
    )


# ---------------------------------------------------------------------- parts, ends, wiring


def test_small_parts_go_and_are_recorded():
    nodes = [(50, 50, 10), (50, 50, 90), (20, 20, 20), (20, 20, 35), (70, 70, 20), (70, 70, 45)]
    graph, edits = clean(graph_of(nodes, [(0, 1), (2, 3), (4, 5)]))
    assert graph.n_segments == 2  # 15 um are less than three diameters of 6 um, 25 um are not
    assert steps(edits) == ["part"]
    assert edits[0]["length_um"] == 15.0


def test_parts_can_be_judged_by_the_largest():
    nodes = [(50, 50, 10), (50, 50, 90), (70, 70, 20), (70, 70, 45)]
    settings = CleanSettings(part_length_share=0.5)
    assert clean(graph_of(nodes, [(0, 1), (2, 3)]), settings=settings)[0].n_segments == 1


def test_the_longest_part_stays_however_small():
    assert clean(graph_of([(50, 50, 50), (50, 50, 54)], [(0, 1)]))[0].n_segments == 1


def test_a_short_part_that_two_faces_cut_stays():
    nodes = [(50, 50, 10), (50, 50, 90), (2, 20, 0), (0, 20, 2)]
    graph = graph_of(nodes, [(0, 1), (2, 3)])
    assert clean(graph)[0].n_segments == 2


def test_lone_nodes_go():
    graph = graph_of([(50, 50, 10), (50, 50, 90), (20, 20, 20)], [(0, 1)])
    cleaned, edits = clean(graph)
    assert cleaned.n_nodes == 2
    assert steps(edits) == ["part"]


def test_series_segments_become_one_in_order():
    nodes = [(50, 50, 10), (50, 50, 30), (50, 50, 60), (50, 50, 90)]
    graph = graph_of(nodes, [(0, 1), (2, 1), (2, 3)])
    joined = join_series(graph)
    assert joined.n_segments == 1
    assert joined.segment_length_um().tolist() == [80.0]
    x = joined.point_position_um[:, 2]
    assert (np.diff(x) > 0).all() or (np.diff(x) < 0).all()


def test_parting_a_node_elsewhere_is_refused():
    graph = trunk_with_branch(20.0)
    with pytest.raises(UnusableInputError, match="segment 0 has node 0 at side 0, expected 1"):
        part_node(graph, 1, [(0, 0)], np.zeros(3))


def test_a_clean_graph_is_left_as_it_is():
    graph = trunk_with_branch(20.0)
    once, edits = clean(graph)
    assert edits == []
    np.testing.assert_array_equal(once.point_position_um, graph.point_position_um)
    twice, again = clean(once)
    assert again == []
    np.testing.assert_array_equal(twice.segment_nodes, once.segment_nodes)


def test_edits_are_plain_data_by_auto():
    _, edits = clean(trunk_with_branch(4.0))
    (edit,) = json.loads(json.dumps(edits))
    assert edit["author"] == "auto"
    assert edit["op"] == "remove"
    assert edit["position_um"] == [50.0, 54.0, 50.0]
    assert edit["length_um"] == 4.0


def test_a_graph_without_segments_is_handled():
    empty = CentrelineGraph.from_polylines([[1, 1, 1]], np.zeros((0, 2)), [])
    graph, edits = clean(empty)
    assert graph.n_segments == 0
    assert steps(edits) == ["part"]


def test_a_rough_tube_comes_out_as_one_segment():
    from scipy.ndimage import gaussian_filter

    shape = (25, 25, 70)
    noise = gaussian_filter(np.random.default_rng(0).normal(size=shape), 0.8)
    z, y, _ = np.ogrid[:25, :25, :70]
    inside = np.hypot(z - 12.0, y - 12.0) + 0.35 * noise / noise.std() <= 5.0
    raw = trace(thin(Mask(inside, SPACING), settings=ThinSettings(tip_protrusion=0.2)))
    assert clean(raw)[0].n_segments == 1
