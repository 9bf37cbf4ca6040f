"""Vessels that run past one another and only touch, which a mask makes into a junction."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from .bridge import EndGeometry, end_geometry
from .graph import CentrelineGraph

__all__ = ["Contact", "touching_vessels"]

Sampler = Callable[[np.ndarray], np.ndarray]
# A contact's segment is no longer than this many times the sum of the two vessels' radii.
_LONGEST = 1.25
_RADIUS_RATIO = 1.25
_GREY_DIP = 0.8
# Axes that meet in one junction pass one another closer than this share of the radii's sum.
_PASSING = 0.6


@dataclass(frozen=True, slots=True)
class Contact:
    """One contact: a segment to remove, or a node to part (`segment` is -1).

    Parameters
    ----------
    segment : int
        The contact's own segment, -1 where the vessels share one node.
    node : int
        The node (of a contact without a segment, the one to part).
    other_ends : tuple of (int, int)
        The two segment ends (segment, side) that go to a node of their own.
    other_um : (3,) array
        Where that node lies.
    position_um : (3,) array
        Place of the contact.
    reason : str
        The figures that decided.
    """

    segment: int
    node: int
    other_ends: tuple[tuple[int, int], ...]
    other_um: np.ndarray
    position_um: np.ndarray
    reason: str


def touching_vessels(
    graph: CentrelineGraph, *, neck: float, angle_deg: float, contrast_at: Sampler | None
) -> list[Contact]:
    """Return the contacts that the evidence says are not junctions.

    Two kinds. A short segment between two junctions, each of which has two further segments that
    run on straight (over `angle_deg`) and alike in radius, and whose own lumen narrows to less than
    `neck` times the thinner vessel's radius. A node of four segment ends that make two such pairs
    whose axes, extended, pass one another by more than half the sum of their radii. Where
    `contrast_at` is given a segment's grey must also fall below 80 % of both vessels'.

    Parameters
    ----------
    graph : CentrelineGraph
        With `point_radius_map_um`.
    neck, angle_deg : float
        The limits.
    contrast_at : callable, optional
        Grey values over the background at (k, 3) positions in um.

    Returns
    -------
    list of Contact
        In the order of segments, then nodes; no two share a node.
    """
    arms = _Arms(graph, angle_deg)
    found = [
        contact
        for segment in _short_between_junctions(graph)
        if (contact := _narrow_neck(graph, arms, int(segment), neck, contrast_at)) is not None
    ]
    crossings = (_crossing(graph, arms, int(node)) for node in np.flatnonzero(arms.degree == 4))
    found += [contact for contact in crossings if contact is not None]
    used: set[int] = set()
    apart = []
    for contact in found:
        nodes = {contact.node}
        if contact.segment >= 0:
            nodes.update(graph.segment_nodes[contact.segment].tolist())
        if used.isdisjoint(nodes):
            used |= nodes
            apart.append(contact)
    return apart


class _Arms:
    """Segment ends by node, with their axes outside the node's ball."""

    def __init__(self, graph: CentrelineGraph, angle_deg: float) -> None:
        self.degree = graph.node_degree()
        self.straight = np.cos(np.radians(angle_deg))
        ends = graph.segment_nodes.ravel()
        self._order = np.argsort(ends, kind="stable")
        self._start = np.searchsorted(ends[self._order], np.arange(graph.n_nodes + 1))
        first, last = graph.point_offsets[:-1], graph.point_offsets[1:] - 1
        radius = np.nan_to_num(graph.point_radius_map_um)
        self.geometry: tuple[EndGeometry, EndGeometry] = (
            end_geometry(graph, 0, skip_um=radius[first]),
            end_geometry(graph, 1, skip_um=radius[last]),
        )

    def at(self, node: int, *, but: int = -1) -> list[tuple[int, int]]:
        """Return the (segment, side) ends at a node, those of one segment left out."""
        ends = self._order[self._start[node] : self._start[node + 1]]
        return [(int(e) // 2, int(e) % 2) for e in ends if int(e) // 2 != but]

    def is_one_vessel(self, pair: tuple[tuple[int, int], ...]) -> bool:
        """Tell whether two segment ends run on straight and are alike in radius."""
        (a, side_a), (b, side_b) = pair
        if a == b:
            return False
        cosine = self.geometry[side_a].outward[a] @ self.geometry[side_b].outward[b]
        radii = self.geometry[0].radius_um[[a, b]]
        return bool(cosine <= self.straight and radii.max() <= _RADIUS_RATIO * radii.min())

    def radius_um(self, pair: tuple[tuple[int, int], ...]) -> float:
        """Return the mean radius of two segments."""
        return float(self.geometry[0].radius_um[[segment for segment, _ in pair]].mean())

    def line(self, pair: tuple[tuple[int, int], ...]) -> tuple[np.ndarray, np.ndarray]:
        """Return the straight line through both segments' axes: a point and a unit vector."""
        (a, side_a), (b, side_b) = pair
        one, two = self.geometry[side_a].inner_um[a], self.geometry[side_b].inner_um[b]
        return one, (two - one) / max(float(np.linalg.norm(two - one)), 1e-12)


def _short_between_junctions(graph: CentrelineGraph) -> np.ndarray:
    """Return the segments between two different junctions of three that are short enough."""
    a, b = graph.segment_nodes.T
    degree = graph.node_degree()
    first, last = graph.point_offsets[:-1], graph.point_offsets[1:] - 1
    radius = np.nan_to_num(graph.point_radius_map_um)
    short = graph.segment_length_um() <= 1.5 * _LONGEST * (radius[first] + radius[last])
    segments: np.ndarray = np.flatnonzero((degree[a] == 3) & (degree[b] == 3) & (a != b) & short)
    return segments


def _narrow_neck(
    graph: CentrelineGraph, arms: _Arms, segment: int, neck: float, contrast_at: Sampler | None
) -> Contact | None:
    """Return the contact that a short segment is, if it is one."""
    one, two = (tuple(arms.at(int(n), but=segment)) for n in graph.segment_nodes[segment])
    if not (len(one) == len(two) == 2 and arms.is_one_vessel(one) and arms.is_one_vessel(two)):
        return None
    radii = arms.radius_um(one), arms.radius_um(two)
    points = graph.points_of(segment)
    inside = np.nan_to_num(graph.point_radius_map_um[points])
    narrowest = int(np.argmin(inside))
    length = float(graph.segment_length_um()[segment])
    if length > _LONGEST * sum(radii) or inside[narrowest] >= neck * min(radii):
        return None
    place = graph.point_position_um[points][narrowest]
    reason = f"neck of {inside[narrowest]:.3g} um, vessels of {radii[0]:.3g} and {radii[1]:.3g} um"
    if contrast_at is not None:
        values = np.asarray(contrast_at(graph.point_position_um[points]))
        share = float(values[1:-1].min(initial=np.inf) / max(values[[0, -1]].min(), 1e-12))
        if share >= _GREY_DIP:
            return None
        reason += f", grey falls to {share:.0%}"
    return Contact(segment, int(graph.segment_nodes[segment, 0]), (), place, place, reason)


def _crossing(graph: CentrelineGraph, arms: _Arms, node: int) -> Contact | None:
    """Return the contact that a node of four ends is, if two vessels pass one another there."""
    ends = arms.at(node)
    first, *rest = ends
    for k, partner in enumerate(rest):
        one, two = (first, partner), tuple(rest[:k] + rest[k + 1 :])
        if len(two) != 2 or not (arms.is_one_vessel(one) and arms.is_one_vessel(two)):
            continue
        apart, on_two = _passing(arms.line(one), arms.line(two))
        both = arms.radius_um(one) + arms.radius_um(two)
        if apart > _PASSING * both:
            place = graph.node_position_um[node]
            reason = f"axes pass one another at {apart:.3g} um, radii together {both:.3g} um"
            return Contact(-1, node, two, on_two, place, reason)
    return None


def _passing(
    one: tuple[np.ndarray, np.ndarray], two: tuple[np.ndarray, np.ndarray]
) -> tuple[float, np.ndarray]:
    """Return the distance of two straight lines and the place on the second where it is least."""
    (p, u), (q, v) = one, two
    normal = np.cross(u, v)
    size = float(np.linalg.norm(normal))
    if size < 0.2:  # nearly parallel: no crossing
        return 0.0, q
    apart = abs(float((q - p) @ normal)) / size
    along = float(np.cross(q - p, u) @ normal) / size**2
    return apart, q + along * v
