"""Pressures and flows of the network, and the resistance between inlet and outlets."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy import sparse
from scipy.sparse import csgraph, linalg

from ..errors import UnusableInputError
from ..network.graph import CentrelineGraph
from .boundary import BoundaryConditions
from .hindrance import segment_hindrance_per_um3

__all__ = ["FlowSolution", "network_hindrance_per_um3", "solve"]

_DIRECT_UP_TO = 200_000


@dataclass(frozen=True, slots=True)
class FlowSolution:
    """Pressures, flows and what follows from them.

    Flow is positive from `segment_nodes[:, 0]` to `[:, 1]`. Nodes that no path joins to an inlet
    and an outlet have NaN pressure, their segments NaN flow.
    """

    pressure_pa: np.ndarray
    flow_um3_per_s: np.ndarray
    viscosity_mpa_s: np.ndarray
    hindrance_per_um3: np.ndarray
    resistance_pa_s_per_m3: np.ndarray
    resistance_share: np.ndarray
    inlet_flow_um3_per_s: float
    network_resistance_pa_s_per_m3: float
    mass_balance_error: float
    unreached_segments: int


def solve(
    graph: CentrelineGraph, conditions: BoundaryConditions, *, viscosity_mpa_s: np.ndarray,
    hindrance_per_um3: np.ndarray | None = None,
) -> FlowSolution:  # fmt: skip
    """Solve Kirchhoff's balance with Hagen-Poiseuille conductances.

    All inlets stand at one pressure and all outlets at another, so the network is a resistance
    between two terminals; a given inlet flow scales the pressures. Components that hold no inlet
    or no outlet carry no flow and are reported. A segment without length makes one node of two: an
    outlet that it joins to an inlet is none.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.
    conditions : BoundaryConditions
        Where blood enters and leaves.
    viscosity_mpa_s : (m,) array
        Viscosity in each segment.
    hindrance_per_um3 : (m,) array, optional
        In place of the integral over the graph's radii; NaN takes a segment out.

    Returns
    -------
    FlowSolution
        Per node and per segment.

    Raises
    ------
    UnusableInputError
        If no inlet is joined to an outlet, or a hindrance is below 0.

    Examples
    --------
    Two alike in series, 1 per um3 and 1 mPa s each:

    >>> line = [[0, 0, 0], [0, 0, 9], [0, 0, 18]]
    >>> graph = CentrelineGraph.from_polylines(line, [[0, 1], [1, 2]], [line[:2], line[1:]])
    >>> held = BoundaryConditions(np.array([0]), np.array([2]), 300.0, 100.0, None, "given", "")
    >>> one = np.ones(2)
    >>> solve(graph, held, viscosity_mpa_s=one, hindrance_per_um3=one).pressure_pa.tolist()
    [300.0, 200.0, 100.0]
    """
    hindrance = segment_hindrance_per_um3(graph) if hindrance_per_um3 is None else hindrance_per_um3
    resistance = hindrance * 1e18 * viscosity_mpa_s * 1e-3
    if (resistance < 0).any():
        msg = f"hindrance_per_um3: found {np.nanmin(hindrance):.4g}, expected hindrances >= 0"
        raise UnusableInputError(msg)
    pressure, flow, total, error = _two_terminal(graph, conditions, resistance)
    if not total > 0:
        msg = (
            "flow: no path joins the inlet to an outlet;"
            " choose root.* or boundary.outlets so that one does"
        )
        raise UnusableInputError(msg)
    drop = conditions.inlet_pressure_pa - conditions.outlet_pressure_pa
    if conditions.inlet_flow_um3_per_s is not None:
        drop = conditions.inlet_flow_um3_per_s * 1e-18 / total
    # Flows came out in m3/s for a head of 1 Pa; um3/s from here on.
    with np.errstate(invalid="ignore"):
        across = pressure[graph.segment_nodes[:, 0]] - pressure[graph.segment_nodes[:, 1]]
        share = np.where(flow == 0, 0.0, flow * across / total)
    return FlowSolution(
        pressure_pa=conditions.outlet_pressure_pa + pressure * drop,
        flow_um3_per_s=flow * drop * 1e18,
        viscosity_mpa_s=np.asarray(viscosity_mpa_s, dtype=np.float64),
        hindrance_per_um3=hindrance, resistance_pa_s_per_m3=resistance, resistance_share=share,
        inlet_flow_um3_per_s=float(total * drop * 1e18),
        network_resistance_pa_s_per_m3=float(1 / total), mass_balance_error=error,
        unreached_segments=int(np.isnan(flow).sum()),
    )  # fmt: skip


def network_hindrance_per_um3(graph: CentrelineGraph, conditions: BoundaryConditions) -> float:
    """Return the purely geometric hindrance from the inlets to all outlets at one pressure."""
    unit = np.full(graph.n_segments, 1.0)
    return solve(graph, conditions, viscosity_mpa_s=unit).network_resistance_pa_s_per_m3 / 1e15


def _two_terminal(
    graph: CentrelineGraph, conditions: BoundaryConditions, resistance: np.ndarray
) -> tuple[np.ndarray, np.ndarray, float, float]:
    """Return pressures (1 at the inlets, 0 at the outlets), flows, their sum and its error."""
    n = graph.n_nodes
    a, b = graph.segment_nodes.T
    known = np.isfinite(resistance)
    without = known & (resistance == 0) & (a != b)
    # Segments without resistance make one node of two.
    merged, size = _parts(a[without], b[without], n)
    wired = known & (merged[a] != merged[b])
    ma, mb = merged[a[wired]], merged[b[wired]]
    g = 1.0 / resistance[wired]
    source, sink = np.zeros(size, dtype=bool), np.zeros(size, dtype=bool)
    sink[merged[conditions.outlets]] = True
    source[merged[conditions.inlets]] = True
    sink &= ~source
    live = _live(ma, mb, source, sink)
    fixed = np.where(source & live, 1.0, 0.0)
    unknown = live & ~source & ~sink
    pressure, wired_flow = _balanced(ma, mb, g, fixed, unknown, np.zeros(size))
    pressure[~live] = np.nan
    flow = np.full(graph.n_segments, np.nan)
    flow[wired] = np.where(live[ma], wired_flow, np.nan)
    flow[known & (a == b) & live[merged[a]]] = 0.0
    net = _net(ma, mb, wired_flow, size)
    through = float(net[source & live].sum())
    error = float(np.abs(net[unknown]).max()) / through if unknown.any() and through > 0 else 0.0
    inside = without & live[merged[a]]
    if inside.any():
        terminals = np.concatenate([conditions.inlets, conditions.outlets])
        left = _net(a[wired], b[wired], np.nan_to_num(flow[wired]), n)
        flow[inside] = _within(a[inside], b[inside], left, terminals, merged)
    return pressure[merged], flow, through, error


def _parts(a: np.ndarray, b: np.ndarray, n: int) -> tuple[np.ndarray, int]:
    """Return the number of the part that each of n nodes lies in, and how many there are."""
    joined = sparse.coo_array((np.ones(len(a)), (a, b)), (n, n))
    count, part = csgraph.connected_components(joined, directed=False)
    return part, int(count)


def _live(a: np.ndarray, b: np.ndarray, source: np.ndarray, sink: np.ndarray) -> np.ndarray:
    """Tell which nodes lie in a part with an inlet and an outlet."""
    part, count = _parts(a, b, len(source))
    enters, leaves = (np.bincount(part[mark], minlength=count) > 0 for mark in (source, sink))
    return np.asarray((enters & leaves)[part])


def _net(a: np.ndarray, b: np.ndarray, flow: np.ndarray, n: int) -> np.ndarray:
    """Flow that leaves each node."""
    leaving = np.bincount(a, weights=flow, minlength=n) - np.bincount(b, weights=flow, minlength=n)
    return np.asarray(leaving)


def _within(
    a: np.ndarray, b: np.ndarray, net: np.ndarray, terminals: np.ndarray, merged: np.ndarray
) -> np.ndarray:
    """Flows in segments without resistance, as the limit of small equal ones.

    They bring what leaves the nodes at their ends; a terminal takes what is over, as does the first
    node of a group without one, where nothing is.
    """
    nodes, ends = np.unique(np.concatenate([a, b]), return_inverse=True)
    ia, ib = ends.reshape(2, -1)
    held = np.isin(nodes, terminals)
    group = merged[nodes]
    has = np.isin(group, group[held])
    _, first = np.unique(np.where(has, -1, group), return_index=True)
    held[first[~has[first]]] = True
    at_rest = np.zeros(len(nodes))
    return _balanced(ia, ib, np.ones(len(ia)), at_rest, ~held, net[nodes])[1]


def _balanced(
    a: np.ndarray, b: np.ndarray, g: np.ndarray, fixed: np.ndarray, unknown: np.ndarray,
    leaving: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Pressures and flows that balance at the unknown nodes, `leaving` being given away there.

    What a solve leaves over is solved for again and added to the flows themselves: the difference
    of two pressures cannot hold the flow through a short wide vessel between thin ones.
    """
    pressure, flow = fixed.copy(), g * (fixed[a] - fixed[b])
    if not unknown.any():
        return pressure, flow
    answer = _laplacian(a, b, g, unknown)
    for _ in range(3):
        change = np.zeros(len(fixed))
        change[unknown] = answer(-(leaving + _net(a, b, flow, len(fixed)))[unknown])
        pressure += change
        flow += g * (change[a] - change[b])
    return pressure, flow


def _laplacian(
    a: np.ndarray, b: np.ndarray, g: np.ndarray, unknown: np.ndarray
) -> Callable[[np.ndarray], np.ndarray]:
    """Return the function that solves the network's Laplacian at the unknown nodes."""
    number = np.full(len(unknown), -1)
    number[unknown] = np.arange(unknown.sum())
    n = int(unknown.sum())
    ia, ib = number[a], number[b]
    diagonal = sum(np.bincount(i[i >= 0], weights=g[i >= 0], minlength=n) for i in (ia, ib))
    inner = (ia >= 0) & (ib >= 0)
    # Scaling by the diagonal takes the factor r**4 between wide and thin vessels out of the matrix.
    scale = 1.0 / np.sqrt(diagonal)
    value = -g[inner] * scale[ia[inner]] * scale[ib[inner]]
    rows = np.concatenate([ia[inner], ib[inner], np.arange(n)])
    columns = np.concatenate([ib[inner], ia[inner], np.arange(n)])
    entries = np.concatenate([value, value, np.ones(n)])
    matrix = sparse.coo_array((entries, (rows, columns)), (n, n)).tocsc()
    matrix.indices, matrix.indptr = matrix.indices.astype(np.int32), matrix.indptr.astype(np.int32)
    solver = _solver(matrix, scale)
    return lambda right: np.asarray(solver(right * scale) * scale)


def _solver(matrix: sparse.csc_array, scale: np.ndarray) -> Callable[[np.ndarray], Any]:
    n = matrix.shape[0]
    # Factors of a tree take no more room than the tree, whatever its size; those of a mesh fill up.
    if n <= _DIRECT_UP_TO or (matrix.nnz - n) // 2 < 1.05 * n:
        # The matrix is positive definite: pivots off the diagonal would only fill it up.
        factor = linalg.splu(
            matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0,
            options={"SymmetricMode": True},
        )  # fmt: skip
        return factor.solve
    import pyamg  # noqa: PLC0415 - heavy to import, and only for very large networks

    # Even pressures are what plain smoothing leaves over; in scaled unknowns they are 1 / scale.
    levels = pyamg.smoothed_aggregation_solver(
        matrix.tocsr(), B=1.0 / scale[:, None], strength=("symmetric", {"theta": 0.08}),
        smooth=("jacobi", {"weighting": "local"}),  # others start from random numbers
    )  # fmt: skip
    return lambda right: levels.solve(right, tol=1e-5, accel="cg", maxiter=300)
