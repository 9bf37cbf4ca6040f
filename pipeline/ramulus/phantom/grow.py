"""Grow trees whose junctions obey a chosen exponent, without collisions, inside a box."""

import heapq
from dataclasses import dataclass, field
from typing import Literal

import numpy as np

from .._settings import Settings, setting
from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph
from .paths import PARTING_SLOPE, Box, arc_length_um, bent_path, keeps_clear

__all__ = ["TreeSettings", "daughters_of", "grow", "optimal_angles_deg"]

_TRIES_PER_JUNCTION = 150
_LEAVE_BELOW = 0.3  # a vessel may run out of the volume once 70 % of the tries have failed
_SHORTEN_BY = 0.4  # the last tries ask for this share of the length asked at first
_RESTARTS = 12
_STEEPEST_FACE = 0.6  # cosine to a face's normal below which a crossing would graze the face
_FACES = ("z-low", "y-low", "x-low", "z-high", "y-high", "x-high")


class TreeSettings(Settings):
    """Shape of a grown tree."""

    exponent: float = setting(
        3.0,
        "junction exponent x: parent**x = sum of daughters**x",
        source="3 is the cube law (Murray 1926)",
        ge=1.5,
        le=6,
    )
    root_radius_um: float = setting(6.0, "radius of the inlet vessel", unit="um", gt=0)
    min_radius_um: float = setting(2.0, "thinnest vessel that is grown", unit="um", gt=0)
    asymmetry: tuple[float, float] = setting(
        (0.5, 1.0), "range of thinner over wider daughter, drawn evenly"
    )
    angles: Literal["optimal", "chosen"] = setting(
        "optimal",
        "angles between parent's axis and daughters: least lumen volume, or as in `angle_deg`",
        source="Murray 1926, J Gen Physiol 9:835",
    )
    angle_deg: tuple[float, float] = setting(
        (30.0, 45.0), "chosen angles of the wider and the thinner daughter", unit="deg"
    )
    length_to_radius: float = setting(
        7.0, "length of a segment in its radii; where that does not fit, down to 0.4 of it", gt=0
    )
    length_spread: float = setting(0.2, "SD of the natural logarithm of the length", ge=0)
    bend_deg: float = setting(
        15.0, "SD of the swing of a path's direction", unit="deg", ge=0, le=45
    )
    clearance_um: float = setting(
        3.0, "smallest gap between vessels that share no junction", unit="um", ge=0
    )
    inlet_face: Literal["z-low", "y-low", "x-low", "z-high", "y-high", "x-high"] = setting(
        "y-low", "the face that cuts the inlet vessel"
    )
    leaves: Literal["inside", "mixed"] = setting(
        "mixed", "whether vessels may run out of the volume, or all end inside"
    )
    max_segments: int = setting(400, "growth ends at so many segments", ge=1)
    min_segments: int = setting(1, "a smaller tree is grown again, up to 12 times", ge=1)
    step_um: float = setting(1.0, "largest step between centreline points", unit="um", gt=0)


def grow(
    settings: TreeSettings,
    *,
    shape: tuple[int, int, int],
    spacing_um: tuple[float, float, float],
    seed: int,
) -> CentrelineGraph:
    """Grow a binary tree from a face of the volume, the widest open tip first.

    A tip divides when two daughters are found that keep their clearance from all vessels and from
    the volume's faces; else it ends there. Vessels that share no junction keep `clearance_um`
    between their walls; those that share one do so from (sum of radii + clearance) / 0.7 of arc
    length on. Daughters start at the junction's node, on the parent's axis, with their own radius.

    Parameters
    ----------
    settings : TreeSettings
        Exponent, radii, asymmetry, angles, lengths, bends, clearance.
    shape, spacing_um : tuple
        The volume's grid, z, y, x.
    seed : int
        Seed of everything random, >= 0.

    Returns
    -------
    CentrelineGraph
        Node 0 is the inlet. Vessels cut by a face end in `border` nodes. Every segment runs
        downstream.

    Raises
    ------
    UnusableInputError
        If not even the root fits, or `min_segments` are not reached in twelve trees.

    Examples
    --------
    >>> tree = grow(TreeSettings(), shape=(96, 96, 96), spacing_um=(1.0, 1.0, 1.0), seed=1)
    >>> tree.n_segments == tree.n_nodes - 1
    True
    """
    _check(settings)
    box = Box.of(shape, spacing_um)
    largest = None
    for restart in range(_RESTARTS):
        tree = _grow_once(settings, box, np.random.default_rng([seed, restart]))
        if largest is None or len(tree.paths) > len(largest.paths):
            largest = tree
        if len(tree.paths) >= settings.min_segments:
            break
    if largest is None or not largest.paths or len(largest.paths) < settings.min_segments:
        found = 0 if largest is None else len(largest.paths)
        msg = (
            f"min_segments: found room for {found} of {settings.min_segments} segments; "
            "enlarge the shape or make root_radius_um, length_to_radius or clearance_um smaller"
        )
        raise UnusableInputError(msg)
    return largest.to_graph(shape, spacing_um)


def daughters_of(parent_radius_um: float, asymmetry: float, exponent: float) -> tuple[float, float]:
    """Return the radii of the wider and the thinner daughter under a junction exponent.

    Parameters
    ----------
    parent_radius_um : float
        Radius of the parent.
    asymmetry : float
        Thinner over wider daughter, in (0, 1].
    exponent : float
        The x of parent**x = sum of daughters**x.

    Returns
    -------
    tuple of float
        Wider and thinner daughter.

    Examples
    --------
    >>> [round(r, 4) for r in daughters_of(1.0, 1.0, 3.0)]  # 2**(-1/3)
    [0.7937, 0.7937]
    """
    wider = parent_radius_um * (1 + asymmetry**exponent) ** (-1 / exponent)
    return wider, asymmetry * wider


def optimal_angles_deg(parent: float, wider: float, thinner: float) -> tuple[float, float]:
    """Return the angles to the parent's axis that need the least lumen volume.

    Murray 1926, J Gen Physiol 9:835: cos t1 = (r0^4 + r1^4 - r2^4) / (2 r0^2 r1^2), 2 likewise.

    Parameters
    ----------
    parent, wider, thinner : float
        Radii, in any one unit.

    Returns
    -------
    tuple of float
        Angles of the wider and the thinner daughter in degrees.

    Examples
    --------
    >>> [round(a, 2) for a in optimal_angles_deg(2 ** (1 / 3), 1.0, 1.0)]
    [37.47, 37.47]
    """
    w0, w1, w2 = parent**2, wider**2, thinner**2
    one = np.clip((w0**2 + w1**2 - w2**2) / (2 * w0 * w1), -1, 1)
    two = np.clip((w0**2 + w2**2 - w1**2) / (2 * w0 * w2), -1, 1)
    return float(np.rad2deg(np.arccos(one))), float(np.rad2deg(np.arccos(two)))


# ---------------------------------------------------------------------- one tree


@dataclass
class _Tree:
    """A tree while it grows."""

    nodes: list[np.ndarray] = field(default_factory=list)
    kinds: list[str] = field(default_factory=list)
    ends: list[tuple[int, int]] = field(default_factory=list)
    paths: list[np.ndarray] = field(default_factory=list)
    radii: list[float] = field(default_factory=list)

    def add(self, start: int, path: np.ndarray, radius: float, kind: str) -> int:
        """Add a segment from a node; returns the new node at its far end."""
        self.nodes.append(path[-1])
        self.kinds.append(kind)
        self.ends.append((start, len(self.nodes) - 1))
        self.paths.append(path)
        self.radii.append(radius)
        return len(self.nodes) - 1

    def points_but(self, segment: int) -> tuple[np.ndarray, np.ndarray]:
        """Return points and radii of all segments but one."""
        rest = [k for k in range(len(self.paths)) if k != segment]
        if not rest:
            return np.zeros((0, 3)), np.zeros(0)
        radius = [np.full(len(self.paths[k]), self.radii[k]) for k in rest]
        return np.concatenate([self.paths[k] for k in rest]), np.concatenate(radius)

    def to_graph(
        self, shape: tuple[int, int, int], spacing_um: tuple[float, float, float]
    ) -> CentrelineGraph:
        """Return the graph."""
        z, y, x = (n * s for n, s in zip(shape, spacing_um, strict=True))
        return CentrelineGraph.from_polylines(
            self.nodes, self.ends, self.paths,
            [np.full(len(p), r) for p, r in zip(self.paths, self.radii, strict=True)],
            node_kind=np.array([NODE_KINDS.index(k) for k in self.kinds], dtype=np.int8),
            spacing_um=spacing_um, extent_um=(z, y, x),
        )  # fmt: skip


def _check(settings: TreeSettings) -> None:
    low, high = settings.asymmetry
    if not 0 < low <= high <= 1:
        msg = f"asymmetry: found {settings.asymmetry}, expected 0 < low <= high <= 1"
        raise UnusableInputError(msg)
    if settings.angles == "chosen" and sum(settings.angle_deg) < 50:
        msg = (
            f"angle_deg: found {settings.angle_deg}, expected a sum of at least 50 to part in time"
        )
        raise UnusableInputError(msg)
    if settings.min_radius_um > settings.root_radius_um:
        msg = (
            f"min_radius_um: found {settings.min_radius_um}, above root_radius_um "
            f"{settings.root_radius_um}; make it smaller"
        )
        raise UnusableInputError(msg)


def _grow_once(settings: TreeSettings, box: Box, rng: np.random.Generator) -> _Tree:
    """Grow one tree until no tip can divide."""
    tree = _Tree()
    root = _root_path(settings, box, rng)
    if root is None:
        return tree
    tree.nodes.append(root[0])
    tree.kinds.append("border")
    tree.add(0, root, settings.root_radius_um, "end")
    tips = [(-settings.root_radius_um, 0)]
    while tips and len(tree.paths) + 2 <= settings.max_segments:
        _, parent = heapq.heappop(tips)
        pair = _daughters(settings, box, tree, parent, rng)
        if pair is None:
            continue
        node = tree.ends[parent][1]
        tree.kinds[node] = "junction"
        for path, radius, face in pair:
            tree.add(node, path, radius, "end" if face < 0 else "border")
            if face < 0:
                heapq.heappush(tips, (-radius, len(tree.paths) - 1))
    return tree


def _root_path(settings: TreeSettings, box: Box, rng: np.random.Generator) -> np.ndarray | None:
    """Return the root's path from the middle of its face, or None if it does not fit."""
    face = _FACES.index(settings.inlet_face)
    inward = np.zeros(3)
    inward[face % 3] = 1.0 if face < 3 else -1.0
    for attempt in range(_TRIES_PER_JUNCTION):
        start = box.low_um + (box.high_um - box.low_um) * rng.uniform(0.35, 0.65, 3)
        start[face % 3] = (box.low_um if face < 3 else box.high_um)[face % 3]
        direction = inward + rng.normal(size=3) * 0.15
        direction /= np.linalg.norm(direction)
        radius = settings.root_radius_um
        path = _path(
            settings, start, direction, radius, radius, 1 - attempt / _TRIES_PER_JUNCTION, rng
        )
        if _fits(box, path, radius, settings.clearance_um, entry_face=face):
            return path
    return None


def _path(
    settings: TreeSettings,
    start: np.ndarray,
    direction: np.ndarray,
    radius: float,
    parent_radius: float,
    patience: float,
    rng: np.random.Generator,
) -> np.ndarray:
    """Return a bent path, at least so long that it can be clear of its neighbours at its end.

    `patience` runs from 1 to 0 with the tries: shorter paths are asked for.
    """
    share = _SHORTEN_BY + (1 - _SHORTEN_BY) * patience
    spread = np.exp(settings.length_spread * rng.normal())
    length = settings.length_to_radius * radius * spread * share
    length = max(length, _shortest(settings, radius, parent_radius) + radius)
    return bent_path(
        start, direction, length_um=length, step_um=settings.step_um, bend_deg=settings.bend_deg,
        radius_um=radius, rng=rng,
    )  # fmt: skip


def _shortest(settings: TreeSettings, radius: float, parent_radius: float) -> float:
    """Arc length from a junction within which a vessel has left its neighbours there."""
    return (radius + parent_radius + settings.clearance_um + settings.step_um) / PARTING_SLOPE


def _fits(
    box: Box, path: np.ndarray, radius: float, clearance: float, *, entry_face: int = -1
) -> bool:
    """Tell whether a whole path keeps a radius and the clearance from the faces but its entry."""
    depth = box.depth_um(path)
    room = radius + clearance
    if entry_face >= 0:
        entering = np.minimum(room, np.linalg.norm(path - path[0], axis=1) * _STEEPEST_FACE)
        depth[:, entry_face] += np.where(entering < room, room - entering, 0.0)
    return bool(depth.min() >= room)


_Daughter = tuple[np.ndarray, float, int]  # path, radius, the face that cuts it or -1


def _daughters(
    settings: TreeSettings, box: Box, tree: _Tree, parent: int, rng: np.random.Generator
) -> tuple[_Daughter, _Daughter] | None:
    """Return two daughters that fit, or None."""
    radius = tree.radii[parent]
    axis = tree.paths[parent][-1] - tree.paths[parent][-2]
    axis /= np.linalg.norm(axis)
    others = tree.points_but(parent)
    mother = tree.paths[parent], np.full(len(tree.paths[parent]), radius)
    for attempt in range(_TRIES_PER_JUNCTION):
        patience = 1 - attempt / _TRIES_PER_JUNCTION
        wider, thinner = daughters_of(radius, rng.uniform(*settings.asymmetry), settings.exponent)
        if thinner < settings.min_radius_um:
            continue
        pair: list[_Daughter] = []
        directions = _directions(settings, axis, (radius, wider, thinner), rng)
        for r, direction in zip((wider, thinner), directions, strict=True):
            path = _path(settings, mother[0][-1], direction, r, radius, patience, rng)
            path, face = _within(settings, box, path, r, radius)
            if face >= 0 and patience > _LEAVE_BELOW:
                break
            sister = [(p, np.full(len(p), s)) for p, s, _ in pair]
            if len(path) and _clear(settings, path, r, others, [mother, *sister]):
                pair.append((path, r, face))
            else:
                break
        if len(pair) == 2:
            return pair[0], pair[1]
    return None


def _directions(
    settings: TreeSettings,
    axis: np.ndarray,
    radii: tuple[float, float, float],
    rng: np.random.Generator,
) -> tuple[np.ndarray, np.ndarray]:
    """Return the daughters' first directions: in one plane with the parent's, either side of it."""
    angles = settings.angle_deg if settings.angles == "chosen" else optimal_angles_deg(*radii)
    side = np.cross(axis, rng.normal(size=3))
    side /= np.linalg.norm(side)
    one, two = np.deg2rad(angles)
    return np.cos(one) * axis + np.sin(one) * side, np.cos(two) * axis - np.sin(two) * side


def _within(
    settings: TreeSettings, box: Box, path: np.ndarray, radius: float, parent_radius: float
) -> tuple[np.ndarray, int]:
    """Return the path, cut where a face cuts it cleanly, and the face (-1: none); or empty."""
    nothing = np.zeros((0, 3))
    cut, face = box.cut(path)
    depth = box.depth_um(cut)
    room = radius + settings.clearance_um
    if face < 0:
        return (cut, -1) if depth.min() >= room else (nothing, -1)
    step = cut[-1] - cut[-2]
    steep = abs(step[face % 3]) >= _STEEPEST_FACE * np.linalg.norm(step)
    length = np.linalg.norm(np.diff(cut, axis=0), axis=1).sum()
    long_enough = length >= _shortest(settings, radius, parent_radius)
    # until its last approach it keeps clear of the face that cuts it, and always of the others
    to_go = np.linalg.norm(cut - cut[-1], axis=1)
    depth[:, face] = np.where(to_go <= 2 * room, room, depth[:, face])
    if settings.leaves == "inside" or not steep or not long_enough or depth.min() < room:
        return nothing, -1
    return cut, face


def _clear(
    settings: TreeSettings,
    path: np.ndarray,
    radius: float,
    others: tuple[np.ndarray, np.ndarray],
    joined: list[tuple[np.ndarray, np.ndarray]],
) -> bool:
    """Tell whether a new path keeps clear of all vessels, of those at its junction from it on."""

    def clear(line: tuple[np.ndarray, np.ndarray], arc_um: np.ndarray | None) -> bool:
        return keeps_clear(
            path, radius, *line, clearance_um=settings.clearance_um, step_um=settings.step_um,
            arc_um=arc_um,
        )  # fmt: skip

    arc_um = arc_length_um(path)
    return clear(others, None) and all(clear(line, arc_um) for line in joined)
