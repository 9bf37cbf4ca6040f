"""A million segments: seconds, not minutes."""

import time

import numpy as np
import pytest

from ramulus.network.graph import CentrelineGraph
from ramulus.tree.diameter_orders import diameter_orders
from ramulus.tree.elements import connectivity, elements, order_table
from ramulus.tree.junction_law import (
    JunctionSettings,
    find_junctions,
    junction_table,
    summarise_junctions,
)
from ramulus.tree.root import Inlets, RootSettings, choose_inlets, direct
from ramulus.tree.strahler import topological_orders

pytestmark = pytest.mark.slow


def binary_graph(levels):
    """A full binary tree of straight segments of three points, cube law with errors."""
    m = 2**levels - 1
    random = np.random.default_rng(0)
    parent = np.concatenate([[-1], (np.arange(1, m) - 1) // 2])
    diameter = 1000 * 2.0 ** (-np.floor(np.log2(np.arange(1, m + 1))) / 3)
    diameter *= random.lognormal(0, 0.05, m)
    step = random.normal(size=(m, 3))
    step *= (10 * diameter / np.linalg.norm(step, axis=1))[:, None]
    node = np.zeros((m + 1, 3))
    for level in range(levels):
        mine = np.arange(2**level - 1, 2 ** (level + 1) - 1)
        node[mine + 1] = node[parent[mine] + 1] + step[mine]
    ends = np.stack([parent + 1, np.arange(1, m + 1)], axis=1)
    first, last = node[ends[:, 0]], node[ends[:, 1]]
    points = np.stack([first, (first + last) / 2, last], axis=1).reshape(-1, 3)
    p = len(points)
    return CentrelineGraph(
        node_position_um=node, node_kind=np.zeros(m + 1, np.int8), segment_nodes=ends,
        point_offsets=3 * np.arange(m + 1), point_position_um=points,
        point_radius_um=np.repeat(diameter / 2, 3), point_radius_se_um=np.full(p, np.nan),
        point_radius_common_um=np.zeros(p), point_radius_map_um=np.full(p, np.nan),
        point_method=np.zeros(p, np.int8), point_in_zone=np.zeros(p, bool),
        segment_resolved=np.ones(m, bool), segment_review=np.full(m, "", object),
    )  # fmt: skip


def test_a_million_segments():
    graph = binary_graph(20)
    took = {}

    def timed(name, function, *args, **keywords):
        start = time.perf_counter()
        value = function(*args, **keywords)
        took[name] = time.perf_counter() - start
        return value

    inlets = timed("inlets", choose_inlets, graph, settings=RootSettings())
    rooting = timed("direct", direct, graph, Inlets(np.array([0]), inlets.rule))
    flow = 1.0 / 2.0 ** np.floor(np.log2(np.arange(1, graph.n_segments + 1)))
    timed("direct by flow", direct, graph, Inlets(np.array([0]), ""), flow_um3_per_s=flow)
    orders = timed("topological", topological_orders, rooting.parent)
    radius = graph.segment_radius_um()
    by_diameter = timed("diameter", diameter_orders, rooting.parent, 2 * radius)
    length = graph.segment_length_um()
    group = timed("elements", elements, rooting.parent, orders.strahler, length, 2 * radius)
    timed("connectivity", connectivity, group)
    timed("table", order_table, group, orders.strahler, length, 2 * radius)
    found = timed("junctions", find_junctions, graph, rooting, radius, 0.05 * radius)
    timed("junction table", junction_table, graph, rooting, found, settings=JunctionSettings())
    pooled = timed("pooled", summarise_junctions, found, settings=JunctionSettings())
    print("\n" + "\n".join(f"{name:16s} {seconds:7.2f} s" for name, seconds in took.items()))
    assert orders.strahler.max() == 20
    assert by_diameter.order.max() <= 20
    assert pooled.exponent.value == pytest.approx(3, abs=0.02)
    assert sum(took.values()) < 180
