"""Lines through the fitted lumen centres, and nodes where these lines meet.

Outside the junctions' zones a line follows the stations' fitted centres; through a zone it runs
straight to the node. A free end that is not cut by a face lies one radius inside the lumen's end
(the last inscribed ball's centre); an end that a face cuts is carried along its axis to that face.
"""

import numpy as np

from . import _recentre_kernels as kernels
from .centreline import meeting_points
from .graph import NODE_KINDS, CentrelineGraph
from .zones import zone_bounds_um

__all__ = ["recentre"]


def recentre(
    graph: CentrelineGraph, *, segment: np.ndarray, s_um: np.ndarray, centre_um: np.ndarray,
    values: np.ndarray, tip_um: np.ndarray, step_um: float, slack_um: float,
) -> tuple[CentrelineGraph, np.ndarray]:  # fmt: skip
    """Return the graph on lines through station centres, and the stations' values at its points.

    Parameters
    ----------
    graph : CentrelineGraph
        With `point_radius_map_um`.
    segment, s_um : (k,) arrays
        Segment and arc length of each station, in order along each segment.
    centre_um : (k, 3) array
        Fitted centre of each.
    values : (k, c) array
        What is carried to the points by interpolation, constant beyond the outer stations.
    tip_um : (n, 3) array
        Places of blind ends as read in the image, NaN where unknown.
    step_um : float
        Distance of the points along the new lines.
    slack_um : float
        RMS distance that a line may keep from the centres.

    Returns
    -------
    tuple
        The graph (radii unset but the map's) and (p, c) values, NaN along segments without a station.
    """
    low, high = zone_bounds_um(graph, graph.point_radius_map_um)
    end = graph.node_kind == NODE_KINDS.index("end")
    trim = end[graph.segment_nodes]
    length = graph.segment_length_um()
    keep_from = np.where(trim[:, 0], np.minimum(low, 0.4 * length), 0.0)
    keep_to = np.where(trim[:, 1], np.maximum(high, 0.6 * length), length)
    node = _ends_moved(graph, segment, s_um, centre_um, keep_from, keep_to)
    node = np.where(np.isfinite(tip_um), tip_um, node)
    for final in (False, True):
        points, carried, counts = kernels.lines(
            np.ascontiguousarray(graph.point_position_um), graph.point_radius_map_um.copy(), graph.arc_um(),
            graph.point_offsets, graph.segment_nodes.copy(), node, trim, keep_from, keep_to, segment, s_um,
            centre_um, np.ascontiguousarray(values), step_um, slack_um,
        )  # fmt: skip
        offsets = np.concatenate(([0], np.cumsum(counts))).astype(np.int64)
        p = len(points)
        new = graph.replace(
            node_position_um=node, point_position_um=points, point_offsets=offsets,
            point_radius_map_um=carried[:, -1].copy(), point_radius_um=np.full(p, np.nan),
            point_radius_se_um=np.full(p, np.nan), point_radius_common_um=np.zeros(p),
            point_method=np.zeros(p, np.int8), point_in_zone=np.zeros(p, bool),
        )  # fmt: skip
        if not final:
            guess = np.where(np.isfinite(carried[:, 0]), carried[:, 0], carried[:, -1])
            node = np.where(
                (graph.node_degree() >= 3)[:, None], meeting_points(new, radius_um=guess), node
            )
    return new, carried[:, :-1]


def _ends_moved(graph, segment, s_um, centre_um, keep_from, keep_to):  # noqa: ANN001, ANN202
    """Free ends put on the axis through their last stations; cut ends carried to the face."""
    node = graph.node_position_um.copy()
    if not len(segment):
        return node
    degree = graph.node_degree()
    border = graph.node_kind == NODE_KINDS.index("border")
    start = np.searchsorted(segment, np.arange(graph.n_segments), side="left")
    stop = np.searchsorted(segment, np.arange(graph.n_segments), side="right")
    spacing, extent = np.asarray(graph.spacing_um), np.asarray(graph.extent_um)
    for side in (0, 1):
        ends = graph.segment_nodes[:, side]
        todo = np.flatnonzero((degree[ends] == 1) & (stop - start >= 2))
        if not len(todo):
            continue
        reach = np.minimum(stop[todo] - start[todo] - 1, 4)
        first = start[todo] if side == 0 else stop[todo] - 1
        back = first + reach if side == 0 else first - reach
        axis = centre_um[first] - centre_um[back]
        axis /= np.maximum(np.linalg.norm(axis, axis=1), 1e-12)[:, None]
        target = keep_from[todo] if side == 0 else keep_to[todo]
        ahead = np.abs(target - s_um[first])
        place = centre_um[first] + ahead[:, None] * axis
        if extent.any():
            place = _to_face(place, axis, spacing, extent, border[ends[todo]])
        node[ends[todo]] = place
    return node


def _to_face(place, axis, spacing, extent, border):  # noqa: ANN001, ANN202
    """Carry cut ends along their axis to the nearest face ahead, if that is two voxels or less away."""
    with np.errstate(divide="ignore", invalid="ignore"):
        to_low = (-0.5 * spacing - place) / axis
        to_high = (extent - 0.5 * spacing - place) / axis
    ahead = np.where(axis < 0, to_low, to_high)
    ahead = np.where(np.abs(axis) > 0.2, ahead, np.inf)
    nearest = ahead.min(axis=1)
    good = border & np.isfinite(nearest) & (np.abs(nearest) <= 2.5 * spacing.max())
    return np.where(good[:, None], place + np.where(good, nearest, 0.0)[:, None] * axis, place)
