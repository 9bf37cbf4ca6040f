"""Vessels of exact shape: straight, curved, helical, tapered, elliptical, and a bifurcation."""

from collections.abc import Sequence

import numpy as np

from .._checks import checked_positive, checked_spacing_um
from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph
from .grow import daughters_of, optimal_angles_deg
from .paths import Box

__all__ = ["arc_tube", "ellipse_axes_um", "helix_tube", "straight_tube", "y_junction"]

Triple = tuple[float, float, float]
Shape = tuple[int, int, int]


def straight_tube(
    *,
    radius_um: float,
    direction: Sequence[float],
    shape: Shape,
    spacing_um: Triple,
    offset_um: Sequence[float] = (0.0, 0.0, 0.0),
    end_radius_um: float | None = None,
    length_um: float | None = None,
) -> CentrelineGraph:
    """Return a straight tube through the volume's middle, in any direction at any offset.

    Parameters
    ----------
    radius_um : float
        Radius, at the first end where it tapers.
    direction : (3,) sequence
        Along the axis, z, y, x; of any length.
    shape, spacing_um : tuple
        The volume's grid.
    offset_um : (3,) sequence
        Added to the volume's middle: moves the axis against the voxels.
    end_radius_um : float, optional
        Radius at the second end; between, it runs linearly.
    length_um : float, optional
        Length of a tube that ends inside, half of it on either side of the middle; if absent, the
        tube is cut by the volume's faces.

    Returns
    -------
    CentrelineGraph
        One segment of two points.

    Raises
    ------
    UnusableInputError
        If a radius is not positive, or the middle with its offset lies outside.

    Examples
    --------
    >>> tube = straight_tube(
    ...     radius_um=2, direction=(0, 0, 1), shape=(9, 9, 20), spacing_um=(1, 1, 1))
    >>> float(tube.segment_length_um()[0])
    20.0
    """
    checked_positive("radius_um", radius_um, unit="um")
    along = np.asarray(direction, dtype=np.float64)
    along /= np.linalg.norm(along)
    box = Box.of(shape, spacing_um)
    middle = 0.5 * (box.low_um + box.high_um) + np.asarray(offset_um)
    if box.depth_um(middle[None]).min() <= 0:
        msg = f"offset_um: found {tuple(offset_um)}, which puts the axis outside; make it smaller"
        raise UnusableInputError(msg)
    if length_um is None:
        far = float(np.linalg.norm(box.high_um - box.low_um))
        ends = [box.cut(np.array([middle, middle + s * far * along]))[0][-1] for s in (-1, 1)]
        kind = "border"
    else:
        ends = [middle + s * 0.5 * length_um * along for s in (-1, 1)]
        kind = "end"
    radii = [radius_um, radius_um if end_radius_um is None else end_radius_um]
    return _one(np.array(ends), np.array(radii), (kind, kind), shape, spacing_um)


def arc_tube(
    *,
    radius_um: float,
    bend_radius_um: float,
    angle_deg: float,
    shape: Shape,
    spacing_um: Triple,
    plane: tuple[Sequence[float], Sequence[float]] = ((0, 1, 0), (0, 0, 1)),
    offset_um: Sequence[float] = (0.0, 0.0, 0.0),
    step_um: float = 0.25,
) -> CentrelineGraph:
    """Return a tube bent to an arc of a circle around the volume's middle; a torus at 360 degrees.

    Parameters
    ----------
    radius_um, bend_radius_um : float
        Radius of the tube and of its axis.
    angle_deg : float
        Angle that the arc spans; 360 gives a loop from a node to itself.
    shape, spacing_um : tuple
        The volume's grid.
    plane : pair of (3,) sequences
        Two orthogonal directions, z, y, x, that span the arc's plane.
    offset_um : (3,) sequence
        Added to the volume's middle.
    step_um : float
        Largest step between points: they lie on the circle, the chords between them inside.

    Returns
    -------
    CentrelineGraph
        One segment; its length is that of the chords.

    Examples
    --------
    >>> ring = arc_tube(radius_um=2, bend_radius_um=10, angle_deg=360, shape=(9, 32, 32),
    ...                 spacing_um=(1, 1, 1))
    >>> round(float(ring.segment_length_um()[0]) / (2 * np.pi * 10), 3), ring.n_nodes
    (1.0, 1)
    """
    n = int(np.ceil(np.deg2rad(angle_deg) * bend_radius_um / step_um)) + 1
    turn = np.linspace(0, np.deg2rad(angle_deg), n)
    u, v = (np.asarray(axis, dtype=np.float64) for axis in plane)
    u, v = u / np.linalg.norm(u), v / np.linalg.norm(v)
    path = bend_radius_um * (np.cos(turn)[:, None] * u + np.sin(turn)[:, None] * v)
    path += _middle(shape, spacing_um) + np.asarray(offset_um)
    closed = angle_deg >= 360
    if closed:
        path[-1] = path[0]
    radii = np.full(n, checked_positive("radius_um", radius_um, unit="um"))
    return _one(path, radii, ("junction",) if closed else ("end", "end"), shape, spacing_um)


def helix_tube(
    *,
    radius_um: float,
    helix_radius_um: float,
    pitch_um: float,
    turns: float,
    shape: Shape,
    spacing_um: Triple,
    axis: int = 0,
    step_um: float = 0.25,
) -> CentrelineGraph:
    """Return a helical tube around the volume's middle, its axis along z (0), y (1) or x (2).

    The tube's length is turns * sqrt((2 pi helix_radius)**2 + pitch**2).

    Parameters
    ----------
    radius_um, helix_radius_um, pitch_um : float
        Radius of the tube, of the helix, and its rise a turn.
    turns : float
        Number of turns.
    shape, spacing_um : tuple
        The volume's grid.
    axis : int
        Along which the helix rises.
    step_um : float
        Largest step between points.

    Returns
    -------
    CentrelineGraph
        One segment that ends inside.

    Examples
    --------
    >>> coil = helix_tube(radius_um=1.5, helix_radius_um=8, pitch_um=12, turns=2,
    ...                   shape=(40, 32, 32), spacing_um=(1, 1, 1))
    >>> round(float(coil.segment_length_um()[0] / (2 * np.hypot(2 * np.pi * 8, 12))), 3)
    1.0
    """
    length = turns * np.hypot(2 * np.pi * helix_radius_um, pitch_um)
    turn = np.linspace(-np.pi * turns, np.pi * turns, int(np.ceil(length / step_um)) + 1)
    parts = [pitch_um * turn / (2 * np.pi), helix_radius_um * np.cos(turn)]
    parts.append(helix_radius_um * np.sin(turn))
    path = np.roll(np.stack(parts, axis=1), axis, axis=1) + _middle(shape, spacing_um)
    radii = np.full(len(path), checked_positive("radius_um", radius_um, unit="um"))
    return _one(path, radii, ("end", "end"), shape, spacing_um)


def y_junction(
    *,
    parent_radius_um: float,
    asymmetry: float,
    exponent: float,
    shape: Shape,
    spacing_um: Triple,
    angles_deg: tuple[float, float] | None = None,
    axis: Sequence[float] = (0, 0, 1),
    side: Sequence[float] = (0, 1, 0),
    node_offset_um: Sequence[float] = (0.0, 0.0, 0.0),
) -> CentrelineGraph:
    """Return one bifurcation whose three vessels are cut by the volume's faces.

    Parameters
    ----------
    parent_radius_um : float
        Radius of the parent.
    asymmetry : float
        Thinner over wider daughter, in (0, 1].
    exponent : float
        The x of parent**x = sum of daughters**x.
    shape, spacing_um : tuple
        The volume's grid.
    angles_deg : pair of float, optional
        Angles of the wider and thinner daughter to the parent's axis; if absent, those of least
        lumen volume.
    axis, side : (3,) sequence
        The parent's direction downstream, and the direction across it to the wider daughter.
    node_offset_um : (3,) sequence
        Of the junction from the volume's middle.

    Returns
    -------
    CentrelineGraph
        Node 0 is the junction; segments: the parent (towards it), wider and thinner daughter.

    Examples
    --------
    >>> fork = y_junction(parent_radius_um=6, asymmetry=1, exponent=3, shape=(40, 60, 60),
    ...                   spacing_um=(1, 1, 1))
    >>> fork.segment_radius_um().round(3).tolist()  # 6 / 2**(1/3)
    [6.0, 4.762, 4.762]
    """
    wider, thinner = daughters_of(parent_radius_um, asymmetry, exponent)
    one, two = np.deg2rad(angles_deg or optimal_angles_deg(parent_radius_um, wider, thinner))
    along = np.asarray(axis, dtype=np.float64) / np.linalg.norm(axis)
    across = np.asarray(side, dtype=np.float64)
    across -= (across @ along) * along
    across /= np.linalg.norm(across)
    box = Box.of(shape, spacing_um)
    node = _middle(shape, spacing_um) + np.asarray(node_offset_um)
    far = float(np.linalg.norm(box.high_um - box.low_um))
    headings = (
        -along,
        np.cos(one) * along + np.sin(one) * across,
        np.cos(two) * along - np.sin(two) * across,
    )
    tips = [box.cut(np.array([node, node + far * heading]))[0][-1] for heading in headings]
    lines = [np.array([tips[0], node]), np.array([node, tips[1]]), np.array([node, tips[2]])]
    kinds = np.array([NODE_KINDS.index(k) for k in ("junction", "border", "border", "border")])
    return CentrelineGraph.from_polylines(
        [node, *tips], [[1, 0], [0, 2], [0, 3]], lines,
        [np.full(2, r) for r in (parent_radius_um, wider, thinner)],
        node_kind=kinds.astype(np.int8), spacing_um=checked_spacing_um("spacing_um", spacing_um),
        extent_um=_extent(shape, spacing_um),
    )  # fmt: skip


def ellipse_axes_um(radius_um: float, flatness: float) -> tuple[float, float, float]:
    """Return an ellipse's wide and narrow semi-axis and the radius of equal laminar resistance.

    The ellipse has the area of a circle of `radius_um` and narrow / wide = `flatness`, as `draw`
    takes it. Laminar flow: Q = pi a^3 b^3 dP / (4 mu L (a^2 + b^2)), so that the circle of equal
    resistance has r^4 = 2 a^3 b^3 / (a^2 + b^2).

    Parameters
    ----------
    radius_um : float
        Radius of the circle of equal area.
    flatness : float
        Narrow over wide axis, in (0, 1].

    Returns
    -------
    tuple of float
        Wide semi-axis, narrow semi-axis, hydraulic radius in um.

    Examples
    --------
    >>> [round(v, 3) for v in ellipse_axes_um(4.0, 0.5)]
    [5.657, 2.828, 3.783]
    """
    wide, narrow = radius_um / np.sqrt(flatness), radius_um * np.sqrt(flatness)
    hydraulic = (2 * wide**3 * narrow**3 / (wide**2 + narrow**2)) ** 0.25
    return float(wide), float(narrow), float(hydraulic)


def _middle(shape: Shape, spacing_um: Triple) -> np.ndarray:
    box = Box.of(shape, spacing_um)
    return np.asarray(0.5 * (box.low_um + box.high_um))


def _extent(shape: Shape, spacing_um: Triple) -> Triple:
    z, y, x = (float(n * s) for n, s in zip(shape, spacing_um, strict=True))
    return z, y, x


def _one(
    path: np.ndarray,
    radii: np.ndarray,
    kinds: tuple[str, ...],
    shape: Shape,
    spacing_um: Triple,
) -> CentrelineGraph:
    """Return the graph of one segment between two nodes, or from one node to itself."""
    nodes = path[[0, -1]][: len(kinds)]
    return CentrelineGraph.from_polylines(
        nodes, [[0, len(kinds) - 1]], [path], [radii],
        node_kind=np.array([NODE_KINDS.index(k) for k in kinds], dtype=np.int8),
        spacing_um=checked_spacing_um("spacing_um", spacing_um),
        extent_um=_extent(shape, spacing_um),
    )  # fmt: skip
