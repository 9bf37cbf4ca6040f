"""Smooth centrelines without the staircase of voxels, and nodes where the axes meet."""

from collections.abc import Sequence
from functools import partial

import numpy as np

from .._checks import checked_spacing_um
from .._settings import Settings, setting
from ..image.grid import in_threads
from ._centreline_kernels import smooth_lines
from .graph import CentrelineGraph
from .zones import zone_bounds_um

__all__ = ["CentrelineSettings", "meeting_points", "smooth", "with_lines"]

# Beyond this strength a line of 60 points is as good as straight.
_STRONGEST = 1e4
# A segment keeps at least this share of its own points, however far the junctions' lumens reach.
_KEPT_SHARE = 0.4
# Weight of a node's old place beside its axes: keeps nearly parallel axes harmless.
_OLD_PLACE = 0.05


class CentrelineSettings(Settings):
    """Settings of the smoothing."""

    slack_voxels: float = setting(
        0.45,
        "RMS distance that a smoothed line may keep from its voxels",
        unit="voxels",
        gt=0,
        source="half a voxel is the grid's own uncertainty; measured on lines and helices",
    )
    step_voxels: float = setting(
        0.5, "distance of the points along a line", unit="finest voxel edges", gt=0
    )


def smooth(
    graph: CentrelineGraph, *, grid_um: Sequence[float], settings: CentrelineSettings | None = None
) -> CentrelineGraph:
    """Return the graph with every segment smoothed and resampled, its ends held at the nodes.

    A chain of voxels is 9 % too long on average. Each line is resampled evenly and minimises its
    squared second differences under the condition that it stays within the slack (RMS, in voxels,
    each axis by its own edge) of the chain (Whittaker 1923, Proc Edinburgh Math Soc 41:63-75);
    what bending that takes off is given back (twicing). Then the junctions are moved to where the
    axes meet (`meeting_points`), and each line is laid again from there without the voxels that lie
    in another vessel's lumen, whose course is the mask's, not the vessel's.

    Parameters
    ----------
    graph : CentrelineGraph
        Segments on voxel positions, with `point_radius_map_um`.
    grid_um : sequence of float
        Voxel edges z, y, x of the grid that the positions come from.
    settings : CentrelineSettings, optional
        See there.

    Returns
    -------
    CentrelineGraph
        The same nodes and segments, in the same order; radii but the map's are unset.

    Raises
    ------
    UnusableInputError
        If an edge of `grid_um` is not positive.

    Examples
    --------
    >>> stairs = [[0, i // 2, i] for i in range(41)]
    >>> graph = CentrelineGraph.from_polylines([stairs[0], stairs[-1]], [[0, 1]], [stairs])
    >>> line = smooth(graph, grid_um=(1, 1, 1))
    >>> round(float(graph.segment_length_um()[0]), 1), round(float(line.segment_length_um()[0]), 1)
    (48.3, 44.7)
    """
    settings = settings or CentrelineSettings()
    scale = np.array(checked_spacing_um("grid_um", grid_um))
    if not graph.n_segments:
        return graph
    first = _laid(graph, scale, settings)
    if not (graph.node_degree() >= 3).any():
        return first
    node_um = meeting_points(first, radius_um=first.point_radius_map_um)
    return _laid(_from_nodes(graph, node_um), scale, settings)


def meeting_points(graph: CentrelineGraph, *, radius_um: np.ndarray) -> np.ndarray:
    """Return (n, 3) node positions where the axes of a junction's segments meet.

    Each segment's axis is the straight line through its points from the zone's edge to two zones
    further. The node is the point with the least sum of squared distances to these axes, no farther
    from the old place than the widest radius there. Nodes of fewer than three segment ends, and
    junctions with fewer than two axes to go by, stay.

    Parameters
    ----------
    graph : CentrelineGraph
        Smoothed lines.
    radius_um : (p,) array
        Radius at each point, to judge the zones by.

    Returns
    -------
    (n, 3) float64 array
        Positions of all nodes.

    Examples
    --------
    >>> ends = [[0, 0, -20], [0, 9, 20], [0, -9, 20]]
    >>> lines = [np.linspace(end, [0.0, 0.0, 2.0], 40) for end in ends]
    >>> tee = CentrelineGraph.from_polylines(
    ...     [*ends, [0, 0, 2]], [[0, 3], [1, 3], [2, 3]], lines, [np.full(40, 3.0)] * 3
    ... )
    >>> [round(float(v), 2) + 0.0 for v in meeting_points(tee, radius_um=tee.point_radius_um)[3]]
    [0.0, 0.0, 2.0]
    """
    node_um = graph.node_position_um.copy()
    degree = graph.node_degree()
    across, towards = np.zeros((graph.n_nodes, 3, 3)), np.zeros((graph.n_nodes, 3))
    axes = np.zeros(graph.n_nodes, dtype=np.int64)
    low, high = zone_bounds_um(graph, radius_um)
    length = graph.segment_length_um()
    for side, reach_um in ((0, low), (1, length - high)):
        segment, middle_um, axis = _axes(graph, side, reach_um, length)
        node = graph.segment_nodes[segment, side]
        segment, middle_um, axis = (v[degree[node] >= 3] for v in (segment, middle_um, axis))
        node = graph.segment_nodes[segment, side]
        projector = np.eye(3) - axis[:, :, None] * axis[:, None, :]
        np.add.at(across, node, projector)
        np.add.at(towards, node, np.einsum("kab,kb->ka", projector, middle_um))
        np.add.at(axes, node, 1)
    moved = np.flatnonzero(axes >= 2)
    system = across[moved] + _OLD_PLACE * np.eye(3)
    target = towards[moved] + _OLD_PLACE * node_um[moved]
    shift = np.linalg.solve(system, target[:, :, None])[:, :, 0] - node_um[moved]
    size = np.linalg.norm(shift, axis=1)
    limit = _widest_um(graph, radius_um)[moved]
    node_um[moved] += shift * np.minimum(1.0, limit / np.maximum(size, 1e-12))[:, None]
    return node_um


def with_lines(
    graph: CentrelineGraph, points_um: np.ndarray, offsets: np.ndarray, radius_map_um: np.ndarray
) -> CentrelineGraph:
    """Return the graph with new points; radii but the map's are unset.

    Parameters
    ----------
    graph : CentrelineGraph
        Nodes and segments that stay.
    points_um : (p, 3) array
        The new points, segment after segment, both nodes included.
    offsets : (m + 1,) array
        Where each segment's points start.
    radius_map_um : (p,) array
        The distance map's radius at each.

    Returns
    -------
    CentrelineGraph
        With the new points.
    """
    p = len(points_um)
    return graph.replace(
        point_position_um=points_um, point_offsets=offsets.astype(np.int64),
        point_radius_map_um=radius_map_um, point_radius_um=np.full(p, np.nan),
        point_radius_se_um=np.full(p, np.nan), point_radius_common_um=np.zeros(p),
        point_method=np.zeros(p, np.int8), point_in_zone=np.zeros(p, dtype=bool),
    )  # fmt: skip


def _laid(
    graph: CentrelineGraph, scale: np.ndarray, settings: CentrelineSettings
) -> CentrelineGraph:
    """Return the graph with each polyline smoothed and resampled."""
    step_um = settings.step_voxels * float(scale.min())
    most = np.ceil(graph.segment_length_um() / step_um).astype(np.int64) + 3
    capacity = np.concatenate(([0], np.cumsum(most)))
    points_um, radius_um = np.empty((capacity[-1], 3)), np.empty(capacity[-1])
    counts = np.empty(graph.n_segments, dtype=np.int64)
    part = partial(
        smooth_lines, graph.point_position_um.copy(), graph.point_radius_map_um.copy(),
        graph.point_offsets, scale, settings.slack_voxels, _STRONGEST, step_um, capacity,
        points_um, radius_um, counts,
    )  # fmt: skip
    in_threads(part, graph.n_segments)
    offsets = np.concatenate(([0], np.cumsum(counts)))
    kept = np.arange(offsets[-1]) + np.repeat(capacity[:-1] - offsets[:-1], counts)
    return with_lines(graph, points_um[kept], offsets, radius_um[kept])


def _from_nodes(graph: CentrelineGraph, node_um: np.ndarray) -> CentrelineGraph:
    """Return the graph with moved nodes, and its lines' points in junction zones left out."""
    low, high = zone_bounds_um(graph, graph.point_radius_map_um)
    length, arc_um = graph.segment_length_um(), graph.arc_um()
    junction = (graph.node_degree() >= 3)[graph.segment_nodes]
    half = 0.5 * _KEPT_SHARE * length
    low = np.where(junction[:, 0], np.minimum(low, 0.5 * length - half), 0.0)
    high = np.where(junction[:, 1], np.maximum(high, 0.5 * length + half), length)
    counts = graph.points_per_segment
    kept = (arc_um >= np.repeat(low, counts)) & (arc_um <= np.repeat(high, counts))
    ends = np.concatenate((graph.point_offsets[:-1], graph.point_offsets[1:] - 1))
    kept[ends] = True
    points_um = graph.point_position_um.copy()
    points_um[graph.point_offsets[:-1]] = node_um[graph.segment_nodes[:, 0]]
    points_um[graph.point_offsets[1:] - 1] = node_um[graph.segment_nodes[:, 1]]
    offsets = np.concatenate(([0], np.cumsum(kept)))[graph.point_offsets]
    moved = with_lines(graph, points_um[kept], offsets, graph.point_radius_map_um[kept])
    return moved.replace(node_position_um=node_um)


def _axes(
    graph: CentrelineGraph, side: int, reach_um: np.ndarray, length_um: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the segments that have an axis at this end, a point on it and its direction."""
    arc_um, counts = graph.arc_um(), graph.points_per_segment
    along = arc_um if side == 0 else np.repeat(length_um, counts) - arc_um
    finest = min(graph.spacing_um) if any(graph.spacing_um) else 0.0
    first = np.repeat(reach_um, counts)
    chosen = (along >= first) & (along <= first + np.maximum(2.0 * first, 3.0 * finest))
    segment, place_um = graph.point_segment[chosen], graph.point_position_um[chosen]
    count = np.bincount(segment, minlength=graph.n_segments)
    sums = [np.bincount(segment, p, graph.n_segments) for p in place_um.T]
    middle_um = np.stack(sums, axis=1) / np.maximum(count, 1)[:, None]
    off = place_um - middle_um[segment]
    scatter = np.empty((graph.n_segments, 3, 3))
    for a in range(3):
        for b in range(3):
            scatter[:, a, b] = np.bincount(segment, off[:, a] * off[:, b], graph.n_segments)
    fit = np.flatnonzero(count >= 4)
    _, vectors = np.linalg.eigh(scatter[fit])
    return fit, middle_um[fit], vectors[:, :, 2]


def _widest_um(graph: CentrelineGraph, radius_um: np.ndarray) -> np.ndarray:
    """Return the widest radius at each node's segment ends, at least the finest voxel edge."""
    finest = min(graph.spacing_um) if any(graph.spacing_um) else 0.0
    widest = np.full(graph.n_nodes, finest)
    for side, end in ((0, graph.point_offsets[:-1]), (1, graph.point_offsets[1:] - 1)):
        np.maximum.at(widest, graph.segment_nodes[:, side], np.nan_to_num(radius_um[end]))
    return widest
