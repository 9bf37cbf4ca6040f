"""Roots, directions, loops: by hand, against networkx, and properties of random networks."""

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tree_cases import graph_of, network, solve_flow

from ramulus.config import load_configuration
from ramulus.errors import UnusableInputError
from ramulus.network.graph import NODE_KINDS, CentrelineGraph
from ramulus.tree.root import Inlets, RootSettings, choose_inlets, components, direct, on_loops
from ramulus.tree.strahler import walking_order

BORDER, INLET, END = (NODE_KINDS.index(kind) for kind in ("border", "inlet", "end"))

# A trunk into a ring with two outlets: nodes, and segments in brackets.
#
#                2 ---[4]--- 4
#          [2] / |
#   0 -[0]- 1   [3]
#          [1] \ |
#                3 ---[5]--- 5
RING = [(0, 1), (1, 3), (1, 2), (2, 3), (2, 4), (3, 5)]
RING_UM = [(0, 0, 0), (0, 0, 9), (0, 5, 15), (0, -5, 15), (0, 5, 25), (0, -5, 25)]


@st.composite
def networks(draw, *, nodes=12):
    """Draw a network that may have loops, parallel segments, loops at a node, and several parts."""
    n = draw(st.integers(2, nodes))
    node = st.integers(0, n - 1)
    ends = draw(st.lists(st.tuples(node, node), min_size=1, max_size=2 * n))
    random = np.random.default_rng(draw(st.integers(0, 99)))
    radius = random.uniform(1, 9, len(ends))
    return network(random.normal(0, 50, (n, 3)), ends, radius)


def rooted(graph, *nodes, **keywords):
    return direct(graph, Inlets(np.array(nodes), "given"), **keywords)


# --------------------------------------------------------------------------- inlets


def forked(kinds, radii=(5.0, 4.0, 3.0)):
    """Three vessels at node 1: ends 0, 2, 3."""
    graph = network([(0, 0, 0), (0, 0, 50), (0, 40, 90), (0, -40, 90)],
                    [(0, 1), (1, 2), (1, 3)], radii)  # fmt: skip
    kind = graph.node_kind.copy()
    for node, name in kinds.items():
        kind[node] = NODE_KINDS.index(name)
    return graph.replace(node_kind=kind)


def test_the_widest_end_that_the_edge_cuts_is_the_inlet():
    found = choose_inlets(forked({2: "border", 3: "border"}), settings=RootSettings())
    assert found.nodes.tolist() == [2]
    assert found.rule == (
        "the widest end that the volume's edge cuts, of the longest part: node 2, radius 4 um"
    )


def test_without_a_cut_end_the_widest_free_end_is_the_inlet():
    found = choose_inlets(forked({}), settings=RootSettings())
    assert found.nodes.tolist() == [0]
    assert "as the volume's edge cuts none" in found.rule


def test_a_closed_network_is_entered_at_its_widest_node():
    ring = network([(0, 0, 0), (0, 0, 9), (0, 9, 9)], [(0, 1), (1, 2), (2, 0)], [1, 2, 1])
    found = choose_inlets(ring, settings=RootSettings())
    assert found.nodes.tolist() == [1]
    assert "no free end" in found.rule


def test_the_root_that_a_file_names_comes_first():
    found = choose_inlets(forked({3: "inlet", 0: "border"}), settings=RootSettings())
    assert found.nodes.tolist() == [3]
    assert "the graph's file names" in found.rule


def test_two_roots_in_one_tree_must_be_meant():
    graph = forked({0: "inlet", 3: "inlet"})
    with pytest.raises(UnusableInputError, match="names 2 roots in one tree, nodes 0, 3"):
        choose_inlets(graph, settings=RootSettings())
    meant = choose_inlets(graph, settings=RootSettings(inlet="node", inlet_nodes=(3, 0)))
    assert meant.nodes.tolist() == [3, 0]
    assert meant.rule == "given nodes: 3, 0"


def test_two_roots_in_two_trees_or_in_one_loop_are_no_contradiction():
    parent = np.array([-1, 0, 0, -1, 3, 3])
    graph = graph_of(parent, np.ones(6), np.full(6, 10.0))
    kind = graph.node_kind.copy()
    kind[:2] = INLET
    found = choose_inlets(graph.replace(node_kind=kind), settings=RootSettings())
    assert found.nodes.tolist() == [0, 1]
    ring = network(RING_UM, RING)
    kind = ring.node_kind.copy()
    kind[[0, 4]] = INLET
    assert choose_inlets(ring.replace(node_kind=kind), settings=RootSettings()).nodes.tolist() == [
        0,
        4,
    ]


def test_a_position_means_the_nearest_free_end():
    chosen = RootSettings(inlet="position", inlet_um=((0.0, 38.0, 88.0), (0.0, 1.0, 1.0)))
    found = choose_inlets(forked({}), settings=chosen)
    assert found.nodes.tolist() == [2, 0]
    assert found.rule == "the free ends nearest to the given positions: nodes 2, 0"


def test_a_position_far_from_any_end_is_refused():
    chosen = RootSettings(inlet="position", inlet_um=((0.0, 0.0, 40.0),))
    with pytest.raises(UnusableInputError, match=r"is 40 um away, expected one within 25 um"):
        choose_inlets(forked({}), settings=chosen)
    wide = chosen.model_copy(update={"search_radius_um": 45.0})
    assert choose_inlets(forked({}), settings=wide).nodes.tolist() == [0]


def test_two_positions_at_one_end_are_refused():
    chosen = RootSettings(inlet="position", inlet_um=((0.0, 0.0, 1.0), (0.0, 1.0, 0.0)))
    with pytest.raises(UnusableInputError, match="both mean the end at node 0"):
        choose_inlets(forked({}), settings=chosen)


@pytest.mark.parametrize(
    ("settings_", "words"),
    [
        (RootSettings(inlet="node"), "root.inlet_nodes: found none"),
        (RootSettings(inlet="node", inlet_nodes=(7,)), "found 7, expected numbers from 0 to 3"),
        (RootSettings(inlet="position"), "root.inlet_um: found none"),
    ],
)
def test_an_inlet_that_is_not_there_is_refused(settings_, words):
    with pytest.raises(UnusableInputError, match=words):
        choose_inlets(forked({}), settings=settings_)


@pytest.mark.parametrize(
    "given_", [{"inlet_nodes": (1,)}, {"inlet_um": ((0, 0, 0),)},
              {"inlet": "node", "inlet_nodes": (1, 1)},
              {"inlet": "node", "inlet_nodes": (1,), "inlet_um": ((0, 0, 0),)}],
)  # fmt: skip
def test_settings_that_contradict_one_another_are_refused(given_):
    with pytest.raises(ValueError, match="found"):
        RootSettings(**given_)


# --------------------------------------------------------------------------- directions


def test_away_from_the_root():
    found = rooted(forked({}), 2)
    assert found.upstream.tolist() == [1, 2, 1]
    assert found.parent.tolist() == [1, -1, 1]
    assert found.generation.tolist() == [1, 0, 1]
    assert found.is_tree
    assert not found.closes_loop.any()


def test_every_part_has_a_root_and_the_inlets_part_is_the_main_one():
    parent = np.array([-1, 0, 0, -1, 3, 3])
    graph = graph_of(parent, [9, 5, 5, 4, 3, 8], np.full(6, 10.0))
    kind = graph.node_kind.copy()
    kind[graph.segment_nodes[4, 1]] = BORDER
    graph = graph.replace(node_kind=kind)
    found = rooted(graph, 0)
    # The second part is entered where the volume's edge cuts it, though another end is wider.
    assert found.parent.tolist() == [-1, 0, 0, 4, -1, 4]
    assert found.main.tolist() == [True] * 3 + [False] * 3
    assert found.roots.tolist() == [0, graph.segment_nodes[4, 1]]
    assert found.n_parts == 2


def test_a_ring_is_directed_by_its_flow():
    # Flow goes from 1 to 2 and on to 3, where it meets the flow from 1 to 3.
    graph = network(RING_UM, RING)
    flow = np.array([3.0, 1.0, 2.0, 0.5, 1.5, 1.5])
    found = rooted(graph, 0, flow_um3_per_s=flow)
    assert found.upstream.tolist() == [0, 1, 1, 2, 2, 3]
    # Node 3 is entered by the greater flow, and the lesser closes the loop.
    assert found.parent.tolist() == [-1, 0, 0, 2, 2, 1]
    assert found.closes_loop.tolist() == [False, False, False, True, False, False]
    assert found.generation.tolist() == [0, 1, 1, 2, 2, 2]
    turned = rooted(graph, 0, flow_um3_per_s=np.array([3.0, 2.5, 0.5, -1.0, 1.5, 1.5]))
    assert turned.upstream[3] == 3
    assert turned.parent.tolist() == [-1, 0, 0, 1, 3, 1]
    assert turned.closes_loop.tolist() == [False, False, True, False, False, False]


def test_without_a_flow_a_ring_is_directed_away_from_the_root():
    found = rooted(network(RING_UM, RING), 0)
    assert found.in_loop.tolist() == [False, True, True, True, False, False]
    assert found.closes_loop.sum() == 1
    assert not found.by_flow.any()


def test_equal_pressures_leave_the_direction_away_from_the_root():
    # A balanced bridge carries nothing but rounding.
    graph = network(RING_UM, RING)
    balanced = np.array([2.0, 1.0, 1.0, -1e-15, 1.0, 1.0])
    found = rooted(graph, 0, flow_um3_per_s=balanced)
    assert not found.by_flow[3]
    assert found.closes_loop.tolist() == [False, False, False, True, False, False]


def test_a_node_that_flow_leaves_but_does_not_enter_starts_a_tree_of_its_own():
    # A second source feeds the ring from outlet 4: it is no inlet, but nothing brings blood there.
    graph = network(RING_UM, RING)
    found = rooted(graph, 0, flow_um3_per_s=np.array([1.0, 1.5, -0.5, 0.5, -1.0, 2.0]))
    assert found.upstream[4] == 4
    assert found.parent[4] == -1
    assert found.entered[4] == -1
    assert walking_order(found.parent).size == 6


def test_a_mesh_orders_only_what_is_reached_without_crossing_a_loop():
    graph = network(RING_UM, RING)
    found = rooted(graph, 0, mesh_share=0.2)
    assert found.loop_share == pytest.approx(
        graph.segment_length_um()[1:4].sum() / graph.segment_length_um().sum()
    )
    assert found.is_mesh
    assert found.orderable.tolist() == [True, False, False, False, False, False]
    tree_like = rooted(graph, 0, mesh_share=0.9)
    assert not tree_like.is_mesh
    assert tree_like.orderable.all()


def test_two_inlets_share_a_tree_out():
    #  0 --- 1 --- 2 --- 3   entered at both ends: the middle closes what would be a path
    graph = network([(0, 0, 9 * k) for k in range(4)], [(0, 1), (1, 2), (2, 3)])
    found = rooted(graph, 0, 3)
    assert found.upstream.tolist() == [0, 1, 3]
    assert found.closes_loop.tolist() == [False, True, False]


@given(networks())
def test_loops_are_those_of_networkx(graph):
    # Source: networkx 3, bridges of the graph with parallel edges and self-loops split by a node.
    plain = nx.Graph()
    plain.add_nodes_from(range(graph.n_nodes))
    for k, (a, b) in enumerate(graph.segment_nodes.tolist()):
        middle = graph.n_nodes + 2 * k
        nx.add_path(plain, [a, middle, middle + 1, b])
    bridges = {tuple(sorted(edge)) for edge in nx.bridges(plain)}
    expected = [
        (graph.n_nodes + 2 * k, graph.n_nodes + 2 * k + 1) not in bridges
        for k in range(graph.n_segments)
    ]
    assert on_loops(graph).tolist() == expected
    part, count = components(graph)
    assert count == nx.number_connected_components(plain)
    assert [set(np.flatnonzero(part == part[v]).tolist()) for v in range(graph.n_nodes)] == [
        {u for u in nx.node_connected_component(plain, v) if u < graph.n_nodes}
        for v in range(graph.n_nodes)
    ]


def check_rooting(graph, found):
    """Hold what must be true of any rooting."""
    m, n = graph.n_segments, graph.n_nodes
    a, b = graph.segment_nodes.T
    assert ((found.upstream == a) | (found.upstream == b)).all()
    assert (found.downstream == a + b - found.upstream).all()
    assert found.closes_loop.sum() == m - n + np.sum(found.entered < 0)
    for k in range(m):
        if found.parent[k] >= 0:
            assert found.downstream[found.parent[k]] == found.upstream[k]
    walking_order(found.parent)  # raises where there is a ring
    assert (found.entered[found.roots] < 0).all()
    kept = graph.select_segments(~found.closes_loop)
    assert not on_loops(kept).any()


@settings(deadline=None)
@given(networks(), st.data())
def test_any_network_becomes_a_forest_and_the_segments_that_close_it(graph, data):
    roots = data.draw(st.sets(st.integers(0, graph.n_nodes - 1), min_size=1, max_size=3))
    found = rooted(graph, *sorted(roots))
    check_rooting(graph, found)
    assert found.n_loops == graph.n_segments - graph.n_nodes + found.n_parts
    assert np.sum(found.entered < 0) == len(found.roots)
    # Breadth first: no way from a root is shorter.
    part, _ = components(graph)
    plain = nx.MultiGraph(graph.segment_nodes.tolist())
    plain.add_nodes_from(range(graph.n_nodes))
    for k in range(graph.n_segments):
        mine = [r for r in found.roots.tolist() if part[r] == part[found.upstream[k]]]
        steps = min(nx.shortest_path_length(plain, r, found.upstream[k]) for r in mine)
        assert found.generation[k] == steps


@settings(deadline=None)
@given(networks(), st.data())
def test_a_flow_gives_the_direction_and_never_a_ring_of_parents(graph, data):
    root = data.draw(st.integers(0, graph.n_nodes - 1))
    flow = solve_flow(graph, [root])
    found = rooted(graph, root, flow_um3_per_s=flow)
    check_rooting(graph, found)
    a, b = graph.segment_nodes.T
    follows = np.where(flow > 0, a, b) == found.upstream
    assert follows[found.by_flow].all()
    # Where flow enters a node, the greatest is the parent there.
    for v in range(graph.n_nodes):
        into = np.flatnonzero((found.downstream == v) & found.by_flow & (a != b))
        if len(into) and v not in found.roots and found.by_flow[found.entered[v]]:
            assert abs(flow[found.entered[v]]) >= np.abs(flow[into]).max() * (1 - 1e-9)


@settings(deadline=None)
@given(networks(), st.integers(0, 2**32 - 1))
def test_even_a_flow_without_sense_gives_a_forest(graph, seed):
    random = np.random.default_rng(seed)
    flow = random.choice([-1.0, 0.0, 1.0, np.nan], graph.n_segments) * random.random(
        graph.n_segments
    )
    check_rooting(graph, rooted(graph, 0, flow_um3_per_s=flow))


def test_a_settings_file_that_contradicts_itself_is_refused_at_once(tmp_path):
    path = tmp_path / "own.toml"
    path.write_text("[root]\ninlet_nodes = [4]\n")
    with pytest.raises(UnusableInputError, match="inlet = 'node'"):
        load_configuration(path)


def test_an_empty_graph_has_no_inlet():
    none = CentrelineGraph.from_polylines(np.zeros((0, 3)), np.zeros((0, 2)), [])
    with pytest.raises(UnusableInputError, match="0 nodes"):
        choose_inlets(none, settings=RootSettings())
