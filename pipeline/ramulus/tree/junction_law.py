"""The law of branching: residuals and exponents at each junction, and pooled over all.

An exponent x solves sum (a_i / a_0)**x = 1 over the daughters; it exists, and is unique, only where
every daughter is thinner than the parent. A radius error that spares no vessel drives some daughters
above their parent, so the exponents that can be solved are a biased sample, and so is their median.
The pooled exponent here solves, over all junctions that are used,

    sum_j w_j (h_j(g) - mu_j(g)) = 0,   h_j(g) = ln(sum_i a_i**g) - g ln a_0,

with mu_j the bias of h_j from the known radius errors to second order and w_j the inverse of its
variance (radius errors and the scatter between junctions), with Huber's weights against outliers.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from .._settings import Settings, setting
from ..network.graph import CentrelineGraph
from ..quantities import Estimate, Undefined
from .angles import leaving_directions, optimal_angles_deg
from .root import Rooting

__all__ = [
    "JunctionSettings", "JunctionSummary", "junction_exponent", "junction_table", "pooled_exponent",
    "summarise_junctions",
]  # fmt: skip

_COLUMNS = [
    "node_id", "n_daughters", "parent_segment", "daughter_segments", "parent_radius_um",
    "daughter_radii_um", "cube_residual", "cube_residual_low", "cube_residual_high",
    "cube_residual_log", "exponent", "exponent_low", "exponent_high", "area_ratio", "asymmetry",
    "angle_1_deg", "angle_2_deg", "optimal_angle_1_deg", "optimal_angle_2_deg", "used", "reason",
]  # fmt: skip
_DRAWS = 400
_LOW_G, _HIGH_G = 0.05, 12.0


class JunctionSettings(Settings):
    """Settings of the junction law."""

    level: float = setting(0.95, "level of the intervals", gt=0.5, lt=1)
    seed: int = setting(20_240, "seed of the draws behind intervals and expected shares", ge=0)


@dataclass(frozen=True, slots=True)
class Junctions:
    """Radii at every directed junction as arrays: daughters are padded with NaN to the right."""

    node: np.ndarray
    parent: np.ndarray
    daughters: np.ndarray
    parent_radius: np.ndarray
    daughter_radius: np.ndarray
    parent_se: np.ndarray
    daughter_se: np.ndarray
    reason: np.ndarray

    @property
    def used(self) -> np.ndarray:
        """Which junctions enter the pooled figures."""
        return self.reason == ""


@dataclass(frozen=True, slots=True)
class JunctionSummary:
    """Pooled figures of all junctions used."""

    used: int
    exponent: Estimate | Undefined
    exponent_plain: Estimate | Undefined
    residual_median: Estimate | Undefined
    area_ratio_median: Estimate | Undefined
    unsolvable: float
    unsolvable_expected: float
    p_cube_law: float
    scatter: float


def junction_exponent(parent_um: float, daughters_um: np.ndarray) -> float:
    """Solve sum (a_i / a_0)**x = 1 for x; NaN where no positive solution exists.

    Examples
    --------
    >>> round(junction_exponent(100.0, np.array([80.0, 60.0])), 6)
    2.0
    """
    return float(_exponents(np.array([parent_um]), np.asarray(daughters_um, dtype=float)[None])[0])


def find_junctions(
    graph: CentrelineGraph, rooting: Rooting, radius_um: np.ndarray, se_um: np.ndarray
) -> Junctions:
    """Collect every node of three or more ends with its parent (on the root's side) and daughters.

    Not used, with the reason: no or several parents, a vessel that is not resolved or has no radius, a
    vessel that lies wholly inside the junction's zone.
    """
    has_parent = rooting.upstream >= 0
    child = np.flatnonzero(has_parent)
    at = rooting.upstream[child]
    order = np.lexsort((child, -np.nan_to_num(radius_um[child]), at))
    child, at = child[order], at[order]
    degree = graph.node_degree()
    nodes = np.flatnonzero(degree >= 3)
    first, last = np.searchsorted(at, nodes), np.searchsorted(at, nodes, side="right")
    count = last - first
    incoming = np.bincount(rooting.downstream[has_parent], minlength=graph.n_nodes)
    bringer = np.full(graph.n_nodes, -1, np.int64)
    bringer[rooting.downstream[has_parent]] = np.flatnonzero(has_parent)
    # Where several segments arrive, the daughters' parent is the one that the rooting names.
    named = np.where(count > 0, rooting.parent[child[np.minimum(first, max(len(child) - 1, 0))]] if len(child) else -1, -1)
    parent = np.where(named >= 0, named, bringer[nodes])
    keep = (count >= 2) & (parent >= 0)
    nodes, first, count, parent = nodes[keep], first[keep], count[keep], parent[keep]
    width = int(count.max()) if len(count) else 2
    slot = np.arange(width)
    inside = slot[None, :] < count[:, None]
    place = np.minimum(first[:, None] + slot[None, :], max(len(child) - 1, 0))
    daughters = np.where(inside, child[place] if len(child) else -1, -1)
    radius = np.where(inside, radius_um[daughters], np.nan)
    se = np.where(inside, se_um[daughters], np.nan)
    reason = _reasons(graph, parent, daughters, inside, radius_um, incoming[nodes])
    return Junctions(nodes, parent, daughters, radius_um[parent], radius, se_um[parent], se, reason)


def junction_table(
    graph: CentrelineGraph, rooting: Rooting, found: Junctions, *, settings: JunctionSettings
) -> pd.DataFrame:
    """Return one row a junction, with the columns of the data contract."""
    k = len(found.node)
    if not k:
        return pd.DataFrame(columns=_COLUMNS)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.nansum(found.daughter_radius**3, axis=1) / found.parent_radius**3
        area = np.nansum(found.daughter_radius**2, axis=1) / found.parent_radius**2
        smallest = np.nanmin(found.daughter_radius, axis=1) if k else np.zeros(0)
        largest = np.nanmax(found.daughter_radius, axis=1) if k else np.zeros(0)
    unknown = ~np.isfinite(found.parent_radius) | (
        (found.daughters >= 0) & ~np.isfinite(found.daughter_radius)
    ).any(axis=1)
    ratio, area = np.where(unknown, np.nan, ratio), np.where(unknown, np.nan, area)
    exponent = _exponents(found.parent_radius, found.daughter_radius)
    low, high, g_low, g_high = _intervals(found, settings)
    angle = _angles(graph, rooting, found)
    two = (found.daughters >= 0).sum(axis=1) == 2
    best = optimal_angles_deg(found.parent_radius, found.daughter_radius[:, 0], found.daughter_radius[:, 1])
    return pd.DataFrame({
        "node_id": found.node, "n_daughters": (found.daughters >= 0).sum(axis=1),
        "parent_segment": found.parent, "daughter_segments": _cells(found.daughters, found.daughters >= 0, "d"),
        "parent_radius_um": found.parent_radius,
        "daughter_radii_um": _cells(found.daughter_radius, found.daughters >= 0, ".6g"),
        "cube_residual": ratio - 1, "cube_residual_low": low - 1, "cube_residual_high": high - 1,
        "cube_residual_log": np.log(ratio), "exponent": exponent, "exponent_low": g_low,
        "exponent_high": g_high, "area_ratio": area, "asymmetry": np.where(unknown, np.nan, smallest / largest),
        "angle_1_deg": angle[:, 0], "angle_2_deg": np.where(two, angle[:, 1], np.nan),
        "optimal_angle_1_deg": np.where(two, best[0], np.nan),
        "optimal_angle_2_deg": np.where(two, best[1], np.nan),
        "used": found.used, "reason": found.reason.astype(str),
    }, columns=_COLUMNS)  # fmt: skip


def summarise_junctions(found: Junctions, *, settings: JunctionSettings) -> JunctionSummary:
    """Return the pooled figures over the junctions that are used."""
    use = found.used
    a0, a = found.parent_radius[use], found.daughter_radius[use]
    s0, s = found.parent_se[use] / a0, found.daughter_se[use] / a
    n = len(a0)
    if n < 3:
        none = Undefined(f"{n} junctions can be used, three are needed")
        return JunctionSummary(n, none, none, none, none, float("nan"), float("nan"), float("nan"), float("nan"))
    exponent, scatter = pooled_exponent(a0, a, s0, s, level=settings.level)
    solved = _exponents(a0, a)
    plain = solved[np.isfinite(solved)]
    residual = np.nansum(a**3, axis=1) / a0**3 - 1
    area = np.nansum(a**2, axis=1) / a0**2
    p = float("nan")
    if exponent:
        from scipy.stats import norm  # noqa: PLC0415 - heavy to import

        se = (exponent.high - exponent.low) / (2 * norm.ppf(0.5 + settings.level / 2))
        p = float(2 * norm.sf(abs(exponent.value - 3.0) / se)) if se > 0 else float("nan")
    return JunctionSummary(
        n, exponent, _median(plain, settings.level, "no junction has an exponent"),
        _median(residual, settings.level, ""), _median(area, settings.level, ""),
        float(1 - len(plain) / n), _expected_unsolvable(a0, a, s0, s, settings), p, scatter,
    )  # fmt: skip


def pooled_exponent(
    a0: np.ndarray, a: np.ndarray, s0: np.ndarray, s: np.ndarray, *, level: float = 0.95
) -> tuple[Estimate | Undefined, float]:
    """Estimate one exponent from all junctions, corrected for radius errors.

    Parameters
    ----------
    a0 : (n,) array
        Parents' radii.
    a : (n, k) array
        Daughters' radii, NaN beyond the last.
    s0, s : arrays like a0, a
        Standard errors of ln radius, random and independent between vessels.

    Returns
    -------
    tuple
        The exponent with its interval, and the scatter of h between junctions (SD).
    """
    tau2 = 0.0
    value = 3.0
    for _ in range(25):
        found = _root(a0, a, s0, s, tau2)
        if not np.isfinite(found):
            return Undefined("the pooled equation has no solution between 0.05 and 12"), float("nan")
        h, mu, variance = _moments(found, a0, a, s0, s)
        # Scatter between junctions beyond the radius errors, by its moment (robust SD).
        spread = 1.4826 * float(np.median(np.abs(h - mu - np.median(h - mu))))
        new_tau2 = max(0.0, spread**2 - float(np.median(variance)))
        if abs(found - value) < 1e-6 and abs(new_tau2 - tau2) < 1e-8:
            break
        value, tau2 = found, 0.5 * (tau2 + new_tau2)
    h, mu, variance = _moments(value, a0, a, s0, s)
    total = variance + tau2
    weight = 1 / np.maximum(total, 1e-12)
    z = (h - mu) / np.sqrt(np.maximum(total, 1e-12))
    weight *= np.minimum(1.0, 2.0 / np.maximum(np.abs(z), 1e-12))
    step = 1e-4
    slope = (_moments(value + step, a0, a, s0, s)[0] - _moments(value - step, a0, a, s0, s)[0]) / (2 * step)
    bread = float(np.sum(weight * slope))
    meat = float(np.sum((weight * (h - mu)) ** 2)) * len(h) / max(len(h) - 1, 1)
    se = np.sqrt(meat) / abs(bread)
    from scipy.stats import t  # noqa: PLC0415 - heavy to import

    half = float(t.ppf(0.5 + level / 2, max(len(h) - 1, 1))) * se
    return Estimate(float(value), float(value - half), float(value + half), level), float(np.sqrt(tau2))


def _moments(g, a0, a, s0, s):  # noqa: ANN001, ANN202
    """h of each junction, its bias and its variance from the radius errors."""
    log_power = g * np.log(a)
    top = np.nanmax(log_power, axis=1, keepdims=True)
    power = np.exp(log_power - top)
    total = np.nansum(power, axis=1)
    h = np.log(total) + top[:, 0] - g * np.log(a0)
    w = power / total[:, None]
    mu = 0.5 * g * g * np.nansum(w * (1 - w) * s**2, axis=1)
    variance = g * g * (s0**2 + np.nansum(w**2 * s**2, axis=1))
    return h, mu, variance


def _root(a0, a, s0, s, tau2):  # noqa: ANN001, ANN202
    def balance(g: float) -> float:
        h, mu, variance = _moments(g, a0, a, s0, s)
        total = np.maximum(variance + tau2, 1e-12)
        z = (h - mu) / np.sqrt(total)
        # Divided by g: h grows with g, and without it the equation leans to small exponents.
        return float(np.sum(np.clip(z, -2.0, 2.0) / np.sqrt(total)) / len(h))

    low, high = _LOW_G, _HIGH_G
    f_low, f_high = balance(low), balance(high)
    if not (f_low > 0 > f_high):
        return float("nan")
    for _ in range(80):
        middle = 0.5 * (low + high)
        if balance(middle) > 0:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


def _exponents(a0: np.ndarray, a: np.ndarray) -> np.ndarray:
    """Bisection on all junctions at once; NaN where a daughter is as wide as the parent or more."""
    with np.errstate(invalid="ignore", divide="ignore"):
        x = a / a0[:, None]
    real = np.isfinite(x)
    solvable = np.isfinite(a0) & (real.sum(axis=1) >= 2) & (np.where(real, x, 0).max(axis=1, initial=0) < 1)
    solvable &= (np.where(real, x, 1) > 0).all(axis=1)
    log_x = np.log(np.where(real & (x > 0), x, 1e-300))
    low, high = np.full(len(a0), 1e-6), np.full(len(a0), 1.0)
    for _ in range(60):
        above = np.exp(high[:, None] * log_x).sum(axis=1) > 1
        high = np.where(above & solvable & (high < 1e6), 2 * high, high)
    for _ in range(80):
        middle = 0.5 * (low + high)
        above = np.exp(middle[:, None] * log_x).sum(axis=1) > 1
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return np.where(solvable, 0.5 * (low + high), np.nan)


def _intervals(found: Junctions, settings: JunctionSettings):  # noqa: ANN202
    """Percentiles of the cube ratio and the exponent under draws of the radius errors.

    Draws without an exponent count as infinite, so an open interval ends empty.
    """
    rng = np.random.default_rng(settings.seed)
    n, k = found.daughter_radius.shape
    s0 = np.nan_to_num(found.parent_se / found.parent_radius)
    s = np.nan_to_num(found.daughter_se / found.daughter_radius)
    tail = 50 * (1 - settings.level)
    with np.errstate(over="ignore", invalid="ignore"):
        s2 = np.sqrt(9 * s0**2 + 9 * np.nansum(
            (found.daughter_radius**3 * s / np.nansum(found.daughter_radius**3, axis=1)[:, None]) ** 2, axis=1))
    ratio = np.nansum(found.daughter_radius**3, axis=1) / found.parent_radius**3
    from scipy.stats import norm  # noqa: PLC0415 - heavy to import

    z = float(norm.ppf(1 - tail / 100))
    low, high = ratio * np.exp(-z * s2), ratio * np.exp(z * s2)
    g_low, g_high = np.full(n, np.nan), np.full(n, np.nan)
    for start in range(0, n, 2000):
        part = slice(start, min(start + 2000, n))
        size = part.stop - part.start
        draws = np.empty((_DRAWS, size))
        e0 = rng.standard_normal((_DRAWS, size))
        e = rng.standard_normal((_DRAWS, size, k))
        for d in range(_DRAWS):
            a0 = found.parent_radius[part] * np.exp(s0[part] * e0[d])
            a = found.daughter_radius[part] * np.exp(s[part] * e[d])
            draws[d] = _exponents(a0, a)
        draws = np.where(np.isnan(draws), np.inf, draws)
        draws.sort(axis=0)
        lower = draws[int(np.floor(tail / 100 * (_DRAWS - 1)))]
        upper = draws[int(np.ceil((1 - tail / 100) * (_DRAWS - 1)))]
        g_low[part], g_high[part] = lower, upper
    unknown = ~np.isfinite(ratio)
    g_low[unknown | ~np.isfinite(g_low)] = np.nan
    g_high[unknown | ~np.isfinite(g_high)] = np.nan
    return low, high, g_low, g_high


def _angles(graph: CentrelineGraph, rooting: Rooting, found: Junctions) -> np.ndarray:
    """(n, k) angle of each daughter to the parent's axis carried on."""
    leaving = leaving_directions(graph, graph.segment_radius_um())
    side = (graph.segment_nodes[found.parent, 0] != found.node).astype(int)
    onward = -leaving[2 * found.parent + side]
    out = np.full(found.daughters.shape, np.nan)
    for k in range(found.daughters.shape[1]):
        mine = found.daughters[:, k]
        real = mine >= 0
        at = np.where(graph.segment_nodes[mine, 0] == found.node, 0, 1)
        cosine = np.sum(onward * leaving[2 * mine + at], axis=1)
        out[real, k] = np.degrees(np.arccos(np.clip(cosine[real], -1, 1)))
    return out


def _reasons(graph, parent, daughters, inside, radius_um, incoming):  # noqa: ANN001, ANN202
    reason = np.full(len(parent), "", dtype=object)
    members = np.concatenate([parent[:, None], np.where(inside, daughters, parent[:, None])], axis=1)
    zone_free = graph.segment_sum((~graph.point_in_zone).astype(float)) > 0
    rules = (
        ((incoming > 1), "two vessels meet here (loop)"),
        (~graph.segment_resolved[members].all(axis=1), "a vessel is not resolved"),
        (~zone_free[members].all(axis=1), "a vessel lies wholly in the junction's zone"),
        (~(np.isfinite(radius_um[members]) & (radius_um[members] > 0)).all(axis=1), "a radius is unknown"),
    )
    for where, text in rules:
        reason[where] = text
    return reason


def _expected_unsolvable(a0, a, s0, s, settings):  # noqa: ANN001, ANN202
    """Share without an exponent if the cube law held exactly and only radius errors acted."""
    rng = np.random.default_rng(settings.seed)
    exact = np.nansum(a**3, axis=1) ** (1 / 3)
    missing = 0.0
    draws = 200
    for _ in range(draws):
        b0 = exact * np.exp(np.nan_to_num(s0) * rng.standard_normal(len(a0)))
        b = a * np.exp(np.nan_to_num(s) * rng.standard_normal(a.shape))
        missing += float(np.mean(np.nanmax(b, axis=1) >= b0))
    return missing / draws


def _median(values: np.ndarray, level: float, reason: str) -> Estimate | Undefined:
    """Median with its distribution-free interval (order statistics, binomial)."""
    values = np.sort(values[np.isfinite(values)])
    n = len(values)
    if not n:
        return Undefined(reason or "no junction")
    from scipy.stats import binom  # noqa: PLC0415 - heavy to import

    k = int(binom.ppf((1 - level) / 2, n, 0.5))
    return Estimate(float(np.median(values)), float(values[max(k - 1, 0)]), float(values[min(n - k, n - 1)]), level)


def _cells(values: np.ndarray, real: np.ndarray, form: str) -> list[str]:
    return [
        " ".join(format(v, form) for v in row[keep].tolist()) for row, keep in zip(values, real, strict=True)
    ]
