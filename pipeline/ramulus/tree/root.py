"""Where the trees start, and which way their segments point."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from pydantic import model_validator
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from .._settings import Settings, setting
from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph
from . import _order_kernels, _walk_kernels
from .strahler import walking_order

__all__ = ["Inlets", "RootSettings", "Rooting", "choose_inlets", "components", "direct", "on_loops"]

_INLET, _BORDER = NODE_KINDS.index("inlet"), NODE_KINDS.index("border")
# A flow below this share of its part's greatest is rounding: the segment points away from the root.
_FLOW_FLOOR = 1e-9


class RootSettings(Settings):
    """Settings of the root."""

    inlet: Literal["widest_border", "position", "node"] = setting(
        "widest_border", "the inlet: the root that a graph's file names, else the widest end that"
        " the volume's edge cuts (of the largest part); the end nearest to given positions; or"
        " given nodes",
    )  # fmt: skip
    inlet_um: tuple[tuple[float, float, float], ...] = setting(
        (), "positions z, y, x of the inlets for inlet = position", unit="um"
    )
    inlet_nodes: tuple[int, ...] = setting((), "node numbers of the inlets for inlet = node")
    search_radius_um: float | None = setting(
        None, "farthest that an end may lie from a position; absent: five of the widest radii",
        unit="um", gt=0,
    )  # fmt: skip

    @model_validator(mode="after")
    def _agree(self) -> "RootSettings":
        """Refuse inlets that contradict the way in which they are said to be given."""
        for key, values, way in (
            ("inlet_um", self.inlet_um, "position"), ("inlet_nodes", self.inlet_nodes, "node")
        ):  # fmt: skip
            if values and self.inlet != way:
                msg = (
                    f"found {key} = {values} beside inlet = '{self.inlet}':"
                    f" set inlet = '{way}' or drop {key}"
                )
                raise ValueError(msg)
            if len(set(values)) < len(values):
                msg = f"found the same inlet twice in {key} = {values}: give each once"
                raise ValueError(msg)
        return self


@dataclass(frozen=True, slots=True)
class Inlets:
    """The inlets of a network.

    Parameters
    ----------
    nodes : (k,) int64
        Node numbers, the main inlet first.
    rule : str
        How they were chosen, as a sentence.
    """

    nodes: np.ndarray
    rule: str


@dataclass(frozen=True, slots=True)
class Rooting:
    """Directions away from the roots, or along the flow where there are loops.

    Parameters
    ----------
    parent : (m,) int64
        The segment that brings to a segment's upstream node; -1 at a root.
    upstream, downstream : (m,) int64
        Nodes.
    generation : (m,) int64
        Steps along the parents to the root: 0 there.
    in_loop : (m,) bool
        Lies on a cycle.
    closes_loop : (m,) bool
        Arrives at a node that another segment is the parent at. Left out, the rest is a forest.
    part : (m,) int64
        Component number.
    main : (m,) bool
        In the part of an inlet.
    roots : (k,) int64
        Root nodes: the inlets, then one of every other part.
    n_loops, n_parts : int
        Independent cycles, components.
    loop_share : float
        Share of the length that lies on cycles.
    entered : (n,) int64
        The segment that each node is reached by, the parent at its junction; -1 at a root, and at
        any node that flow leaves but does not enter.
    by_flow : (m,) bool
        The flow gave the direction.
    is_mesh : bool
        More of the length lies on cycles than `mesh_share`.
    orderable : (m,) bool
        May have a branching order: in a tree-like network all, in a mesh those that are reached
        from a root without crossing a cycle.
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
    entered: np.ndarray
    by_flow: np.ndarray
    is_mesh: bool
    orderable: np.ndarray

    @property
    def is_tree(self) -> bool:
        """Whether no segment lies on a cycle."""
        return self.n_loops == 0


def choose_inlets(graph: CentrelineGraph, *, settings: RootSettings) -> Inlets:
    """Choose the inlet nodes.

    Parameters
    ----------
    graph : CentrelineGraph
        With radii, where the widest end is asked for.
    settings : RootSettings
        The way to choose.

    Returns
    -------
    Inlets
        The nodes and the rule as a sentence.

    Raises
    ------
    UnusableInputError
        If a given node does not exist, no end lies near a given position, two positions mean one
        end, or the graph's file names two roots in one tree.

    Examples
    --------
    >>> graph = CentrelineGraph.from_polylines([[0, 0, 0], [0, 0, 9]], [[0, 1]],
    ...     [[[0, 0, 0], [0, 0, 9]]], [[2.0, 1.0]])
    >>> choose_inlets(graph, settings=RootSettings(inlet="node", inlet_nodes=(1,))).rule
    'given nodes: 1'
    """
    if settings.inlet == "node":
        return _given_nodes(graph, settings)
    if settings.inlet == "position":
        return _nearest_ends(graph, settings)
    named = np.flatnonzero(graph.node_kind == _INLET)
    if len(named):
        return _named_nodes(graph, named)
    return _widest_end(graph)


def direct(
    graph: CentrelineGraph,
    inlets: Inlets,
    *,
    flow_um3_per_s: np.ndarray | None = None,
    mesh_share: float = 0.2,
) -> Rooting:
    """Direct every segment away from its part's root, or along the flow where the part has loops.

    Parts without an inlet are rooted at their widest end that the volume's edge cuts, else at their
    widest free end, else at their widest node. Away from the root means breadth first, in steps
    from junction to junction. With a flow, the segments of a part that holds loops follow it, and
    the parent at a node is the segment that brings most; where the flow is nought (blind ends,
    balanced bridges) the direction stays away from the root. For veins, rooted where they drain,
    give the negative of the flow.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.
    inlets : Inlets
        The roots of their parts.
    flow_um3_per_s : (m,) array, optional
        Positive from `segment_nodes[:, 0]` to `[:, 1]`; NaN where there is none.
    mesh_share : float
        Share of the length on cycles above which the network is a mesh.

    Returns
    -------
    Rooting
        Per segment and per node.

    Examples
    --------
    >>> line = [[0, 0, 0], [0, 0, 9]]
    >>> graph = CentrelineGraph.from_polylines(line, [[0, 1]], [line], [[2.0, 1.0]])
    >>> direct(graph, Inlets(np.array([1]), "given")).upstream.tolist()
    [1]
    """
    n, m = graph.n_nodes, graph.n_segments
    nodes, ends_at, offsets = _incidence(graph)
    part_of_node, n_parts = components(graph)
    part = part_of_node[nodes[:, 0]]
    in_loop = on_loops(graph)
    roots = _root_of_each_part(graph, inlets, part_of_node, n_parts)
    upstream, entered = np.full(m, -1, np.int64), np.full(n, -1, np.int64)
    _walk_kernels.walk(nodes, ends_at, offsets, roots, upstream, entered)
    by_flow, size = _flowing(part, n_parts, in_loop, flow_um3_per_s)
    if flow_um3_per_s is not None and by_flow.any():
        along = np.where(flow_um3_per_s > 0, nodes[:, 0], nodes[:, 1])
        upstream = np.where(by_flow, along, upstream)
        entered = np.full(n, -1, np.int64)
        _walk_kernels.walk_downstream(nodes, ends_at, offsets, roots, upstream, size, entered)
    downstream = nodes.sum(axis=1) - upstream
    parent = entered[upstream]
    length = graph.segment_length_um()
    loop_share = float(length[in_loop].sum() / max(length.sum(), 1e-12))
    generation, crossed = _along_parents(parent, in_loop)
    is_mesh = loop_share > mesh_share
    return Rooting(
        parent=parent, upstream=upstream, downstream=downstream, generation=generation,
        in_loop=in_loop, closes_loop=entered[downstream] != np.arange(m), part=part,
        main=np.isin(part, part_of_node[inlets.nodes]), roots=roots, n_loops=m - n + n_parts,
        n_parts=n_parts, loop_share=loop_share, entered=entered, by_flow=by_flow, is_mesh=is_mesh,
        orderable=~crossed if is_mesh else np.ones(m, dtype=bool),
    )  # fmt: skip


def components(graph: CentrelineGraph) -> tuple[np.ndarray, int]:
    """Return the part that each node belongs to, and how many there are.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.

    Returns
    -------
    part : (n,) int array
        Numbers from 0.
    count : int
        Number of parts; a node without segments is one.
    """
    a, b = graph.segment_nodes.T
    count, label = connected_components(
        coo_array((np.ones(len(a)), (a, b)), (graph.n_nodes, graph.n_nodes)), directed=False
    )
    return label, int(count)


def on_loops(graph: CentrelineGraph) -> np.ndarray:
    """Tell which segments lie on a cycle (parallel segments do, and loops from a node to itself).

    Parameters
    ----------
    graph : CentrelineGraph
        The network.

    Returns
    -------
    (m,) bool array
        False for bridges: without such a segment its part falls in two.
    """
    nodes, ends_at, offsets = _incidence(graph)
    bridge = np.zeros(graph.n_segments, bool)
    _walk_kernels.bridges(nodes, ends_at, offsets, graph.n_nodes, bridge)
    return ~bridge


def _incidence(graph: CentrelineGraph) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Segment ends by node (end 2 i + side of segment i), and where each node's ends begin."""
    nodes = graph.segment_nodes.copy()
    ends = nodes.ravel()
    offsets = np.concatenate(([0], np.cumsum(graph.node_degree()))).astype(np.int64)
    return nodes, np.argsort(ends, kind="stable"), offsets


def _named_nodes(graph: CentrelineGraph, named: np.ndarray) -> Inlets:
    part, n_parts = components(graph)
    loops = np.bincount(part[graph.segment_nodes[:, 0]], minlength=n_parts)
    loops = loops - np.bincount(part, minlength=n_parts) + 1
    for inlet_part in np.unique(part[named]).tolist():
        mine = named[part[named] == inlet_part]
        if len(mine) > 1 and loops[inlet_part] == 0:
            text = ", ".join(map(str, mine.tolist()))
            msg = (
                f"root: the graph's file names {len(mine)} roots in one tree, nodes {text};"
                f" expected one, or all of them as root.inlet_nodes with root.inlet = 'node'"
            )
            raise UnusableInputError(msg)
    text = ", ".join(map(str, named.tolist()))
    return Inlets(named, f"what the graph's file names: node{'s' * (len(named) > 1)} {text}")


def _end_radius(graph: CentrelineGraph) -> np.ndarray:
    """(n,) mean radius of the widest segment at each node."""
    radius = np.nan_to_num(graph.segment_radius_um())
    widest = np.zeros(graph.n_nodes)
    np.maximum.at(widest, graph.segment_nodes.ravel(), np.repeat(radius, 2))
    return widest


def _widest_end(graph: CentrelineGraph) -> Inlets:
    part, n_parts = components(graph)
    length = np.bincount(
        part[graph.segment_nodes[:, 0]], weights=graph.segment_length_um(), minlength=n_parts
    )
    largest = part == (int(np.argmax(length)) if n_parts else -1)
    free = (graph.node_degree() == 1) & largest
    border = free & (graph.node_kind == _BORDER)
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
    msg = "root: found a graph of 0 nodes, expected at least one vessel"
    raise UnusableInputError(msg)


def _given_nodes(graph: CentrelineGraph, settings: RootSettings) -> Inlets:
    nodes = np.array(settings.inlet_nodes, dtype=np.int64)
    if not len(nodes):
        msg = "root.inlet_nodes: found none, expected node numbers, as root.inlet is 'node'"
        raise UnusableInputError(msg)
    bad = nodes[(nodes < 0) | (nodes >= graph.n_nodes)]
    if len(bad):
        top = graph.n_nodes - 1
        msg = f"root.inlet_nodes: found {int(bad[0])}, expected numbers from 0 to {top}"
        raise UnusableInputError(msg)
    return Inlets(nodes, f"given nodes: {', '.join(map(str, nodes.tolist()))}")


def _nearest_ends(graph: CentrelineGraph, settings: RootSettings) -> Inlets:
    if not settings.inlet_um:
        msg = "root.inlet_um: found none, expected z, y, x in um, as root.inlet is 'position'"
        raise UnusableInputError(msg)
    free = np.flatnonzero(graph.node_degree() == 1)
    free = free if len(free) else np.arange(graph.n_nodes)
    reach = settings.search_radius_um or _reach_um(graph)
    chosen: dict[int, tuple[float, float, float]] = {}
    for position in settings.inlet_um:
        distance = np.linalg.norm(graph.node_position_um[free] - position, axis=1)
        k = int(np.argmin(distance))
        if distance[k] > reach:
            msg = (
                f"root.inlet_um: the free end nearest to {position} um is {distance[k]:.4g} um"
                f" away, expected one within {reach:.4g} um (root.search_radius_um)"
            )
            raise UnusableInputError(msg)
        node = int(free[k])
        if node in chosen:
            msg = (
                f"root.inlet_um: {chosen[node]} and {position} um both mean the end at node {node},"
                f" expected one position an end"
            )
            raise UnusableInputError(msg)
        chosen[node] = position
    nodes = np.array(list(chosen), dtype=np.int64)
    text = ", ".join(map(str, nodes.tolist()))
    return Inlets(nodes, f"the free ends nearest to the given positions: nodes {text}")


def _reach_um(graph: CentrelineGraph) -> float:
    """Five of the widest radii, or three voxels; else a twentieth of the network's size."""
    reach = max(5 * float(_end_radius(graph).max()), 3 * max(graph.spacing_um))
    if reach > 0:
        return reach
    return 0.05 * float(np.linalg.norm(np.ptp(graph.node_position_um, axis=0)))


def _root_of_each_part(
    graph: CentrelineGraph, inlets: Inlets, part: np.ndarray, n_parts: int
) -> np.ndarray:
    radius, degree = _end_radius(graph), graph.node_degree()
    border = (graph.node_kind == _BORDER) & (degree == 1)
    # In this order of preference: cut ends, free ends, any node; the widest of its kind.
    rank = np.where(border, 2, np.where(degree == 1, 1, 0))
    order = np.lexsort((-radius, -rank, part))
    first = np.r_[True, np.diff(part[order]) != 0][: len(order)]
    own = order[first]
    has_inlet = np.isin(np.arange(n_parts), part[inlets.nodes])
    return np.concatenate([inlets.nodes, own[~has_inlet]]).astype(np.int64)


def _flowing(
    part: np.ndarray, n_parts: int, in_loop: np.ndarray, flow: np.ndarray | None
) -> tuple[np.ndarray, np.ndarray]:
    """Tell which segments follow the flow, and the size of the flow in each (else 0)."""
    if flow is None:
        return np.zeros(len(part), dtype=bool), np.zeros(len(part))
    size = np.nan_to_num(np.abs(np.asarray(flow, dtype=np.float64)))
    greatest = np.zeros(n_parts)
    np.maximum.at(greatest, part, size)
    with_loops = np.bincount(part[in_loop], minlength=n_parts) > 0
    by_flow = with_loops[part] & (size > _FLOW_FLOOR * greatest[part])
    return by_flow, np.where(by_flow, size, 0.0)


def _along_parents(parent: np.ndarray, in_loop: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the generations, and whether a cycle holds a segment or lies above it."""
    order = walking_order(parent)
    generation, crossed = np.zeros(len(parent), np.int64), in_loop.copy()
    _order_kernels.generations(parent, order, generation)
    _order_kernels.carry_down(parent, order, crossed)
    return generation, crossed
