"""Elements (segments of one order in series), order tables and the connectivity matrix."""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike

from ..errors import UnusableInputError
from ..quantities import Undefined
from . import _order_kernels as kernels
from .strahler import checked_parent, walking_order

__all__ = [
    "Connectivity", "Elements", "WholeTree", "connectivity", "count_cut", "diameter_class_table",
    "elements", "order_table", "velocity_by_continuity", "whole_tree",
]  # fmt: skip


@dataclass(frozen=True, slots=True)
class Elements:
    """Elements of a tree.

    Parameters
    ----------
    element_of_segment : (m,) int64
        Element of each segment, -1 in order 0.
    order, n_segments : (k,) int64
        Order and number of segments of each element.
    length_um, diameter_um : (k,) float64
        Sum of its segments' lengths, mean of their diameters.
    parent : (k,) int64
        The element that it springs from; -1 at a root.
    """

    element_of_segment: np.ndarray
    order: np.ndarray
    n_segments: np.ndarray
    length_um: np.ndarray
    diameter_um: np.ndarray
    parent: np.ndarray


@dataclass(frozen=True, slots=True)
class Connectivity:
    """The connectivity matrix C(m, n): elements of order m that spring from one of order n.

    Parameters
    ----------
    mean, se : (k, k) float64
        At [m - 1, n - 1]: mean over the elements of order n, and its standard error (NaN for one
        element).
    n_parents : (k,) int64
        Elements of each order.
    """

    mean: np.ndarray
    se: np.ndarray
    n_parents: np.ndarray


@dataclass(frozen=True, slots=True)
class WholeTree:
    """Numbers of elements by order, those extrapolated kept apart from those counted.

    Parameters
    ----------
    intact, cut : (k,) float64
        Counted: seen whole, and cut off somewhere.
    extrapolated : (k,) float64
        Not seen: what the cut elements would have carried.
    total : (k,) float64
        The sum of the three: an extrapolation.
    total_se : (k,) float64
        Standard error of the total from that of the connectivity matrix.
    """

    intact: np.ndarray
    cut: np.ndarray
    extrapolated: np.ndarray
    total: np.ndarray
    total_se: np.ndarray

    def to_frame(self) -> pd.DataFrame:
        """Return one row an order; the columns say which numbers are extrapolated.

        Returns
        -------
        DataFrame
            Orders from 1.
        """
        return pd.DataFrame({
            "order": np.arange(1, len(self.total) + 1), "n_elements_intact": self.intact,
            "n_elements_cut": self.cut, "n_elements_extrapolated": self.extrapolated,
            "n_elements_total_extrapolated": self.total,
            "n_elements_total_extrapolated_se": self.total_se,
        })  # fmt: skip


def elements(
    parent: ArrayLike, order: ArrayLike, length_um: ArrayLike, diameter_um: ArrayLike
) -> Elements:
    """Group the segments of a rooted tree into elements.

    An element's diameter is the mean of its segments', its length their sum (Kassab 1993, Am J
    Physiol 265:H350). Where a segment has several daughters of its own order, its element goes on
    into the widest (the first among equals), and the others spring from it.

    Parameters
    ----------
    parent, order : (m,) array_like of int
        Parent segment (-1 at a root) and order (0: not ordered).
    length_um, diameter_um : (m,) array_like
        Of each segment.

    Returns
    -------
    Elements
        Numbered so that every element comes after the one that it springs from.

    Raises
    ------
    UnusableInputError
        If the parents hold a ring.

    Examples
    --------
    >>> found = elements([-1, 0, 0], [2, 2, 1], [5.0, 6.0, 3.0], [9.0, 7.0, 2.0])
    >>> found.element_of_segment.tolist(), found.diameter_um.tolist()
    ([0, 0, 1], [8.0, 2.0])
    """
    above = checked_parent(parent)
    rank = np.ascontiguousarray(order, dtype=np.int64)
    length, diameter = (np.asarray(v, dtype=np.float64) for v in (length_um, diameter_um))
    walk = walking_order(above)
    same = ((above >= 0) & (rank == rank[above])).astype(np.int64)
    heir, number = np.full(len(above), -1, np.int64), np.full(len(above), -1, np.int64)
    kernels.heirs(above, walk, same, diameter, heir)
    n = kernels.element_ids(above, walk, rank, heir, number)
    member = number >= 0
    count = np.bincount(number[member], minlength=n)
    total = np.bincount(number[member], weights=length[member], minlength=n)
    mean = np.bincount(number[member], weights=diameter[member], minlength=n) / np.maximum(count, 1)
    of_element, spring = np.zeros(n, np.int64), np.full(n, -1, np.int64)
    of_element[number[member]] = rank[member]
    head = np.flatnonzero(member & (above >= 0))
    head = head[number[above[head]] != number[head]]
    spring[number[head]] = number[above[head]]
    return Elements(number, of_element, count, total, mean, spring)


def connectivity(found: Elements) -> Connectivity:
    """Return the connectivity matrix with its standard error over the parents' elements.

    Exact in any rooted tree: N_m = sum over n of C(m, n) N_n, and one more where m is the root's
    order.

    Parameters
    ----------
    found : Elements
        The elements of a tree or forest.

    Returns
    -------
    Connectivity
        Zero columns where an order has no element.

    Examples
    --------
    >>> found = elements([-1, 0, 0], [2, 1, 1], [5.0, 6.0, 3.0], [9.0, 7.0, 2.0])
    >>> connectivity(found).mean.tolist()
    [[0.0, 2.0], [0.0, 0.0]]
    """
    k = len(found.order)
    top = int(found.order.max()) if k else 0
    n_parents = np.bincount(found.order, minlength=top + 1)[1:]
    mean, se = np.zeros((top, top)), np.full((top, top), np.nan)
    springing = found.parent >= 0
    for m in range(1, top + 1):
        mine = found.parent[springing & (found.order == m)]
        springs = np.bincount(mine, minlength=k).astype(np.float64)
        total = np.bincount(found.order, weights=springs, minlength=top + 1)[1:]
        mean[m - 1] = total / np.maximum(n_parents, 1)
        left = (springs - mean[m - 1, found.order - 1]) ** 2
        square = np.bincount(found.order, weights=left, minlength=top + 1)[1:]
        several = n_parents > 1
        variance = square[several] / (n_parents[several] - 1)
        se[m - 1, several] = np.sqrt(variance / n_parents[several])
    return Connectivity(mean, se, n_parents)


def order_table(
    found: Elements, order: ArrayLike, length_um: ArrayLike, diameter_um: ArrayLike
) -> pd.DataFrame:
    """Return one row an order: numbers, diameters, lengths and total cross-section.

    Diameters are those of elements, `length_um` is of segments. SDs are sample SDs, NaN for a
    single member. The cross-section is the sum over elements of pi D**2 / 4.

    Parameters
    ----------
    found : Elements
        The elements of the same segments.
    order : (m,) array_like of int
        Order of each segment, 0 where there is none.
    length_um, diameter_um : (m,) array_like
        Of each segment.

    Returns
    -------
    DataFrame
        Columns of `orders.csv` that need no flow; orders without vessels have no row.
    """
    del diameter_um  # kept so that all tables of segments are called alike
    rank, length = np.asarray(order, dtype=np.int64), np.asarray(length_um, dtype=np.float64)
    own = found.order
    rows = np.unique(rank[rank > 0])
    n_segments = np.bincount(rank, minlength=1)[rows]
    n_elements, wide, wide_sd = _by_order(own, found.diameter_um, rows)
    _, long, long_sd = _by_order(rank, length, rows)
    _, element_long, element_long_sd = _by_order(own, found.length_um, rows)
    area = np.bincount(own, weights=np.pi / 4 * found.diameter_um**2, minlength=1)
    return pd.DataFrame({
        "order": rows, "n_segments": n_segments, "n_elements": n_elements,
        "segments_per_element": n_segments / np.maximum(n_elements, 1),
        "diameter_um_mean": wide, "diameter_um_sd": wide_sd,
        "length_um_mean": long, "length_um_sd": long_sd,
        "element_length_um_mean": element_long, "element_length_um_sd": element_long_sd,
        "cross_section_um2": area[rows] if len(rows) else area[:0],
    })  # fmt: skip


def velocity_by_continuity(cross_section_um2: ArrayLike, flow_um3_per_s: float) -> np.ndarray:
    """Return the mean velocity of each order if the whole flow passes through it once.

    Parameters
    ----------
    cross_section_um2 : (k,) array_like
        Total cross-section of each order.
    flow_um3_per_s : float
        Flow through the root.

    Returns
    -------
    (k,) array
        um/s. Too low for an order that many paths skip.

    Examples
    --------
    >>> velocity_by_continuity([100.0, 50.0], 1000.0).tolist()
    [10.0, 20.0]
    """
    return flow_um3_per_s / np.asarray(cross_section_um2, dtype=np.float64)


def diameter_class_table(
    length_um: ArrayLike, diameter_um: ArrayLike, edges_um: ArrayLike
) -> pd.DataFrame:
    """Count segments by class of diameter: what there is to report where orders have no meaning.

    Parameters
    ----------
    length_um, diameter_um : (m,) array_like
        Of each segment; those without a diameter are left out.
    edges_um : (k,) array_like
        Increasing; a class holds its lower edge.

    Returns
    -------
    DataFrame
        One row a class: edges, number, length and volume; the last class is open.

    Examples
    --------
    >>> diameter_class_table([9.0, 8.0], [5.0, 20.0], [0, 10])["n_segments"].tolist()
    [1, 1]
    """
    edges = np.asarray(edges_um, dtype=np.float64)
    if len(edges) == 0 or (np.diff(edges) <= 0).any():
        msg = f"edges_um: found {edges.tolist()}, expected increasing diameters in um"
        raise UnusableInputError(msg)
    length, diameter = (np.asarray(v, dtype=np.float64) for v in (length_um, diameter_um))
    place = np.searchsorted(edges, np.nan_to_num(diameter, nan=-np.inf), side="right") - 1
    known = place >= 0
    place, length, diameter = place[known], length[known], diameter[known]
    volume = np.pi / 4 * diameter**2 * length
    return pd.DataFrame({
        "diameter_um_from": edges, "diameter_um_to": np.append(edges[1:], np.inf),
        "n_segments": np.bincount(place, minlength=len(edges)),
        "length_um": np.bincount(place, weights=length, minlength=len(edges)),
        "volume_um3": np.bincount(place, weights=volume, minlength=len(edges)),
    })  # fmt: skip


def count_cut(found: Elements, segment_cut: ArrayLike) -> tuple[np.ndarray, np.ndarray]:
    """Count the elements of each order that were seen whole, and those that are cut.

    Parameters
    ----------
    found : Elements
        The elements.
    segment_cut : (m,) array_like of bool
        Segments whose far end the volume's edge cuts.

    Returns
    -------
    intact, cut : (k,) int arrays
        By order from 1.
    """
    cut_elements = np.zeros(len(found.order), dtype=bool)
    number = found.element_of_segment[np.asarray(segment_cut, dtype=bool)]
    cut_elements[number[number >= 0]] = True
    top = int(found.order.max()) if len(found.order) else 0
    cut = np.bincount(found.order[cut_elements], minlength=top + 1)[1:]
    return np.bincount(found.order, minlength=top + 1)[1:] - cut, cut


def whole_tree(matrix: Connectivity, intact: ArrayLike, cut: ArrayLike) -> WholeTree | Undefined:
    """Extrapolate how many elements of each order there were before branches were cut off.

    N'_m = sum over n >= m of C(m, n) (N'_n + N_n,cut), total = intact + cut + N' (Kassab 1993,
    appendix, eq. 10). It takes the matrix of what was seen for that of what was not.

    Parameters
    ----------
    matrix : Connectivity
        Of the elements seen whole.
    intact, cut : (k,) array_like
        Numbers of elements by order.

    Returns
    -------
    WholeTree or Undefined
        Undefined where an order gives rise to one or more of its own order on the average, which
        has no end.

    Examples
    --------
    >>> mean = np.array([[0.0, 3.0], [0.0, 0.0]])
    >>> matrix = Connectivity(mean, np.zeros((2, 2)), np.array([9, 3]))
    >>> whole_tree(matrix, [6, 2], [0, 1]).total.tolist()
    [9.0, 3.0]
    """
    c = np.triu(matrix.mean)
    whole, lost = (np.asarray(v, dtype=np.float64) for v in (intact, cut))
    if (np.diag(c) >= 1).any():
        order = int(np.argmax(np.diag(c) >= 1)) + 1
        return Undefined(
            f"elements of order {order} carry {c[order - 1, order - 1]:.3g} of their own order"
        )
    gain = np.linalg.inv(np.eye(len(c)) - c)
    missing = gain @ (c @ lost)
    # d N' = (I - C)^-1 dC (N' + cut), to first order in the matrix's errors.
    variance = np.triu(np.nan_to_num(matrix.se)) ** 2 @ (missing + lost) ** 2
    return WholeTree(whole, lost, missing, whole + lost + missing, np.sqrt(gain**2 @ variance))


def _by_order(
    order: np.ndarray, value: np.ndarray, rows: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Count, mean and sample SD of a value by order."""
    size = int(rows.max()) + 1 if len(rows) else 1
    count = np.bincount(order, minlength=size)
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.bincount(order, weights=value, minlength=size) / count
        square = np.bincount(order, weights=(value - mean[order]) ** 2, minlength=size)
        sd = np.sqrt(square / np.where(count > 1, count - 1, np.nan))
    return count[rows], mean[rows], sd[rows]
