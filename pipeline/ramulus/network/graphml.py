"""GraphML: the graph with its nodes' and segments' columns as attributes."""

import io

import networkx as nx
import pandas as pd

__all__ = ["graphml_bytes"]


def graphml_bytes(nodes: pd.DataFrame, segments: pd.DataFrame) -> bytes:
    """Return the graph as GraphML; empty cells are left out.

    Parameters
    ----------
    nodes, segments : DataFrame
        The sample folder's tables.
    """
    graph = nx.MultiGraph()
    for row in nodes.to_dict("records"):
        graph.add_node(int(row.pop("node_id")), **_plain(row))
    for row in segments.to_dict("records"):
        key = int(row["segment_id"])
        graph.add_edge(int(row.pop("node_a")), int(row.pop("node_b")), key=key, **_plain(row))
    out = io.BytesIO()
    nx.write_graphml_xml(graph, out)
    return out.getvalue()


def _plain(row: dict) -> dict:
    """Python scalars only, without undefined ones; numpy's are foreign to GraphML."""
    plain = {}
    for name, value in row.items():
        if pd.isna(value):
            continue
        item = value.item() if hasattr(value, "item") else value
        plain[str(name)] = int(item) if isinstance(item, bool) else item
    return plain
