"""The scores themselves, on graphs that differ from the truth in one known way."""

import numpy as np
import pytest
from scoring import loops, score

from ramulus.network.graph import CentrelineGraph


def ladder(*, shift=0.0, radius_scale=1.0):
    """Two rails and two rungs along x: 4 junctions, 4 ends, one loop; radius 2, 3 and 6 um."""
    nodes = np.array(
        [[0, 0, 0], [0, 0, 20], [0, 0, 50], [0, 0, 70], [0, 30, 0], [0, 30, 20], [0, 30, 50],
         [0, 30, 70]], dtype=float,
    )  # fmt: skip
    nodes[:, 0] += shift
    ends = [(0, 1), (1, 2), (2, 3), (4, 5), (5, 6), (6, 7), (1, 5), (2, 6)]
    radius = np.array([6, 6, 6, 2, 2, 2, 3, 3]) * radius_scale
    lines = [np.linspace(nodes[a], nodes[b], 31) for a, b in ends]
    return CentrelineGraph.from_polylines(
        nodes, ends, lines, [np.full(31, r) for r in radius], spacing_um=(2, 1, 1),
        extent_um=(20, 60, 80),
    )  # fmt: skip


def test_the_truth_scores_full_marks_against_itself():
    result = score(ladder(), ladder(), hindrance=lambda _: 2.0)
    assert (result.junction_recall, result.junction_precision) == (1, 1)
    assert (result.centreline_recall, result.centreline_precision) == (1, 1)
    assert (result.length_ratio, result.hindrance_ratio) == (1, 1)
    assert (result.loops, result.true_loops, result.components) == (1, 1, 1)
    assert all(e.median == 0 for e in result.radius_errors if e.n)


def test_radius_errors_are_reported_by_class_of_true_radius():
    result = score(ladder(radius_scale=1.05), ladder())
    for low in (2.0, 3.0, 5.0):
        error = result.radius_error(low)
        assert error.n > 50
        assert error.median == pytest.approx(0.05)
        assert error.p90_absolute == pytest.approx(0.05)
    assert result.radius_error(1.2).n == 0


def test_a_lost_rung_costs_junctions_length_and_the_loop():
    measured = ladder().select_segments([0, 1, 2, 3, 4, 5, 6])
    # node 2 and 6 keep degree 2: no junctions
    result = score(measured, ladder())
    assert result.junction_recall == 0.5
    assert result.junction_precision == 1.0
    assert result.length_ratio == pytest.approx(170 / 200)
    # of the lost 30 um of radius 3 the 2 um (one coarse voxel) at either end lie near a rail
    assert result.centreline_recall == pytest.approx(1 - 26 / 200, abs=0.01)
    assert (result.loops, result.true_loops) == (0, 1)
    assert len(result.unmatched_true_um) == 2


def test_an_invented_branch_costs_precision_alone():
    result = score(ladder(), ladder().select_segments([0, 1, 2, 3, 4, 5, 6]))
    assert (result.junction_recall, result.junction_precision) == (1.0, 0.5)
    assert result.centreline_recall == 1.0
    assert result.centreline_precision == pytest.approx(1 - 26 / 200, abs=0.01)


@pytest.mark.parametrize(("shift", "recall"), [(1.9, 1.0), (2.9, 120 / 200), (4.1, 0.0)])
def test_a_centreline_is_found_within_a_voxel_or_half_the_radius(shift, recall):
    # the 70 um of radius 6 allow 3 um, all else the coarsest voxel edge, 2 um
    expected = 70 / 200 if shift == 2.9 else recall
    assert score(ladder(shift=shift), ladder()).centreline_recall == pytest.approx(expected)


@pytest.mark.parametrize(("shift", "recall"), [(3.9, 1.0), (4.1, 0.5), (6.1, 0.0)])
def test_a_junction_is_found_within_two_voxels_or_the_radius(shift, recall):
    # two junctions lie on the rail of radius 6, two on that of radius 2 with a rung of 3: 4 um
    assert score(ladder(shift=shift), ladder()).junction_recall == recall


def test_junctions_match_one_to_one():
    truth = ladder()
    nodes = truth.node_position_um
    twin = nodes[1] + np.array([0, 0, 1.0])  # a second junction beside the first
    tips = [twin + np.array([s, 0, 0]) for s in (1.0, -1.0)]
    extra = CentrelineGraph.from_polylines(
        [*nodes, twin, *tips],
        [*truth.segment_nodes, (8, 1), (8, 9), (8, 10)],
        [truth.point_position_um[truth.points_of(k)] for k in range(8)]
        + [[twin, nodes[1]], [twin, tips[0]], [twin, tips[1]]],
        [np.full(31, 2.0)] * 8 + [[2, 2]] * 3,
        spacing_um=truth.spacing_um,
    )
    result = score(extra, truth)
    assert result.junction_recall == 1.0
    assert result.junction_precision == pytest.approx(4 / 5)


def test_an_empty_measurement_scores_nothing():
    nothing = ladder().select_segments([])
    result = score(nothing, ladder())
    assert (result.junction_recall, result.centreline_recall, result.length_ratio) == (0, 0, 0)
    assert (result.junction_precision, result.centreline_precision) == (1, 1)


def test_loops_count_parallel_vessels_and_rings():
    line = [[0, 0, 0], [0, 0, 5]]
    ring = [[0, 0, 0], [0, 5, 0], [0, 0, 5], [0, 0, 0]]
    graph = CentrelineGraph.from_polylines(line, [[0, 1], [0, 1], [0, 0]], [line, line, ring])
    assert loops(graph) == 2
