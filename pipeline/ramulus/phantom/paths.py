"""Bent paths, the box they run in, and the clearance between them: the ground of the growers."""

from dataclasses import dataclass

import numpy as np

from ..network.graph import CentrelineGraph
from ._clearance_kernels import smallest_gap

__all__ = [
    "PARTING_SLOPE", "Box", "arc_length_um", "bent_path", "keeps_clear", "segments_keep_clear",
]  # fmt: skip

# Two vessels that share a junction must part at least this fast: their distance is at least this
# share of the arc length from the junction until they are clear of each other (about 44 degrees).
PARTING_SLOPE = 0.7


@dataclass(frozen=True, slots=True)
class Box:
    """The volume: its two corners (z, y, x), half a voxel outside the outermost voxel centres."""

    low_um: np.ndarray
    high_um: np.ndarray

    @classmethod
    def of(cls, shape: tuple[int, int, int], spacing_um: tuple[float, float, float]) -> "Box":
        """Return the box of a grid whose first voxel's centre is the origin.

        Parameters
        ----------
        shape, spacing_um : tuple
            Voxels and their edges along z, y, x.

        Returns
        -------
        Box
            The box.
        """
        spacing = np.asarray(spacing_um, dtype=np.float64)
        return cls(-0.5 * spacing, (np.asarray(shape) - 0.5) * spacing)

    def depth_um(self, points_um: np.ndarray) -> np.ndarray:
        """(n, 6) distance of each point from faces z-low, y-low, x-low, z-high...; < 0 outside."""
        return np.concatenate([points_um - self.low_um, self.high_um - points_um], axis=1)

    def cut(self, path_um: np.ndarray) -> tuple[np.ndarray, int]:
        """Cut a path where it first leaves.

        Parameters
        ----------
        path_um : (n, 3) array
            A path that begins inside.

        Returns
        -------
        path_um : (k, 3) array
            The path up to its crossing, which lies exactly on the face.
        face : int
            0 to 5 for z-low, y-low, x-low, z-high, y-high, x-high; -1 if it does not leave.
        """
        depth = self.depth_um(path_um)
        outside = np.flatnonzero(depth.min(axis=1) < 0)
        if not len(outside) or outside[0] == 0:
            return path_um, -1
        i = int(outside[0])
        step = depth[i - 1] - depth[i]
        with np.errstate(divide="ignore", invalid="ignore"):
            share = np.where(depth[i] < 0, depth[i - 1] / step, np.inf)
        face = int(np.argmin(share))
        crossing = path_um[i - 1] + share[face] * (path_um[i] - path_um[i - 1])
        axis = face % 3
        crossing[axis] = (self.low_um if face < 3 else self.high_um)[axis]
        return np.concatenate([path_um[:i], crossing[None]]), face


def bent_path(
    start_um: np.ndarray,
    direction: np.ndarray,
    *,
    length_um: float,
    step_um: float,
    bend_deg: float,
    radius_um: float,
    rng: np.random.Generator,
) -> np.ndarray:
    """Return a gently bent path that leaves its start exactly along a direction.

    The direction swings in two planes by (1 - cos) waves whose amplitudes are normal with SD
    `bend_deg`, kept so small that the radius of curvature is at least three vessel radii.

    Parameters
    ----------
    start_um, direction : (3,) array
        First point, and the unit vector along which the path leaves it.
    length_um, step_um : float
        Length of the path, largest step between points.
    bend_deg : float
        SD of the swings.
    radius_um : float
        Radius of the vessel.
    rng : numpy.random.Generator
        Source of the swings.

    Returns
    -------
    (n, 3) array
        Points at equal steps of at most `step_um`; their polyline is `length_um` long.
    """
    n = max(2, int(np.ceil(length_um / step_um)))
    middle = (np.arange(n) + 0.5) / n
    side, up = _across(direction)
    heading = np.tile(direction, (n, 1))
    for axis in (side, up):
        waves = rng.uniform(0.5, 1.5)
        largest = length_um / (np.pi * waves * 3 * radius_um) / np.sqrt(2)
        swing = np.clip(np.deg2rad(bend_deg) * rng.normal(), -largest, largest)
        turn = 0.5 * swing * (1 - np.cos(2 * np.pi * waves * middle))
        heading = heading + np.tan(turn)[:, None] * axis
    heading /= np.linalg.norm(heading, axis=1, keepdims=True)
    steps = np.cumsum(heading * (length_um / n), axis=0)
    return np.asarray(start_um + np.concatenate([np.zeros((1, 3)), steps]))


def _across(direction: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return two unit vectors that are orthogonal to a unit vector and to each other."""
    helper = np.eye(3)[int(np.argmin(np.abs(direction)))]
    side = np.cross(direction, helper)
    side /= np.linalg.norm(side)
    return side, np.cross(direction, side)


def keeps_clear(
    path_um: np.ndarray,
    radius_um: float,
    others_um: np.ndarray,
    other_radius_um: np.ndarray,
    *,
    clearance_um: float,
    step_um: float,
    arc_um: np.ndarray | None = None,
) -> bool:
    """Tell whether a path keeps its clearance from others' points.

    With `arc_um`, the path's arc length from the node that it shares with the others, the path may
    be nearer where it has parted by `PARTING_SLOPE` times that length.

    Parameters
    ----------
    path_um : (n, 3) array
        The path, of one radius.
    radius_um : float
        Its radius.
    others_um : (k, 3) array
        Points of the other vessels.
    other_radius_um : (k,) array
        Their radii.
    clearance_um : float
        Smallest gap between the walls.
    step_um : float
        Largest step between points.
    arc_um : (n,) array, optional
        Arc length of the path's points from the shared node.

    Returns
    -------
    bool
        Whether the clearance is kept.

    Distances are taken between points, which stand for the stretch of half a step on either side:
    a step is added to the clearance, so that the lines themselves keep it.
    """
    if not len(others_um):
        return True
    reach = radius_um + clearance_um + step_um + float(np.max(other_radius_um))
    low, high = path_um.min(axis=0) - reach, path_um.max(axis=0) + reach
    near = ((others_um >= low) & (others_um <= high)).all(axis=1)
    arc = np.zeros(len(path_um)) if arc_um is None else arc_um
    enough = clearance_um + step_um
    gap = smallest_gap(
        path_um, np.full(len(path_um), radius_um), arc, others_um[near], other_radius_um[near],
        0.0 if arc_um is None else PARTING_SLOPE, enough,
    )  # fmt: skip
    return bool(gap >= enough)


def arc_length_um(path_um: np.ndarray) -> np.ndarray:
    """(n,) arc length of each point of a path from its first."""
    return np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(path_um, axis=0), axis=1))))


def segments_keep_clear(
    graph: CentrelineGraph, *, clearance_um: float, step_um: float
) -> np.ndarray:
    """Tell which segments keep their clearance from all the others.

    Segments that share a node are judged from that node on, where they part gradually. A segment
    is not judged against itself.

    Parameters
    ----------
    graph : CentrelineGraph
        Vessels with radii.
    clearance_um : float
        Smallest gap between the walls.
    step_um : float
        Largest step between points.

    Returns
    -------
    (m,) bool array
        True where a segment keeps clear.
    """
    clear = np.ones(graph.n_segments, dtype=bool)
    owner = graph.point_segment
    ends = graph.segment_nodes[owner]
    for segment, (a, b) in enumerate(graph.segment_nodes):
        points = graph.points_of(segment)
        path, radius = graph.point_position_um[points], graph.point_radius_um[points]
        arc = arc_length_um(path)
        at_a, at_b = (ends == a).any(axis=1), (ends == b).any(axis=1)
        for others, from_node in (
            (~at_a & ~at_b, None),
            (at_a & ~at_b, arc),
            (at_b & ~at_a, arc[-1] - arc),
            (at_a & at_b & (owner != segment), np.minimum(arc, arc[-1] - arc)),
        ):
            clear[segment] &= keeps_clear(
                path, float(radius.max()), graph.point_position_um[others],
                graph.point_radius_um[others], clearance_um=clearance_um, step_um=step_um,
                arc_um=from_node,
            )  # fmt: skip
    return clear
