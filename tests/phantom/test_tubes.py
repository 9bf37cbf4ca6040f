"""Single vessels of exact shape."""

import numpy as np
import pytest

from ramulus.errors import UnusableInputError
from ramulus.phantom.paths import Box
from ramulus.phantom.tubes import arc_tube, ellipse_axes_um, helix_tube, straight_tube, y_junction

GRID = {"shape": (30, 60, 60), "spacing_um": (2.0, 1.0, 1.0)}


@pytest.mark.parametrize("direction", [(0, 0, 1), (1, 2, -3), (-1, 0.1, 0)])
def test_a_tube_runs_from_face_to_face_through_the_middle(direction):
    tube = straight_tube(radius_um=2, direction=direction, offset_um=(0.3, -0.2, 0.1), **GRID)
    ends = tube.node_position_um
    assert np.abs(Box.of(**GRID).depth_um(ends).min(axis=1)).max() < 1e-9
    along = (ends[1] - ends[0]) / np.linalg.norm(ends[1] - ends[0])
    assert along == pytest.approx(np.array(direction) / np.linalg.norm(direction))
    middle = np.array([29.3, 29.3, 29.6])
    assert np.linalg.norm(np.cross(middle - ends[0], along)) < 1e-9
    assert (tube.node_kind_names() == "border").all()


def test_an_arc_has_its_bend_radius_and_length():
    arc = arc_tube(radius_um=2, bend_radius_um=20, angle_deg=90, **GRID)
    away = np.linalg.norm(arc.point_position_um - np.array([29.0, 29.5, 29.5]), axis=1)
    assert away == pytest.approx(np.full(len(away), 20.0))
    assert arc.segment_length_um()[0] == pytest.approx(np.pi / 2 * 20, rel=1e-4)


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_helix_has_its_length_and_axis(axis):
    coil = helix_tube(radius_um=1.5, helix_radius_um=8, pitch_um=10, turns=3, axis=axis, **GRID)
    assert coil.segment_length_um()[0] == pytest.approx(3 * np.hypot(2 * np.pi * 8, 10), rel=1e-4)
    assert np.ptp(coil.point_position_um[:, axis]) == pytest.approx(30)


def test_a_junction_obeys_its_exponent_and_angles():
    fork = y_junction(
        parent_radius_um=5, asymmetry=0.7, exponent=2.5, angles_deg=(20, 55), axis=(1, 1, 0),
        side=(0, 0, 1), node_offset_um=(1, -2, 3), **GRID,
    )  # fmt: skip
    parent, wider, thinner = fork.segment_radius_um()
    assert wider**2.5 + thinner**2.5 == pytest.approx(parent**2.5)
    assert thinner / wider == pytest.approx(0.7)
    ends = fork.node_position_um[1:] - fork.node_position_um[0]
    ends /= np.linalg.norm(ends, axis=1, keepdims=True)
    assert np.rad2deg(np.arccos(-ends[0] @ ends[1:].T)) == pytest.approx([20, 55])
    assert ends[1, 2] > 0 > ends[2, 2]


def test_a_flat_lumen_resists_more_than_a_round_one_of_its_area():
    # r^4 = 2 a^3 b^3 / (a^2 + b^2) with a b = r0^2: at b/a = 1/2, (2 * r0^6 / (2.5 r0^2))^(1/4)
    assert ellipse_axes_um(1.0, 0.5)[2] == pytest.approx((2 / 2.5) ** 0.25)
    assert ellipse_axes_um(3.0, 1.0) == pytest.approx((3, 3, 3))


def test_an_axis_outside_the_volume_is_refused():
    with pytest.raises(UnusableInputError, match="offset_um"):
        straight_tube(radius_um=2, direction=(0, 0, 1), offset_um=(0, 80, 0), **GRID)
    with pytest.raises(UnusableInputError, match="radius_um"):
        straight_tube(radius_um=0, direction=(0, 0, 1), **GRID)
