"""Which free ends face one another across a short gap."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["EndGeometry", "Gap", "end_geometry", "facing_ends"]

Sampler = Callable[[np.ndarray], np.ndarray]
# An end's axis is taken over this many radii.
_AXIS_RADII = 4.0
# Over a gap shorter than this many radii the axes are uncertain: any forward direction will do.
_CLOSE_RADII = 0.75
_SAMPLES = 9
_NEIGHBOURS = 16


@dataclass(frozen=True, slots=True)
class Gap:
    """Two free ends to be joined, and why."""

    ends: tuple[int, int]
    length_um: float
    radius_um: float
    reason: str


@dataclass(frozen=True, slots=True)
class EndGeometry:
    """The axis by which a segment arrives at one of its ends.

    Parameters
    ----------
    outward : (m, 3) array
        Unit vector from inside the segment to its end.
    inner_um : (m, 3) array
        Where that axis starts.
    radius_um : (m,) array
        Mean map radius of the segment.
    """

    outward: np.ndarray
    inner_um: np.ndarray
    radius_um: np.ndarray


def end_geometry(
    graph: CentrelineGraph, side: int, *, skip_um: np.ndarray | float = 0.0
) -> EndGeometry:
    """Return the axes of all segments at their first (0) or last (1) end.

    Parameters
    ----------
    graph : CentrelineGraph
        With `point_radius_map_um`.
    side : int
        0 or 1.
    skip_um : float or (m,) array
        Length next to the end that the axis leaves out.

    Returns
    -------
    EndGeometry
        One row a segment.
    """
    weight = graph.point_weight_um()
    total = graph.segment_sum(weight * np.nan_to_num(graph.point_radius_map_um))
    radius = total / np.maximum(graph.segment_sum(weight), 1e-12)
    length = graph.segment_length_um()
    near = np.minimum(skip_um, 0.5 * length)
    far = np.minimum(near + _AXIS_RADII * np.maximum(radius, 1e-9), length)
    start, stop = graph.point_offsets[:-1], graph.point_offsets[1:] - 1
    step = length / np.maximum(stop - start, 1)
    last = stop - start
    ahead = np.minimum(np.rint(near / np.maximum(step, 1e-12)).astype(np.int64), last - 1)
    behind = np.clip(np.ceil(far / np.maximum(step, 1e-12)).astype(np.int64), ahead + 1, last)
    near_point, far_point = (start + k if side == 0 else stop - k for k in (ahead, behind))
    inner = graph.point_position_um[far_point]
    outward = graph.point_position_um[near_point] - inner
    outward /= np.maximum(np.linalg.norm(outward, axis=1, keepdims=True), 1e-12)
    return EndGeometry(outward, inner, radius)


def facing_ends(
    graph: CentrelineGraph,
    *,
    radii: float,
    angle_deg: float,
    radius_ratio: float,
    grey: float,
    contrast_at: Sampler | None,
) -> list[Gap]:
    """Return the gaps to bridge, the best first, each end in one at most.

    The rule: two blind ends of different segments, no further apart than `radii` times the sum of
    their radii; the straight line between them within `angle_deg` of both axes (within 90 degrees
    if it is shorter than three quarters of that sum); radii alike within `radius_ratio`; no other
    vessel's lumen on the way; and, where `contrast_at` is given, a mean contrast on the way of at
    least `grey` times that of the paler vessel. Gaps are ranked by their length in radii and their
    angles.

    Parameters
    ----------
    graph : CentrelineGraph
        With `point_radius_map_um` and node kinds.
    radii, angle_deg, radius_ratio, grey : float
        The limits.
    contrast_at : callable, optional
        Grey values over the background at (k, 3) positions in um.

    Returns
    -------
    list of Gap
        With the reason for each.
    """
    ends, segment, outward, inner_um, radius = _free_ends(graph)
    if len(ends) < 2:
        return []
    place = graph.node_position_um[ends]
    i, j = cKDTree(place).query_pairs(2 * radii * radius.max(), output_type="ndarray").T
    line = place[j] - place[i]
    length = np.linalg.norm(line, axis=1)
    line /= np.maximum(length, 1e-12)[:, None]
    both = radius[i] + radius[j]
    cosines = np.stack([(outward[i] * line).sum(axis=1), -(outward[j] * line).sum(axis=1)])
    facing = (cosines >= np.cos(np.radians(angle_deg))).all(axis=0)
    facing |= (length <= _CLOSE_RADII * both) & (cosines > 0).all(axis=0)
    alike = np.maximum(radius[i], radius[j]) <= radius_ratio * np.minimum(radius[i], radius[j])
    fit = facing & alike & (length <= radii * both) & (segment[i] != segment[j])
    fit[fit] = _is_clear(graph, place[i[fit]], place[j[fit]], segment[i[fit]], segment[j[fit]])
    shares = np.full(len(i), np.inf)
    if contrast_at is not None and fit.any():
        inner = inner_um[i[fit]], inner_um[j[fit]]
        shares[fit] = _grey_share(contrast_at, place[i[fit]], place[j[fit]], *inner)
    fit &= shares >= grey
    cost = length / np.maximum(both, 1e-12) + 2.0 - cosines.sum(axis=0)
    gaps: list[Gap] = []
    used: set[int] = set()
    for k in np.flatnonzero(fit)[np.argsort(cost[fit], kind="stable")]:
        pair = (int(ends[i[k]]), int(ends[j[k]]))
        if used.isdisjoint(pair):
            used.update(pair)
            angles = np.degrees(np.arccos(np.clip(cosines[:, k], -1, 1)))
            gaps.append(Gap(pair, length[k], 0.5 * both[k], _reason(length[k], angles, shares[k])))
    return gaps


def _free_ends(graph: CentrelineGraph) -> tuple[np.ndarray, ...]:
    """Return blind ends: node, segment, outward axis, where the axis starts, radius."""
    degree = graph.node_degree()
    blind = (degree == 1) & (graph.node_kind == NODE_KINDS.index("end"))
    parts = []
    for side in (0, 1):
        geometry = end_geometry(graph, side)
        node = graph.segment_nodes[:, side]
        own = np.flatnonzero(blind[node])
        parts.append(
            (node[own], own, geometry.outward[own], geometry.inner_um[own], geometry.radius_um[own])
        )
    return tuple(np.concatenate(pair) for pair in zip(*parts, strict=True))


def _is_clear(
    graph: CentrelineGraph, a_um: np.ndarray, b_um: np.ndarray, of_a: np.ndarray, of_b: np.ndarray
) -> np.ndarray:
    """Tell for each line whether no other segment's lumen lies on its middle half."""
    if not len(a_um):
        return np.zeros(0, dtype=bool)
    tree = cKDTree(graph.point_position_um)
    owner, radius = graph.point_segment, np.nan_to_num(graph.point_radius_map_um)
    clear = np.ones(len(a_um), dtype=bool)
    for share in np.linspace(0.25, 0.75, 5):
        k = min(_NEIGHBOURS, graph.n_points)
        found = tree.query(a_um * (1 - share) + b_um * share, k=k)
        distance, point = (np.reshape(part, (len(a_um), k)) for part in found)
        other = (owner[point] != of_a[:, None]) & (owner[point] != of_b[:, None])
        clear &= ~(other & (distance < radius[point])).any(axis=1)
    return clear


def _grey_share(
    contrast_at: Sampler,
    a_um: np.ndarray,
    b_um: np.ndarray,
    a_inner: np.ndarray,
    b_inner: np.ndarray,
) -> np.ndarray:
    """Return the mean contrast on each gap's middle over that inside the paler of its two ends."""

    def mean_along(start: np.ndarray, stop: np.ndarray) -> np.ndarray:
        share = np.linspace(0.2, 0.8, _SAMPLES)[:, None, None]
        places = start * (1 - share) + stop * share
        values: np.ndarray = np.reshape(contrast_at(places.reshape(-1, 3)), (_SAMPLES, -1))
        mean: np.ndarray = values.mean(axis=0)
        return mean

    plateau = np.minimum(mean_along(a_inner, a_um), mean_along(b_inner, b_um))
    share: np.ndarray = mean_along(a_um, b_um) / np.maximum(plateau, 1e-12)
    return share


def _reason(length_um: float, angles_deg: np.ndarray, share: float) -> str:
    text = f"gap of {length_um:.4g} um between ends {angles_deg[0]:.0f} and {angles_deg[1]:.0f} deg"
    text += " off its line"
    return text + (f", grey at {share:.0%}" if np.isfinite(share) else "")
