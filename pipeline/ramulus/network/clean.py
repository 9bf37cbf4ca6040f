"""Cleaning of the raw graph by rules without a scale of their own; every change is recorded.

In this order, until nothing changes: nodes inside one inscribed ball become one; spurs go; rings
smaller than the vessel's circumference go; series segments are joined; gaps are bridged; small parts
go. Lengths are judged by the radius of the distance map there.
"""

from collections.abc import Callable
from typing import Any

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from .._settings import Settings, setting
from .graph import NODE_KINDS, CentrelineGraph
from .rewire import add_segments, join_series, merge_nodes
from .trace import end_kinds

__all__ = ["CleanSettings", "clean"]

Sampler = Callable[[np.ndarray], np.ndarray]


class CleanSettings(Settings):
    """Settings of the cleaning."""

    spur_protrusion: float = setting(
        1.0, "a free end counts as a vessel from this protrusion beyond the parent's wall, in parent's"
        " radii", unit="radii", ge=0, source="judgement; the report shows how many fall to it",
    )  # fmt: skip
    part_length_diameters: float = setting(
        3.0, "a part shorter than this many of its own diameters is removed", unit="diameters", ge=0
    )
    part_length_share: float = setting(
        0.0, "a part shorter than this share of the largest part's length is removed", ge=0, lt=1
    )
    bridge_radii: float = setting(
        4.0, "longest gap that is bridged, in the sum of both ends' radii; 0: none", unit="radii", ge=0
    )
    bridge_angle_deg: float = setting(
        45.0, "largest angle between either end's axis and the bridge", unit="deg", gt=0, le=90
    )
    bridge_grey: float = setting(
        0.3, "smallest mean grey value along a bridge, as a share of the ends' contrast", ge=0, le=1
    )


def clean(
    graph: CentrelineGraph, *, settings: CleanSettings, contrast_at: Sampler | None = None
) -> tuple[CentrelineGraph, list[dict[str, Any]]]:
    """Return the cleaned graph and the list of automatic edits.

    Parameters
    ----------
    graph : CentrelineGraph
        As traced, with `point_radius_map_um`.
    contrast_at : callable, optional
        Takes (k, 3) positions in um and returns the grey values over the background there; without
        it gaps are judged by geometry alone.

    Returns
    -------
    tuple
        Graph; edits as dictionaries with `op`, `position_um`, `reason`, `author`.
    """
    edits: list[dict[str, Any]] = []
    graph = _until_stable(graph, settings, edits)
    if settings.bridge_radii > 0:
        bridged = _bridged(graph, settings, contrast_at, edits)
        if bridged.n_segments != graph.n_segments:
            graph = _until_stable(bridged, settings, edits)
    graph = _without_small_parts(graph, settings, edits)
    return graph.replace(node_kind=end_kinds(graph, margin_um=_margin(graph))), edits


def _until_stable(graph: CentrelineGraph, settings: CleanSettings, edits: list[dict[str, Any]]) -> CentrelineGraph:
    graph = join_series(graph)
    for _ in range(30):
        before = graph.n_segments
        graph = _merged(graph, edits)
        graph = _without_small_rings(graph, edits)
        graph = join_series(graph)
        graph = graph.replace(node_kind=end_kinds(graph, margin_um=_margin(graph)))
        graph = join_series(_without_spurs(graph, settings, edits))
        if graph.n_segments == before:
            break
    return graph


def _margin(graph: CentrelineGraph) -> float:
    return max(graph.spacing_um)


def _node_radius(graph: CentrelineGraph) -> np.ndarray:
    """(n,) widest map radius of the segments at each node, near it."""
    widest = np.zeros(graph.n_nodes)
    for side, at in ((0, graph.point_offsets[:-1]), (1, graph.point_offsets[1:] - 1)):
        np.maximum.at(widest, graph.segment_nodes[:, side], np.nan_to_num(graph.point_radius_map_um[at]))
    return widest


def _merged(graph: CentrelineGraph, edits: list[dict[str, Any]]) -> CentrelineGraph:
    """Junctions whose segment lies inside one inscribed ball are one junction."""
    radius, degree = _node_radius(graph), graph.node_degree()
    a, b = graph.segment_nodes.T
    chord = np.linalg.norm(graph.node_position_um[a] - graph.node_position_um[b], axis=1)
    length = graph.segment_length_um()
    ball = np.maximum(radius[a], radius[b])
    short = (degree[a] >= 3) & (degree[b] >= 3) & (a != b) & (chord < ball) & (length < 1.5 * ball)
    if not short.any():
        return graph
    n = graph.n_nodes
    _, group = connected_components(coo_array((np.ones(short.sum()), (a[short], b[short])), (n, n)), directed=False)
    for k in np.flatnonzero(short).tolist():
        edits.append(_edit("merge", graph.node_position_um[a[k]], "two junctions inside one inscribed ball"))
    return merge_nodes(graph, group, np.maximum(radius, 1e-9), short)


def _without_small_rings(graph: CentrelineGraph, edits: list[dict[str, Any]]) -> CentrelineGraph:
    """Rings shorter than the circumference of the vessel there are dents of the mask."""
    length, radius = graph.segment_length_um(), _node_radius(graph)
    a, b = np.sort(graph.segment_nodes, axis=1).T
    ring = (a == b) & (length < 2 * np.pi * radius[a])
    order = np.lexsort((length, b, a))
    same = (a[order][1:] == a[order][:-1]) & (b[order][1:] == b[order][:-1]) & (a[order][1:] != b[order][1:])
    first, second = order[:-1][same], order[1:][same]
    small = length[first] + length[second] < 2 * np.pi * np.minimum(radius[a[first]], radius[b[first]])
    drop = ring.copy()
    drop[second[small]] = True
    if not drop.any():
        return graph
    middle = graph.point_position_um[(graph.point_offsets[:-1] + graph.point_offsets[1:]) // 2]
    for k in np.flatnonzero(drop).tolist():
        edits.append(_edit("remove", middle[k], "ring shorter than the vessel's circumference"))
    return graph.select_segments(~drop)


def _without_spurs(graph: CentrelineGraph, settings: CleanSettings, edits: list[dict[str, Any]]) -> CentrelineGraph:
    """Remove free ends that hardly leave their parent; at each junction the shortest first."""
    degree, radius = graph.node_degree(), _node_radius(graph)
    length = graph.segment_length_um()
    end = (graph.node_kind == NODE_KINDS.index("end")) & (degree == 1)
    border = (graph.node_kind == NODE_KINDS.index("border")) & (degree == 1)
    a, b = graph.segment_nodes.T
    free = (end[a] & (degree[b] >= 3)) | (end[b] & (degree[a] >= 3))
    cut = (border[a] & (degree[b] >= 3)) | (border[b] & (degree[a] >= 3))
    base = np.where(degree[a] >= 3, a, b)
    tip = np.where(degree[a] >= 3, b, a)
    protrusion = length - radius[base]
    limit = settings.spur_protrusion * radius[base]
    stubby = radius[tip] > 0.8 * radius[base]
    limit = np.where(stubby, np.maximum(limit, 2.0 * radius[tip]), limit)
    # A vessel that a face cuts close to its junction stays unless it does not leave the parent at all.
    spur = (free & (protrusion < limit)) | (cut & (protrusion < 0))
    if not spur.any():
        return graph
    score = np.where(spur, protrusion / np.maximum(radius[base], 1e-9), np.inf)
    order = np.lexsort((np.arange(len(score)), score, base))
    leading = np.r_[True, base[order][1:] != base[order][:-1]]
    drop = np.zeros(graph.n_segments, bool)
    drop[order[leading]] = True
    drop &= spur
    for k in np.flatnonzero(drop).tolist():
        edits.append(_edit("remove", graph.node_position_um[tip[k]], "spur shorter than the parent's radius allows"))
    return graph.select_segments(~drop)


def _bridged(graph, settings, contrast_at, edits):  # noqa: ANN001, ANN202
    """Join facing free ends across short gaps, best pairs first, each end once."""
    degree = graph.node_degree()
    ends = np.flatnonzero((degree == 1) & (graph.node_kind == NODE_KINDS.index("end")))
    if len(ends) < 2:
        return graph
    radius, outward, segment = _end_geometry(graph)
    widest = float(radius[ends].max())
    pairs = cKDTree(graph.node_position_um[ends]).query_pairs(2 * settings.bridge_radii * widest, output_type="ndarray")
    if not len(pairs):
        return graph
    i, j = ends[pairs[:, 0]], ends[pairs[:, 1]]
    gap = graph.node_position_um[j] - graph.node_position_um[i]
    distance = np.linalg.norm(gap, axis=1)
    gap /= np.maximum(distance, 1e-9)[:, None]
    near = distance <= settings.bridge_radii * (radius[i] + radius[j])
    limit = np.cos(np.radians(settings.bridge_angle_deg))
    cos_i, cos_j = (outward[i] * gap).sum(1), -(outward[j] * gap).sum(1)
    # Over a very short gap the axes are uncertain: half the distance of one radius is forgiven.
    close = distance <= 0.75 * (radius[i] + radius[j])
    facing = ((cos_i >= limit) & (cos_j >= limit)) | (close & (cos_i > 0) & (cos_j > 0))
    similar = np.maximum(radius[i], radius[j]) <= 2.0 * np.minimum(radius[i], radius[j])
    chosen = np.flatnonzero(near & facing & similar & (segment[i] != segment[j]))
    if contrast_at is not None and len(chosen):
        chosen = chosen[_bright(graph, i[chosen], j[chosen], contrast_at, settings.bridge_grey)]
    if not len(chosen):
        return graph
    cost = distance[chosen] / (radius[i[chosen]] + radius[j[chosen]]) + 2 - cos_i[chosen] - cos_j[chosen]
    used, accepted = set(), []
    for k in chosen[np.argsort(cost, kind="stable")].tolist():
        a, b = int(i[k]), int(j[k])
        if a in used or b in used:
            continue
        used |= {a, b}
        accepted.append((a, b))
        edits.append(_edit(
            "join", 0.5 * (graph.node_position_um[a] + graph.node_position_um[b]),
            f"gap of {distance[k]:.4g} um between facing ends",
        ))  # fmt: skip
    return add_segments(graph, np.array(accepted, dtype=np.int64), "bridged gap")


def _end_geometry(graph: CentrelineGraph) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """(n,) radius, (n, 3) outward axis and (n,) segment at each free end, over the last few radii."""
    radius, outward = np.zeros(graph.n_nodes), np.zeros((graph.n_nodes, 3))
    segment = np.full(graph.n_nodes, -1)
    weight = graph.point_weight_um()
    mean = graph.segment_sum(weight * np.nan_to_num(graph.point_radius_map_um)) / np.maximum(graph.segment_sum(weight), 1e-12)
    step = np.maximum(graph.segment_length_um() / np.maximum(graph.points_per_segment - 1, 1), 1e-9)
    reach = np.clip(np.ceil(4 * mean / step).astype(int), 2, np.maximum(graph.points_per_segment - 1, 1))
    for side, at, direction in ((0, graph.point_offsets[:-1], 1), (1, graph.point_offsets[1:] - 1, -1)):
        node = graph.segment_nodes[:, side]
        axis = graph.point_position_um[at] - graph.point_position_um[at + direction * reach]
        axis /= np.maximum(np.linalg.norm(axis, axis=1), 1e-12)[:, None]
        outward[node], radius[node], segment[node] = axis, mean, np.arange(graph.n_segments)
    return radius, outward, segment


def _bright(graph, i, j, contrast_at, share):  # noqa: ANN001, ANN202
    f = np.linspace(0, 1, 9)[:, None, None]
    line = graph.node_position_um[i] * (1 - f) + graph.node_position_um[j] * f
    grey = contrast_at(line.reshape(-1, 3)).reshape(9, -1)
    ends = np.minimum(grey[0], grey[-1])
    return grey[2:-2].mean(axis=0) >= share * np.maximum(ends, 1e-12)


def _without_small_parts(graph: CentrelineGraph, settings: CleanSettings, edits: list[dict[str, Any]]) -> CentrelineGraph:
    n = graph.n_nodes
    a, b = graph.segment_nodes.T
    _, part = connected_components(coo_array((np.ones(len(a)), (a, b)), (n, n)), directed=False)
    length = np.bincount(part[a], weights=graph.segment_length_um(), minlength=part.max() + 1)
    radius = np.zeros(len(length))
    np.maximum.at(radius, part, _node_radius(graph))
    small = length < 2 * settings.part_length_diameters * radius
    small |= length < settings.part_length_share * length.max()
    small[np.argmax(length)] = False
    drop = small[part[a]]
    if not drop.any():
        return graph
    for p in np.flatnonzero(small).tolist():
        node = int(np.flatnonzero(part == p)[0])
        edits.append(_edit("remove", graph.node_position_um[node], "part shorter than its own diameters allow"))
    return graph.select_segments(~drop)


def _edit(op: str, position_um: np.ndarray, reason: str) -> dict[str, Any]:
    return {
        "op": op, "position_um": [round(float(v), 4) for v in position_um], "reason": reason,
        "author": "auto",
    }  # fmt: skip
