"""Exact hindrance, loops and the file of a phantom's truth."""

from pathlib import Path

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from scipy.integrate import quad

from ramulus.errors import UnusableInputError
from ramulus.network.graph import NODE_KINDS, CentrelineGraph
from ramulus.phantom.grow import daughters_of
from ramulus.phantom.lattice import LatticeSettings, weave
from ramulus.phantom.truth import (
    inlet_of,
    network_hindrance_per_um3,
    outlets_of,
    read_truth,
    truth_of,
    write_truth,
)
from ramulus.phantom.tubes import straight_tube

REFERENCE = Path(__file__).parents[1] / "reference"
BORDER = NODE_KINDS.index("border")


def binary_tree(*, generations, exponent, root_radius_um, root_length_um, next_length, asymmetry):
    """A tree whose places mean nothing: only lengths and radii count."""
    nodes, ends, lines, radii = [np.zeros(3), np.array([0, 0, root_length_um])], [], [], []

    def branch(start, end, radius, length, generation):
        ends.append((start, end))
        # a straight line of the right length, wherever it leads
        lines.append([nodes[start], nodes[start] + np.array([0, 0, length])])
        radii.append([radius, radius])
        if generation == generations:
            return
        for daughter in daughters_of(radius, asymmetry(), exponent):
            grown = next_length(length, radius, daughter)
            nodes.append(nodes[end] + np.array([0, 0, grown]))
            branch(end, len(nodes) - 1, daughter, grown, generation + 1)

    branch(0, 1, root_radius_um, root_length_um, 0)
    kinds = np.full(len(nodes), NODE_KINDS.index("end"), dtype=np.int8)
    kinds[0] = BORDER
    return CentrelineGraph.from_polylines(nodes, ends, lines, radii, node_kind=kinds)


# Source: murray_tree_cases.csv, derived in closed form (the column `closed_form`) and checked there
# by exact solution.
@pytest.mark.parametrize("row", list(pd.read_csv(REFERENCE / "murray_tree_cases.csv").itertuples()))
def test_hindrance_of_a_tree_equals_its_closed_form(row):
    rng = np.random.default_rng(0)
    name = row.tree
    if "asymmetry drawn anew" in name:
        asymmetry = lambda: rng.uniform(0.3, 1)  # noqa: E731
    else:
        ratio = float(name.rsplit("daughters ", 1)[1].split(" : ")[0]) if " : " in name else 1.0
        asymmetry = lambda: ratio  # noqa: E731
    if "length factor" in name:
        factor = float(name.split("length factor ")[1].split()[0])
        next_length = lambda length, *_: factor * length  # noqa: E731
    else:
        next_length = lambda length, radius, daughter: length * daughter / radius  # noqa: E731
    tree = binary_tree(
        generations=row.generations_after_root, exponent=row.exponent,
        root_radius_um=row.root_radius_um, root_length_um=row.root_length_um,
        next_length=next_length, asymmetry=asymmetry,
    )  # fmt: skip
    truth = truth_of(tree)
    assert len(truth.outlets) == row.tips
    # the table's exponent 2.33333 stands for 7/3
    assert truth.hindrance_per_um3 == pytest.approx(row.hindrance_per_um3, rel=1e-5)


# Source: resistor_networks.csv: unit resistors along the edges of polyhedra.
@pytest.mark.parametrize(
    ("graph", "ends", "expected"),
    [
        (nx.cubical_graph(), "antipode", 5 / 6),
        (nx.cubical_graph(), "edge", 7 / 12),
        (nx.dodecahedral_graph(), "antipode", 7 / 6),
        (nx.dodecahedral_graph(), "edge", 19 / 30),
        (nx.icosahedral_graph(), "antipode", 1 / 2),
        (nx.grid_2d_graph(4, 4), "antipode", 13 / 7),
    ],
)
def test_hindrance_of_a_mesh_equals_the_exact_resistance(graph, ends, expected):
    graph = nx.convert_node_labels_to_integers(graph)
    distance = nx.single_source_shortest_path_length(graph, 0)
    other = max(distance, key=distance.get) if ends == "antipode" else next(iter(graph[0]))
    unit_length_um = np.pi / 8  # of a tube of radius 1 um: hindrance 1
    line = [[0, 0, 0], [0, 0, unit_length_um]]
    vessels = CentrelineGraph.from_polylines(
        np.zeros((len(graph), 3)), list(graph.edges), [line] * graph.size(), [[1, 1]] * graph.size()
    )
    assert network_hindrance_per_um3(vessels, 0, np.array([other])) == pytest.approx(expected)


def test_hindrance_of_a_loop_network_equals_networkx():
    net = weave(
        LatticeSettings(spacing_um=15, max_radius_um=3), shape=(80, 80, 80), spacing_um=(1, 1, 1),
        seed=6,
    )  # fmt: skip
    truth = truth_of(net)
    graph = nx.Graph()
    for segment, (a, b) in enumerate(net.segment_nodes.tolist()):
        points = net.points_of(segment)
        radius = net.point_radius_um[points][0]
        length = np.linalg.norm(np.diff(net.point_position_um[points], axis=0), axis=1).sum()
        graph.add_edge(a, b, resistance=8 * length / (np.pi * radius**4))
    # all outlets are one point
    for outlet in truth.outlets.tolist():
        nx.contracted_nodes(graph, "out", outlet, copy=False) if "out" in graph else (
            nx.relabel_nodes(graph, {outlet: "out"}, copy=False)
        )
    expected = nx.resistance_distance(
        graph, truth.inlet, "out", weight="resistance", invert_weight=True
    )
    assert truth.loops == net.n_segments - net.n_nodes + 1
    assert truth.hindrance_per_um3 == pytest.approx(expected, rel=1e-9)


def test_hindrance_of_a_cone_equals_the_integral():
    tube = straight_tube(
        radius_um=4, end_radius_um=1.5, direction=(0, 1, 1), shape=(20, 60, 60),
        spacing_um=(1, 1, 1),
    )  # fmt: skip
    length = float(tube.segment_length_um()[0])
    expected = quad(lambda s: 8 / np.pi / (4 - 2.5 * s / length) ** 4, 0, length)[0]
    assert truth_of(tube).hindrance_per_um3 == pytest.approx(expected, rel=1e-9)


def test_the_widest_cut_end_is_the_inlet():
    tube = straight_tube(
        radius_um=2, end_radius_um=3, direction=(0, 0, 1), shape=(9, 9, 9), spacing_um=(1, 1, 1)
    )
    assert inlet_of(tube) == 1
    assert outlets_of(tube, 1).tolist() == [0]


def test_a_vessel_without_a_cut_end_has_no_inlet_and_no_hindrance(tmp_path):
    tube = straight_tube(
        radius_um=2, direction=(0, 0, 1), shape=(9, 9, 19), spacing_um=(1, 1, 1), length_um=5
    )
    truth = truth_of(tube)
    assert truth.inlet == -1
    assert np.isnan(truth.hindrance_per_um3)
    write_truth(tmp_path / "tube.truth.json", truth)
    assert np.isnan(read_truth(tmp_path / "tube.truth.json").hindrance_per_um3)


def test_an_inlet_without_an_outlet_is_refused():
    line = [[0, 0, 0], [0, 0, 1]]
    two = CentrelineGraph.from_polylines(
        np.zeros((4, 3)), [[0, 1], [2, 3]], [line] * 2, [[1, 1]] * 2
    )
    with pytest.raises(UnusableInputError, match="joined to the inlet 0"):
        network_hindrance_per_um3(two, 0, np.array([3]))


def test_the_file_brings_back_the_truth(tmp_path):
    net = weave(
        LatticeSettings(spacing_um=15, max_radius_um=3), shape=(80, 80, 80), spacing_um=(1, 1, 1),
        seed=6,
    )  # fmt: skip
    truth = truth_of(net, made_with={"seed": 6})
    write_truth(tmp_path / "net.truth.json", truth)
    back = read_truth(tmp_path / "net.truth.json")
    assert back.made_with == {"seed": 6}
    assert (back.inlet, back.loops) == (truth.inlet, truth.loops)
    assert back.hindrance_per_um3 == truth.hindrance_per_um3
    np.testing.assert_array_equal(back.outlets, truth.outlets)
    np.testing.assert_array_equal(back.graph.segment_nodes, net.segment_nodes)
    np.testing.assert_array_equal(back.graph.node_kind, net.node_kind)
    np.testing.assert_allclose(back.graph.point_position_um, net.point_position_um, atol=6e-7)
    np.testing.assert_allclose(back.graph.point_radius_um, net.point_radius_um, atol=6e-7)
    assert back.graph.spacing_um == net.spacing_um
    assert back.graph.extent_um == net.extent_um


@pytest.mark.parametrize("text", ["{", "[]", '{"format": "other"}'])
def test_another_file_is_refused_by_its_name(tmp_path, text):
    path = tmp_path / "wrong.json"
    path.write_text(text)
    with pytest.raises(UnusableInputError, match=r"wrong\.json"):
        read_truth(path)
