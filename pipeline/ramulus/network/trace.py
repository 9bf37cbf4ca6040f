"""From centreline voxels to the raw graph: nodes, and the voxel chains between them."""

from collections.abc import Sequence

import numpy as np

from ..errors import UnusableInputError
from ..image._bit_grid import BitGrid
from ..image._thin_kernels import label_sets
from ..image.mask import Skeleton
from ..image.thin import without_corners
from ._trace_kernels import walk_chains
from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["end_kinds", "trace"]

_JUNCTION, _END, _BORDER = (NODE_KINDS.index(kind) for kind in ("junction", "end", "border"))
# A cut end's last stretch points towards the face: at most about 75 degrees off its normal.
_OUTWARD = 0.25
_TIP_POINTS = 12


def trace(skeleton: Skeleton) -> CentrelineGraph:
    """Return the graph of a skeleton, on voxel positions.

    A voxel with two 26-neighbours belongs to a path. Connected voxels with three neighbours or more
    are one junction, placed at their mean weighted by the distance to the wall; a voxel with one
    neighbour is a free end, and one with none a node without segments. A closed chain without a
    node gets one at its first voxel. Parallel segments and loops from a node to itself are kept.

    Parameters
    ----------
    skeleton : Skeleton
        Centreline voxels; voxels at corners that no path needs are left out.

    Returns
    -------
    CentrelineGraph
        Nodes in the order of their first voxels. `point_radius_map_um` holds the distance map's
        values (at a junction the largest of its voxels); other radii are NaN. Kinds of free ends
        are those of `end_kinds`.

    Raises
    ------
    UnusableInputError
        If there is no line of two or more voxels.

    Examples
    --------
    >>> line = np.array([[0, 0, x] for x in range(5)])
    >>> shape = (3, 3, 9)
    >>> graph = trace(Skeleton(line, np.ones(5, np.float32), shape, (1.0, 1.0, 1.0)))
    >>> graph.n_nodes, graph.n_segments, graph.segment_length_um().tolist()
    (2, 1, [4.0])
    """
    skeleton = without_corners(skeleton)
    grid = BitGrid(skeleton.shape)
    start, neighbour = grid.neighbours(grid.address(grid.linear(skeleton.voxels)))
    node_of = _node_of_each_voxel(start, neighbour)
    chain, chain_start, ends = walk_chains(start, neighbour, node_of)
    if not len(ends):
        msg = f"skeleton: none of its {len(node_of)} voxels form a line, so there is no graph"
        raise UnusableInputError(msg)
    node_um, node_radius_um = _node_places(skeleton, node_of)
    position_um = _positions_um(skeleton)[chain]
    offsets, points_um = _with_ends(position_um, chain_start, node_um[ends])
    _, radius_um = _with_ends(skeleton.distance_um[chain], chain_start, node_radius_um[ends])
    graph = _raw_graph(skeleton, node_um, ends, offsets, points_um, radius_um)
    return graph.replace(node_kind=end_kinds(graph, origin_um=skeleton.origin_um))


def end_kinds(
    graph: CentrelineGraph,
    *,
    margin_voxels: float = 1.0,
    origin_um: Sequence[float] = (0.0, 0.0, 0.0),
) -> np.ndarray:
    """Return node kinds by the graph alone: junction, end, or border.

    A free end is `border` where it lies within its vessel's radius and `margin_voxels` of a face of
    the volume and the vessel runs towards that face, or where it lies on the face.

    Parameters
    ----------
    graph : CentrelineGraph
        With `extent_um` and `spacing_um`; without them no end is at a border.
    margin_voxels : float
        Distance allowed beyond the radius, in voxel edges along the face's normal.
    origin_um : sequence of float
        Centre of the volume's first voxel.

    Returns
    -------
    (n,) int8 array
        Indices into `NODE_KINDS`.

    Examples
    --------
    >>> graph = CentrelineGraph.from_polylines(
    ...     [[5, 5, 0], [5, 5, 6]], [[0, 1]], [[[5, 5, 0], [5, 5, 6]]],
    ...     spacing_um=(1.0, 1.0, 1.0), extent_um=(10.0, 10.0, 10.0),
    ... )
    >>> [NODE_KINDS[kind] for kind in end_kinds(graph)]
    ['border', 'end']
    """
    degree = graph.node_degree()
    kind = np.where(degree > 1, _JUNCTION, _END).astype(np.int8)
    spacing, extent = np.array(graph.spacing_um), np.array(graph.extent_um)
    open_axes = extent > 2.5 * spacing
    if not graph.n_segments or not open_axes.any():
        return kind
    radius_um = np.where(
        np.isfinite(graph.point_radius_um), graph.point_radius_um, graph.point_radius_map_um
    )
    radius_um = np.nan_to_num(radius_um)
    count = np.minimum(graph.points_per_segment - 1, _TIP_POINTS)
    for side, tip, inwards in (
        (0, graph.point_offsets[:-1], 1),
        (1, graph.point_offsets[1:] - 1, -1),
    ):
        place_um = graph.point_position_um[tip]
        back = tip + inwards * count
        outward = place_um - graph.point_position_um[back]
        outward /= np.maximum(np.linalg.norm(outward, axis=1, keepdims=True), 1e-12)
        reach_um = np.maximum(radius_um[tip], radius_um[back])[:, None] + margin_voxels * spacing
        low_um = place_um - np.array(origin_um) + spacing / 2
        high_um = extent - low_um
        cut = ((low_um <= reach_um) & (outward < -_OUTWARD)) | (low_um <= 0.75 * spacing)
        cut |= ((high_um <= reach_um) & (outward > _OUTWARD)) | (high_um <= 0.75 * spacing)
        node = graph.segment_nodes[:, side]
        kind[node[(cut & open_axes).any(axis=1) & (degree[node] == 1)]] = _BORDER
    return kind


def _node_of_each_voxel(start: np.ndarray, neighbour: np.ndarray) -> np.ndarray:
    """Return the node that each voxel belongs to, -1 for the voxels of paths."""
    degree = np.diff(start)
    first_of_junction, junction = _first_of_sets(start, neighbour, degree >= 3)
    representative = np.where(degree >= 3, first_of_junction[junction], -1)
    lone = degree < 2
    representative[lone] = np.flatnonzero(lone)
    first_of_path, path = _first_of_sets(start, neighbour, degree == 2)
    touches_node = np.zeros(len(first_of_path), dtype=bool)
    beside = np.repeat(path, degree)
    touches_node[beside[(beside >= 0) & (degree[neighbour] != 2)]] = True
    rings = first_of_path[:-1][~touches_node[:-1]]
    representative[rings] = rings
    is_node = representative >= 0
    node_of = np.full(len(degree), -1, dtype=np.int64)
    _, node_of[is_node] = np.unique(representative[is_node], return_inverse=True)
    return node_of


def _first_of_sets(
    start: np.ndarray, neighbour: np.ndarray, member: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Return the first voxel of each connected set of members (then -1), and each voxel's set."""
    label, count = label_sets(start, neighbour, member)
    first = np.zeros(count, dtype=np.int64)
    inside = np.flatnonzero(member)[::-1]
    first[label[inside]] = inside
    return np.append(first, -1), label


def _positions_um(skeleton: Skeleton) -> np.ndarray:
    positions: np.ndarray = skeleton.voxels * np.array(skeleton.spacing_um) + skeleton.origin_um
    return positions


def _node_places(skeleton: Skeleton, node_of: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return each node's position, weighted by distance to the wall, and its largest distance."""
    member = np.flatnonzero(node_of >= 0)
    node, weight = node_of[member], skeleton.distance_um[member].astype(np.float64)
    position_um = _positions_um(skeleton)[member]
    total = np.bincount(node, weight)
    sums = [np.bincount(node, weight * along) for along in position_um.T]
    largest = np.zeros(len(total))
    np.maximum.at(largest, node, weight)
    return np.stack(sums, axis=1) / total[:, None], largest


def _with_ends(
    values: np.ndarray, chain_start: np.ndarray, at_ends: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Put the two nodes' values round each chain's own; return offsets and values."""
    inner = np.diff(chain_start)
    offsets = chain_start + 2 * np.arange(len(chain_start))
    joined = np.empty((offsets[-1], *values.shape[1:]), dtype=np.float64)
    joined[offsets[:-1]], joined[offsets[1:] - 1] = at_ends[:, 0], at_ends[:, 1]
    joined[np.arange(len(values)) + np.repeat(2 * np.arange(len(inner)) + 1, inner)] = values
    return offsets, joined


def _raw_graph(
    skeleton: Skeleton,
    node_um: np.ndarray,
    ends: np.ndarray,
    offsets: np.ndarray,
    points_um: np.ndarray,
    radius_um: np.ndarray,
) -> CentrelineGraph:
    """Return the graph with neutral values where tracing knows nothing."""
    z, y, x = (float(n * s) for n, s in zip(skeleton.shape, skeleton.spacing_um, strict=True))
    p, m = len(points_um), len(ends)
    return CentrelineGraph(
        node_position_um=node_um, node_kind=np.zeros(len(node_um), dtype=np.int8),
        segment_nodes=ends, point_offsets=offsets, point_position_um=points_um,
        point_radius_um=np.full(p, np.nan), point_radius_se_um=np.full(p, np.nan),
        point_radius_common_um=np.zeros(p), point_radius_map_um=radius_um,
        point_method=np.zeros(p, dtype=np.int8), point_in_zone=np.zeros(p, dtype=bool),
        segment_resolved=np.ones(m, dtype=bool), segment_review=np.full(m, "", dtype=object),
        spacing_um=skeleton.spacing_um, extent_um=(z, y, x),
    )  # fmt: skip
