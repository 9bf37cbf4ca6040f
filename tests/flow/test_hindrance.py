"""Hagen-Poiseuille: worked examples, cones, profiles; scaling and subdivision."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from tree_cases import rows_of, table, worked_tree

from ramulus.errors import UnusableInputError
from ramulus.flow.hindrance import (
    hindrance_per_um3,
    hindrance_radius_um,
    point_hindrance_per_um3,
    segment_hindrance_per_um3,
)
from ramulus.network.graph import CentrelineGraph


def tube(length_um, radius_um):
    return hindrance_per_um3([0.0, length_um], [radius_um, radius_um])


def example(number):
    return rows_of("poiseuille_examples", id=number).iloc[0]


def tube_of(row):
    """Resistance of a worked example's tube, Pa s/m3."""
    return tube(row.length_um, row.radius_um) * 1e18 * row.viscosity_mpa_s * 1e-3


# Source of these, row by row: poiseuille_examples.csv (OpenStax College Physics 12.4; a public
# solution of a textbook problem; Stewart, Calculus, answers from memory; derived).
@pytest.mark.parametrize("number", [2, 10, 11])
def test_flow_of_a_worked_example(number):
    row = example(number)
    flow = row.pressure_drop_pa / tube_of(row)
    expected = float(row.recomputed) * (1e-6 if "cm3/s" in row.asked else 1.0)
    assert flow == pytest.approx(expected, rel=2e-5)
    if isinstance(row.published, str) or np.isfinite(row.published):
        published = float(row.published) * (1e-6 if "cm3/s" in row.asked else 1.0)
        assert flow == pytest.approx(published, rel=5e-3)


@pytest.mark.parametrize(("number", "behind_pa"), [(1, 1066.0), (8, 0.0)])
def test_pressure_of_a_worked_example(number, behind_pa):
    row = example(number)
    pressure = row.flow_um3_per_s * 1e-18 * tube_of(row) + behind_pa
    assert pressure == pytest.approx(float(row.recomputed), rel=1e-4)
    assert pressure == pytest.approx(float(row.published), rel=5e-3)


def test_mean_velocity_of_a_worked_example():
    row = example(12)
    area = np.pi * (row.radius_um * 1e-6) ** 2
    velocity = row.pressure_drop_pa / tube_of(row) / area
    assert velocity == pytest.approx(float(row.recomputed), rel=1e-5)


def test_axial_velocity_of_a_worked_example():
    row = example(9)
    area = np.pi * (row.radius_um * 1e-6) ** 2
    axial = 2 * row.pressure_drop_pa / tube_of(row) / area * 100
    assert axial == pytest.approx(float(row.published), rel=5e-4)


@pytest.mark.parametrize(
    ("number", "flow_factor"), [(3, 0.5), (5, 0.01), (7, 10.0)], ids=["half", "hundredth", "ten"]
)
def test_radius_for_a_wanted_flow(number, flow_factor):
    factor = float(example(number).recomputed)
    assert tube(100, 10) / tube(100, 10 * factor) == pytest.approx(flow_factor, rel=1e-4)


def test_flow_and_pressure_after_a_narrowing():
    # 0.95 of the radius lets 0.81 through; 0.90 takes 1.52 times the pressure.
    assert tube(100, 10) / tube(100, 9.5) == pytest.approx(float(example(4).published), abs=5e-3)
    assert tube(100, 9.0) / tube(100, 10) == pytest.approx(float(example(6).published), abs=5e-3)


@pytest.mark.parametrize("number", [13, 14])
def test_resistance_of_round_vessels(number):
    row = example(number)
    assert tube_of(row) == pytest.approx(float(row.recomputed), rel=1e-5)


def test_a_cone_is_exact_with_two_points():
    coarse = hindrance_per_um3([0, 1000], [50, 30])
    assert coarse == pytest.approx(float(example(15).recomputed), rel=1e-5)
    arc = np.linspace(0, 1000, 301)
    assert hindrance_per_um3(arc, 50 - 20 * arc / 1000) == pytest.approx(coarse, rel=1e-12)
    integral = quad(lambda s: 8 / np.pi / (50 - 20 * s / 1000) ** 4, 0, 1000)[0]
    assert coarse == pytest.approx(integral, rel=1e-10)


def test_an_exponential_taper_of_the_area():
    # Dog aorta, common practice, no source: R0 0.8 cm, A0 exp(-B x / R0), B 0.02 over 40 cm.
    arc = np.linspace(0, 400_000, 400)
    radius = 8000 * np.exp(-0.02 * arc / 8000 / 2)
    found = hindrance_per_um3(arc, radius) * 1e12
    assert found == pytest.approx(float(example(16).recomputed), rel=1e-4)


def test_a_lognormal_radius_raises_the_hindrance():
    # exp(10 s^2) over that of the arithmetic mean radius (poiseuille_examples.csv, derived).
    from scipy.stats import norm

    share = (np.arange(20_000) + 0.5) / 20_000
    radius = 10 * np.exp(0.10 * norm.ppf(share))
    arc = np.linspace(0, 1000, len(radius))
    ratio = hindrance_per_um3(arc, radius) / tube(1000, radius.mean())
    assert ratio == pytest.approx(float(example(18).recomputed), rel=2e-3)


def test_halving_the_radius_raises_resistance_16_times():
    # Common practice, no source.
    assert tube(300, 5) == pytest.approx(16 * tube(300, 10), rel=1e-14)


def test_segments_of_the_worked_tree():
    # Source: worked_tree_flow.csv, derived by hand and by program.
    tree = worked_tree()
    found = [tube(s.length_um, s.diameter_um / 2) for s in tree.itertuples()]
    np.testing.assert_allclose(found, table("worked_tree_flow")["hindrance_per_um3"], rtol=1e-9)


positive = st.floats(0.5, 500)


@given(positive, positive, positive, st.floats(0.01, 100))
def test_scaling_by_k_changes_the_hindrance_by_k_to_the_minus_three(length, first, last, k):
    once = hindrance_per_um3([0, length], [first, last])
    assert hindrance_per_um3([0, k * length], [k * first, k * last]) == pytest.approx(
        once * k**-3, rel=1e-9
    )


@given(positive, positive, positive, st.floats(0.05, 0.95))
def test_a_point_between_changes_nothing(length, first, last, at):
    middle = first + at * (last - first)
    assert hindrance_per_um3([0, at * length, length], [first, middle, last]) == pytest.approx(
        hindrance_per_um3([0, length], [first, last]), rel=1e-9
    )


@given(positive, st.lists(positive, min_size=2, max_size=6))
def test_direction_does_not_matter(step, radii):
    arc = step * np.arange(len(radii))
    assert hindrance_per_um3(arc, radii) == pytest.approx(
        hindrance_per_um3(arc, radii[::-1]), rel=1e-12
    )


def bent(radii):
    nodes = [[0, 0, 0], [0, 3, 4], [0, 3, 16]]
    return CentrelineGraph.from_polylines(
        nodes, [[0, 1], [1, 2]], [nodes[:2], [[0, 3, 4], [0, 3, 8], [0, 3, 16]]], radii
    )


def test_segments_of_a_graph_are_integrated_one_by_one():
    graph = bent([[2.0, 3.0], [3.0, 2.5, 1.0]])
    expected = [hindrance_per_um3([0, 5], [2, 3]), hindrance_per_um3([0, 4, 12], [3, 2.5, 1])]
    np.testing.assert_allclose(segment_hindrance_per_um3(graph), expected, rtol=1e-12)
    by_point = point_hindrance_per_um3(graph)
    assert by_point[0] == 0
    assert by_point[2] == 0
    assert by_point.sum() == pytest.approx(sum(expected))


def test_an_unknown_radius_leaves_its_own_segment_alone_unknown():
    found = segment_hindrance_per_um3(bent([[2.0, 3.0], [3.0, np.nan, 1.0]]))
    assert np.isfinite(found[0])
    assert np.isnan(found[1])


def test_a_segment_without_length_has_no_hindrance():
    graph = CentrelineGraph.from_polylines(
        [[0, 0, 0], [0, 0, 0]], [[0, 1]], [[[0, 0, 0], [0, 0, 0]]], [[1.0, 1.0]]
    )
    assert segment_hindrance_per_um3(graph).tolist() == [0.0]
    assert np.isnan(hindrance_radius_um(np.array([0.0]), np.array([0.0]))).all()


def test_the_radius_with_the_same_hindrance():
    graph = bent([[2.0, 2.0], [3.0, 2.5, 1.0]])
    length, hindrance = graph.segment_length_um(), segment_hindrance_per_um3(graph)
    radius = hindrance_radius_um(length, hindrance)
    assert radius[0] == pytest.approx(2.0)
    assert tube(length[1], radius[1]) == pytest.approx(hindrance[1])


@pytest.mark.parametrize(
    ("arc", "radius", "words"),
    [
        ([0, 1], [1, 2, 3], "arc_um, radius_um"),
        ([0], [1], "arc_um, radius_um"),
        ([0, 0], [1, 1], "arc_um"),
        ([1, 0], [1, 1], "arc_um"),
        ([0, np.nan], [1, 1], "arc_um"),
        ([0, 1], [1, 0], "radius_um"),
        ([0, 1], [1, -2], "radius_um"),
        ([0, 1], [1, np.nan], "radius_um"),
    ],
)
def test_a_profile_that_is_none_is_refused_by_name(arc, radius, words):
    with pytest.raises(UnusableInputError, match=words):
        hindrance_per_um3(arc, radius)
