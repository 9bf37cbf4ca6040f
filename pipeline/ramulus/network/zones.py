"""Junction zones: where a vessel's lumen is not its own.

The rule. Seen from a node of three or more segment ends, a vessel of radius r stands clear of a
neighbour of radius R that leaves at an angle t once its axis is (R + 0.6 r) away from the
neighbour's: after (R + 0.6 r) / sin t of length, at most three of the wider radius. A neighbour that
leaves backwards (t >= 90 degrees) is passed after R. The zone is the longest over the neighbours. At a
blind end it is the vessel's own radius (the rounded end); where a face cuts the vessel there is none.
Zones take up at most 70 % of a segment.
"""

import numpy as np

from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["zone_bounds_um"]

_CLEAR = 0.6
_LONGEST = 3.0
_SHARE = 0.7


def zone_bounds_um(
    graph: CentrelineGraph, point_radius_um: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
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
        Start and end of the free length of each segment.
    """
    length = graph.segment_length_um()
    own = np.repeat(_mean_radius(graph, point_radius_um), 2)
    ends = graph.segment_nodes.ravel()
    degree = graph.node_degree()
    border = graph.node_kind == NODE_KINDS.index("border")
    reach = np.where((degree[ends] == 1) & ~border[ends], own, 0.0)
    first, second = _pairs_at_nodes(ends, degree)
    if len(first):
        axis = _leaving_axes(graph, own)
        cosine = np.clip((axis[first] * axis[second]).sum(axis=1), -1.0, 1.0)
        sine = np.sqrt(1.0 - cosine**2)
        needed = (own[second] + _CLEAR * own[first]) / np.maximum(sine, 0.2)
        needed = np.minimum(needed, _LONGEST * np.maximum(own[first], own[second]))
        needed = np.where(cosine > 0.0, needed, own[second])
        np.maximum.at(reach, first, needed)
    reach = reach.reshape(-1, 2)
    shrink = np.minimum(1.0, _SHARE * length / np.maximum(reach.sum(axis=1), 1e-12))
    return reach[:, 0] * shrink, length - reach[:, 1] * shrink


def _mean_radius(graph: CentrelineGraph, point_radius_um: np.ndarray) -> np.ndarray:
    weight = graph.point_weight_um()
    total = graph.segment_sum(weight * np.nan_to_num(point_radius_um))
    return total / np.maximum(graph.segment_sum(weight), 1e-12)


def _pairs_at_nodes(ends: np.ndarray, degree: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """All ordered pairs of different segment ends at nodes of three or more."""
    order = np.argsort(ends, kind="stable")
    start = np.cumsum(degree) - degree
    places = order[degree[ends[order]] >= 3]
    partners = degree[ends[places]]
    first = np.repeat(places, partners)
    within = np.arange(len(first)) - np.repeat(np.cumsum(partners) - partners, partners)
    second = order[np.repeat(start[ends[places]], partners) + within]
    different = first != second
    return first[different], second[different]


def _leaving_axes(graph: CentrelineGraph, own: np.ndarray) -> np.ndarray:
    """(2 m, 3) unit vectors from each node to the point some two radii along each of its segments."""
    step = graph.segment_length_um() / np.maximum(graph.points_per_segment - 1, 1)
    reach = np.clip(
        np.rint(2.5 * own[::2] / np.maximum(step, 1e-9)), 1, graph.points_per_segment - 1
    ).astype(int)
    axis = np.empty((2 * graph.n_segments, 3))
    start, stop = graph.point_offsets[:-1], graph.point_offsets[1:] - 1
    axis[::2] = graph.point_position_um[start + reach] - graph.point_position_um[start]
    axis[1::2] = graph.point_position_um[stop - reach] - graph.point_position_um[stop]
    return axis / np.maximum(np.linalg.norm(axis, axis=1), 1e-12)[:, None]
