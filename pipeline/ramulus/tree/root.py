"""Where the tree starts, and which way its segments point."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from .._settings import Settings, setting
from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph
from . import _walk_kernels as kernels

__all__ = ["Inlets", "RootSettings", "Rooting", "choose_inlets", "components", "direct", "on_loops"]


class RootSettings(Settings):
    """Settings of the root."""

    inlet: Literal["widest_border", "position", "node"] = setting(
        "widest_border", "the inlet: the root that a graph's file names, else the widest end that the volume's"
        " edge cuts (of the largest part); the end nearest to given positions; or given nodes",
    )  # fmt: skip
    inlet_um: tuple[tuple[float, float, float], ...] = setting(
        (), "positions z, y, x of the inlets for inlet = position", unit="um"
    )
    inlet_nodes: tuple[int, ...] = setting((), "node numbers of the inlets for inlet = node")
    search_radius_um: float | None = setting(
        None, "farthest that an end may lie from a given position; absent: five of the widest radii",
        unit="um", gt=0,
    )  # fmt: skip


@dataclass(frozen=True, slots=True)
class Inlets:
    """The inlet nodes, the first being the main one, and the rule that chose them."""

    nodes: np.ndarray
    rule: str


@dataclass(frozen=True, slots=True)
class Rooting:
    """Directions away from the roots.

    Per segment: `parent` segment (-1 at a root), `upstream` and `downstream` node, `generation` (root
    0), `in_loop` (lies on a cycle), `closes_loop` (both its ends are reached another way), `part`
    (component number), `main` (in a part of an inlet). `roots` holds the root node of every part.
    """

    parent: np.ndarray
    upstream: np.ndarray
    downstream: np.ndarray
    generation: np.ndarray
    in_loop: np.ndarray
    closes_loop: np.ndarray
    part: np.ndarray
    main: np.ndarray
    roots: np.ndarray
    n_loops: int
    n_parts: int
    loop_share: float

    @property
    def is_tree(self) -> bool:
        """Whether no segment lies on a cycle."""
        return self.n_loops == 0


def choose_inlets(graph: CentrelineGraph, *, settings: RootSettings) -> Inlets:
    """Choose the inlet nodes.

    Raises
    ------
    UnusableInputError
        If a given node does not exist, is no free end, or no end lies near a given position.
    """
    if settings.inlet == "node":
        return _given_nodes(graph, settings)
    if settings.inlet == "position":
        return _nearest_ends(graph, settings)
    named = np.flatnonzero(graph.node_kind == NODE_KINDS.index("inlet"))
    if len(named):
        return Inlets(named, f"the root that the graph's file names: node {int(named[0])}")
    return _widest_end(graph)


def direct(graph: CentrelineGraph, inlets: Inlets, *, flow_um3_per_s: np.ndarray | None = None) -> Rooting:
    """Direct every segment away from its part's root, or along the flow where it lies on a loop.

    Parts without an inlet are rooted at their widest end that the volume's edge cuts, else at their
    widest node. A segment's parent is the one that its upstream node is reached by; with a flow given
    it is the segment that brings the most flow to that node.

    Parameters
    ----------
    flow_um3_per_s : (m,) array, optional
        Positive from `segment_nodes[:, 0]` to `[:, 1]`; NaN where there is none.
    """
    n, m = graph.n_nodes, graph.n_segments
    ends = graph.segment_nodes.ravel()
    ends_at = np.argsort(ends, kind="stable")
    offsets = np.searchsorted(ends[ends_at], np.arange(n + 1))
    part_of_node, n_parts = components(graph)
    in_loop = on_loops(graph)
    roots = _root_of_each_part(graph, inlets, part_of_node, n_parts)
    nodes = graph.segment_nodes.copy()
    upstream, parent = np.full(m, -1, np.int64), np.full(m, -1, np.int64)
    generation, visited = np.zeros(m, np.int64), np.zeros(n, bool)
    kernels.walk(nodes, ends_at, offsets, roots, upstream, parent, generation, visited)
    downstream = nodes.sum(axis=1) - upstream
    closes = _closing(nodes, upstream, downstream, parent)
    if flow_um3_per_s is not None and in_loop.any():
        parent, upstream, downstream, generation = _along_flow(
            graph, in_loop, flow_um3_per_s, parent, upstream, downstream, generation
        )
    length = graph.segment_length_um()
    part = part_of_node[nodes[:, 0]]
    return Rooting(
        parent, upstream, downstream, generation, in_loop, closes, part,
        np.isin(part, part_of_node[inlets.nodes]), roots, m - n + n_parts, n_parts,
        float(length[in_loop].sum() / max(length.sum(), 1e-12)),
    )  # fmt: skip


def components(graph: CentrelineGraph) -> tuple[np.ndarray, int]:
    """Return the part that each node belongs to, and how many there are."""
    a, b = graph.segment_nodes.T
    count, label = connected_components(
        coo_array((np.ones(len(a)), (a, b)), (graph.n_nodes, graph.n_nodes)), directed=False
    )
    return label, int(count)


def on_loops(graph: CentrelineGraph) -> np.ndarray:
    """(m,) whether each segment lies on a cycle."""
    ends = graph.segment_nodes.ravel()
    ends_at = np.argsort(ends, kind="stable")
    offsets = np.searchsorted(ends[ends_at], np.arange(graph.n_nodes + 1))
    bridge = np.zeros(graph.n_segments, bool)
    kernels.bridges(graph.segment_nodes.copy(), ends_at, offsets, graph.n_nodes, bridge)
    return ~bridge


def _end_radius(graph: CentrelineGraph) -> np.ndarray:
    """(n,) mean radius of the widest segment at each node."""
    radius = np.nan_to_num(graph.segment_radius_um())
    widest = np.zeros(graph.n_nodes)
    np.maximum.at(widest, graph.segment_nodes.ravel(), np.repeat(radius, 2))
    return widest


def _widest_end(graph: CentrelineGraph) -> Inlets:
    part, n_parts = components(graph)
    length = np.bincount(part[graph.segment_nodes[:, 0]], weights=graph.segment_length_um(), minlength=n_parts)
    largest = part == int(np.argmax(length))
    free = (graph.node_degree() == 1) & largest
    border = free & (graph.node_kind == NODE_KINDS.index("border"))
    radius = _end_radius(graph)
    for pool, name in (
        (border, "the widest end that the volume's edge cuts"),
        (free, "the widest free end, as the volume's edge cuts none"),
        (largest, "the widest node, as the network has no free end"),
    ):
        if pool.any():
            node = int(np.argmax(np.where(pool, radius, -1.0)))
            rule = f"{name}, of the longest part: node {node}, radius {radius[node]:.4g} um"
            return Inlets(np.array([node]), rule)
    raise UnusableInputError("root: the graph has no node")  # noqa: EM101, TRY003 - a fixed sentence


def _given_nodes(graph: CentrelineGraph, settings: RootSettings) -> Inlets:
    nodes = np.array(settings.inlet_nodes, dtype=np.int64)
    if not len(nodes):
        msg = "root.inlet_nodes: found none, expected node numbers, as root.inlet is 'node'"
        raise UnusableInputError(msg)
    bad = nodes[(nodes < 0) | (nodes >= graph.n_nodes)]
    if len(bad):
        msg = f"root.inlet_nodes: found {int(bad[0])}, expected numbers from 0 to {graph.n_nodes - 1}"
        raise UnusableInputError(msg)
    return Inlets(nodes, f"given nodes {', '.join(map(str, nodes.tolist()))}")


def _nearest_ends(graph: CentrelineGraph, settings: RootSettings) -> Inlets:
    if not settings.inlet_um:
        msg = "root.inlet_um: found none, expected positions z, y, x in um, as root.inlet is 'position'"
        raise UnusableInputError(msg)
    free = np.flatnonzero(graph.node_degree() == 1)
    free = free if len(free) else np.arange(graph.n_nodes)
    reach = settings.search_radius_um or 5 * float(_end_radius(graph).max())
    chosen = []
    for position in settings.inlet_um:
        distance = np.linalg.norm(graph.node_position_um[free] - position, axis=1)
        k = int(np.argmin(distance))
        if distance[k] > reach:
            msg = (
                f"root.inlet_um: the free end nearest to {tuple(position)} um is {distance[k]:.4g} um away,"
                f" expected one within {reach:.4g} um (root.search_radius_um)"
            )
            raise UnusableInputError(msg)
        chosen.append(int(free[k]))
    return Inlets(np.array(list(dict.fromkeys(chosen))), "the free ends nearest to the given positions")


def _root_of_each_part(graph, inlets, part, n_parts):  # noqa: ANN001, ANN202
    radius, degree = _end_radius(graph), graph.node_degree()
    border = (graph.node_kind == NODE_KINDS.index("border")) & (degree == 1)
    # In this order of preference: cut ends, free ends, any node; the widest of its kind.
    rank = np.where(border, 2, np.where(degree == 1, 1, 0))
    order = np.lexsort((-radius, -rank, part))
    first = np.r_[True, np.diff(part[order]) != 0]
    own = order[first]
    has_inlet = np.isin(np.arange(n_parts), part[inlets.nodes])
    return np.concatenate([inlets.nodes, own[~has_inlet]]).astype(np.int64)


def _closing(nodes, upstream, downstream, parent):  # noqa: ANN001, ANN202
    """A segment closes a loop if its downstream node was reached by another segment (or is a root)."""
    reached_by = np.full(int(nodes.max()) + 1 if len(nodes) else 0, -1, np.int64)
    has_child = parent >= 0
    reached_by[upstream[has_child]] = parent[has_child]
    leaf = np.bincount(nodes.ravel(), minlength=len(reached_by)) == 1
    return ~leaf[downstream] & (reached_by[downstream] != np.arange(len(nodes)))


def _along_flow(graph, in_loop, flow, parent, upstream, downstream, generation):  # noqa: ANN001, ANN202
    a, b = graph.segment_nodes.T
    turn = in_loop & np.isfinite(flow) & (flow != 0)
    upstream = np.where(turn, np.where(flow > 0, a, b), upstream)
    downstream = a + b - upstream
    # The parent brings the most flow to the upstream node.
    size = np.nan_to_num(np.abs(flow))
    order = np.lexsort((np.arange(len(size)), -size, downstream))
    first = np.r_[True, np.diff(downstream[order]) != 0]
    bringer = np.full(graph.n_nodes, -1, np.int64)
    bringer[downstream[order[first]]] = order[first]
    parent = np.where(size > 0, bringer[upstream], parent)
    parent = np.where(parent == np.arange(len(parent)), -1, parent)
    return parent, upstream, downstream, generation
