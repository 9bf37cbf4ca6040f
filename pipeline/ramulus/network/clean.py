"""Cleaning of the raw graph by rules without a scale of their own; every change is recorded.

In this order: specks without length go; vessels that merely touch are parted; then, until nothing
changes, junctions inside one inscribed ball become one, rings smaller than the vessel's
circumference and spurs go, series segments are joined; gaps are bridged and the last step is done
again; small parts go. Lengths are judged by the distance map's radius there.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from .._settings import Settings, setting
from .bridge import facing_ends
from .contact import touching_vessels
from .graph import NODE_KINDS, CentrelineGraph
from .rewire import add_segments, join_series, merge_nodes, part_node
from .trace import end_kinds

__all__ = ["CleanSettings", "Edit", "clean"]

Edit = dict[str, Any]
Sampler = Callable[[np.ndarray], np.ndarray]
_END, _BORDER = NODE_KINDS.index("end"), NODE_KINDS.index("border")
_ROUNDS = 50


class CleanSettings(Settings):
    """Settings of the cleaning."""

    merge_radii: float = setting(
        1.0,
        "junctions closer along their segment than this many radii of the wider inscribed ball "
        "become one; 0: none",
        unit="radii",
        ge=0,
        source="both lie inside one inscribed ball",
    )
    spur_protrusion: float = setting(
        1.0,
        "a free end counts as a vessel from this protrusion beyond the parent's inscribed ball, in "
        "the ball's radii",
        unit="radii",
        ge=0,
        source="common practice, no source; the report shows how many fall to it",
    )
    spur_voxels: float = setting(
        3.0,
        "and from this protrusion in voxel edges of the stack along its direction",
        unit="voxels",
        ge=0,
        source="own phantom study: noise makes bumps of up to three voxels",
    )
    part_length_diameters: float = setting(
        3.0,
        "a part shorter than this many of its own diameters is removed",
        unit="diameters",
        ge=0,
        source="common practice, no source",
    )
    part_length_share: float = setting(
        0.0, "a part shorter than this share of the largest part's length is removed", ge=0, lt=1
    )
    bridge_radii: float = setting(
        4.0,
        "longest gap that is bridged, in the sum of both ends' radii; 0: none",
        unit="radii",
        ge=0,
    )
    bridge_angle_deg: float = setting(
        45.0, "largest angle between either end's axis and the bridge", unit="deg", gt=0, le=90
    )
    bridge_radius_ratio: float = setting(
        2.0, "largest ratio of the two ends' radii", ge=1, source="common practice, no source"
    )
    bridge_grey: float = setting(
        0.3, "smallest mean grey value along a bridge, as a share of the ends' contrast", ge=0, le=1
    )
    contact_neck: float = setting(
        0.7,
        "touching vessels are parted where the neck between them is narrower than this share of "
        "the thinner one's radius; 0: never",
        ge=0,
        le=1,
        source="common practice, no source",
    )
    contact_angle_deg: float = setting(
        150.0,
        "and each of them runs on straighter than this",
        unit="deg",
        ge=90,
        le=180,
        source="common practice, no source",
    )


def clean(
    graph: CentrelineGraph,
    *,
    settings: CleanSettings | None = None,
    contrast_at: Sampler | None = None,
    origin_um: Sequence[float] = (0.0, 0.0, 0.0),
) -> tuple[CentrelineGraph, list[Edit]]:
    """Return the cleaned graph and the list of automatic edits.

    Parameters
    ----------
    graph : CentrelineGraph
        As traced, with `point_radius_map_um`, `spacing_um` and `extent_um`.
    settings : CleanSettings, optional
        The rules' limits.
    contrast_at : callable, optional
        Takes (k, 3) positions in um and returns the grey values over the background there; without
        it gaps and contacts are judged by geometry alone.
    origin_um : sequence of float
        Centre of the volume's first voxel.

    Returns
    -------
    tuple
        The graph, and the edits in the order in which they were made: dictionaries with `op`
        (merge, remove, join, split), `step` (contact, ball, ring, spur, gap, part), `position_um`,
        `reason`, `author` (auto) and the lengths and radii that decided.

    Examples
    --------
    >>> trunk = np.array([[0, 9, x] for x in range(41)])
    >>> spur = np.array([[0, 9, 20], [0, 13, 20]])
    >>> lines = [trunk[:21], trunk[20:], spur]
    >>> graph = CentrelineGraph.from_polylines(
    ...     [trunk[0], trunk[20], trunk[40], spur[1]], [[0, 1], [1, 2], [1, 3]], lines,
    ...     point_radius_map_um=np.full(44, 3.0), spacing_um=(1, 1, 1),
    ... )
    >>> cleaned, edits = clean(graph)
    >>> cleaned.n_segments, [(edit["op"], edit["step"]) for edit in edits]
    (1, [('remove', 'spur')])
    """
    work = _Work(graph, settings or CleanSettings(), contrast_at, origin_um, [])
    work.drop_lone_nodes()
    work.part_contacts()
    work.settle()
    if work.bridge_gaps():
        work.settle()
    work.drop_small_parts()
    work.name_ends()
    return work.graph, work.edits


@dataclass(slots=True)
class _Work:
    """The graph on its way through the steps, and the edits so far."""

    graph: CentrelineGraph
    settings: CleanSettings
    contrast_at: Sampler | None
    origin_um: Sequence[float]
    edits: list[Edit]

    def drop_lone_nodes(self) -> None:
        """Drop nodes without a segment: specks of the mask that thinning left a voxel of."""
        lone = np.flatnonzero(self.graph.node_degree() == 0)
        for node in lone:
            place = self.graph.node_position_um[node]
            self.note("remove", "part", place, "speck without length", length_um=0.0)
        if len(lone):
            self.graph = self.graph.select_segments(np.arange(self.graph.n_segments))

    def part_contacts(self) -> None:
        """Part vessels that run past one another and only touch."""
        s = self.settings
        self.graph = join_series(self.graph)
        if s.contact_neck <= 0:
            return
        found = touching_vessels(
            self.graph, neck=s.contact_neck, angle_deg=s.contact_angle_deg,
            contrast_at=self.contrast_at,
        )  # fmt: skip
        for contact in found:
            self.note("split", "contact", contact.position_um, contact.reason)
        drop = np.zeros(self.graph.n_segments, dtype=bool)
        drop[[c.segment for c in found if c.segment >= 0]] = True
        for contact in found:
            if contact.segment < 0:
                self.graph = part_node(
                    self.graph, contact.node, contact.other_ends, contact.other_um
                )
        self.graph = join_series(self.graph.select_segments(~drop))

    def settle(self) -> None:
        """Merge junctions, drop rings and spurs and join series until nothing changes."""
        for _ in range(_ROUNDS):
            before = self.graph.n_segments
            if not before:
                return
            self.merge_inside_balls()
            self.drop_small_rings()
            self.graph = join_series(self.graph)
            self.name_ends()
            self.drop_spurs()
            self.graph = join_series(self.graph)
            if self.graph.n_segments == before:
                return

    def merge_inside_balls(self) -> None:
        """Make junctions one whose segment lies inside the inscribed ball of either.

        Shortest first: a segment is contracted when no shorter one waits at its two nodes, and the
        rest is judged again. Contracting a segment opens and closes no loop.
        """
        while True:
            graph = self.graph
            a, b = graph.segment_nodes.T
            radius, degree = _node_radius_um(graph), graph.node_degree()
            length = graph.segment_length_um()
            ball = np.maximum(radius[a], radius[b])
            short = (degree[a] >= 3) & (degree[b] >= 3) & (a != b)
            short &= length < self.settings.merge_radii * ball
            if not short.any():
                return
            chosen = _first_at_both_nodes(graph, short, length)
            for k in np.flatnonzero(chosen):
                self.note(
                    "merge", "ball", graph.node_position_um[a[k]],
                    "two junctions inside one inscribed ball",
                    length_um=length[k], radius_um=ball[k],
                )  # fmt: skip
            group = np.arange(graph.n_nodes)
            group[b[chosen]] = a[chosen]
            _, group = np.unique(group, return_inverse=True)
            self.graph = merge_nodes(graph, group, np.maximum(radius, 1e-9), chosen)

    def drop_small_rings(self) -> None:
        """Drop one side of every ring shorter than the vessel's circumference there."""
        graph = self.graph
        length, radius = graph.segment_length_um(), _node_radius_um(graph)
        a, b = np.sort(graph.segment_nodes, axis=1).T
        circumference = 2 * np.pi * np.maximum(radius[a], radius[b])
        drop = (a == b) & (length < circumference)
        # Of two segments between the same nodes the thinner one goes, of equal ones the longer.
        order = np.lexsort((length, -_mean_radius_um(graph), b, a))
        first, second = order[:-1], order[1:]
        pair = (a[first] == a[second]) & (b[first] == b[second]) & (a[first] != b[first])
        small = pair & (length[first] + length[second] < circumference[first])
        drop[second[small]] = True
        for k in np.flatnonzero(drop):
            self.note(
                "remove", "ring", _middle_um(graph, int(k)), "ring shorter than the circumference",
                length_um=length[k], radius_um=circumference[k] / (2 * np.pi),
            )  # fmt: skip
        self.graph = graph.select_segments(~drop) if drop.any() else graph

    def drop_spurs(self) -> None:
        """Drop free ends that hardly leave their parent; at each junction the least one first.

        An end that a face cuts stays unless it does not leave the parent's ball at all.
        """
        graph = self.graph
        base, tip, side = _base_and_tip(graph)
        free = (base >= 0) & (graph.node_kind[tip] == _END)
        cut = (base >= 0) & (graph.node_kind[tip] == _BORDER)
        radius = _node_radius_um(graph)
        protrusion = graph.segment_length_um() + radius[tip] - radius[base]
        spur = free & (protrusion < self._least_protrusion_um(base, tip, side, radius))
        spur |= cut & (protrusion - radius[tip] < 0)
        score = np.where(spur, protrusion / np.maximum(radius[base], 1e-9), np.inf)
        order = np.lexsort((np.arange(len(score)), score, base))
        leading = np.append(True, np.diff(base[order]) != 0)[: len(order)]
        drop = np.zeros(graph.n_segments, dtype=bool)
        drop[order[leading]] = True
        drop &= spur
        for k in np.flatnonzero(drop):
            self.note(
                "remove", "spur", graph.node_position_um[tip[k]],
                "spur that hardly leaves its parent",
                length_um=graph.segment_length_um()[k], radius_um=radius[base[k]],
            )  # fmt: skip
        self.graph = graph.select_segments(~drop) if drop.any() else graph

    def _least_protrusion_um(
        self, base: np.ndarray, tip: np.ndarray, side: np.ndarray, radius_um: np.ndarray
    ) -> np.ndarray:
        """Return what a free end needs: by the parent, by itself if as wide, and by the voxels."""
        graph = self.graph
        own = _radius_beyond_um(graph, side, radius_um[base])
        least = self.settings.spur_protrusion * radius_um[base]
        least = np.where(own > 0.8 * radius_um[base], np.maximum(least, 2.0 * own), least)
        along = graph.node_position_um[tip] - graph.node_position_um[base]
        along /= np.maximum(np.linalg.norm(along, axis=1, keepdims=True), 1e-12)
        edge = np.linalg.norm(along * np.array(graph.spacing_um), axis=1)
        needed: np.ndarray = np.maximum(least, self.settings.spur_voxels * edge)
        return needed

    def bridge_gaps(self) -> bool:
        """Join facing free ends across short gaps; return whether any were found."""
        s, graph = self.settings, self.graph
        if s.bridge_radii <= 0:
            return False
        gaps = facing_ends(
            graph, radii=s.bridge_radii, angle_deg=s.bridge_angle_deg,
            radius_ratio=s.bridge_radius_ratio, grey=s.bridge_grey, contrast_at=self.contrast_at,
        )  # fmt: skip
        for gap in gaps:
            self.note(
                "join", "gap", graph.node_position_um[list(gap.ends)].mean(axis=0), gap.reason,
                length_um=gap.length_um, radius_um=gap.radius_um,
            )  # fmt: skip
        if gaps:
            pairs = np.array([gap.ends for gap in gaps], dtype=np.int64)
            self.graph = add_segments(graph, pairs, "bridged gap")
        return bool(gaps)

    def drop_small_parts(self) -> None:
        """Drop components too short for their own diameter; the longest always stays.

        A part that two faces cut is a vessel that crosses a corner of the volume, and stays.
        """
        graph, s = self.graph, self.settings
        part, count = _parts(graph)
        lengths = graph.segment_length_um()
        first = graph.segment_nodes[:, 0]
        length = np.bincount(part[first], lengths, count)
        weighted = np.bincount(part[first], lengths * _mean_radius_um(graph), count)
        radius = weighted / np.maximum(length, 1e-12)
        crossing = np.bincount(part, graph.node_kind == _BORDER, count) >= 2
        small = ~crossing & (length < 2 * s.part_length_diameters * radius)
        small |= length < s.part_length_share * length.max(initial=0.0)
        if count:
            small[np.argmax(length)] = False
        places = graph.node_position_um[np.unique(part, return_index=True)[1]]
        for k in np.flatnonzero(small):
            self.note(
                "remove", "part", places[k], "part too short for its own diameter",
                length_um=length[k], radius_um=radius[k],
            )  # fmt: skip
        if small.any():
            self.graph = graph.select_segments(~small[part[first]])

    def name_ends(self) -> None:
        """Tell junctions, blind ends and ends cut by a face apart again."""
        kind = end_kinds(self.graph, origin_um=self.origin_um)
        self.graph = self.graph.replace(node_kind=kind)

    def note(
        self, op: str, step: str, position_um: np.ndarray, reason: str, **sizes_um: float
    ) -> None:
        """Record one edit."""
        place = [round(float(v), 4) for v in position_um]
        sizes = {name: round(float(value), 4) for name, value in sizes_um.items()}
        edit = {"op": op, "step": step, "position_um": place, "reason": reason, "author": "auto"}
        self.edits.append(edit | sizes)


def _node_radius_um(graph: CentrelineGraph) -> np.ndarray:
    """Return the widest map radius of the segments at each node, right at it."""
    widest = np.zeros(graph.n_nodes)
    for side, end in ((0, graph.point_offsets[:-1]), (1, graph.point_offsets[1:] - 1)):
        radius = np.nan_to_num(graph.point_radius_map_um[end])
        np.maximum.at(widest, graph.segment_nodes[:, side], radius)
    return widest


def _mean_radius_um(graph: CentrelineGraph) -> np.ndarray:
    """Return the length-weighted mean map radius of each segment."""
    weight = graph.point_weight_um()
    total = graph.segment_sum(weight * np.nan_to_num(graph.point_radius_map_um))
    mean: np.ndarray = total / np.maximum(graph.segment_sum(weight), 1e-12)
    return mean


def _first_at_both_nodes(
    graph: CentrelineGraph, candidate: np.ndarray, length: np.ndarray
) -> np.ndarray:
    """Return the candidates that are the shortest candidate at both of their nodes."""
    order = np.lexsort((np.arange(len(length)), length))
    rank = np.empty(len(length), dtype=np.int64)
    rank[order] = np.arange(len(length))
    best = np.full(graph.n_nodes, len(length))
    for side in (0, 1):
        np.minimum.at(best, graph.segment_nodes[candidate, side], rank[candidate])
    at_nodes = best[graph.segment_nodes]
    first: np.ndarray = candidate & (at_nodes == rank[:, None]).all(axis=1)
    return first


def _base_and_tip(graph: CentrelineGraph) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return each segment's junction and free end, and which end is the junction; base -1: none."""
    degree = graph.node_degree()[graph.segment_nodes]
    side = np.where(degree[:, 1] == 1, 0, 1)
    rows = np.arange(graph.n_segments)
    has_base = (degree[rows, side] >= 3) & (degree[rows, 1 - side] == 1)
    base = np.where(has_base, graph.segment_nodes[rows, side], -1)
    return base, graph.segment_nodes[rows, 1 - side], side


def _radius_beyond_um(graph: CentrelineGraph, side: np.ndarray, reach_um: np.ndarray) -> np.ndarray:
    """Return each segment's widest map radius further than `reach_um` from one end; 0: nothing."""
    counts = graph.points_per_segment
    arc_um = graph.arc_um()
    length = np.repeat(graph.segment_length_um(), counts)
    from_end = np.where(np.repeat(side, counts) == 0, arc_um, length - arc_um)
    radius = np.where(
        from_end > np.repeat(reach_um, counts), np.nan_to_num(graph.point_radius_map_um), 0.0
    )
    widest: np.ndarray = np.maximum.reduceat(radius, graph.point_offsets[:-1])
    return widest


def _middle_um(graph: CentrelineGraph, segment: int) -> np.ndarray:
    points = graph.points_of(segment)
    middle: np.ndarray = graph.point_position_um[(points.start + points.stop) // 2]
    return middle


def _parts(graph: CentrelineGraph) -> tuple[np.ndarray, int]:
    """Return the component of each node, and how many there are."""
    n = graph.n_nodes
    a, b = graph.segment_nodes.T
    count, part = connected_components(coo_array((np.ones(len(a)), (a, b)), shape=(n, n)))
    return part, int(count)
