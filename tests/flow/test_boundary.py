"""Where blood enters and leaves: the rules, and the record of them."""

import numpy as np
import pytest
from tree_cases import network

from ramulus.errors import UnusableInputError
from ramulus.flow.boundary import BoundarySettings, boundary_conditions, outlet_nodes
from ramulus.network.graph import NODE_KINDS

JUNCTION, END, BORDER = (NODE_KINDS.index(k) for k in ("junction", "end", "border"))


def forked(kinds=(BORDER, JUNCTION, END, BORDER)):
    """Lay a trunk 0-1 with the daughters 1-2 (a true end) and 1-3 (cut by the edge).

            2
           /
      0---1
           \\
            3
    """
    place = [(0, 0, 0), (0, 0, 50), (0, 40, 90), (0, -40, 90)]
    ends = [(0, 1), (1, 2), (1, 3)]
    return network(place, ends, node_kind=np.array(kinds, dtype=np.int8))


def conditions(graph, loop_share=0.0, **settings):
    chosen = BoundarySettings(**settings)
    return boundary_conditions(graph, np.array([0]), loop_share=loop_share, settings=chosen)


def test_in_a_tree_every_free_end_but_the_inlet_is_an_outlet():
    found = conditions(forked())
    assert found.outlets.tolist() == [2, 3]
    assert found.rule == "all_ends"
    assert "tree-like" in found.sentence


def test_in_a_mesh_the_ends_that_the_edge_cuts_are_the_outlets():
    found = conditions(forked(), loop_share=0.21)
    assert found.outlets.tolist() == [3]
    assert found.rule == "border_ends"
    assert "mesh" in found.sentence


def test_the_share_that_makes_a_mesh_is_a_setting():
    assert conditions(forked(), loop_share=0.21, mesh_share=0.3).rule == "all_ends"
    assert conditions(forked(), loop_share=0.2).rule == "all_ends"


def test_a_mesh_that_no_edge_cuts_falls_back_on_all_ends_and_says_so():
    found = conditions(forked((BORDER, JUNCTION, END, END)), loop_share=0.5)
    assert found.rule == "all_ends"
    assert found.outlets.tolist() == [2, 3]
    assert "no end is cut" in found.sentence


@pytest.mark.parametrize(("rule", "outlets"), [("all_ends", [2, 3]), ("border_ends", [3])])
@pytest.mark.parametrize("loop_share", [0.0, 0.9])
def test_a_rule_that_is_set_holds_in_trees_and_meshes(rule, outlets, loop_share):
    found = conditions(forked(), loop_share=loop_share, outlets=rule)
    assert found.rule == rule
    assert found.outlets.tolist() == outlets


def test_several_inlets_are_no_outlets():
    assert outlet_nodes(forked(), np.array([0, 3]), "all_ends").tolist() == [2]


def test_a_pressure_that_does_not_drive_is_refused():
    with pytest.raises(UnusableInputError, match=r"boundary\.inlet_pressure_pa"):
        conditions(forked(), inlet_pressure_pa=2000.0, outlet_pressure_pa=2000.0)


def test_a_given_flow_needs_no_inlet_pressure():
    found = conditions(
        forked(), inlet_pressure_pa=0.0, outlet_pressure_pa=2000.0, inlet_flow_um3_per_s=9.0
    )
    assert found.inlet_flow_um3_per_s == 9.0


def test_the_record_names_every_node_with_its_condition():
    record = conditions(forked()).to_json()
    assert record["outlet_rule"] == "all_ends"
    assert record["nodes"] == [
        {"node_id": 0, "kind": "inlet", "type": "pressure", "value_pa": 5000.0},
        {"node_id": 2, "kind": "outlet", "type": "pressure", "value_pa": 2000.0},
        {"node_id": 3, "kind": "outlet", "type": "pressure", "value_pa": 2000.0},
    ]


def test_the_record_of_a_given_flow():
    record = conditions(forked(), inlet_flow_um3_per_s=9.0).to_json()
    inlet = record["nodes"][0]
    assert inlet == {"node_id": 0, "kind": "inlet", "type": "flow", "value_um3_per_s": 9.0}
