"""Grown trees: exponent, angles, clearance and borders, checked on the finished graph."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.spatial.distance import cdist

from ramulus.errors import UnusableInputError
from ramulus.phantom._clearance_kernels import smallest_gap
from ramulus.phantom.grow import TreeSettings, daughters_of, grow, optimal_angles_deg
from ramulus.phantom.paths import PARTING_SLOPE, Box, bent_path

REFERENCE = Path(__file__).parents[1] / "reference"
SPACING = (2.0, 1.0, 1.0)
SHAPE = (48, 96, 96)
SETTINGS = TreeSettings(exponent=2.7, min_segments=11, max_segments=25)


@pytest.fixture(scope="module")
def tree():
    return grow(SETTINGS, shape=SHAPE, spacing_um=SPACING, seed=4)


def forks(tree):
    """Parent, daughters of each junction; segments run downstream."""
    for node in np.flatnonzero(tree.node_degree() == 3):
        parent = int(np.flatnonzero(tree.segment_nodes[:, 1] == node)[0])
        yield parent, np.flatnonzero(tree.segment_nodes[:, 0] == node)


def test_every_junction_obeys_the_exponent(tree):
    radius = tree.segment_radius_um()
    for parent, daughters in forks(tree):
        assert (radius[daughters] ** 2.7).sum() == pytest.approx(radius[parent] ** 2.7)
        assert 0.5 <= radius[daughters].min() / radius[daughters].max() <= 1


def test_it_is_a_tree_rooted_in_the_inlet_face(tree):
    degree = tree.node_degree()
    assert tree.n_segments == tree.n_nodes - 1
    assert set(degree) == {1, 3}
    assert tree.node_kind_names()[0] == "border"
    assert tree.node_position_um[0, 1] == pytest.approx(-0.5)  # y-low
    assert tree.point_radius_um[0] == SETTINGS.root_radius_um
    assert tree.point_radius_um.min() >= SETTINGS.min_radius_um


def test_daughters_leave_at_the_angles_of_least_volume(tree):
    def heading(segment, *, start):
        points = tree.point_position_um[tree.points_of(segment)]
        step = points[1] - points[0] if start else points[-1] - points[-2]
        return step / np.linalg.norm(step)

    radius = tree.segment_radius_um()
    for parent, daughters in forks(tree):
        wider, thinner = daughters[np.argsort(-radius[daughters])]
        angles = optimal_angles_deg(radius[parent], radius[wider], radius[thinner])
        along = heading(parent, start=False)
        for daughter, angle in zip((wider, thinner), angles, strict=True):
            cosine = along @ heading(daughter, start=True)
            assert np.rad2deg(np.arccos(cosine)) == pytest.approx(angle, abs=1.0)


def test_chosen_angles_are_kept():
    settings = TreeSettings(angles="chosen", angle_deg=(30, 50), bend_deg=0, max_segments=3)
    tree = grow(settings, shape=(96, 96, 96), spacing_um=(1, 1, 1), seed=1)
    chords = tree.point_position_um[tree.point_offsets[1:] - 1]
    chords = chords - tree.point_position_um[tree.point_offsets[:-1]]
    chords /= np.linalg.norm(chords, axis=1, keepdims=True)
    assert np.rad2deg(np.arccos(chords[1:] @ chords[0])) == pytest.approx([30, 50])


def test_vessels_that_share_no_junction_keep_their_clearance(tree):
    radius = tree.segment_radius_um()
    for a in range(tree.n_segments):
        for b in range(a):
            if set(tree.segment_nodes[a]) & set(tree.segment_nodes[b]):
                continue
            pair = [tree.point_position_um[tree.points_of(s)] for s in (a, b)]
            gap = cdist(*pair).min() - radius[a] - radius[b]
            assert gap >= SETTINGS.clearance_um


def test_vessels_at_a_junction_part_within_the_stated_length(tree):
    radius, arc = tree.segment_radius_um(), tree.arc_um()
    for parent, daughters in forks(tree):
        for one in daughters:
            for other in (parent, *daughters[daughters != one]):
                room = radius[one] + radius[other] + SETTINGS.clearance_um
                far = arc[tree.points_of(one)] >= (room + SETTINGS.step_um) / PARTING_SLOPE
                points = tree.point_position_um[tree.points_of(one)][far]
                if len(points):
                    others = tree.point_position_um[tree.points_of(other)]
                    assert cdist(points, others).min() >= room


def test_vessels_lie_inside_or_are_cut_by_a_face(tree):
    box = Box.of(SHAPE, SPACING)
    depth = box.depth_um(tree.node_position_um).min(axis=1)
    kind = tree.node_kind_names()
    assert np.abs(depth[kind == "border"]).max() < 1e-9
    room = SETTINGS.min_radius_um + SETTINGS.clearance_um
    assert depth[kind != "border"].min() >= room
    assert box.depth_um(tree.point_position_um).min() > -1e-9


def test_leaves_end_inside_where_asked():
    tree = grow(
        TreeSettings(leaves="inside", root_radius_um=4, max_segments=9),
        shape=(80, 80, 80), spacing_um=(1, 1, 1), seed=2,
    )  # fmt: skip
    assert (tree.node_kind_names() == "border").sum() == 1


def test_the_same_seed_gives_the_same_tree(tree):
    again = grow(SETTINGS, shape=SHAPE, spacing_um=SPACING, seed=4)
    assert again.point_position_um.tobytes() == tree.point_position_um.tobytes()
    other = grow(SETTINGS, shape=SHAPE, spacing_um=SPACING, seed=5)
    assert other.node_position_um.shape != tree.node_position_um.shape or not np.allclose(
        other.node_position_um, tree.node_position_um
    )


# Source: bifurcation_exact.csv, derived in closed form for four exponents and ten asymmetries.
@pytest.mark.parametrize("row", list(pd.read_csv(REFERENCE / "bifurcation_exact.csv").itertuples()))
def test_daughters_and_optimal_angles_equal_the_exact_table(row):
    radii = daughters_of(1.0, row.asymmetry_d2_over_d1, row.exponent)
    assert radii == pytest.approx((row.d1_over_d0, row.d2_over_d0), abs=2e-6)
    expected = (row.optimal_angle_1_deg, row.optimal_angle_2_deg)
    # at exponent 2 the cosine is 1: its arc cosine keeps half of the digits
    assert optimal_angles_deg(1.0, *radii) == pytest.approx(expected, abs=2e-4)


def test_a_bent_path_has_its_length_and_starts_straight():
    direction = np.array([0.6, 0.0, 0.8])
    path = bent_path(
        np.zeros(3), direction, length_um=50, step_um=1, bend_deg=20, radius_um=3,
        rng=np.random.default_rng(1),
    )  # fmt: skip
    steps = np.linalg.norm(np.diff(path, axis=0), axis=1)
    assert steps.sum() == pytest.approx(50)
    assert np.ptp(steps) < 1e-9
    assert path[1] @ direction / np.linalg.norm(path[1]) > 0.9999


def test_a_path_is_cut_exactly_on_the_face():
    box = Box.of((10, 10, 10), (1.0, 1.0, 1.0))
    cut, face = box.cut(np.array([[5.0, 5, 5], [5, 5, 8], [5, 6, 11]]))
    assert face == 5  # x-high
    np.testing.assert_allclose(cut[-1], [5, 5.5, 9.5])
    whole, face = box.cut(np.array([[5.0, 5, 5], [5, 5, 8]]))
    assert (len(whole), face) == (2, -1)


def test_the_gap_kernel_equals_plain_distances():
    rng = np.random.default_rng(3)
    a, b = rng.uniform(0, 10, (12, 3)), rng.uniform(0, 10, (9, 3))
    ra, rb = rng.uniform(0.1, 1, 12), rng.uniform(0.1, 1, 9)
    plain = (cdist(a, b) - ra[:, None] - rb).min()
    gap = smallest_gap(a, ra, np.zeros(12), b, rb, 0.0, plain + 1e-9)
    assert gap == pytest.approx(plain)
    assert smallest_gap(a, ra, np.zeros(12), b, rb, 0.0, plain - 1e-9) == np.inf


def test_a_volume_without_room_is_refused():
    with pytest.raises(UnusableInputError, match="min_segments: found room for 0"):
        grow(TreeSettings(), shape=(12, 12, 12), spacing_um=(1, 1, 1), seed=0)


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"asymmetry": (0.9, 0.5)}, "asymmetry"),
        ({"min_radius_um": 9.0}, "min_radius_um"),
        ({"angles": "chosen", "angle_deg": (20, 20)}, "angle_deg"),
    ],
)
def test_impossible_settings_are_refused(wrong, message):
    with pytest.raises(UnusableInputError, match=message):
        grow(TreeSettings(**wrong), shape=SHAPE, spacing_um=SPACING, seed=0)
