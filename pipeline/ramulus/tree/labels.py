"""Arteries and veins, where labels tell them apart: each label's vessels as trees of their own."""

from dataclasses import dataclass

import numpy as np

from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph

__all__ = ["LabelledTrees", "separate_labels"]


@dataclass(frozen=True, slots=True)
class LabelledTrees:
    """A graph in which vessels of different labels no longer touch.

    Parameters
    ----------
    graph : CentrelineGraph
        The same segments in the same order; nodes shared by several labels stand once for each.
    node : (k,) int64
        The node of the original graph behind each node.
    label : (k,) array
        The label of each node.
    """

    graph: CentrelineGraph
    node: np.ndarray
    label: np.ndarray


def separate_labels(graph: CentrelineGraph, segment_label: np.ndarray) -> LabelledTrees:
    """Part a network where labels meet, so that each label is rooted and ordered on its own.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.
    segment_label : (m,) array
        Anything that can be sorted: "artery", "vein", "" where it is not known.

    Returns
    -------
    LabelledTrees
        Segments keep their numbers, so that every per-segment result of the parted graph is one of
        the original graph.

    Raises
    ------
    UnusableInputError
        If there is not one label a segment.

    Examples
    --------
    >>> node = [[0, 0, 0], [0, 0, 1], [0, 0, 2]]
    >>> graph = CentrelineGraph.from_polylines(node, [[0, 1], [1, 2]], [node[:2], node[1:]])
    >>> separate_labels(graph, np.array(["artery", "vein"])).node.tolist()
    [0, 1, 1, 2]
    """
    label = np.asarray(segment_label)
    if label.shape != (graph.n_segments,):
        msg = f"segment_label: found shape {label.shape}, expected ({graph.n_segments},)"
        raise UnusableInputError(msg)
    names, number = np.unique(label, return_inverse=True)
    pair = graph.segment_nodes * max(len(names), 1) + number[:, None]
    kept, renumbered = np.unique(pair.ravel(), return_inverse=True)
    node, of_label = kept // max(len(names), 1), kept % max(len(names), 1)
    segment_nodes = renumbered.reshape(-1, 2).astype(np.int64)
    degree = np.bincount(segment_nodes.ravel(), minlength=len(node))
    kind = graph.node_kind[node]
    # A junction between labels alone is a free end of each.
    kind = np.where(
        (kind == NODE_KINDS.index("junction")) & (degree == 1), NODE_KINDS.index("end"), kind
    )
    parted = graph.replace(
        node_position_um=graph.node_position_um[node], node_kind=kind.astype(np.int8),
        segment_nodes=segment_nodes,
    )  # fmt: skip
    return LabelledTrees(parted, node, names[of_label])
