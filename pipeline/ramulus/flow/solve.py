"""Pressures and flows of the network, and the resistance between inlet and outlets."""

from dataclasses import dataclass

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

    Flow is positive from `segment_nodes[:, 0]` to `[:, 1]`. Nodes that no path joins to an inlet and
    an outlet have NaN pressure, their segments NaN flow.
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
    or no outlet carry no flow and are reported.

    Parameters
    ----------
    viscosity_mpa_s : (m,) array
        Viscosity in each segment.
    hindrance_per_um3 : (m,) array, optional
        In place of the integral over the graph's radii.

    Raises
    ------
    UnusableInputError
        If no inlet is joined to an outlet, or a hindrance is not positive.
    """
    hindrance = segment_hindrance_per_um3(graph) if hindrance_per_um3 is None else hindrance_per_um3
    resistance = hindrance * 1e18 * viscosity_mpa_s * 1e-3
    known = np.isfinite(resistance)
    if (resistance[known] < 0).any():
        msg = "hindrance_per_um3: found a value below 0, expected hindrances > 0"
        raise UnusableInputError(msg)
    head = 1.0
    pressure, flow, error = _two_terminal(graph, conditions.inlets, conditions.outlets, resistance, known, head)
    total = _net_outflow(graph, flow, conditions.inlets)
    if not total > 0:
        msg = "flow: no path joins the inlet to an outlet; choose root.* or boundary.outlets so that one does"
        raise UnusableInputError(msg)
    drop = conditions.inlet_pressure_pa - conditions.outlet_pressure_pa
    if conditions.inlet_flow_um3_per_s is not None:
        drop = conditions.inlet_flow_um3_per_s * 1e-18 * head / total
    # Flows came out in m3/s for a head of 1 Pa; um3/s from here on.
    with np.errstate(invalid="ignore"):
        across = pressure[graph.segment_nodes[:, 0]] - pressure[graph.segment_nodes[:, 1]]
        share = np.where(flow == 0, 0.0, flow * across / (total * head))
    return FlowSolution(
        pressure_pa=conditions.outlet_pressure_pa + pressure * drop,
        flow_um3_per_s=flow * drop * 1e18, viscosity_mpa_s=np.asarray(viscosity_mpa_s, dtype=np.float64),
        hindrance_per_um3=hindrance, resistance_pa_s_per_m3=resistance, resistance_share=share,
        inlet_flow_um3_per_s=float(total * drop * 1e18),
        network_resistance_pa_s_per_m3=float(head / total), mass_balance_error=error,
        unreached_segments=int(np.isnan(flow).sum()),
    )  # fmt: skip


def network_hindrance_per_um3(graph: CentrelineGraph, conditions: BoundaryConditions) -> float:
    """Return the purely geometric hindrance from the inlets to all outlets at one pressure."""
    unit = np.full(graph.n_segments, 1.0)
    return solve(graph, conditions, viscosity_mpa_s=unit).network_resistance_pa_s_per_m3 / 1e15


def _net_outflow(graph: CentrelineGraph, flow: np.ndarray, nodes: np.ndarray) -> float:
    """Flow that leaves the given nodes into the network."""
    marked = np.zeros(graph.n_nodes, bool)
    marked[nodes] = True
    known = np.nan_to_num(flow)
    a, b = graph.segment_nodes.T
    return float(np.sum(known * marked[a]) - np.sum(known * marked[b]))


def _two_terminal(graph, inlets, outlets, resistance, known, head):  # noqa: ANN001, ANN202
    """Pressures (head at the inlets, 0 at the outlets) and flows in the unit of head / resistance."""
    n = graph.n_nodes
    a, b = graph.segment_nodes.T
    real = known & (a != b)
    # Segments without resistance make one node of two.
    zero = real & (resistance == 0)
    _, merged = csgraph.connected_components(
        sparse.coo_array((np.ones(zero.sum()), (a[zero], b[zero])), (n, n)), directed=False
    )
    size = int(merged.max()) + 1
    wired = real & (merged[a] != merged[b])
    ma, mb = merged[a[wired]], merged[b[wired]]
    g = 1.0 / resistance[wired]
    _, part = csgraph.connected_components(sparse.coo_array((g, (ma, mb)), (size, size)), directed=False)
    source, sink = np.zeros(size, bool), np.zeros(size, bool)
    source[merged[inlets]], sink[merged[outlets]] = True, True
    has = [np.bincount(part, weights=mark, minlength=part.max() + 1) > 0 for mark in (source, sink)]
    live = (has[0] & has[1])[part]
    pressure = np.full(size, np.nan)
    pressure[source & live], pressure[sink & live] = head, 0.0
    unknown = live & ~source & ~sink
    if unknown.any():
        pressure[unknown] = _interior(size, ma, mb, g, pressure, unknown)
    flow = np.full(graph.n_segments, np.nan)
    flow[wired] = g * (pressure[ma] - pressure[mb])
    flow[known & (a == b) & live[merged[a]]] = 0.0
    node_pressure = pressure[merged]
    net = np.bincount(ma, weights=np.nan_to_num(flow[wired]), minlength=size) - np.bincount(
        mb, weights=np.nan_to_num(flow[wired]), minlength=size
    )
    through = float(net[source & live].sum())
    error = float(np.abs(net[unknown]).max()) / through if unknown.any() and through > 0 else 0.0
    return node_pressure, flow, error


def _interior(size, a, b, g, pressure, unknown):  # noqa: ANN001, ANN202
    number = np.full(size, -1)
    number[unknown] = np.arange(unknown.sum())
    n = int(unknown.sum())
    ia, ib = number[a], number[b]
    diagonal = np.zeros(n)
    for i in (ia, ib):
        diagonal += np.bincount(i[i >= 0], weights=g[i >= 0], minlength=n)
    right = np.zeros(n)
    for i, other in ((ia, b), (ib, a)):
        edge = (i >= 0) & ~unknown[other] & np.isfinite(pressure[other])
        right += np.bincount(i[edge], weights=(g * np.nan_to_num(pressure[other]))[edge], minlength=n)
    inner = (ia >= 0) & (ib >= 0)
    # Scaling by the diagonal takes the factor r**4 between wide and thin vessels out of the matrix.
    scale = 1.0 / np.sqrt(diagonal)
    value = -g[inner] * scale[ia[inner]] * scale[ib[inner]]
    rows = np.concatenate([ia[inner], ib[inner], np.arange(n)])
    columns = np.concatenate([ib[inner], ia[inner], np.arange(n)])
    matrix = sparse.coo_array((np.concatenate([value, value, np.ones(n)]), (rows, columns)), (n, n)).tocsc()
    matrix.indices, matrix.indptr = matrix.indices.astype(np.int32), matrix.indptr.astype(np.int32)
    scaled = right * scale
    if n <= _DIRECT_UP_TO:
        factor = linalg.splu(matrix, permc_spec="MMD_AT_PLUS_A", options={"SymmetricMode": True})
        x = factor.solve(scaled)
        for _ in range(2):
            x += factor.solve(scaled - matrix @ x)
        return x * scale
    import pyamg  # noqa: PLC0415 - heavy to import, and only for very large networks

    x = pyamg.ruge_stuben_solver(matrix.tocsr()).solve(scaled, tol=1e-12, accel="cg", maxiter=200)
    return x * scale
