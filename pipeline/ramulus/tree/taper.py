"""Exponential taper of a vessel's cross-section, A = A0 exp(-B x / R0)."""

import numpy as np

from ..network.graph import CentrelineGraph
from ..quantities import Estimate, Undefined
from .root import Rooting

__all__ = ["fit_taper", "trunk_segments", "trunk_taper"]


def fit_taper(arc_um: np.ndarray, radius_um: np.ndarray, *, level: float = 0.95) -> tuple[Estimate | Undefined, float]:
    """Fit ln r = ln R0 - B x / (2 R0); return B with its interval, and R0 in um.

    Neighbouring points share errors: the standard error counts one point for every two radii of
    length.

    Examples
    --------
    >>> x = np.linspace(0, 400, 50)
    >>> b, r0 = fit_taper(x, 8 * np.exp(-0.03 * x / (2 * 8)))
    >>> round(b.value, 6), round(r0, 6)
    (0.03, 8.0)
    """
    x, r = np.asarray(arc_um, dtype=float), np.asarray(radius_um, dtype=float)
    use = np.isfinite(r) & (r > 0)
    x, r = x[use], r[use]
    if len(x) < 4 or np.ptp(x) <= 0:
        return Undefined("fewer than four radii along the vessel"), float("nan")
    slope, intercept = np.polyfit(x, np.log(r), 1)
    r0 = float(np.exp(intercept))
    b = -2 * r0 * float(slope)
    left = np.log(r) - intercept - slope * x
    independent = min(len(x), max(3.0, np.ptp(x) / (2 * float(np.median(r)))))
    if independent <= 3.0:
        return Estimate(b, float("nan"), float("nan"), level), r0
    from scipy.stats import t  # noqa: PLC0415 - heavy to import

    variance = float(np.mean(left**2)) * independent / (independent - 2)
    se = 2 * r0 * np.sqrt(variance / (independent * float(np.var(x))))
    half = float(t.ppf(0.5 + level / 2, independent - 2)) * se
    return Estimate(b, b - half, b + half, level), r0


def trunk_segments(rooting: Rooting, radius_um: np.ndarray, root: int) -> list[int]:
    """Return the segments of the trunk: from the root always into the widest daughter, to a tip.

    Following a fixed rule from the root keeps the trunk one vessel; the taper it shows includes the
    steps at its branchings.
    """
    here = np.flatnonzero((rooting.upstream == root) & (rooting.parent < 0))
    if not len(here):
        return []
    trunk = [int(here[np.argmax(radius_um[here])])]
    daughters: dict[int, list[int]] = {}
    for child in np.flatnonzero(rooting.parent >= 0).tolist():
        daughters.setdefault(int(rooting.parent[child]), []).append(child)
    seen = set(trunk)
    while trunk[-1] in daughters:
        options = [c for c in daughters[trunk[-1]] if c not in seen]
        if not options:
            break
        trunk.append(max(options, key=lambda c: (radius_um[c], -c)))
        seen.add(trunk[-1])
    return trunk


def trunk_taper(graph: CentrelineGraph, rooting: Rooting, root: int) -> Estimate | Undefined:
    """Return B of the trunk over its points outside junction zones."""
    trunk = trunk_segments(rooting, np.nan_to_num(graph.segment_radius_um()), root)
    arc, radius, start = [], [], 0.0
    length = graph.segment_length_um()
    along = graph.arc_um()
    for segment in trunk:
        points = graph.points_of(segment)
        outside = ~graph.point_in_zone[points]
        x = along[points]
        if rooting.upstream[segment] != graph.segment_nodes[segment, 0]:
            x = length[segment] - x
        arc.append(start + x[outside])
        radius.append(graph.point_radius_um[points][outside])
        start += float(length[segment])
    if not arc:
        return Undefined("no segment leaves the root")
    x, r = np.concatenate(arc), np.concatenate(radius)
    sort = np.argsort(x, kind="stable")
    return fit_taper(x[sort], r[sort])[0]
