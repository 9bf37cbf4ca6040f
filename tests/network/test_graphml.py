import io

import igraph
import networkx as nx
import numpy as np
import pandas as pd
import pytest
from small_graphs import random_tree, ring_with_a_tail

from ramulus.network.graphml import graphml_bytes


@pytest.fixture
def tables():
    frames = ring_with_a_tail().to_frames()
    nodes, segments = frames["nodes"], frames["segments"]
    segments["order"] = pd.Series([2, 1, None, 1], dtype="Int64")
    segments["flow_um3_per_s"] = [0.1, -3e12, np.nan, np.inf]
    segments["resolved"] = [True, False, True, True]
    segments["review"] = ['a < b & "c"', "", "control \x07 character, \u00b5m", "="]
    return nodes, segments


def test_networkx_reads_what_was_written(tables):
    nodes, segments = tables
    graph = nx.read_graphml(io.BytesIO(graphml_bytes(nodes, segments)), node_type=int)
    assert graph.is_multigraph()
    assert not graph.is_directed()
    assert [graph.nodes[k]["x_um"] for k in range(3)] == nodes["x_um"].tolist()
    edges = {d["segment_id"]: (a, b, d) for a, b, d in graph.edges(data=True)}
    assert [edges[k][:2] for k in range(4)] == segments[["node_a", "node_b"]].apply(
        tuple, axis=1
    ).tolist()
    assert [edges[k][2]["length_um"] for k in range(4)] == segments["length_um"].tolist()
    assert [edges[k][2].get("order") for k in range(4)] == [2, 1, None, 1]
    assert [edges[k][2]["resolved"] for k in range(4)] == [True, False, True, True]
    assert [edges[k][2].get("flow_um3_per_s") for k in range(4)] == [0.1, -3e12, None, None]
    assert edges[0][2]["review"] == 'a < b & "c"'
    assert edges[2][2]["review"] == "control \N{REPLACEMENT CHARACTER} character, \u00b5m"


def test_igraph_reads_what_was_written(tables, tmp_path):
    nodes, segments = tables
    (tmp_path / "network.graphml").write_bytes(graphml_bytes(nodes, segments))
    graph = igraph.Graph.Read_GraphML(str(tmp_path / "network.graphml"))
    assert graph.get_edgelist() == segments[["node_a", "node_b"]].apply(tuple, axis=1).tolist()
    assert graph.es["length_um"] == segments["length_um"].tolist()
    assert graph.es["resolved"] == [True, False, True, True]
    assert graph.vs["kind"] == nodes["kind"].tolist()
    assert graph.count_multiple() == [2, 2, 1, 1]


def test_the_same_tables_give_the_same_bytes(tables):
    assert graphml_bytes(*tables) == graphml_bytes(*tables)


def test_a_tree_keeps_its_numbers():
    frames = random_tree(60, seed=2).to_frames()
    read = nx.read_graphml(
        io.BytesIO(graphml_bytes(frames["nodes"], frames["segments"])), node_type=int
    )
    assert nx.is_tree(nx.Graph(read))
    assert list(read.nodes) == list(range(61))
