"""`CentrelineGraph`: the vessel graph as arrays, with the views that people know."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from .._checks import checked_points
from ..errors import UnusableInputError

if TYPE_CHECKING:
    import networkx as nx

__all__ = ["NODE_KINDS", "RADIUS_METHODS", "CentrelineGraph"]

NODE_KINDS = ("junction", "end", "border", "inlet", "outlet")
RADIUS_METHODS = ("none", "fit", "contrast", "volume", "distance", "continued", "given", "edited")


@dataclass(frozen=True, slots=True)
class CentrelineGraph:
    """A vessel graph: nodes, segments between them, and the points along each segment.

    Structure of arrays: segment `i` owns the points `point_offsets[i]:point_offsets[i + 1]`, in
    order from `segment_nodes[i, 0]` to `segment_nodes[i, 1]`, both nodes' positions included.
    Parallel segments and loops from a node to itself are legal.

    Parameters
    ----------
    node_position_um : (n, 3) float64
        z, y, x of each node.
    node_kind : (n,) int8
        Index into `NODE_KINDS`.
    segment_nodes : (m, 2) int64
        The two end nodes of each segment.
    point_offsets : (m + 1,) int64
        Where each segment's points start.
    point_position_um : (p, 3) float64
        z, y, x along the centrelines.
    point_radius_um : (p,) float64
        Lumen radius; NaN where none is known.
    point_radius_se_um : (p,) float64
        Random standard error of each radius; NaN where unknown.
    point_radius_common_um : (p,) float64
        Systematic standard error shared by all radii (blur, threshold, correction); 0 if unknown.
    point_radius_map_um : (p,) float64
        The radius that the distance map gives, kept for comparison; NaN where none.
    point_method : (p,) int8
        Index into `RADIUS_METHODS`.
    point_in_zone : (p,) bool
        True inside a junction's zone: left out of a segment's mean radius.
    segment_resolved : (m,) bool
        False where the vessel is too thin for its image to size.
    segment_review : (m,) object (str)
        Why a person should look at the segment; empty where there is no reason.
    spacing_um : tuple of float
        The voxel spacing of the image behind the graph; zeros if there is none.
    extent_um : tuple of float
        Physical size of the volume along z, y, x; zeros if there is none.
    """

    node_position_um: np.ndarray
    node_kind: np.ndarray
    segment_nodes: np.ndarray
    point_offsets: np.ndarray
    point_position_um: np.ndarray
    point_radius_um: np.ndarray
    point_radius_se_um: np.ndarray
    point_radius_common_um: np.ndarray
    point_radius_map_um: np.ndarray
    point_method: np.ndarray
    point_in_zone: np.ndarray
    segment_resolved: np.ndarray
    segment_review: np.ndarray
    spacing_um: tuple[float, float, float] = (0.0, 0.0, 0.0)
    extent_um: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        n, m, p = len(self.node_position_um), len(self.segment_nodes), len(self.point_position_um)
        for name, length in (
            ("node_kind", n), ("point_offsets", m + 1), ("segment_resolved", m),
            ("segment_review", m), ("point_radius_um", p), ("point_radius_se_um", p),
            ("point_radius_common_um", p), ("point_radius_map_um", p), ("point_method", p),
            ("point_in_zone", p),
        ):  # fmt: skip
            if len(getattr(self, name)) != length:
                msg = f"{name}: found {len(getattr(self, name))} values, expected {length}"
                raise UnusableInputError(msg)
        if m and (self.segment_nodes.min() < 0 or self.segment_nodes.max() >= n):
            msg = f"segment_nodes: found a node outside 0..{n - 1}"
            raise UnusableInputError(msg)
        if m and (np.diff(self.point_offsets).min() < 2 or self.point_offsets[-1] != p):
            msg = "point_offsets: every segment needs at least its two nodes' points"
            raise UnusableInputError(msg)
        for name in self.__slots__:
            value = getattr(self, name)
            if isinstance(value, np.ndarray):
                view = value.view()
                view.setflags(write=False)
                object.__setattr__(self, name, view)

    # ------------------------------------------------------------------ making

    @classmethod
    def from_polylines(
        cls,
        node_position_um: Any,
        segment_nodes: Any,
        polylines_um: Sequence[Any],
        radii_um: Sequence[Any] | None = None,
        **fields: Any,
    ) -> "CentrelineGraph":
        """Build a graph from one (k, 3) polyline a segment, and one (k,) radius array a segment.

        Fields that are not given get neutral values; node kinds are `junction` from degree 2 up
        and `end` below.

        Raises
        ------
        UnusableInputError
            If shapes disagree or a position is not finite.
        """
        nodes = checked_points("node_position_um", np.reshape(node_position_um, (-1, 3)))
        ends = np.reshape(np.asarray(segment_nodes, dtype=np.int64), (-1, 2))
        lines = [checked_points("polylines_um", line) for line in polylines_um]
        if len(lines) != len(ends):
            msg = f"polylines_um: found {len(lines)} lines for {len(ends)} segments"
            raise UnusableInputError(msg)
        offsets = np.concatenate(([0], np.cumsum([len(line) for line in lines]))).astype(np.int64)
        points = np.concatenate(lines) if lines else np.zeros((0, 3))
        p = len(points)
        radius = np.full(p, np.nan)
        if radii_um is not None and lines:
            radius = np.concatenate([np.asarray(r, dtype=np.float64) for r in radii_um])
        degree = np.bincount(ends.ravel(), minlength=len(nodes))
        given = RADIUS_METHODS.index("given")
        arrays: dict[str, Any] = {
            "node_kind": np.where(degree > 1, 0, 1).astype(np.int8),
            "point_radius_um": radius,
            "point_radius_se_um": np.full(p, np.nan),
            "point_radius_common_um": np.zeros(p),
            "point_radius_map_um": np.full(p, np.nan),
            "point_method": np.where(np.isfinite(radius), given, 0).astype(np.int8),
            "point_in_zone": np.zeros(p, dtype=bool),
            "segment_resolved": np.ones(len(ends), dtype=bool),
            "segment_review": np.full(len(ends), "", dtype=object),
        }
        arrays.update(fields)
        return cls(
            node_position_um=nodes, segment_nodes=ends, point_offsets=offsets,
            point_position_um=points, **arrays,
        )  # fmt: skip

    def replace(self, **changes: Any) -> "CentrelineGraph":
        """Return a graph with some fields changed."""
        return replace(self, **changes)

    def select_segments(self, keep: Any) -> "CentrelineGraph":
        """Return the graph of the segments kept (bool mask or indices), in their order.

        Nodes that lose all their segments are dropped; ids are renumbered in order.
        """
        index = np.flatnonzero(keep) if np.asarray(keep).dtype == bool else np.asarray(keep)
        index = index.astype(np.int64)
        used = np.unique(self.segment_nodes[index].ravel())
        renumber = np.full(self.n_nodes, -1, dtype=np.int64)
        renumber[used] = np.arange(len(used))
        counts = self.points_per_segment[index]
        offsets = np.concatenate(([0], np.cumsum(counts))).astype(np.int64)
        points = np.repeat(self.point_offsets[index] - offsets[:-1], counts) + np.arange(
            offsets[-1]
        )
        changes: dict[str, Any] = {
            name: getattr(self, name)[points] for name in self.__slots__ if name in _POINT_FIELDS
        }
        return self.replace(
            node_position_um=self.node_position_um[used],
            node_kind=self.node_kind[used],
            segment_nodes=renumber[self.segment_nodes[index]],
            point_offsets=offsets,
            segment_resolved=self.segment_resolved[index],
            segment_review=self.segment_review[index],
            **changes,
        )

    def with_directions(self, reverse: Any) -> "CentrelineGraph":
        """Return the graph with the segments marked in `reverse` (bool, (m,)) turned round."""
        reverse = np.asarray(reverse, dtype=bool)
        counts = self.points_per_segment
        start = np.repeat(self.point_offsets[:-1], counts)
        within = np.arange(self.n_points) - start
        flipped = start + np.repeat(counts, counts) - 1 - within
        order = np.where(np.repeat(reverse, counts), flipped, np.arange(self.n_points))
        changes = {name: getattr(self, name)[order] for name in _POINT_FIELDS}
        nodes = np.where(reverse[:, None], self.segment_nodes[:, ::-1], self.segment_nodes)
        return self.replace(segment_nodes=nodes, **changes)

    # ------------------------------------------------------------------ reading

    @property
    def n_nodes(self) -> int:
        """Number of nodes."""
        return len(self.node_position_um)

    @property
    def n_segments(self) -> int:
        """Number of segments."""
        return len(self.segment_nodes)

    @property
    def n_points(self) -> int:
        """Number of points over all segments."""
        return len(self.point_position_um)

    @property
    def points_per_segment(self) -> np.ndarray:
        """(m,) number of points of each segment."""
        return np.diff(self.point_offsets)

    @property
    def point_segment(self) -> np.ndarray:
        """(p,) the segment that each point belongs to."""
        return np.repeat(np.arange(self.n_segments), self.points_per_segment)

    def points_of(self, segment: int) -> slice:
        """Return the slice of one segment's points."""
        return slice(int(self.point_offsets[segment]), int(self.point_offsets[segment + 1]))

    def node_degree(self) -> np.ndarray:
        """(n,) number of segment ends at each node; a loop from a node to itself counts twice."""
        return np.bincount(self.segment_nodes.ravel(), minlength=self.n_nodes)

    def node_kind_names(self) -> np.ndarray:
        """(n,) kind of each node by name."""
        return np.array(NODE_KINDS, dtype=object)[self.node_kind]

    def step_um(self) -> np.ndarray:
        """(p,) distance of each point from the point before it; 0 at a segment's first point."""
        step = np.zeros(self.n_points)
        if self.n_points:
            step[1:] = np.linalg.norm(np.diff(self.point_position_um, axis=0), axis=1)
            step[self.point_offsets[:-1]] = 0.0
        return step

    def arc_um(self) -> np.ndarray:
        """(p,) arc length of each point from its segment's first node."""
        total = np.cumsum(self.step_um())
        return total - np.repeat(total[self.point_offsets[:-1]], self.points_per_segment)

    def segment_length_um(self) -> np.ndarray:
        """(m,) arc length of each segment."""
        return self.segment_sum(self.step_um())

    def segment_chord_um(self) -> np.ndarray:
        """(m,) straight distance between each segment's two ends."""
        first = self.point_position_um[self.point_offsets[:-1]]
        last = self.point_position_um[self.point_offsets[1:] - 1]
        return np.linalg.norm(last - first, axis=1)

    def segment_sum(self, values: np.ndarray) -> np.ndarray:
        """(m,) sum of a per-point array over each segment."""
        if not self.n_segments:
            return np.zeros(0)
        return np.add.reduceat(np.asarray(values, dtype=np.float64), self.point_offsets[:-1])

    def segment_radius_um(self) -> np.ndarray:
        """(m,) length-weighted mean radius outside the junctions' zones.

        A segment that lies wholly in zones is averaged over all its points; NaN without radii.
        """
        weight = self.point_weight_um() * np.isfinite(self.point_radius_um)
        outside = weight * ~self.point_in_zone
        whole = self.segment_sum(outside) <= 0
        weight = np.where(np.repeat(whole, self.points_per_segment), weight, outside)
        total = self.segment_sum(weight)
        radius = np.where(np.isfinite(self.point_radius_um), self.point_radius_um, 0.0)
        with np.errstate(invalid="ignore", divide="ignore"):
            return self.segment_sum(weight * radius) / total

    def point_weight_um(self) -> np.ndarray:
        """(p,) length that each point stands for: half of the steps on either side."""
        step = self.step_um()
        after = np.append(step[1:], 0.0)
        return 0.5 * (step + after)

    # ------------------------------------------------------------------ views

    def to_networkx(self) -> "nx.MultiGraph":
        """Return a MultiGraph: nodes with position and kind, edges keyed by segment id."""
        import networkx as nx  # noqa: PLC0415 - costs every command's start 0.15 s

        graph = nx.MultiGraph()
        kinds = self.node_kind_names()
        for node, (z, y, x) in enumerate(self.node_position_um.tolist()):
            graph.add_node(node, z_um=z, y_um=y, x_um=x, kind=str(kinds[node]))
        lengths, radii = self.segment_length_um().tolist(), self.segment_radius_um().tolist()
        for segment, (a, b) in enumerate(self.segment_nodes.tolist()):
            graph.add_edge(
                a, b, key=segment, segment_id=segment, length_um=lengths[segment],
                radius_um=radii[segment],
            )  # fmt: skip
        return graph

    def to_frames(self) -> dict[str, pd.DataFrame]:
        """Return the geometric columns as data frames: `nodes`, `segments`, `points`."""
        nodes = pd.DataFrame(self.node_position_um, columns=["z_um", "y_um", "x_um"])
        nodes.insert(0, "node_id", np.arange(self.n_nodes))
        nodes.insert(1, "kind", self.node_kind_names().astype(str))
        nodes["degree"] = self.node_degree()
        segments = pd.DataFrame(
            {
                "segment_id": np.arange(self.n_segments),
                "node_a": self.segment_nodes[:, 0],
                "node_b": self.segment_nodes[:, 1],
                "length_um": self.segment_length_um(),
                "chord_um": self.segment_chord_um(),
                "radius_um": self.segment_radius_um(),
                "resolved": self.segment_resolved,
                "review": self.segment_review.astype(str),
            }
        )
        points = pd.DataFrame(self.point_position_um, columns=["z_um", "y_um", "x_um"])
        points.insert(0, "segment_id", self.point_segment)
        points.insert(
            1, "point",
            np.arange(self.n_points) - np.repeat(self.point_offsets[:-1], self.points_per_segment),
        )  # fmt: skip
        points["radius_um"] = self.point_radius_um
        points["radius_method"] = np.array(RADIUS_METHODS, dtype=object)[self.point_method].astype(
            str
        )
        return {"nodes": nodes, "segments": segments, "points": points}

    def _repr_html_(self) -> str:
        length_mm = float(self.segment_length_um().sum()) / 1000
        return (
            f"<b>CentrelineGraph</b>: {self.n_nodes} nodes, {self.n_segments} segments, "
            f"{length_mm:.3f} mm"
        )


_POINT_FIELDS = (
    "point_position_um", "point_radius_um", "point_radius_se_um", "point_radius_common_um",
    "point_radius_map_um", "point_method", "point_in_zone",
)  # fmt: skip


def concatenate(graphs: Iterable[CentrelineGraph]) -> CentrelineGraph:
    """Return one graph that holds all the given ones as separate components."""
    parts = list(graphs)
    shift = np.cumsum([0, *(g.n_nodes for g in parts)])
    offsets = [np.zeros(1, dtype=np.int64)]
    for part in parts:
        offsets.append(part.point_offsets[1:] + offsets[-1][-1])
    changes: dict[str, Any] = {
        name: np.concatenate([getattr(g, name) for g in parts])
        for name in (*_POINT_FIELDS, "node_position_um", "node_kind", "segment_resolved",
                     "segment_review")
    }  # fmt: skip
    nodes = [g.segment_nodes + shift[i] for i, g in enumerate(parts)]
    return parts[0].replace(
        segment_nodes=np.concatenate(nodes), point_offsets=np.concatenate(offsets), **changes
    )
