"""Arteries and veins that touch are rooted and ordered apart."""

import numpy as np
import pytest
from tree_cases import network

from ramulus.errors import UnusableInputError
from ramulus.network.graph import NODE_KINDS
from ramulus.tree.labels import separate_labels
from ramulus.tree.root import RootSettings, choose_inlets, components, direct
from ramulus.tree.strahler import topological_orders

# An artery (upper) and a vein (lower) that join at node 2 by way of a fork of each:
#
#   0 --artery-- 1 --artery-- 2 --vein-- 3 --vein-- 4
#                 \                       \
#                  5 (artery)              6 (vein)
ENDS = [(0, 1), (1, 2), (1, 5), (2, 3), (3, 4), (3, 6)]
LABEL = np.array(["artery", "artery", "artery", "vein", "vein", "vein"])
PLACE = [(0, 0, 0), (0, 0, 10), (0, 0, 20), (0, 0, 30), (0, 0, 40), (0, 9, 19), (0, 9, 39)]


def joined():
    graph = network(PLACE, ENDS, [5, 3, 2, 3, 6, 2])
    kind = graph.node_kind.copy()
    kind[[0, 4]] = NODE_KINDS.index("border")
    return graph.replace(node_kind=kind)


def test_each_label_becomes_a_tree_of_its_own():
    parted = separate_labels(joined(), LABEL)
    part, count = components(parted.graph)
    assert count == 2
    of_segment = part[parted.graph.segment_nodes[:, 0]]
    assert len(set(of_segment[:3])) == len(set(of_segment[3:])) == 1
    assert parted.label[parted.graph.segment_nodes[:, 1]].tolist() == LABEL.tolist()
    shared = np.flatnonzero(parted.node == 2)
    assert parted.label[shared].tolist() == ["artery", "vein"]
    # Each has an end there now.
    assert parted.graph.node_kind_names()[shared].tolist() == ["end", "end"]


def test_each_label_is_rooted_at_its_own_cut_end_and_ordered_apart():
    parted = separate_labels(joined(), LABEL)
    inlets = choose_inlets(parted.graph, settings=RootSettings())
    found = direct(parted.graph, inlets)
    assert sorted(parted.node[found.roots].tolist()) == [0, 4]
    assert topological_orders(found.parent).strahler.tolist() == [2, 1, 1, 1, 2, 1]
    whole = direct(joined(), choose_inlets(joined(), settings=RootSettings()))
    assert topological_orders(whole.parent).strahler.tolist() != [2, 1, 1, 1, 2, 1]


def test_one_label_changes_nothing():
    parted = separate_labels(joined(), np.full(6, "artery"))
    np.testing.assert_array_equal(parted.graph.segment_nodes, joined().segment_nodes)
    np.testing.assert_array_equal(parted.graph.node_kind, joined().node_kind)


def test_one_label_a_segment_is_needed():
    with pytest.raises(UnusableInputError, match=r"found shape \(2,\), expected \(6,\)"):
        separate_labels(joined(), np.array(["artery", "vein"]))
