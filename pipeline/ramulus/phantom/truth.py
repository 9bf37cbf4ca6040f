"""The truth of a phantom: its graph with exact hindrance and loops, written and read as JSON.

The hindrance is computed here on its own, so that it can check the flow layer: exact integrals over
cones, then one sparse solve.
"""

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import spsolve

from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph

__all__ = [
    "Truth", "inlet_of", "network_hindrance_per_um3", "outlets_of", "read_truth", "truth_of",
    "write_truth",
]  # fmt: skip

_FORMAT = "ramulus phantom truth 1"
_DECIMALS = 6  # of positions and radii in um, in the file


@dataclass(frozen=True, slots=True)
class Truth:
    """What is known of a phantom.

    Parameters
    ----------
    graph : CentrelineGraph
        Nodes, segments, centrelines, radii.
    inlet : int
        The node at which blood enters; -1 if no vessel is cut by the volume's edge.
    outlets : (k,) int64
        The nodes at which it leaves.
    loops : int
        Independent loops: segments - nodes + components.
    hindrance_per_um3 : float
        From the inlet to all outlets at one pressure; NaN without an inlet or outlet.
    made_with : dict
        Settings and seed that made the phantom, as JSON has them.
    """

    graph: CentrelineGraph
    inlet: int
    outlets: np.ndarray
    loops: int
    hindrance_per_um3: float
    made_with: dict[str, Any]


def truth_of(graph: CentrelineGraph, *, made_with: dict[str, Any] | None = None) -> Truth:
    """Return the truth of a drawn graph.

    Parameters
    ----------
    graph : CentrelineGraph
        Vessels with radii.
    made_with : dict, optional
        Settings and seed, for the record.

    Returns
    -------
    Truth
        The graph with its inlet, outlets, loops and hindrance.

    Examples
    --------
    >>> from ramulus.phantom.tubes import straight_tube
    >>> tube = straight_tube(radius_um=5, direction=(0, 0, 1), shape=(20, 20, 1000),
    ...                      spacing_um=(1, 1, 1))
    >>> round(truth_of(tube).hindrance_per_um3, 4)  # 8 L / (pi r^4)
    4.0744
    """
    inlet = inlet_of(graph)
    outlets = outlets_of(graph, inlet)
    hindrance = float("nan")
    if inlet >= 0 and len(outlets):
        hindrance = network_hindrance_per_um3(graph, inlet, outlets)
    return Truth(graph, inlet, outlets, _loops(graph), hindrance, made_with or {})


def inlet_of(graph: CentrelineGraph) -> int:
    """Return the widest vessel end that the volume's edge cuts.

    Parameters
    ----------
    graph : CentrelineGraph
        Vessels with radii.

    Returns
    -------
    int
        The node, or -1 if the edge cuts none.
    """
    end_node, end_radius = _ends(graph)
    cut = graph.node_kind[end_node] == NODE_KINDS.index("border")
    if not cut.any():
        return -1
    return int(end_node[cut][np.argmax(end_radius[cut])])


def outlets_of(graph: CentrelineGraph, inlet: int) -> np.ndarray:
    """Return the outlets: every free end but the inlet in a tree, the cut ends but it in a mesh.

    Parameters
    ----------
    graph : CentrelineGraph
        The network; with a loop it counts as a mesh, whose blind ends carry no flow.
    inlet : int
        The inlet's node, or -1.

    Returns
    -------
    (k,) int64 array
        Nodes.
    """
    degree_one = graph.node_degree() == 1
    if _loops(graph) > 0:
        degree_one &= graph.node_kind == NODE_KINDS.index("border")
    if inlet >= 0:
        degree_one[inlet] = False
    return np.flatnonzero(degree_one)


def network_hindrance_per_um3(graph: CentrelineGraph, inlet: int, outlets: np.ndarray) -> float:
    """Return the hindrance from the inlet to the outlets, which are held at one pressure.

    Parameters
    ----------
    graph : CentrelineGraph
        Vessels with radii.
    inlet : int
        A node.
    outlets : (k,) array_like
        Nodes, the inlet not among them.

    Returns
    -------
    float
        Hindrance in um**-3.

    Raises
    ------
    UnusableInputError
        If no path joins the inlet to an outlet.
    """
    a, b = graph.segment_nodes.T
    conductance = 1 / _segment_hindrance_per_um3(graph)
    n = graph.n_nodes
    part = connected_components(coo_array((np.ones(len(a)), (a, b)), shape=(n, n)))[1]
    if not (part[outlets] == part[inlet]).any():
        msg = f"outlets: found none that is joined to the inlet {inlet}, expected at least one"
        raise UnusableInputError(msg)
    free = part == part[inlet]
    free[outlets] = False
    row = np.concatenate([a, b, a, b])
    column = np.concatenate([a, b, b, a])
    value = np.concatenate([conductance, conductance, -conductance, -conductance])
    matrix = coo_array((value, (row, column)), shape=(n, n)).tocsr()[free][:, free].tocsc()
    inflow = (np.flatnonzero(free) == inlet).astype(np.float64)
    pressure = np.atleast_1d(spsolve(matrix, inflow))
    return float(pressure[np.flatnonzero(free) == inlet][0])


def write_truth(path: str | Path, truth: Truth) -> None:
    """Write a truth as JSON; positions and radii are rounded to 1e-6 um.

    Parameters
    ----------
    path : str or Path
        The file.
    truth : Truth
        What to write.
    """
    graph = truth.graph
    nodes = [
        {"node_id": k, "kind": str(kind), "position_um": _rounded(place)}
        for k, (kind, place) in enumerate(
            zip(graph.node_kind_names(), graph.node_position_um, strict=True)
        )
    ]
    segments = []
    length, radius = graph.segment_length_um(), graph.segment_radius_um()
    for k, (a, b) in enumerate(graph.segment_nodes.tolist()):
        points = graph.points_of(k)
        segments.append(
            {
                "segment_id": k, "node_a": a, "node_b": b, "length_um": round(float(length[k]), 6),
                "radius_um": round(float(radius[k]), 6),
                "points_um": [_rounded(p) for p in graph.point_position_um[points]],
                "point_radius_um": _rounded(graph.point_radius_um[points]),
            }
        )  # fmt: skip
    known = np.isfinite(truth.hindrance_per_um3)
    record = {
        "format": _FORMAT, "spacing_um": list(graph.spacing_um), "extent_um": list(graph.extent_um),
        "inlet": truth.inlet, "outlets": truth.outlets.tolist(), "loops": truth.loops,
        "network_hindrance_per_um3": truth.hindrance_per_um3 if known else None,
        "total_length_um": round(float(length.sum()), 6), "made_with": truth.made_with,
        "nodes": nodes, "segments": segments,
    }  # fmt: skip
    text = json.dumps(record, ensure_ascii=False, separators=(",", ":"))
    # one node or segment a line: small, and readable beside a difference
    text = text.replace('{"node_id"', '\n{"node_id"').replace('{"segment_id"', '\n{"segment_id"')
    Path(path).write_text(text + "\n", encoding="utf-8")


def read_truth(path: str | Path) -> Truth:
    """Read what `write_truth` wrote.

    Parameters
    ----------
    path : str or Path
        The file.

    Returns
    -------
    Truth
        What it holds.

    Raises
    ------
    UnusableInputError
        If the file is not such a record.
    """
    try:
        record = json.loads(Path(path).read_text(encoding="utf-8"))
        found = record["format"]
    except (OSError, ValueError, KeyError, TypeError) as error:
        msg = f"{path}: not a phantom's truth ({error}); give the .truth.json beside the phantom"
        raise UnusableInputError(msg) from error
    if found != _FORMAT:
        msg = f"{path}: found format {found!r}, expected {_FORMAT!r}"
        raise UnusableInputError(msg)
    nodes, segments = record["nodes"], record["segments"]
    graph = CentrelineGraph.from_polylines(
        [n["position_um"] for n in nodes], [[s["node_a"], s["node_b"]] for s in segments],
        [s["points_um"] for s in segments], [s["point_radius_um"] for s in segments],
        node_kind=np.array([NODE_KINDS.index(n["kind"]) for n in nodes], dtype=np.int8),
        spacing_um=tuple(record["spacing_um"]), extent_um=tuple(record["extent_um"]),
    )  # fmt: skip
    hindrance = record["network_hindrance_per_um3"]
    return Truth(
        graph, record["inlet"], np.array(record["outlets"], dtype=np.int64), record["loops"],
        float("nan") if hindrance is None else hindrance, record["made_with"],
    )  # fmt: skip


def _ends(graph: CentrelineGraph) -> tuple[np.ndarray, np.ndarray]:
    """Return the nodes of degree 1 with the radius of their vessel there."""
    node = graph.segment_nodes.ravel()
    radius = np.stack(
        [
            graph.point_radius_um[graph.point_offsets[:-1]],
            graph.point_radius_um[graph.point_offsets[1:] - 1],
        ],
        axis=1,
    ).ravel()
    alone = graph.node_degree()[node] == 1
    return node[alone], radius[alone]


def _loops(graph: CentrelineGraph) -> int:
    """Return the first Betti number."""
    n, (a, b) = graph.n_nodes, graph.segment_nodes.T
    parts = connected_components(coo_array((np.ones(len(a)), (a, b)), shape=(n, n)))[0]
    return int(graph.n_segments - n + parts)


def _segment_hindrance_per_um3(graph: CentrelineGraph) -> np.ndarray:
    """(m,) integral of (8 / pi) ds / r^4, exact for radii that run linearly between points."""
    step = graph.step_um()
    start, end = np.roll(graph.point_radius_um, 1), graph.point_radius_um
    cones = step * (start**2 + start * end + end**2) / (3 * start**3 * end**3)
    return 8 / np.pi * graph.segment_sum(cones)


def _rounded(values: np.ndarray) -> list[float]:
    return [round(float(v), _DECIMALS) for v in values]
