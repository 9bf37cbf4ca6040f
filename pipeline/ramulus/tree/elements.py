"""Elements (segments of one order in series), order tables and the connectivity matrix."""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from . import _order_kernels as kernels
from .strahler import walking_order

__all__ = ["Connectivity", "Elements", "connectivity", "elements", "order_table", "whole_tree_counts"]


@dataclass(frozen=True, slots=True)
class Elements:
    """Elements of a tree: per segment its element (-1 in order 0); per element order, size, parent."""

    element_of_segment: np.ndarray
    order: np.ndarray
    n_segments: np.ndarray
    length_um: np.ndarray
    diameter_um: np.ndarray
    parent: np.ndarray


@dataclass(frozen=True, slots=True)
class Connectivity:
    """C(m, n): elements of order m that spring from one element of order n; index [m - 1, n - 1]."""

    mean: np.ndarray
    se: np.ndarray
    n_parents: np.ndarray


def elements(parent: np.ndarray, order: np.ndarray, length_um: np.ndarray, diameter_um: np.ndarray) -> Elements:
    """Group the segments of a rooted tree into elements.

    An element's diameter is the mean of its segments', its length their sum (Kassab 1993). Where a
    parent has two daughters of its own order, the first in the list goes on with its element.

    Parameters
    ----------
    parent, order : (m,) int arrays
        Parent segment (-1 at a root) and order (0: not ordered).
    """
    parent = np.ascontiguousarray(parent, dtype=np.int64)
    order = np.ascontiguousarray(order, dtype=np.int64)
    walk = walking_order(parent)
    number = np.full(len(parent), -1, np.int64)
    n = kernels.element_ids(parent, walk, order, number)
    member = number >= 0
    count = np.bincount(number[member], minlength=n)
    length = np.bincount(number[member], weights=np.asarray(length_um)[member], minlength=n)
    diameter = np.bincount(number[member], weights=np.asarray(diameter_um)[member], minlength=n)
    of_element = np.zeros(n, np.int64)
    of_element[number[member]] = order[member]
    spring = np.full(n, -1, np.int64)
    head = member & (parent >= 0)
    head &= np.where(parent >= 0, number[parent] != number, False)
    spring[number[head]] = number[parent[head]]
    return Elements(number, of_element, count, length, diameter / np.maximum(count, 1), spring)


def connectivity(found: Elements) -> Connectivity:
    """Return the connectivity matrix with the standard error over the parents' elements."""
    top = int(found.order.max()) if len(found.order) else 0
    mean, se = np.zeros((top, top)), np.zeros((top, top))
    n_parents = np.bincount(found.order, minlength=top + 1)[1:]
    child = found.parent >= 0
    for m in range(1, top + 1):
        of_order = child & (found.order == m)
        springs = np.bincount(found.parent[of_order], minlength=len(found.order))
        for n in range(1, top + 1):
            mine = springs[found.order == n]
            if len(mine):
                mean[m - 1, n - 1] = mine.mean()
                se[m - 1, n - 1] = mine.std(ddof=1) / np.sqrt(len(mine)) if len(mine) > 1 else np.nan
    return Connectivity(mean, se, n_parents)


def order_table(found: Elements, order: np.ndarray, length_um: np.ndarray, diameter_um: np.ndarray) -> pd.DataFrame:
    """Return one row an order: numbers, diameters, lengths and total cross-section.

    SDs are sample SDs, empty for a single member. The cross-section is the sum over elements of
    pi D**2 / 4.
    """
    rows = []
    length_um, diameter_um = np.asarray(length_um), np.asarray(diameter_um)
    for k in range(1, (int(order.max()) if len(order) else 0) + 1):
        mine, own = order == k, found.order == k
        if not mine.any():
            continue
        rows.append({
            "order": k, "n_segments": int(mine.sum()), "n_elements": int(own.sum()),
            "segments_per_element": mine.sum() / max(own.sum(), 1),
            "diameter_um_mean": float(found.diameter_um[own].mean()), "diameter_um_sd": _sd(found.diameter_um[own]),
            "length_um_mean": float(length_um[mine].mean()), "length_um_sd": _sd(length_um[mine]),
            "element_length_um_mean": float(found.length_um[own].mean()),
            "element_length_um_sd": _sd(found.length_um[own]),
            "cross_section_um2": float(np.sum(np.pi / 4 * found.diameter_um[own] ** 2)),
        })  # fmt: skip
    columns = [
        "order", "n_segments", "n_elements", "segments_per_element", "diameter_um_mean", "diameter_um_sd",
        "length_um_mean", "length_um_sd", "element_length_um_mean", "element_length_um_sd",
        "cross_section_um2",
    ]  # fmt: skip
    return pd.DataFrame(rows, columns=columns)


def whole_tree_counts(found: Connectivity, intact: np.ndarray, cut: np.ndarray) -> np.ndarray:
    """Extrapolate how many elements of each order there were before branches were cut off.

    N'_m = sum over n >= m of C(m, n) (N'_n + N_n,cut); total = intact + cut + N' (Kassab 1993,
    appendix, eq. 10). The diagonal term counts daughters of the parent's own order and is left to the
    measured numbers.

    Parameters
    ----------
    intact, cut : (orders,) arrays
        Numbers of elements seen whole and seen cut.
    """
    top = len(intact)
    missing = np.zeros(top)
    for m in range(top - 1, -1, -1):
        above = slice(m + 1, top)
        missing[m] = float(np.sum(found.mean[m, above] * (missing[above] + cut[above])))
        missing[m] += found.mean[m, m] * cut[m]
        missing[m] /= max(1.0 - found.mean[m, m], 1e-9)
    return np.asarray(intact) + np.asarray(cut) + missing


def _sd(values: np.ndarray) -> float:
    return float(np.std(values, ddof=1)) if len(values) > 1 else float("nan")
