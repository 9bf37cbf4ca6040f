"""Exponential taper of a vessel's cross-section, A = A0 exp(-B x / R0)."""

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike

from ..network.graph import CentrelineGraph
from ..quantities import Estimate, Undefined
from . import _order_kernels as kernels
from .elements import Elements
from .root import Rooting
from .strahler import topological_orders, walking_order

__all__ = ["element_taper", "fit_taper", "trunk_segments", "trunk_taper"]


def fit_taper(
    arc_um: ArrayLike, radius_um: ArrayLike, *, level: float = 0.95
) -> tuple[Estimate | Undefined, float]:
    """Fit ln r = ln R0 - B x / (2 R0) by least squares.

    Neighbouring points share errors: the standard error counts one measurement for every two radii
    of length.

    Parameters
    ----------
    arc_um, radius_um : (n,) array_like
        Arc length along the vessel and lumen radius; radii that are not > 0 are left out.
    level : float
        Level of the interval.

    Returns
    -------
    b : Estimate or Undefined
        B: dimensionless, > 0 where the vessel narrows; without an interval in a vessel not much
        longer than wide.
    radius_um : float
        R0, the fitted radius at x = 0; NaN where B is undefined.

    Examples
    --------
    >>> x = np.linspace(0, 400, 50)
    >>> b, r0 = fit_taper(x, 8 * np.exp(-0.03 * x / (2 * 8)))
    >>> round(b.value, 6), round(r0, 6)
    (0.03, 8.0)
    """
    x, r = np.asarray(arc_um, dtype=np.float64), np.asarray(radius_um, dtype=np.float64)
    whole = np.zeros(len(x), dtype=np.int64)
    fit = _fit_groups(whole, x, r, 1, level).iloc[0]
    if not np.isfinite(fit["taper_b"]):
        return Undefined("fewer than four radii along the vessel"), float("nan")
    bounds = float(fit["taper_b_low"]), float(fit["taper_b_high"])
    estimate = Estimate(float(fit["taper_b"]), *bounds, level)
    return estimate, float(fit["radius0_um"])


def trunk_segments(rooting: Rooting, radius_um: np.ndarray, root: int) -> list[int]:
    """Return the segments of the trunk: the main stem from a root to a tip.

    The stem goes on into the daughter of the highest Strahler order, among equals the widest
    (Horton 1945): a wide stub does not end it.

    Parameters
    ----------
    rooting : Rooting
        Directions.
    radius_um : (m,) array
        Mean radius of each segment.
    root : int
        The root's node.

    Returns
    -------
    list of int
        Segments from the root on; empty where none leaves it. A fixed rule keeps the trunk one
        vessel; its taper includes the steps at its branchings.
    """
    here = np.flatnonzero((rooting.upstream == root) & (rooting.parent < 0))
    if not len(here):
        return []
    width, rank = np.nan_to_num(radius_um), topological_orders(rooting.parent).strahler
    heir = np.full(len(width), -1, np.int64)
    kernels.heirs(rooting.parent, walking_order(rooting.parent), rank, width, heir)
    trunk = [int(here[np.lexsort((-width[here], -rank[here]))[0]])]
    while heir[trunk[-1]] >= 0:
        trunk.append(int(heir[trunk[-1]]))
    return trunk


def trunk_taper(
    graph: CentrelineGraph, rooting: Rooting, root: int, *, level: float = 0.95
) -> Estimate | Undefined:
    """Return B along the trunk over its points outside junction zones.

    Parameters
    ----------
    graph : CentrelineGraph
        With radii.
    rooting : Rooting
        Directions.
    root : int
        The root's node.
    level : float
        Level of the interval.

    Returns
    -------
    Estimate or Undefined
        B.
    """
    trunk = trunk_segments(rooting, graph.segment_radius_um(), root)
    if not trunk:
        return Undefined("no segment leaves the root")
    start = np.full(graph.n_segments, np.nan)
    length = graph.segment_length_um()
    start[trunk] = np.concatenate(([0.0], np.cumsum(length[trunk])[:-1]))
    arc = _arc_downstream(graph, rooting, start)
    mine = np.isfinite(arc) & ~graph.point_in_zone
    return fit_taper(arc[mine], graph.point_radius_um[mine], level=level)[0]


def element_taper(
    graph: CentrelineGraph, rooting: Rooting, found: Elements, *, level: float = 0.95
) -> pd.DataFrame:
    """Fit the taper along every element, over its points outside junction zones.

    Parameters
    ----------
    graph : CentrelineGraph
        With radii.
    rooting : Rooting
        Directions.
    found : Elements
        Elements of the graph's segments.
    level : float
        Level of the intervals.

    Returns
    -------
    DataFrame
        One row an element: `element_id, order, length_um, n_points, radius0_um, taper_b,
        taper_b_low, taper_b_high`; empty cells where fewer than four radii are known.
    """
    length = graph.segment_length_um()
    start = np.full(graph.n_segments, np.nan)
    walk = walking_order(rooting.parent)
    kernels.arc_starts(rooting.parent, walk, found.element_of_segment, length, start)
    arc = _arc_downstream(graph, rooting, start)
    element = found.element_of_segment[graph.point_segment]
    mine = np.isfinite(arc) & ~graph.point_in_zone & (element >= 0)
    table = _fit_groups(
        element[mine], arc[mine], graph.point_radius_um[mine], len(found.order), level
    )
    table.insert(0, "element_id", np.arange(len(found.order)))
    table.insert(1, "order", found.order)
    table.insert(2, "length_um", found.length_um)
    return table


def _arc_downstream(graph: CentrelineGraph, rooting: Rooting, start: np.ndarray) -> np.ndarray:
    """(p,) arc length of each point, its segment beginning at `start` at the upstream end."""
    per = graph.points_per_segment
    along, length = graph.arc_um(), graph.segment_length_um()
    turned = np.repeat(rooting.upstream != graph.segment_nodes[:, 0], per)
    along = np.where(turned, np.repeat(length, per) - along, along)
    return np.asarray(np.repeat(start, per) + along)


def _fit_groups(
    group: np.ndarray, x: np.ndarray, r: np.ndarray, n: int, level: float
) -> pd.DataFrame:
    """Fit every group of points at once."""
    use = np.isfinite(r) & (r > 0) & np.isfinite(x)
    group, x, r = group[use], x[use], r[use]
    y = np.log(r)
    count = np.bincount(group, minlength=n).astype(np.float64)

    def mean(value: np.ndarray) -> np.ndarray:
        return np.asarray(np.bincount(group, weights=value, minlength=n) / np.maximum(count, 1))

    x_mean, y_mean, typical = mean(x), mean(y), np.exp(mean(y))
    dx, dy = x - x_mean[group], y - y_mean[group]
    x_var = mean(dx**2)
    enough = (count >= 4) & (x_var > 0)
    with np.errstate(invalid="ignore", divide="ignore"):
        slope = np.where(enough, mean(dx * dy) / x_var, np.nan)
        r0 = np.exp(y_mean - slope * x_mean)
        b = -2 * r0 * slope
        left = mean((dy - np.nan_to_num(slope)[group] * dx) ** 2)
        # Evenly spread points span sqrt(12) of their standard deviation.
        independent = np.minimum(count, np.sqrt(12 * x_var) / (2 * typical))
        free = np.where(independent > 3, independent - 2, np.nan)
        half = _t(level, free) * 2 * r0 * np.sqrt(left / free / x_var)
    return pd.DataFrame({
        "n_points": count.astype(np.int64), "radius0_um": r0, "taper_b": b,
        "taper_b_low": b - half, "taper_b_high": b + half,
    })  # fmt: skip


def _t(level: float, free: np.ndarray) -> np.ndarray:
    from scipy.stats import t  # noqa: PLC0415 - heavy to import

    return np.asarray(t.ppf(0.5 + level / 2, free))
