"""Elementary changes of a graph's wiring: join series, merge and part nodes, add segments."""

from collections.abc import Sequence

import numpy as np

from ..errors import UnusableInputError
from . import _clean_kernels as kernels
from .graph import CentrelineGraph

__all__ = ["add_segments", "join_series", "merge_nodes", "part_node"]

_POINTS = (
    "point_position_um", "point_radius_um", "point_radius_se_um", "point_radius_common_um",
    "point_radius_map_um", "point_method", "point_in_zone",
)  # fmt: skip


def join_series(graph: CentrelineGraph, keep: np.ndarray | None = None) -> CentrelineGraph:
    """Return the graph without nodes of degree two: their two segments become one.

    Parameters
    ----------
    graph : CentrelineGraph
        The graph.
    keep : (n,) bool array, optional
        Nodes that stay whatever their degree.

    Returns
    -------
    CentrelineGraph
        A closed ring keeps one node.
    """
    degree = graph.node_degree().copy()
    if keep is not None:
        degree[keep & (degree == 2)] = -1
    if not (degree == 2).any():
        return graph
    ends = graph.segment_nodes.ravel()
    ends_at = np.argsort(ends, kind="stable")
    ends_offset = np.searchsorted(ends[ends_at], np.arange(graph.n_nodes + 1))
    m = graph.n_segments
    chain, flip = np.empty(m, np.int64), np.empty(m, np.bool_)
    offsets, nodes = np.empty(m + 1, np.int64), np.empty((m, 2), np.int64)
    n = kernels.chains(
        graph.segment_nodes.copy(), degree, ends_at, ends_offset, chain, flip, offsets, nodes
    )
    turned = np.zeros(m, bool)
    turned[chain] = flip
    graph = graph.with_directions(turned)
    offsets = offsets[: n + 1]
    first_in_chain = np.zeros(m, bool)
    first_in_chain[offsets[:-1]] = True
    # The point shared by two joined segments is kept once.
    skip = np.where(first_in_chain, 0, 1)
    counts = graph.points_per_segment[chain] - skip
    starts = graph.point_offsets[chain] + skip
    ends_of = np.cumsum(counts)
    take = np.arange(ends_of[-1]) + np.repeat(starts - (ends_of - counts), counts)
    point_offsets = np.concatenate(([0], ends_of[offsets[1:] - 1]))
    resolved = np.logical_and.reduceat(graph.segment_resolved[chain], offsets[:-1])
    review = graph.segment_review[chain[offsets[:-1]]]
    for k in np.flatnonzero(
        np.logical_or.reduceat(graph.segment_review[chain] != "", offsets[:-1])
    ):
        review[k] = _joined(graph.segment_review[chain[offsets[k] : offsets[k + 1]]])
    joined = graph.replace(
        segment_nodes=nodes[:n].copy(), point_offsets=point_offsets.astype(np.int64),
        segment_resolved=resolved, segment_review=review,
        **{name: getattr(graph, name)[take] for name in _POINTS},
    )  # fmt: skip
    return joined.select_segments(np.arange(n))


def merge_nodes(
    graph: CentrelineGraph, group: np.ndarray, weight: np.ndarray, drop: np.ndarray
) -> CentrelineGraph:
    """Return the graph with the nodes of each group made one, at their weighted mean.

    Parameters
    ----------
    graph : CentrelineGraph
        The graph.
    group : (n,) int array
        Group number of each node, 0 to the number of groups less one.
    weight : (n,) array
        Weight of each node's position.
    drop : (m,) bool array
        Segments that vanish.

    Returns
    -------
    CentrelineGraph
        Nodes in the order of their groups.
    """
    n = int(group.max()) + 1 if len(group) else 0
    total = np.bincount(group, weights=weight, minlength=n)
    position = np.stack(
        [
            np.bincount(group, weights=weight * graph.node_position_um[:, a], minlength=n) / total
            for a in range(3)
        ],
        axis=1,
    )
    kind = np.zeros(n, np.int8)
    kind[group[::-1]] = graph.node_kind[::-1]
    points = graph.point_position_um.copy()
    points[graph.point_offsets[:-1]] = position[group[graph.segment_nodes[:, 0]]]
    points[graph.point_offsets[1:] - 1] = position[group[graph.segment_nodes[:, 1]]]
    merged = graph.replace(
        node_position_um=position, node_kind=kind, segment_nodes=group[graph.segment_nodes],
        point_position_um=points,
    )  # fmt: skip
    return merged.select_segments(~drop)


def part_node(
    graph: CentrelineGraph, node: int, ends: Sequence[tuple[int, int]], place_um: np.ndarray
) -> CentrelineGraph:
    """Return the graph with some segment ends of a node moved to a new node.

    Parameters
    ----------
    graph : CentrelineGraph
        The graph.
    node : int
        The node that keeps its other ends.
    ends : sequence of (int, int)
        The (segment, side) ends that go to the new node, which comes last.
    place_um : (3,) array
        Position of the new node.

    Returns
    -------
    CentrelineGraph
        With one node more.

    Raises
    ------
    UnusableInputError
        If an end is not at the node.
    """
    segment_nodes, points_um = graph.segment_nodes.copy(), graph.point_position_um.copy()
    for segment, side in ends:
        if segment_nodes[segment, side] != node:
            found = int(segment_nodes[segment, side])
            msg = f"ends: segment {segment} has node {found} at side {side}, expected {node}"
            raise UnusableInputError(msg)
        segment_nodes[segment, side] = graph.n_nodes
        points = graph.points_of(segment)
        points_um[points.start if side == 0 else points.stop - 1] = place_um
    return graph.replace(
        node_position_um=np.concatenate((graph.node_position_um, place_um[None])),
        node_kind=np.append(graph.node_kind, graph.node_kind[node]),
        segment_nodes=segment_nodes, point_position_um=points_um,
    )  # fmt: skip


def add_segments(graph: CentrelineGraph, pairs: np.ndarray, review: str) -> CentrelineGraph:
    """Return the graph with straight segments added between pairs of nodes.

    The map's radius runs linearly from the radius at one node to that at the other.

    Parameters
    ----------
    graph : CentrelineGraph
        The graph.
    pairs : (k, 2) int array
        The nodes to join.
    review : str
        Why a person should look at the new segments.

    Returns
    -------
    CentrelineGraph
        With the new segments last.
    """
    if not len(pairs):
        return graph
    widest = np.zeros(graph.n_nodes)
    for side, at in ((0, graph.point_offsets[:-1]), (1, graph.point_offsets[1:] - 1)):
        np.maximum.at(
            widest, graph.segment_nodes[:, side], np.nan_to_num(graph.point_radius_map_um[at])
        )
    step = min(graph.spacing_um) if any(graph.spacing_um) else 1.0
    lines, radii = [], []
    for a, b in pairs.tolist():
        start, stop = graph.node_position_um[a], graph.node_position_um[b]
        count = max(2, int(np.ceil(np.linalg.norm(stop - start) / step)) + 1)
        f = np.linspace(0, 1, count)[:, None]
        lines.append(start * (1 - f) + stop * f)
        radii.append(widest[a] * (1 - f[:, 0]) + widest[b] * f[:, 0])
    counts = np.array([len(line) for line in lines])
    p = int(counts.sum())
    new = {
        "point_position_um": np.concatenate(lines), "point_radius_um": np.full(p, np.nan),
        "point_radius_se_um": np.full(p, np.nan), "point_radius_common_um": np.zeros(p),
        "point_radius_map_um": np.concatenate(radii), "point_method": np.zeros(p, np.int8),
        "point_in_zone": np.zeros(p, bool),
    }  # fmt: skip
    return graph.replace(
        segment_nodes=np.concatenate([graph.segment_nodes, pairs]),
        point_offsets=np.concatenate(
            [graph.point_offsets, graph.point_offsets[-1] + np.cumsum(counts)]
        ),
        segment_resolved=np.concatenate([graph.segment_resolved, np.ones(len(pairs), bool)]),
        segment_review=np.concatenate(
            [graph.segment_review, np.full(len(pairs), review, dtype=object)]
        ),
        **{name: np.concatenate([getattr(graph, name), value]) for name, value in new.items()},
    )


def _joined(reviews: np.ndarray) -> str:
    return "; ".join(dict.fromkeys(r for r in reviews if r))
