"""Pressures and flows: exact networks, other solvers, conservation laws, degenerate parts."""

from fractions import Fraction

import networkx as nx
import numpy as np
import pytest
from flow_cases import between, connected, resistance, solved, unit_resistance, wires
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from tree_cases import graph_of, network, rows_of, table, worked_tree

from ramulus.errors import UnusableInputError
from ramulus.flow import solve as module
from ramulus.flow.hindrance import segment_hindrance_per_um3
from ramulus.flow.solve import network_hindrance_per_um3, solve

few = settings(max_examples=40, deadline=None)


def exact(name):
    """Resistance of a named network, resistor_networks.csv."""
    rows = rows_of("resistor_networks", network=name)
    assert len(rows) == 1
    return float(Fraction(rows["resistance_exact"].iloc[0]))


# ---------------------------------------------------------------- exact networks
# Source: resistor_networks.csv (exact fractions: derived, the cube's read in textbooks).


@pytest.mark.parametrize(
    ("name", "ends", "ohms", "a", "b"),
    [
        ("two in series, 2 and 3", [(0, 1), (1, 2)], [2, 3], 0, 2),
        ("two in parallel, 2 and 3", [(0, 1), (1, 0)], [2, 3], 0, 1),
        (
            "Wheatstone bridge, all 1",
            [(0, 2), (0, 3), (2, 1), (3, 1), (2, 3)], [1, 1, 1, 1, 1], 0, 1,
        ),
        (
            "Wheatstone bridge, balanced 1:2 = 2:4, bridge 7",
            [(0, 2), (2, 1), (0, 3), (3, 1), (2, 3)], [1, 2, 2, 4, 7], 0, 1,
        ),
        (
            "Wheatstone bridge ac 1, ad 2, cb 3, db 4, cd 5",
            [(0, 2), (0, 3), (2, 1), (3, 1), (2, 3)], [1, 2, 3, 4, 5], 0, 1,
        ),
    ],
)  # fmt: skip
def test_small_networks_are_exact(name, ends, ohms, a, b):
    n = 1 + max(max(e) for e in ends)
    assert resistance(n, ends, ohms, a, b) == pytest.approx(exact(name), rel=1e-12)


CUBE = nx.hypercube_graph(3)
O3 = (0, 0, 0)


@pytest.mark.parametrize(
    ("name", "graph", "a", "b"),
    [
        ("cube, edge", CUBE, O3, (0, 0, 1)),
        ("cube, face diagonal", CUBE, O3, (0, 1, 1)),
        ("cube, body diagonal", CUBE, O3, (1, 1, 1)),
        ("4-cube, opposite corners", nx.hypercube_graph(4), (0,) * 4, (1,) * 4),
        ("5-cube, opposite corners", nx.hypercube_graph(5), (0,) * 5, (1,) * 5),
        ("6-cube, opposite corners", nx.hypercube_graph(6), (0,) * 6, (1,) * 6),
        ("tetrahedron, any pair", nx.tetrahedral_graph(), 0, 3),
        ("octahedron, edge", nx.octahedral_graph(), 0, 1),
        ("icosahedron, edge", nx.icosahedral_graph(), 0, 1),
        ("dodecahedron, edge", nx.dodecahedral_graph(), 0, 1),
        ("complete graph of 5 nodes", nx.complete_graph(5), 0, 4),
        ("complete graph of 10 nodes", nx.complete_graph(10), 0, 9),
        ("ring of 7, 1 apart", nx.cycle_graph(7), 0, 1),
        ("ring of 7, 3 apart", nx.cycle_graph(7), 0, 3),
        *((f"square grid {n} by {n} nodes, opposite corners", nx.grid_2d_graph(n, n), (0, 0),
           (n - 1, n - 1)) for n in (2, 3, 4, 5, 6)),
        *((f"cubic grid {n} by {n} by {n} nodes, opposite corners", nx.grid_graph([n] * 3), O3,
           (n - 1,) * 3) for n in (3, 4)),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)  # fmt: skip
def test_networks_of_unit_resistors_are_exact(name, graph, a, b):
    assert unit_resistance(graph, a, b) == pytest.approx(exact(name), rel=1e-12)


@pytest.mark.parametrize("solid", ["octahedron", "icosahedron", "dodecahedron"])
def test_opposite_corners_of_solids_are_exact(solid):
    graph = getattr(nx, f"{solid[:-2]}al_graph")()
    distance = nx.single_source_shortest_path_length(graph, 0)
    far = max(distance, key=distance.get)
    found = unit_resistance(graph, 0, far)
    assert found == pytest.approx(exact(f"{solid}, opposite"), rel=1e-12)


@pytest.mark.parametrize("n", [1, 2, 3, 5, 10])
def test_ladders_are_ratios_of_fibonacci_numbers(n):
    # Series resistors along nodes 1, 2, ... and a shunt to node 0 at each.
    ends = [(1, 2)] + [(k, k + 1) for k in range(2, n + 1)] + [(k, 0) for k in range(2, n + 2)]
    found = resistance(n + 2, ends, np.ones(len(ends)), 1, 0)
    name = f"ladder, {n} sections of series 1 and shunt 1"
    assert found == pytest.approx(exact(name), rel=1e-12)


def test_the_balanced_bridge_carries_nothing():
    graph = wires(4, [(0, 2), (0, 3), (2, 1), (3, 1), (2, 3)])
    found = solved(graph, 0, 1, hindrance_per_um3=np.array([1.0, 2.0, 2.0, 4.0, 7.0]))
    assert abs(found.flow_um3_per_s[4]) < 1e-12 * found.inlet_flow_um3_per_s


# ---------------------------------------------------------------- trees


def test_the_worked_tree():
    """Check the hindrance, flows and shares of the worked tree of thirteen segments.

    Source: worked_tree_flow.csv (derived by hand and by program). Root to all tips at one pressure:
    0.00787810242 per um3; segment 6 holds 0.5404 of it.
    """
    tree, flow = worked_tree(), table("worked_tree_flow")
    graph = graph_of(tree["parent"].to_numpy(), tree["diameter_um"], tree["length_um"])
    outlets = np.flatnonzero((graph.node_degree() == 1) & (np.arange(graph.n_nodes) != 0))
    found = solved(graph, 0, outlets)
    assert found.network_resistance_pa_s_per_m3 / 1e15 == pytest.approx(0.00787810242, rel=1e-9)
    np.testing.assert_allclose(
        found.flow_um3_per_s / found.inlet_flow_um3_per_s, flow["flow_over_inlet_flow"], atol=1e-10
    )
    np.testing.assert_allclose(found.resistance_share, flow["resistance_share"], atol=1e-9)


def cube_law_tree(generations, root_radius_um, radii_long, asymmetry):
    """Grow parents, radii and lengths of a full tree under the cube law."""
    parent, radius, row = [-1], [root_radius_um], [0]
    for _ in range(generations):
        new = []
        for k in row:
            ratio = asymmetry()
            wide = radius[k] / (1 + ratio**3) ** (1 / 3)
            for r in (wide, ratio * wide):
                new.append(len(parent))
                parent.append(k)
                radius.append(r)
        row = new
    radius = np.array(radius)
    return np.array(parent), radius, radii_long * radius


@pytest.mark.parametrize(
    ("generations", "root_um", "radii_long", "name"),
    [
        (3, 100, 10, "cube law, length = 10 radii, daughters 0.5 : 1"),
        (6, 100, 10, "cube law, length = 10 radii, asymmetry drawn anew at every junction"),
    ],
)
def test_cube_law_trees_have_a_closed_form_however_asymmetric(
    generations, root_um, radii_long, name
):
    # Source: murray_tree_cases.csv: (N + 1) 8 l / (pi a0^3), derived.
    random = np.random.default_rng(3)
    draw = (lambda: 0.5) if "0.5" in name else (lambda: random.uniform(0.3, 1))
    parent, radius, length = cube_law_tree(generations, root_um, radii_long, draw)
    graph = graph_of(parent, 2 * radius, length, points=2)
    outlets = np.flatnonzero(graph.node_degree() == 1)[1:]
    row = rows_of("murray_tree_cases", tree=name, generations_after_root=generations).iloc[0]
    found = network_hindrance_per_um3(graph, between(0, outlets))
    assert found == pytest.approx(row["hindrance_per_um3"], rel=1e-9)
    # One drop of pressure for every segment, flow as the cubed radius, one wall shear stress.
    flow = solved(graph, 0, outlets)
    across = np.abs(flow.flow_um3_per_s) * flow.resistance_pa_s_per_m3
    np.testing.assert_allclose(across, across[0], rtol=1e-9)
    shear = np.abs(flow.flow_um3_per_s) / radius**3
    np.testing.assert_allclose(shear, shear[0], rtol=1e-9)


# ---------------------------------------------------------------- other solvers


@few
@given(connected())
def test_resistances_are_those_of_networkx(case):
    graph, inlet, outlets = case
    hindrance = segment_hindrance_per_um3(graph)
    reference = nx.MultiGraph()
    for (a, b), h in zip(graph.segment_nodes.tolist(), hindrance, strict=True):
        reference.add_edge(a, b, weight=h)
    expected = nx.resistance_distance(reference, inlet, int(outlets[0]), weight="weight")
    found = network_hindrance_per_um3(graph, between(inlet, outlets[:1]))
    assert found == pytest.approx(expected, rel=1e-8)


@few
@given(connected())
def test_pressures_and_flows_are_those_of_a_dense_solve(case):
    graph, inlet, outlets = case
    n = graph.n_nodes
    a, b = graph.segment_nodes.T
    g = 1 / (segment_hindrance_per_um3(graph) * 1e18 * 1e-3)
    laplacian = np.zeros((n, n))
    for node, other in ((a, b), (b, a)):
        np.add.at(laplacian, (node, node), g)
        np.add.at(laplacian, (node, other), -g)
    fixed = np.zeros(n, bool)
    fixed[[inlet, *outlets]] = True
    pressure = np.full(n, 2000.0)
    pressure[inlet] = 5000.0
    matrix = laplacian[np.ix_(~fixed, ~fixed)]
    right = -laplacian[np.ix_(~fixed, fixed)] @ pressure[fixed]
    pressure[~fixed] = np.linalg.solve(matrix, right)
    found = solved(graph, inlet, outlets)
    np.testing.assert_allclose(found.pressure_pa, pressure, rtol=1e-7)
    flow = g * (pressure[a] - pressure[b]) * 1e18
    np.testing.assert_allclose(
        found.flow_um3_per_s, flow, rtol=1e-6, atol=1e-8 * np.abs(flow).max()
    )


def test_the_solver_of_large_networks_agrees_with_the_direct_one(monkeypatch):
    grid = nx.convert_node_labels_to_integers(nx.grid_2d_graph(40, 40))
    radius = np.random.default_rng(5).uniform(2, 20, grid.number_of_edges())
    graph = wires(1600, list(grid.edges()), radius_um=radius)
    direct = solved(graph, 0, 1599)
    monkeypatch.setattr(module, "_DIRECT_UP_TO", 10)
    iterated = solved(graph, 0, 1599)
    np.testing.assert_allclose(iterated.pressure_pa, direct.pressure_pa, rtol=1e-9)
    assert iterated.mass_balance_error < 1e-9
    again = solved(graph, 0, 1599)
    assert again.flow_um3_per_s.tobytes() == iterated.flow_um3_per_s.tobytes()


# ---------------------------------------------------------------- laws


@few
@given(connected())
def test_what_flows_in_flows_out(case):
    graph, inlet, outlets = case
    found = solved(graph, inlet, outlets)
    a, b = graph.segment_nodes.T
    net = np.bincount(a, found.flow_um3_per_s, graph.n_nodes)
    net -= np.bincount(b, found.flow_um3_per_s, graph.n_nodes)
    total = found.inlet_flow_um3_per_s
    assert net[inlet] == pytest.approx(total, rel=1e-9)
    assert net[outlets].sum() == pytest.approx(-total, rel=1e-9)
    inner = np.delete(net, [inlet, *outlets])
    assert np.abs(inner).max(initial=0) <= 1e-9 * total
    assert found.mass_balance_error <= 1e-9


@few
@given(connected())
def test_pressures_lie_between_those_given(case):
    graph, inlet, outlets = case
    pressure = solved(graph, inlet, outlets).pressure_pa
    assert pressure.min() >= 2000 - 1e-6
    assert pressure.max() <= 5000 + 1e-6


@few
@given(connected())
def test_dissipation_equals_flow_times_pressure_drop(case):
    graph, inlet, outlets = case
    found = solved(graph, inlet, outlets)
    flow = found.flow_um3_per_s * 1e-18
    dissipated = np.sum(flow**2 * found.resistance_pa_s_per_m3)
    assert dissipated == pytest.approx(found.inlet_flow_um3_per_s * 1e-18 * 3000.0, rel=1e-9)
    assert found.resistance_share.sum() == pytest.approx(1.0, rel=1e-9)
    assert (found.resistance_share >= -1e-12).all()


@few
@given(connected())
def test_in_and_out_may_be_exchanged(case):
    # Reciprocity: the flow into node b by a pressure at a is that into a by the pressure at b.
    graph, a, outlets = case
    assume(len(outlets) >= 2)
    b, ground = int(outlets[0]), outlets[1:]

    def into(source, watched):
        found = solved(graph, source, np.append(ground, watched))
        ends = graph.segment_nodes
        flow = found.flow_um3_per_s
        return flow[ends[:, 1] == watched].sum() - flow[ends[:, 0] == watched].sum()

    scale = max(into(a, b), into(b, a), 1e-300)
    assert into(a, b) == pytest.approx(into(b, a), rel=1e-7, abs=1e-9 * scale)


@few
@given(connected(), st.floats(1.0, 5.0), st.data())
def test_narrowing_a_vessel_never_lowers_the_resistance(case, factor, data):
    # Rayleigh's law of monotonicity.
    graph, inlet, outlets = case
    hindrance = segment_hindrance_per_um3(graph)
    k = data.draw(st.integers(0, graph.n_segments - 1))
    before = solved(graph, inlet, outlets, hindrance_per_um3=hindrance)
    narrowed = hindrance.copy()
    narrowed[k] *= factor
    after = solved(graph, inlet, outlets, hindrance_per_um3=narrowed)
    assert after.network_resistance_pa_s_per_m3 >= before.network_resistance_pa_s_per_m3 * (
        1 - 1e-9
    )


@few
@given(connected())
def test_closing_an_outlet_never_lowers_the_resistance(case):
    graph, inlet, outlets = case
    assume(len(outlets) >= 2)
    every = network_hindrance_per_um3(graph, between(inlet, outlets))
    fewer = network_hindrance_per_um3(graph, between(inlet, outlets[1:]))
    assert fewer >= every * (1 - 1e-9)


@few
@given(connected(), st.floats(0.01, 100))
def test_scaling_by_k_changes_the_network_by_k_to_the_minus_three(case, k):
    graph, inlet, outlets = case
    larger = graph.replace(
        node_position_um=k * graph.node_position_um,
        point_position_um=k * graph.point_position_um,
        point_radius_um=k * graph.point_radius_um,
    )
    conditions = between(inlet, outlets)
    once = network_hindrance_per_um3(graph, conditions)
    assert network_hindrance_per_um3(larger, conditions) == pytest.approx(once * k**-3, rel=1e-9)


@few
@given(connected(), st.integers(0, 999))
def test_numbers_and_directions_of_segments_do_not_matter(case, seed):
    graph, inlet, outlets = case
    random = np.random.default_rng(seed)
    order = random.permutation(graph.n_segments)
    reverse = random.random(graph.n_segments) < 0.5
    number = random.permutation(graph.n_nodes)
    turned = graph.with_directions(reverse)
    ends = [turned.segment_nodes[k] for k in order]
    places = np.empty_like(graph.node_position_um)
    places[number] = graph.node_position_um
    other = type(graph).from_polylines(
        places, number[np.array(ends)],
        [turned.point_position_um[turned.points_of(k)] for k in order],
        [turned.point_radius_um[turned.points_of(k)] for k in order],
    )  # fmt: skip
    found = solved(graph, inlet, outlets)
    again = solved(other, number[inlet], number[outlets])
    assert again.network_resistance_pa_s_per_m3 == pytest.approx(
        found.network_resistance_pa_s_per_m3, rel=1e-9
    )
    back = np.where(reverse[order], -1, 1) * again.flow_um3_per_s
    np.testing.assert_allclose(
        back, found.flow_um3_per_s[order], rtol=1e-6, atol=1e-9 * found.inlet_flow_um3_per_s
    )
    np.testing.assert_allclose(again.pressure_pa[number], found.pressure_pa, rtol=1e-7)


@few
@given(connected(), st.floats(0.1, 0.9), st.data())
def test_a_node_in_the_middle_of_a_segment_changes_nothing(case, at, data):
    graph, inlet, outlets = case
    k = data.draw(st.integers(0, graph.n_segments - 1))
    a, b = graph.segment_nodes[k].tolist()
    middle = (1 - at) * graph.node_position_um[a] + at * graph.node_position_um[b]
    places = np.vstack([graph.node_position_um, middle])
    ends = [*np.delete(graph.segment_nodes, k, axis=0).tolist()]
    radius = graph.segment_radius_um()
    radii = [*np.delete(radius, k), radius[k], radius[k]]
    new = graph.n_nodes
    parted = network(places, [*ends, (a, new), (new, b)], radii, points=2)
    conditions = between(inlet, outlets)
    assert network_hindrance_per_um3(parted, conditions) == pytest.approx(
        network_hindrance_per_um3(graph, conditions), rel=1e-9
    )


@few
@given(connected(most=7))
def test_fosters_sum_over_all_segments(case):
    # Foster 1949: sum over edges of g_e R_eff(e) = nodes - components.
    graph, _, _ = case
    hindrance = segment_hindrance_per_um3(graph)
    total = sum(
        network_hindrance_per_um3(graph, between(int(a), int(b))) / h
        for (a, b), h in zip(graph.segment_nodes, hindrance, strict=True)
    )
    assert total == pytest.approx(graph.n_nodes - 1, rel=1e-8)


# ---------------------------------------------------------------- conditions and odd parts


def test_a_given_flow_scales_the_pressures():
    graph = wires(3, [(0, 1), (1, 2)], radius_um=5.0)
    viscosity = np.full(2, 3.5)
    found = solve(graph, between(0, 2, inlet_pa=0.0, flow=1e6), viscosity_mpa_s=viscosity)
    assert found.inlet_flow_um3_per_s == pytest.approx(1e6)
    np.testing.assert_allclose(found.flow_um3_per_s, 1e6)
    drop = 1e6 * 1e-18 * found.network_resistance_pa_s_per_m3
    assert found.pressure_pa[0] - found.pressure_pa[2] == pytest.approx(drop)
    assert found.pressure_pa[2] == pytest.approx(2000.0)


def test_several_inlets_share_one_pressure():
    # Two equal arms join and leave by one: 1/2 + 1.
    ends = [(0, 2), (1, 2), (2, 3)]
    found = solved(wires(4, ends), [0, 1], 3, hindrance_per_um3=np.ones(3))
    assert found.network_resistance_pa_s_per_m3 / 1e15 == pytest.approx(1.5)


def test_a_part_without_inlet_or_outlet_carries_nothing_and_is_counted():
    """Leave 3-4 (no inlet) unknown, and stop the flow in the dead end 1-5.

    0---1---2      3---4
        |
        5
    """
    graph = wires(6, [(0, 1), (1, 2), (3, 4), (1, 5)])
    found = solved(graph, 0, [2])
    assert found.unreached_segments == 1
    assert np.isnan(found.flow_um3_per_s[2])
    assert np.isnan(found.pressure_pa[[3, 4]]).all()
    assert found.flow_um3_per_s[3] == pytest.approx(0, abs=1e-9 * found.inlet_flow_um3_per_s)
    assert found.pressure_pa[5] == pytest.approx(found.pressure_pa[1])


def test_a_loop_from_a_node_to_itself_carries_nothing():
    place = [[0, 0, 0], [0, 0, 9], [0, 0, 20]]
    lines = [place[:2], place[1:], [[0, 0, 9], [4, 0, 9], [4, 4, 9], [0, 0, 9]]]
    graph = type(wires(2, [(0, 1)])).from_polylines(
        place, [[0, 1], [1, 2], [1, 1]], lines, [[2.0] * len(line) for line in lines]
    )
    found = solved(graph, 0, 2)
    assert found.flow_um3_per_s[2] == 0
    assert found.resistance_share[2] == 0
    assert found.unreached_segments == 0


def test_a_segment_without_length_joins_its_nodes():
    ends = [(0, 1), (1, 2), (2, 3)]
    graph = wires(4, ends)
    found = solved(graph, 0, 3, hindrance_per_um3=np.array([1.0, 0.0, 1.0]))
    assert found.network_resistance_pa_s_per_m3 / 1e15 == pytest.approx(2.0)
    assert found.pressure_pa[1] == found.pressure_pa[2]
    np.testing.assert_allclose(found.resistance_share, [0.5, 0.0, 0.5])
    np.testing.assert_allclose(found.flow_um3_per_s, found.inlet_flow_um3_per_s)
    assert found.unreached_segments == 0


def test_inlet_and_outlet_may_be_joined_by_segments_without_length():
    graph = wires(4, [(0, 1), (1, 2), (2, 3)])
    found = solved(graph, 0, 3, hindrance_per_um3=np.array([0.0, 2.0, 0.0]))
    assert found.network_resistance_pa_s_per_m3 / 1e15 == pytest.approx(2.0)
    np.testing.assert_allclose(found.flow_um3_per_s, found.inlet_flow_um3_per_s)


def test_an_outlet_at_no_distance_from_the_inlet_is_none():
    graph = wires(4, [(0, 1), (0, 2), (0, 3)])
    found = solved(graph, 0, [1, 2, 3], hindrance_per_um3=np.array([0.0, 2.0, 2.0]))
    assert found.network_resistance_pa_s_per_m3 / 1e15 == pytest.approx(1.0)
    assert found.flow_um3_per_s[0] == 0


@few
@given(connected(), st.data())
def test_no_length_is_the_limit_of_little_length(case, data):
    graph, inlet, outlets = case
    assume(graph.n_nodes > 3)
    hindrance = segment_hindrance_per_um3(graph)
    k = data.draw(st.integers(0, graph.n_segments - 1))
    assume(not set(graph.segment_nodes[k].tolist()) <= {inlet, *outlets.tolist()})
    # Parallel vessels of no length share the flow evenly, as do equal ones of little.
    beside = (np.sort(graph.segment_nodes, axis=1) == np.sort(graph.segment_nodes[k])).all(axis=1)
    none, little = (np.where(beside, v, hindrance) for v in (0.0, 1e-7 * hindrance.min()))
    exact_, near = (solved(graph, inlet, outlets, hindrance_per_um3=h) for h in (none, little))
    np.testing.assert_allclose(
        exact_.flow_um3_per_s, near.flow_um3_per_s, rtol=1e-4,
        atol=1e-5 * exact_.inlet_flow_um3_per_s,
    )  # fmt: skip


def test_a_segment_of_unknown_radius_is_taken_out():
    ends = [(0, 1), (1, 2), (0, 2)]
    found = solved(wires(3, ends), 0, 2, hindrance_per_um3=np.array([1.0, 1.0, np.nan]))
    assert found.network_resistance_pa_s_per_m3 / 1e15 == pytest.approx(2.0)
    assert np.isnan(found.flow_um3_per_s[2])
    assert found.unreached_segments == 1


@pytest.mark.parametrize("spread", [1e3, 1e6, 1e9, 1e12])
def test_wide_and_thin_vessels_side_by_side_stay_exact(spread):
    # A main path of low and side paths of high hindrance: parallel sums in closed form.
    ends = [(0, 1), (1, 2), (0, 3), (3, 2), (1, 3)]
    ohms = np.array([1.0, 1.0, spread, spread, spread])
    found = solved(wires(4, ends), 0, 2, hindrance_per_um3=ohms)
    expected = 1 / (1 / 2 + 1 / (2 * spread))
    assert found.network_resistance_pa_s_per_m3 / 1e15 == pytest.approx(expected, rel=1e-12)
    assert found.mass_balance_error <= 1e-12


@pytest.mark.parametrize("spread", [1e3, 1e6, 1e9, 1e12])
def test_a_short_wide_vessel_between_thin_ones_hands_on_what_it_gets(spread):
    # 0--(thin)--1==(wide)==2--(thin)--3, the wide one's pressure drop far below rounding.
    ohms = np.array([spread, 1.0, 2 * spread])
    found = solved(wires(4, [(0, 1), (1, 2), (2, 3)]), 0, 3, hindrance_per_um3=ohms)
    np.testing.assert_allclose(found.flow_um3_per_s, found.inlet_flow_um3_per_s, rtol=1e-12)
    assert found.mass_balance_error <= 1e-12


def test_without_a_path_from_inlet_to_outlet_it_says_so():
    graph = wires(4, [(0, 1), (2, 3)])
    with pytest.raises(UnusableInputError, match="no path joins the inlet to an outlet"):
        solved(graph, 0, 3)
    with pytest.raises(UnusableInputError, match="no path joins"):
        solved(graph, 0, np.zeros(0, dtype=np.int64))


def test_a_hindrance_below_zero_is_refused():
    with pytest.raises(UnusableInputError, match="hindrance_per_um3"):
        solved(wires(2, [(0, 1)]), 0, 1, hindrance_per_um3=np.array([-1.0]))


def test_viscosity_scales_the_resistance_of_its_own_segment():
    graph = wires(3, [(0, 1), (1, 2)])
    hindrance = np.array([1.0, 2.0])
    found = solve(
        graph, between(0, 2), viscosity_mpa_s=np.array([3.0, 5.0]), hindrance_per_um3=hindrance
    )
    assert found.network_resistance_pa_s_per_m3 == pytest.approx((3 + 10) * 1e15)
    assert found.resistance_share[1] == pytest.approx(10 / 13)
