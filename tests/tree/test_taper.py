"""Exponential taper along one vessel, the trunk and the elements."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from tree_cases import graph_of

from ramulus.network.graph import CentrelineGraph
from ramulus.quantities import Undefined
from ramulus.tree.elements import elements
from ramulus.tree.root import Inlets, direct
from ramulus.tree.taper import element_taper, fit_taper, trunk_segments, trunk_taper


@pytest.mark.parametrize(("b", "end_cm2"), [(0.02, 0.74), (0.05, 0.16)])
def test_a_dogs_aorta(b, end_cm2):
    # Common practice, no source: A0 = 2 cm^2, R0 = 0.8 cm, B = 0.02 to 0.05 over 40 cm; A0 exp(-B x
    # / R0) leaves 0.74 to 0.16 cm^2. The law is fitted to radii, so R0 = sqrt(A0 / pi) = 0.798 cm.
    x_um = np.linspace(0, 400_000, 200)
    r0_um = np.sqrt(2 / np.pi) * 1e4
    area_cm2 = 2 * np.exp(-b * x_um / r0_um)
    found, start_um = fit_taper(x_um, np.sqrt(area_cm2 / np.pi) * 1e4)
    assert found.value == pytest.approx(b)
    assert start_um == pytest.approx(r0_um)
    assert start_um == pytest.approx(8000, rel=0.003)
    assert area_cm2[-1] == pytest.approx(end_cm2, abs=0.01)


@given(st.floats(-0.05, 0.05), st.floats(1, 1000), st.floats(0.01, 100))
def test_b_is_without_dimension(b, r0, scale):
    x = np.linspace(0, 50 * r0, 30)
    r = r0 * np.exp(-b * x / (2 * r0))
    found, start = fit_taper(scale * x, scale * r)
    assert found.value == pytest.approx(b, abs=1e-9)
    assert start == pytest.approx(scale * r0)


def test_line_is_that_of_scipy_with_fewer_independent_points():
    # Source: scipy.stats.linregress on the logarithms. 400 um of a vessel 8 um in radius hold about
    # 25 independent radii, not 200, so that the standard error grows by sqrt(200 / 25).
    random = np.random.default_rng(2)
    x = np.linspace(0, 400, 200)
    r = 8 * np.exp(-0.02 * x / 16 + 0.05 * random.standard_normal(200))
    line = stats.linregress(x, np.log(r))
    found, start = fit_taper(x, r)
    assert start == pytest.approx(np.exp(line.intercept))
    assert found.value == pytest.approx(-2 * start * line.slope)
    half = (found.high - found.low) / 2 / stats.t.ppf(0.975, 24)
    assert half / (2 * start * line.stderr) == pytest.approx(np.sqrt(200 / 26), rel=0.15)


def test_radii_that_are_not_known_are_left_out():
    x = np.linspace(0, 400, 50)
    r = 8 * np.exp(-0.03 * x / 16)
    r[::7] = np.nan
    assert fit_taper(x, r)[0].value == pytest.approx(0.03)


@pytest.mark.parametrize("r", [[], [5.0] * 3, [np.nan] * 9])
def test_too_few_radii_have_no_taper(r):
    found, start = fit_taper(np.arange(len(r)), r)
    assert isinstance(found, Undefined)
    assert "fewer than four radii" in found.reason
    assert np.isnan(start)


def test_a_vessel_hardly_longer_than_wide_has_no_interval():
    x = np.linspace(0, 20, 10)
    found, _ = fit_taper(x, 8 - 0.01 * x)
    assert found.value > 0
    assert np.isnan(found.low)
    assert np.isnan(found.high)


#   A trunk of three segments with a side branch at each joint; the first side branch is wider than
#   the trunk there, but a stub.
#
#             4      3 5
#            /        |/
#   0 ---- 1 ------ 2
PARENT = np.array([-1, 0, 1, 2, 0, 2])
WIDTH = np.array([40.0, 30.0, 20.0, 10.0, 35.0, 9.0])


def tapering(b=0.02, turned=()):
    """The tree with one law of taper along its main stem, points from the root on."""
    graph = graph_of(PARENT, WIDTH, np.full(6, 300.0), points=40)
    radius = graph.point_radius_um.copy()
    start = {0: 0.0, 1: 300.0, 2: 600.0, 3: 900.0}
    for segment, first in start.items():
        points = graph.points_of(segment)
        radius[points] = 20 * np.exp(-b * (first + np.linspace(0, 300, 40)) / 40)
    reverse = np.isin(np.arange(6), turned)
    return graph.replace(point_radius_um=radius).with_directions(reverse)


def rooted(graph):
    return direct(graph, Inlets(np.array([0]), "given"))


def test_the_trunk_is_the_main_stem_not_a_wide_stub():
    graph = tapering()
    assert trunk_segments(rooted(graph), WIDTH / 2, 0) == [0, 1, 2, 3]
    assert trunk_segments(rooted(graph), WIDTH / 2, 3) == []


@pytest.mark.parametrize("turned", [(), (0, 2), (1, 2, 3)])
def test_taper_of_the_trunk_whatever_the_direction_of_storage(turned):
    graph = tapering(turned=turned)
    found = trunk_taper(graph, rooted(graph), 0)
    assert found.value == pytest.approx(0.02)
    assert found.low <= found.value <= found.high


def test_points_in_junction_zones_do_not_enter():
    graph = tapering()
    zone, radius = graph.point_in_zone.copy(), graph.point_radius_um.copy()
    zone[:5] = True
    radius[:5] = 500.0
    graph = graph.replace(point_in_zone=zone, point_radius_um=radius)
    assert trunk_taper(graph, rooted(graph), 0).value == pytest.approx(0.02)


def test_taper_of_elements_joins_their_segments():
    graph = tapering(turned=(1,))
    order = np.array([3, 3, 2, 1, 1, 1])
    found = elements(PARENT, order, np.full(6, 300.0), WIDTH)
    rows = element_taper(graph, rooted(graph), found)
    assert rows["element_id"].tolist() == list(range(5))
    trunk = rows.loc[found.element_of_segment[0]]
    assert trunk["n_points"] == 80
    assert trunk["length_um"] == 600
    assert trunk["taper_b"] == pytest.approx(0.02)
    assert trunk["radius0_um"] == pytest.approx(20)
    # The second element begins at 600 um of the stem: its own R0 there, and B in proportion to it.
    second = rows.loc[found.element_of_segment[2]]
    assert second["radius0_um"] == pytest.approx(20 * np.exp(-0.3))
    assert second["taper_b"] == pytest.approx(0.02 * np.exp(-0.3))
    assert rows.loc[found.element_of_segment[4], "taper_b"] == pytest.approx(0, abs=1e-12)


def test_each_element_is_fitted_as_if_alone():
    graph = tapering()
    random = np.random.default_rng(4)
    graph = graph.replace(point_radius_um=graph.point_radius_um * random.lognormal(0, 0.1, 240))
    order = np.arange(6, 0, -1)
    found = elements(PARENT, order, np.full(6, 300.0), WIDTH)
    rows = element_taper(graph, rooted(graph), found)
    for segment in range(6):
        alone, r0 = fit_taper(
            np.linspace(0, 300, 40), graph.point_radius_um[graph.points_of(segment)]
        )
        row = rows.loc[found.element_of_segment[segment]]
        assert (row["taper_b"], row["radius0_um"]) == pytest.approx((alone.value, r0))
        assert row["taper_b_low"] == pytest.approx(alone.low)


def test_a_root_without_a_vessel_has_no_trunk():
    line = [[0, 0, 0], [0, 0, 9]]
    graph = CentrelineGraph.from_polylines([*line, [5, 5, 5]], [[0, 1]], [line], [[2.0, 1.0]])
    found = trunk_taper(graph, direct(graph, Inlets(np.array([2]), "given")), 2)
    assert isinstance(found, Undefined)
