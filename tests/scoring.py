"""Score a measured vessel graph against the true one; each rule is stated beside its figure.

A voxel is the coarsest axis' edge in tolerances of place, and the finest axis' edge in classes of
radius, which is the stricter reading of both.
"""

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import linear_sum_assignment
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist

from ramulus.network.graph import CentrelineGraph

RADIUS_CLASSES_VOXELS = ((0.0, 1.2), (1.2, 2.0), (2.0, 3.0), (3.0, 5.0), (5.0, np.inf))


@dataclass(frozen=True, slots=True)
class RadiusError:
    """Relative radius errors of one class of true radius (in voxels, low <= r < high)."""

    low_voxels: float
    high_voxels: float
    n: int
    median: float  # signed: the bias
    p90_absolute: float  # 90 % of the points lie within


@dataclass(frozen=True, slots=True)
class Score:
    """How well a measured graph tells the true one."""

    junction_recall: float
    junction_precision: float
    junction_offset_um: float  # median distance of the matched pairs
    centreline_recall: float
    centreline_precision: float
    length_ratio: float  # measured over true
    loops: int
    true_loops: int
    components: int
    true_components: int
    segments: int
    true_segments: int
    ends: int
    true_ends: int
    radius_errors: tuple[RadiusError, ...]
    hindrance_ratio: float = float("nan")  # measured over true; NaN where it was not asked for
    unmatched_true_um: np.ndarray = field(default_factory=lambda: np.zeros((0, 3)), repr=False)
    unmatched_measured_um: np.ndarray = field(default_factory=lambda: np.zeros((0, 3)), repr=False)

    def radius_error(self, low_voxels: float) -> RadiusError:
        """Return the class that starts at `low_voxels`."""
        return next(e for e in self.radius_errors if e.low_voxels == low_voxels)


def score(
    measured: CentrelineGraph,
    truth: CentrelineGraph,
    *,
    hindrance: Callable[[CentrelineGraph], float] | None = None,
) -> Score:
    """Score `measured` against `truth`, whose `spacing_um` gives the voxel.

    Junctions (nodes of degree 3 or more) match one to one, by the assignment of least distance,
    within max(widest true radius at the node, 2 coarsest voxel edges). A stretch of centreline is
    found when the other graph's centreline passes within max(1 coarsest edge, half the true
    radius); recall and precision are shares of length. Radii are compared at measured points that
    lie on a true centreline by that rule, each with the nearest true point's, one point for every
    half finest edge of length, outside true and measured junction zones alike.
    """
    coarse, fine = max(truth.spacing_um), min(truth.spacing_um)
    junctions = _match_junctions(measured, truth, coarse)
    true_line, measured_line = _dense(truth, 0.25 * coarse), _dense(measured, 0.25 * coarse)
    found, _ = _near(true_line, measured_line, np.maximum(coarse, 0.5 * true_line.radius_um))
    real, nearest = _near(measured_line, true_line, None)
    if len(measured_line.place_um) and len(true_line.place_um):
        real = real <= np.maximum(coarse, 0.5 * true_line.radius_um[nearest])
    length = float(measured.segment_length_um().sum()) / float(truth.segment_length_um().sum())
    return Score(
        *junctions[:3],
        centreline_recall=_share(found, true_line),
        centreline_precision=_share(real, measured_line),
        length_ratio=length,
        loops=loops(measured), true_loops=loops(truth),
        components=_components(measured),
        true_components=_components(truth),
        segments=measured.n_segments, true_segments=truth.n_segments,
        ends=int((measured.node_degree() == 1).sum()),
        true_ends=int((truth.node_degree() == 1).sum()),
        radius_errors=_radius_errors(measured, truth, coarse, fine),
        hindrance_ratio=hindrance(measured) / hindrance(truth) if hindrance else float("nan"),
        unmatched_true_um=junctions[3], unmatched_measured_um=junctions[4],
    )  # fmt: skip


def loops(graph: CentrelineGraph) -> int:
    """Return the first Betti number: segments - nodes + components."""
    return graph.n_segments - graph.n_nodes + _components(graph)


# ---------------------------------------------------------------------- junctions


def _match_junctions(
    measured: CentrelineGraph, truth: CentrelineGraph, coarse: float
) -> tuple[float, float, float, np.ndarray, np.ndarray]:
    """Return recall, precision, median offset and the places of unmatched true and measured."""
    true_nodes = np.flatnonzero(truth.node_degree() >= 3)
    true_um = truth.node_position_um[true_nodes]
    measured_um = measured.node_position_um[measured.node_degree() >= 3]
    if not len(true_um) or not len(measured_um):
        recall = 1.0 if not len(true_um) else 0.0
        precision = 1.0 if not len(measured_um) else 0.0
        return recall, precision, float("nan"), true_um, measured_um
    limit = np.maximum(_widest_radius_at_nodes(truth)[true_nodes], 2 * coarse)
    distance = cdist(true_um, measured_um)
    allowed = distance <= limit[:, None]
    # a pair out of reach costs more than all pairs in reach together
    cost = np.where(allowed, distance, 1e3 * (1 + distance[allowed].sum()))
    rows, columns = linear_sum_assignment(cost)
    matched = allowed[rows, columns]
    rows, columns = rows[matched], columns[matched]
    offset = float(np.median(distance[rows, columns])) if len(rows) else float("nan")
    lost = np.delete(true_um, rows, axis=0)
    invented = np.delete(measured_um, columns, axis=0)
    return len(rows) / len(true_um), len(rows) / len(measured_um), offset, lost, invented


def _widest_radius_at_nodes(graph: CentrelineGraph) -> np.ndarray:
    widest = np.zeros(graph.n_nodes)
    np.maximum.at(
        widest, graph.segment_nodes[:, 0], graph.point_radius_um[graph.point_offsets[:-1]]
    )
    np.maximum.at(
        widest, graph.segment_nodes[:, 1], graph.point_radius_um[graph.point_offsets[1:] - 1]
    )
    return widest


# ---------------------------------------------------------------------- centrelines


@dataclass(frozen=True, slots=True)
class _Line:
    """All centrelines as points that each stand for a piece of length."""

    place_um: np.ndarray
    weight_um: np.ndarray
    radius_um: np.ndarray
    in_zone: np.ndarray


def _dense(graph: CentrelineGraph, step_um: float) -> _Line:
    """Cut every step between points into pieces of at most `step_um`; a point in each middle."""
    later = np.ones(graph.n_points, dtype=bool)
    later[graph.point_offsets[:-1]] = False
    b = np.flatnonzero(later)
    a = b - 1
    length = np.linalg.norm(graph.point_position_um[b] - graph.point_position_um[a], axis=1)
    pieces = np.maximum(1, np.ceil(length / step_um)).astype(np.int64)
    source = np.repeat(np.arange(len(a)), pieces)
    first = np.concatenate(([0], np.cumsum(pieces)))[:-1]
    share = ((np.arange(len(source)) - first[source]) + 0.5) / pieces[source]

    def between(values: np.ndarray) -> np.ndarray:
        low, high = values[a][source], values[b][source]
        return low + (high - low) * (share if low.ndim == 1 else share[:, None])

    zone = graph.point_in_zone
    return _Line(
        between(graph.point_position_um), length[source] / pieces[source],
        between(graph.point_radius_um), (zone[a] | zone[b])[source],
    )  # fmt: skip


def _near(line: _Line, other: _Line, limit: np.ndarray | None) -> tuple[np.ndarray, np.ndarray]:
    """Distance to the other line (or whether within a limit), and the nearest point, of each."""
    if not len(other.place_um) or not len(line.place_um):
        return np.zeros(len(line.place_um), dtype=bool), np.zeros(len(line.place_um), np.int64)
    distance, nearest = cKDTree(other.place_um).query(line.place_um)
    return (distance if limit is None else distance <= limit), nearest


def _share(found: np.ndarray, line: _Line) -> float:
    total = line.weight_um.sum()
    return float((line.weight_um * found).sum() / total) if total > 0 else 1.0


def _components(graph: CentrelineGraph) -> int:
    n = graph.n_nodes
    if not n:
        return 0
    a, b = graph.segment_nodes.T
    return int(connected_components(coo_array((np.ones(len(a)), (a, b)), shape=(n, n)))[0])


# ---------------------------------------------------------------------- radii


def _radius_errors(
    measured: CentrelineGraph, truth: CentrelineGraph, coarse: float, fine: float
) -> tuple[RadiusError, ...]:
    """Relative errors of the measured radii, by class of true radius."""
    line, true_line = _dense(measured, 0.5 * fine), _dense(truth, 0.25 * fine)
    error, size = np.zeros(0), np.zeros(0)
    if len(line.place_um):
        distance, nearest = cKDTree(true_line.place_um).query(line.place_um)
        true_radius = true_line.radius_um[nearest]
        used = (distance <= np.maximum(coarse, 0.5 * true_radius)) & np.isfinite(line.radius_um)
        used &= ~line.in_zone & ~_in_true_zone(line.place_um, truth)
        error = line.radius_um[used] / true_radius[used] - 1
        size = true_radius[used] / fine
    classes = []
    for low, high in RADIUS_CLASSES_VOXELS:
        values = error[(size >= low) & (size < high)]
        classes.append(
            RadiusError(
                low, high, len(values),
                float(np.median(values)) if len(values) else float("nan"),
                float(np.quantile(np.abs(values), 0.9)) if len(values) else float("nan"),
            )
        )  # fmt: skip
    return tuple(classes)


def _in_true_zone(place_um: np.ndarray, truth: CentrelineGraph) -> np.ndarray:
    """Whether a place lies within the widest lumen at a true junction: it has no single radius."""
    nodes = np.flatnonzero(truth.node_degree() >= 3)
    if not len(nodes):
        return np.zeros(len(place_um), dtype=bool)
    reach = _widest_radius_at_nodes(truth)[nodes]
    distance, which = cKDTree(truth.node_position_um[nodes]).query(place_um)
    return distance <= reach[which]
