"""Weave loop networks: a jittered mesh of junctions of three vessels, cut by the volume's faces."""

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from scipy.spatial import cKDTree
from scipy.spatial.transform import Rotation
from scipy.special import ndtr, ndtri

from .._settings import Settings, setting
from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph
from .paths import Box, segments_keep_clear

if TYPE_CHECKING:
    import networkx as nx

__all__ = ["LatticeSettings", "weave"]

# The net of degree 3 and highest symmetry in space, (10,3)-a: eight nodes a cubic cell, each joined
# to the three at sqrt(2)/4 of the cell's edge, at 120 degrees; its shortest rings have ten nodes.
# Wells, Three-dimensional nets and polyhedra, 1977 (recalled from memory; the tests count).
_CELL = (
    np.array(
        [[1, 1, 1], [3, 7, 5], [7, 5, 3], [5, 3, 7], [5, 5, 5], [7, 3, 1], [3, 1, 7], [1, 7, 3]]
    )
    / 8
)
_EDGE = np.sqrt(2) / 4
_STEEPEST_FACE = 0.5  # cosine to a face's normal below which a crossing would graze the face
_ATTEMPTS = 6  # meshes that are tried, each with less jitter
_ROUNDS = 8  # of straightening vessels that come too near to one another


class LatticeSettings(Settings):
    """Shape of a woven loop network."""

    spacing_um: float = setting(17.0, "distance between neighbouring junctions", unit="um", gt=0)
    jitter: float = setting(
        0.1, "SD of the junctions' displacement, as a share of their distance", ge=0, le=0.3
    )
    missing: float = setting(0.08, "share of the vessels that are left out", ge=0, le=0.6)
    radius_um: float = setting(2.5, "median radius", unit="um", gt=0)
    radius_spread: float = setting(0.25, "SD of the natural logarithm of the radius", ge=0, le=1)
    min_radius_um: float = setting(
        2.0, "smallest radius; thinner draws are raised", unit="um", gt=0
    )
    max_radius_um: float = setting(4.0, "largest radius; wider draws are lowered", unit="um", gt=0)
    bend: float = setting(
        0.08, "SD of the sideways swing of a vessel, as a share of its length", ge=0, le=0.3
    )
    clearance_um: float = setting(
        3.0, "smallest gap between vessels that share no junction", unit="um", ge=0
    )
    step_um: float = setting(1.0, "largest step between centreline points", unit="um", gt=0)


def weave(
    settings: LatticeSettings,
    *,
    shape: tuple[int, int, int],
    spacing_um: tuple[float, float, float],
    seed: int,
) -> CentrelineGraph:
    """Weave a loop network that fills the volume and is cut by its faces.

    A mesh of degree 3, turned and shifted at random, loses a share of its vessels; what is left at
    nodes of degree 2 is one vessel, and dead ends inside are taken away. Vessels are gently bent,
    straightened where they come too near to one another. The largest connected part is kept.

    Parameters
    ----------
    settings : LatticeSettings
        Distances, radii, bends, clearance.
    shape, spacing_um : tuple
        The volume's grid, z, y, x.
    seed : int
        Seed of everything random, >= 0.

    Returns
    -------
    CentrelineGraph
        Connected; junctions of degree 3, every end a `border` node on a face. Independent loops:
        segments - nodes + 1.

    Raises
    ------
    UnusableInputError
        If the vessels cannot keep their clearance, or no loop fits into the volume.

    Examples
    --------
    >>> net = weave(LatticeSettings(), shape=(96, 96, 96), spacing_um=(1.0, 1.0, 1.0), seed=1)
    >>> sorted({int(d) for d in net.node_degree()})
    [1, 3]
    """
    if settings.min_radius_um > settings.max_radius_um:
        msg = f"min_radius_um: found {settings.min_radius_um}, above max_radius_um; make it smaller"
        raise UnusableInputError(msg)
    box = Box.of(shape, spacing_um)
    for attempt in range(_ATTEMPTS):
        rng = np.random.default_rng([seed, attempt])
        calmer = settings.model_copy(update={"jitter": settings.jitter * (1 - attempt / _ATTEMPTS)})
        chains = _chains(_thinned(_mesh(calmer, box, rng), calmer, rng))
        radius = _radii(calmer, len(chains.ends), rng)
        paths = _clear_paths(calmer, box, chains, radius, rng)
        if paths and len(chains.ends) >= len(chains.node_um):  # at least one loop
            return _graph(chains, paths, radius, shape, spacing_um)
    msg = (
        f"lattice.spacing_um: found {settings.spacing_um} um between junctions, with which no loop "
        f"of clear vessels fits into {shape} voxels; try shorter ones, or less clearance_um"
    )
    raise UnusableInputError(msg)


# ---------------------------------------------------------------------- the straight mesh


def _mesh(settings: LatticeSettings, box: Box, rng: np.random.Generator) -> "nx.Graph":
    """Return the mesh inside the box: nodes with `place`, edges cut by a face to `border` nodes."""
    import networkx as nx  # noqa: PLC0415 - costs every command's start 0.15 s

    places = _places(settings, box, rng)
    pairs = cKDTree(places[1]).query_pairs(1.05 * settings.spacing_um, output_type="ndarray")
    room = 2 * settings.max_radius_um + settings.clearance_um
    inside = box.depth_um(places[0]).min(axis=1) >= room
    graph = nx.Graph()
    for a, b in pairs[np.lexsort((pairs[:, 1], pairs[:, 0]))].tolist():
        if inside[a] and inside[b]:
            graph.add_edge(a, b)
        elif inside[a] or inside[b]:
            kept, lost = (a, b) if inside[a] else (b, a)
            crossing = _crossing(box, places[0][kept], places[0][lost], room)
            if crossing is not None:
                border = len(inside) + graph.number_of_edges()
                graph.add_node(border, place=crossing, cut=True)
                graph.add_edge(kept, border)
    for node in graph:
        if node < len(inside):
            graph.add_node(node, place=places[0][node], cut=False)
    return graph


def _places(
    settings: LatticeSettings, box: Box, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Return the nodes' jittered and exact positions, turned and shifted at random."""
    edge_um = settings.spacing_um / _EDGE
    middle = 0.5 * (box.low_um + box.high_um)
    n = int(np.ceil(0.5 * np.linalg.norm(box.high_um - box.low_um) / edge_um)) + 1
    cells = np.stack(np.meshgrid(*[np.arange(-n, n)] * 3, indexing="ij"), axis=-1).reshape(-1, 1, 3)
    nodes = (cells + _CELL + rng.uniform(size=3)).reshape(-1, 3) * edge_um
    exact = Rotation.random(rng=rng).apply(nodes) + middle
    near = (box.depth_um(exact) > -1.5 * settings.spacing_um).all(axis=1)
    exact = exact[near]
    return exact + rng.normal(size=exact.shape) * settings.jitter * settings.spacing_um, exact


def _crossing(box: Box, start: np.ndarray, toward: np.ndarray, room_um: float) -> np.ndarray | None:
    """Return where the line from a node inside toward another leaves the box, or None.

    None where it would graze the face, run on far beyond the other node, or come near an edge.
    """
    direction = (toward - start) / np.linalg.norm(toward - start)
    far = np.linalg.norm(box.high_um - box.low_um)
    path, face = box.cut(np.array([start, start + far * direction]))
    too_far = np.linalg.norm(path[-1] - start) > 1.5 * np.linalg.norm(toward - start)
    near_edge = np.partition(box.depth_um(path[-1:])[0], 1)[1] < room_um
    if abs(direction[face % 3]) < _STEEPEST_FACE or too_far or near_edge:
        return None
    return np.asarray(path[-1])


def _thinned(mesh: "nx.Graph", settings: LatticeSettings, rng: np.random.Generator) -> "nx.Graph":
    """Leave out a share of the edges, then dead ends inside; keep the largest connected part."""
    import networkx as nx  # noqa: PLC0415 - costs every command's start 0.15 s

    graph = mesh.copy()
    edges = sorted(graph.edges)
    dropped = rng.permutation(len(edges))[: int(settings.missing * len(edges))]
    graph.remove_edges_from([edges[k] for k in dropped])
    dead = _dead_ends(graph)
    while dead:
        graph.remove_nodes_from(dead)
        dead = _dead_ends(graph)
    if not graph:
        return graph
    largest = max(nx.connected_components(graph), key=lambda part: (len(part), -min(part)))
    return graph.subgraph(largest)


def _dead_ends(graph: "nx.Graph") -> list[int]:
    """Return the nodes that lead nowhere: alone, or of degree 1 inside the volume."""
    return [n for n in graph if graph.degree[n] < (1 if graph.nodes[n]["cut"] else 2)]


# ---------------------------------------------------------------------- vessels


@dataclass(frozen=True, slots=True)
class _Chains:
    """Vessels as chains of mesh nodes between nodes of degree 1 or 3."""

    node_um: np.ndarray
    cut: np.ndarray
    ends: np.ndarray
    corners_um: list[np.ndarray]


def _chains(mesh: "nx.Graph") -> _Chains:
    """Join the edges at nodes of degree 2 into one vessel."""
    kept = sorted(node for node in mesh if mesh.degree[node] != 2)
    number = {node: k for k, node in enumerate(kept)}
    place = mesh.nodes(data="place")
    ends, corners = [], []
    for start in kept:
        for neighbour in sorted(mesh[start]):
            chain = [start, neighbour]
            while mesh.degree[chain[-1]] == 2:
                chain.append(next(n for n in mesh[chain[-1]] if n != chain[-2]))
            if (chain[0], chain[1]) <= (chain[-1], chain[-2]):  # each chain is met from both ends
                ends.append((number[chain[0]], number[chain[-1]]))
                corners.append(np.array([place[node] for node in chain]))
    return _Chains(
        node_um=np.array([place[node] for node in kept]).reshape(-1, 3),
        cut=np.array([mesh.nodes[node]["cut"] for node in kept], dtype=bool),
        ends=np.array(ends, dtype=np.int64).reshape(-1, 2),
        corners_um=corners,
    )


def _radii(settings: LatticeSettings, n: int, rng: np.random.Generator) -> np.ndarray:
    """Draw lognormal radii within the limits: by quantile, so that no two are alike."""
    low, high = (
        ndtr(np.log(limit / settings.radius_um) / max(settings.radius_spread, 1e-9))
        for limit in (settings.min_radius_um, settings.max_radius_um)
    )
    drawn = ndtri(rng.uniform(low, high, size=n)) * settings.radius_spread
    return np.clip(
        settings.radius_um * np.exp(drawn), settings.min_radius_um, settings.max_radius_um
    )


def _clear_paths(
    settings: LatticeSettings,
    box: Box,
    chains: _Chains,
    radius: np.ndarray,
    rng: np.random.Generator,
) -> list[np.ndarray]:
    """Return bent paths that keep their clearance, straightening those that do not, or none."""
    swing = settings.bend * rng.normal(size=(len(chains.ends), 2, 2))
    for _ in range(_ROUNDS):
        paths = [
            _bent(corners, s, settings.step_um)
            for corners, s in zip(chains.corners_um, swing, strict=True)
        ]
        graph = _graph(chains, paths, radius, (1, 1, 1), (1.0, 1.0, 1.0))
        clear = segments_keep_clear(
            graph, clearance_um=settings.clearance_um, step_um=settings.step_um
        )
        clear &= np.array([box.depth_um(path[1:-1]).min() > 0 for path in paths], dtype=bool)
        if clear.all():
            return paths
        swing[~clear] *= 0.5
    return []


def _bent(corners_um: np.ndarray, swing: np.ndarray, step_um: float) -> np.ndarray:
    """Round a chain's corners off and swing it sideways, its two ends kept."""
    from scipy.interpolate import BSpline  # noqa: PLC0415 - costs every command's start 0.3 s

    n = len(corners_um)
    degree = min(2, n - 1)
    knots = np.concatenate([np.zeros(degree), np.linspace(0, 1, n - degree + 1), np.ones(degree)])
    fine = BSpline(knots, corners_um, degree)(np.linspace(0, 1, 40 * n))
    chord = corners_um[-1] - corners_um[0]
    if not chord.any():  # a vessel from a node to itself
        chord = fine[len(fine) // 2] - fine[0]
    length = np.linalg.norm(np.diff(fine, axis=0), axis=1).sum()
    side = np.cross(chord, np.eye(3)[int(np.argmin(np.abs(chord)))])
    side /= np.linalg.norm(side)
    up = np.cross(chord / np.linalg.norm(chord), side)
    place = np.linspace(0, 1, len(fine))
    for (one, two), axis in zip(swing, (side, up), strict=True):
        wave = one * np.sin(np.pi * place) + 0.3 * two * np.sin(2 * np.pi * place)
        fine = fine + (length * wave)[:, None] * axis
    return _even(fine, step_um)


def _even(path_um: np.ndarray, step_um: float) -> np.ndarray:
    """Resample a path at nearly equal steps of at most `step_um`, its two ends kept."""
    arc = np.concatenate(([0.0], np.cumsum(np.linalg.norm(np.diff(path_um, axis=0), axis=1))))
    wanted = np.linspace(0, arc[-1], max(3, int(np.ceil(arc[-1] / step_um)) + 1))
    return np.stack([np.interp(wanted, arc, path_um[:, k]) for k in range(3)], axis=1)


def _graph(
    chains: _Chains,
    paths: list[np.ndarray],
    radius: np.ndarray,
    shape: tuple[int, int, int],
    spacing_um: tuple[float, float, float],
) -> CentrelineGraph:
    """Return the vessels as a graph."""
    z, y, x = (n * s for n, s in zip(shape, spacing_um, strict=True))
    kinds = np.where(chains.cut, NODE_KINDS.index("border"), NODE_KINDS.index("junction"))
    return CentrelineGraph.from_polylines(
        chains.node_um, chains.ends, paths,
        [np.full(len(p), r) for p, r in zip(paths, radius, strict=True)],
        node_kind=kinds.astype(np.int8), spacing_um=spacing_um, extent_um=(z, y, x),
    )  # fmt: skip
