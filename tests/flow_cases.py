"""Networks for the tests of flow: unit resistors, random ones, conditions by node numbers."""

import networkx as nx
import numpy as np
from hypothesis import strategies as st
from tree_cases import network

from ramulus.flow.boundary import BoundaryConditions
from ramulus.flow.solve import solve


def between(inlets, outlets, *, inlet_pa=5000.0, outlet_pa=2000.0, flow=None):
    """Hold the nodes given at two pressures."""
    return BoundaryConditions(
        np.atleast_1d(inlets), np.atleast_1d(outlets), inlet_pa, outlet_pa, flow, "given", "given"
    )


def wires(n_nodes, ends, *, seed=0, radius_um=1.0, **fields):
    """Lay a network of straight vessels between nodes at random places."""
    place = np.random.default_rng(seed).normal(0, 50, (n_nodes, 3))
    return network(place, ends, radius_um, **fields)


def resistance(n_nodes, ends, hindrance, a, b):
    """Return the hindrance between two nodes of a network with the segment hindrances given."""
    graph = wires(n_nodes, ends)
    found = solve(
        graph, between(a, b), viscosity_mpa_s=np.ones(len(ends)),
        hindrance_per_um3=np.asarray(hindrance, dtype=float),
    )  # fmt: skip
    return found.network_resistance_pa_s_per_m3 / 1e15


def unit_resistance(graph, a, b):
    """Return the resistance between two nodes of a networkx graph of unit resistors."""
    graph = nx.convert_node_labels_to_integers(graph, label_attribute="old")
    number = {data["old"]: node for node, data in graph.nodes(data=True)}
    ends = list(graph.edges())
    return resistance(len(graph), ends, np.ones(len(ends)), number[a], number[b])


@st.composite
def connected(draw, *, most=10):
    """Draw a connected network with loops and parallel vessels: (graph, inlet node, outlets)."""
    n = draw(st.integers(3, most))
    random = np.random.default_rng(draw(st.integers(0, 10_000)))
    ends = [(int(random.integers(0, k)), k) for k in range(1, n)]
    for _ in range(draw(st.integers(0, n))):
        a, b = random.choice(n, 2, replace=False)
        ends.append((int(a), int(b)))
    radius = np.exp(random.uniform(np.log(2), np.log(20), len(ends)))
    graph = network(random.normal(0, 100, (n, 3)), ends, radius, points=3)
    special = random.permutation(n)
    return graph, int(special[0]), special[1 : 1 + draw(st.integers(1, min(3, n - 1)))]


def solved(graph, inlet, outlets, **more):
    """Solve with a viscosity of 1 mPa s."""
    viscosity = np.ones(graph.n_segments)
    return solve(graph, between(inlet, outlets), viscosity_mpa_s=viscosity, **more)
