"""Junction zones: where a vessel's lumen is not its own.

The rule. At a node of three or more segment ends, the zone of one segment reaches along it as far
as the widest of the *other* segments' radii there, from the node: inside that vessel's lumen the
cross-section shows the neighbour's wall. For the widest segment itself that is the widest branch's
radius. At a free end the zone is the segment's own radius (the cap), unless the volume's face cuts it.
"""

import numpy as np

from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["zone_bounds_um"]


def zone_bounds_um(graph: CentrelineGraph, point_radius_um: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return, for each segment, the arc lengths between which its lumen is its own.

    Parameters
    ----------
    graph : CentrelineGraph
        The graph.
    point_radius_um : (p,) array
        Radii to judge the zones by; NaN counts as 0.

    Returns
    -------
    tuple of (m,) arrays
        Start and end, `start >= end` where a segment lies wholly in zones.
    """
    radius = np.nan_to_num(point_radius_um)
    weight = graph.point_weight_um()
    mean = graph.segment_sum(weight * radius) / np.maximum(graph.segment_sum(weight), 1e-12)
    ends = graph.segment_nodes.ravel()
    own = np.repeat(mean, 2)
    degree = graph.node_degree()
    first, second, winner = _two_largest(ends, own, graph.n_nodes)
    place = np.arange(len(own))
    other = np.where(winner[ends] == place, second[ends], first[ends])
    border = graph.node_kind == NODE_KINDS.index("border")
    tip = np.where(border[ends], 0.0, own)
    reach = np.where(degree[ends] >= 3, other, np.where(degree[ends] == 1, tip, 0.0)).reshape(-1, 2)
    length = graph.segment_length_um()
    return reach[:, 0], length - reach[:, 1]


def _two_largest(ends: np.ndarray, values: np.ndarray, n_nodes: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Largest and second largest value at each node, and the place of the largest."""
    order = np.lexsort((np.arange(len(ends)), -values, ends))
    sorted_ends = ends[order]
    start = np.flatnonzero(np.r_[True, sorted_ends[1:] != sorted_ends[:-1]]) if len(ends) else np.zeros(0, int)
    first, second = np.zeros(n_nodes), np.zeros(n_nodes)
    winner = np.full(n_nodes, -1, dtype=np.int64)
    nodes = sorted_ends[start] if len(ends) else start
    first[nodes] = values[order][start]
    winner[nodes] = order[start]
    has_two = np.r_[np.diff(start), len(ends) - start[-1]] >= 2 if len(ends) else start.astype(bool)
    second[nodes[has_two]] = values[order][start[has_two] + 1]
    return first, second, winner
