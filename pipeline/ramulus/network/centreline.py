"""Smooth centrelines without the staircase of voxels, and nodes where the axes meet."""

import numpy as np

from .._settings import Settings, setting
from . import _clean_kernels as kernels
from .graph import CentrelineGraph
from .zones import zone_bounds_um

__all__ = ["CentrelineSettings", "meeting_points", "smooth", "with_lines"]


class CentrelineSettings(Settings):
    """Settings of the smoothing."""

    slack_voxels: float = setting(
        0.45, "RMS distance that a smoothed line may keep from its voxels", unit="voxels", gt=0,
        source="half a voxel is the grid's own uncertainty; measured on lines and helices",
    )  # fmt: skip
    step_voxels: float = setting(0.5, "distance of the points along a line", unit="finest voxel edges", gt=0)


def smooth(graph: CentrelineGraph, *, grid_um: tuple[float, float, float], settings: CentrelineSettings) -> CentrelineGraph:
    """Return the graph with every segment smoothed and resampled, its ends held.

    Each line minimises its squared second differences under the condition that it stays within the
    slack (RMS) of the voxels (Whittaker 1923, Proc Edinburgh Math Soc 41:63, with the strength set
    by the residual).

    Parameters
    ----------
    graph : CentrelineGraph
        Segments on voxel positions.
    grid_um : tuple of float
        Voxel edges of the grid that the positions come from.
    """
    if not graph.n_segments:
        return graph
    step = settings.step_voxels * min(grid_um)
    slack = settings.slack_voxels * float(np.mean(grid_um))
    length = graph.segment_length_um()
    capacity = np.concatenate(([0], np.cumsum(np.ceil(length / step).astype(np.int64) + 3)))
    points, values = np.empty((capacity[-1], 3)), np.empty(capacity[-1])
    counts = np.empty(graph.n_segments, np.int64)
    kernels.smooth_all(
        np.ascontiguousarray(graph.point_position_um), graph.point_radius_map_um.copy(),
        graph.point_offsets, slack, 3000.0, step, capacity, points, values, counts,
    )  # fmt: skip
    offsets = np.concatenate(([0], np.cumsum(counts)))
    take = np.arange(offsets[-1]) + np.repeat(capacity[:-1] - offsets[:-1], counts)
    return with_lines(graph, points[take], offsets, values[take])


def with_lines(graph: CentrelineGraph, points: np.ndarray, offsets: np.ndarray, radius_map_um: np.ndarray) -> CentrelineGraph:
    """Return the graph with new points; radii but the map's are unset."""
    p = len(points)
    return graph.replace(
        point_position_um=points, point_offsets=offsets.astype(np.int64),
        point_radius_map_um=radius_map_um, point_radius_um=np.full(p, np.nan),
        point_radius_se_um=np.full(p, np.nan), point_radius_common_um=np.zeros(p),
        point_method=np.zeros(p, np.int8), point_in_zone=np.zeros(p, bool),
    )  # fmt: skip


def meeting_points(graph: CentrelineGraph, *, radius_um: np.ndarray) -> np.ndarray:
    """Return (n, 3) node positions where the axes of a junction's segments meet.

    Each segment's axis is the straight line through its points from the zone's edge to one zone
    further; the node is the point with the least sum of squared distances to these axes, no farther
    from the old place than the widest radius there. Other nodes stay.
    """
    node = graph.node_position_um.copy()
    degree = graph.node_degree()
    low, high = zone_bounds_um(graph, radius_um)
    length = graph.segment_length_um()
    arc = graph.arc_um()
    per = graph.points_per_segment
    normal = np.zeros((graph.n_nodes, 3, 3))
    right = np.zeros((graph.n_nodes, 3))
    widest = np.zeros(graph.n_nodes)
    radius = np.nan_to_num(radius_um)
    used = np.zeros(graph.n_nodes, np.int64)
    finest = min(s for s in graph.spacing_um) if any(graph.spacing_um) else 0.0
    for side in (0, 1):
        reach = low if side == 0 else length - high
        along = arc if side == 0 else np.repeat(length, per) - arc
        first = np.repeat(reach, per)
        span = np.maximum(first, 3.0 * finest)
        chosen = (along >= first) & (along <= first + 2.0 * span)
        ends = graph.segment_nodes[:, side]
        near = graph.point_offsets[:-1] if side == 0 else graph.point_offsets[1:] - 1
        np.maximum.at(widest, ends, radius[near])
        segment = graph.point_segment[chosen]
        if not len(segment):
            continue
        count = np.bincount(segment, minlength=graph.n_segments)
        mean = np.stack([
            np.bincount(segment, weights=graph.point_position_um[chosen, a], minlength=graph.n_segments)
            for a in range(3)
        ], axis=1) / np.maximum(count, 1)[:, None]  # fmt: skip
        left = graph.point_position_um[chosen] - mean[segment]
        scatter = np.zeros((graph.n_segments, 3, 3))
        for a in range(3):
            for b in range(3):
                scatter[:, a, b] = np.bincount(segment, weights=left[:, a] * left[:, b], minlength=graph.n_segments)
        fit = np.flatnonzero((count >= 4) & (degree[ends] >= 3))
        if not len(fit):
            continue
        _, vectors = np.linalg.eigh(scatter[fit])
        axis = vectors[:, :, 2]
        across = np.eye(3) - axis[:, :, None] * axis[:, None, :]
        np.add.at(normal, ends[fit], across)
        np.add.at(right, ends[fit], np.einsum("kab,kb->ka", across, mean[fit]))
        np.add.at(used, ends[fit], 1)
    solve = np.flatnonzero(used >= 2)
    if not len(solve):
        return node
    # A weak pull to the old place keeps nearly parallel axes harmless.
    system = normal[solve] + 0.01 * np.eye(3)
    target = right[solve] + 0.01 * node[solve]
    moved = np.linalg.solve(system, target[:, :, None])[:, :, 0]
    shift = moved - node[solve]
    size = np.linalg.norm(shift, axis=1)
    limit = np.maximum(widest[solve], finest)
    node[solve] += shift * np.minimum(1.0, limit / np.maximum(size, 1e-12))[:, None]
    return node
