"""From centreline voxels to the raw graph: nodes, and the voxel chains between them."""

import numpy as np

from ..errors import UnusableInputError
from ..image.mask import Skeleton
from . import _trace_kernels as kernels
from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["end_kinds", "trace"]


def trace(skeleton: Skeleton) -> CentrelineGraph:
    """Return the graph of a skeleton, on voxel positions.

    A voxel with two 26-neighbours is part of a path, any other a node's; connected node voxels with
    three or more neighbours are one junction, placed at their mean weighted by the distance to the
    wall. A closed chain without a node gets one at its first voxel. Lone voxels are left out.

    Parameters
    ----------
    skeleton : Skeleton
        Centreline voxels.

    Returns
    -------
    CentrelineGraph
        `point_radius_map_um` holds the distance map's values, other radii are NaN.

    Raises
    ------
    UnusableInputError
        If no chain of voxels is there to be traced.
    """
    voxels = np.ascontiguousarray(skeleton.voxels, dtype=np.int64)
    shape = np.asarray(skeleton.shape, dtype=np.int64)
    linear = np.ravel_multi_index(voxels.T, skeleton.shape) if len(voxels) else np.zeros(0, np.int64)
    neighbours, count = kernels.neighbour_lists(linear, voxels, shape)
    is_node = _node_voxels(neighbours, count)
    label = np.full(len(voxels), -1, dtype=np.int64)
    n_nodes = kernels.label_clusters(neighbours, count, is_node, label)
    size = len(voxels)
    chain = np.empty(size, np.int64)
    offsets = np.empty(2 * size + 2, np.int64)
    ends = np.empty((2 * size + 1, 4), np.int64)
    m = kernels.walk_segments(neighbours, count, is_node, label, chain, offsets, ends)
    direct = _direct_contacts(neighbours, count, is_node, label)
    if m + len(direct) == 0:
        msg = "trace: the skeleton holds no line of two or more voxels, so there is no graph"
        raise UnusableInputError(msg)
    return _assembled(skeleton, voxels, label, n_nodes, chain, offsets[: m + 1], ends[:m], direct)


def end_kinds(graph: CentrelineGraph, *, margin_um: float) -> np.ndarray:
    """Return node kinds by the graph alone: junction, end, or border.

    A free end is `border` where it lies within its own radius and `margin_um` of a face of the
    volume, and the vessel runs towards that face.
    """
    degree = graph.node_degree()
    kind = np.where(degree == 1, NODE_KINDS.index("end"), NODE_KINDS.index("junction"))
    if not any(graph.extent_um):
        return kind.astype(np.int8)
    extent, spacing = np.asarray(graph.extent_um), np.asarray(graph.spacing_um)
    start, stop = graph.point_offsets[:-1], graph.point_offsets[1:] - 1
    radius = graph.point_radius_um
    radius = np.where(np.isfinite(radius), radius, np.nan_to_num(graph.point_radius_map_um))
    for side, at, direction in ((0, start, 1), (1, stop, -1)):
        node = graph.segment_nodes[:, side]
        reach = np.maximum(1, np.minimum(graph.points_per_segment - 1, 12))
        tip = graph.point_position_um[at]
        back = graph.point_position_um[at + direction * reach]
        outward = tip - back
        outward /= np.maximum(np.linalg.norm(outward, axis=1), 1e-9)[:, None]
        near = np.maximum(radius[at], np.maximum(radius[at + direction * reach], 0.0)) + margin_um
        low = tip + spacing / 2
        high = extent - spacing / 2 - tip
        cut = ((low <= near[:, None]) & (outward < -0.25)) | ((high <= near[:, None]) & (outward > 0.25))
        touching = (np.minimum(low, high) <= spacing * 0.75).any(axis=1)
        border = (cut.any(axis=1) | touching) & (degree[node] == 1)
        kind[node[border]] = NODE_KINDS.index("border")
    return kind.astype(np.int8)


def _node_voxels(neighbours: np.ndarray, count: np.ndarray) -> np.ndarray:
    """Mark node voxels; every closed chain of path voxels gets one."""
    is_node = count != 2
    from scipy.sparse import coo_matrix  # noqa: PLC0415 - heavy to import
    from scipy.sparse.csgraph import connected_components  # noqa: PLC0415

    n = len(count)
    if not n:
        return is_node
    row = np.repeat(np.arange(n), 26)[(neighbours >= 0).ravel()]
    column = neighbours[neighbours >= 0]
    _, part = connected_components(coo_matrix((np.ones(len(row), bool), (row, column)), (n, n)), directed=False)
    has_node = np.zeros(part.max() + 1, bool)
    has_node[part[is_node]] = True
    _, first = np.unique(part, return_index=True)
    is_node[first[~has_node]] = True
    return is_node


def _direct_contacts(neighbours, count, is_node, label):  # noqa: ANN001, ANN202
    """Pairs of different nodes whose voxels touch: none, as touching node voxels are one cluster."""
    del neighbours, count, is_node, label
    return np.zeros((0, 4), np.int64)


def _assembled(skeleton, voxels, label, n_nodes, chain, offsets, ends, direct):  # noqa: ANN001, ANN202
    spacing, origin = np.asarray(skeleton.spacing_um), np.asarray(skeleton.origin_um)
    position = voxels * spacing + origin
    member = np.flatnonzero(label >= 0)
    weight = np.maximum(skeleton.distance_um[member].astype(np.float64), 1e-6)
    total = np.bincount(label[member], weights=weight, minlength=n_nodes)
    node = np.stack(
        [np.bincount(label[member], weights=weight * position[member, a], minlength=n_nodes) / total
         for a in range(3)], axis=1,
    )  # fmt: skip
    node_map = np.zeros(n_nodes)
    np.maximum.at(node_map, label[member], skeleton.distance_um[member])
    inner = np.diff(offsets)
    counts = inner + 2
    start = np.concatenate(([0], np.cumsum(counts)))
    points = np.empty((start[-1], 3))
    radius = np.empty(start[-1])
    points[start[:-1]], points[start[1:] - 1] = node[ends[:, 0]], node[ends[:, 1]]
    radius[start[:-1]], radius[start[1:] - 1] = node_map[ends[:, 0]], node_map[ends[:, 1]]
    place = np.arange(len(chain[: offsets[-1]])) + np.repeat(start[:-1] + 1 - offsets[:-1], inner)
    points[place] = position[chain[: offsets[-1]]]
    radius[place] = skeleton.distance_um[chain[: offsets[-1]]]
    p, m = len(points), len(ends)
    graph = CentrelineGraph(
        node_position_um=node, node_kind=np.zeros(n_nodes, np.int8), segment_nodes=ends[:, :2].copy(),
        point_offsets=start.astype(np.int64), point_position_um=points,
        point_radius_um=np.full(p, np.nan), point_radius_se_um=np.full(p, np.nan),
        point_radius_common_um=np.zeros(p), point_radius_map_um=radius,
        point_method=np.zeros(p, np.int8), point_in_zone=np.zeros(p, bool),
        segment_resolved=np.ones(m, bool), segment_review=np.full(m, "", dtype=object),
        spacing_um=skeleton.spacing_um,
        extent_um=tuple(float(n * s) for n, s in zip(skeleton.shape, skeleton.spacing_um, strict=True)),
    )  # fmt: skip
    graph = graph.select_segments(np.arange(m))
    return graph.replace(node_kind=end_kinds(graph, margin_um=max(skeleton.spacing_um)))
