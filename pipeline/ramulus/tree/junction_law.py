"""The law of branching: residuals and exponents at each junction, and pooled over all."""

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike

from .._settings import Settings, setting
from ..network.graph import NODE_KINDS, CentrelineGraph
from ..quantities import Estimate, Undefined
from .angles import bifurcation_angles_deg, optimal_angles_deg
from .exponent import exponent_intervals, junction_exponent, junction_exponents, log_ratio
from .pooled_exponent import (
    PlainExponents,
    bias_and_variance,
    expected_unsolvable,
    plain_exponents,
    pooled_exponent,
)
from .root import Rooting

__all__ = [
    "JunctionSettings", "JunctionSummary", "Junctions", "find_junctions", "junction_exponent",
    "junction_size_um", "junction_table", "law_by_group", "shear_ratios", "size_trend",
    "summarise_junctions",
]  # fmt: skip


class JunctionSettings(Settings):
    """Settings of the junction law."""

    level: float = setting(0.95, "level of the intervals", gt=0.5, lt=1)
    seed: int = setting(20_240, "seed of the draws behind the expected shares", ge=0)


@dataclass(frozen=True, slots=True)
class Junctions:
    """Radii at every junction as arrays; daughters are sorted from the widest and padded.

    Parameters
    ----------
    node, parent : (n,) int64
        Node, and the segment that brings to it; -1 where the root lies.
    daughters : (n, k) int64
        Segments that leave, -1 beyond the last.
    parent_radius, parent_se, parent_common : (n,) float64
        Mean radius, its random and its systematic standard error, in um.
    daughter_radius, daughter_se, daughter_common : (n, k) float64
        The same of the daughters, NaN beyond the last.
    reason : (n,) object (str)
        Why the junction does not enter the pooled figures; empty where it does.
    """

    node: np.ndarray
    parent: np.ndarray
    daughters: np.ndarray
    parent_radius: np.ndarray
    daughter_radius: np.ndarray
    parent_se: np.ndarray
    daughter_se: np.ndarray
    parent_common: np.ndarray
    daughter_common: np.ndarray
    reason: np.ndarray

    @property
    def used(self) -> np.ndarray:
        """Which junctions enter the pooled figures."""
        return np.asarray(self.reason == "", dtype=bool)

    @property
    def n_daughters(self) -> np.ndarray:
        """Number of daughters of each junction."""
        return np.asarray((self.daughters >= 0).sum(axis=1))

    def relative(
        self, rows: np.ndarray | slice
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Return radii and the standard errors of their logarithms, for some rows.

        Parameters
        ----------
        rows : bool mask, int indices or slice
            Which junctions.

        Returns
        -------
        parent_um, daughters_um, parent_se, daughter_se : arrays
            As the pooled exponent takes them.
        """
        a0, a = self.parent_radius[rows], self.daughter_radius[rows]
        with np.errstate(invalid="ignore", divide="ignore"):
            return a0, a, self.parent_se[rows] / a0, self.daughter_se[rows] / a


@dataclass(frozen=True, slots=True)
class JunctionSummary:
    """Pooled figures of all junctions used.

    Parameters
    ----------
    used : int
        Junctions.
    exponent : Estimate or Undefined
        Corrected for radius errors.
    exponent_plain : Estimate or Undefined
        Median of the exponents that exist.
    residual_median, area_ratio_median : Estimate or Undefined
        With intervals from order statistics. The median residual plus one is the median ratio of
        the parent's wall shear stress to its daughters', if these share one.
    unsolvable, unsolvable_expected : float
        Share without an exponent; the same if the cube law held and only radius errors acted.
    p_cube_law : float
        Two-sided p of exponent 3, by the pooled equation.
    scatter : float
        SD of the log ratio between junctions beyond the radius errors.
    unsolvable_p : float
        Two-sided p of the observed share under the expected one.
    exponent_common : tuple of float
        The exponent with all radii smaller, and larger, by their systematic error at the level.
    residual_log_median, residual_log_sd : float
        Median and robust SD (1.4826 median absolute deviation) of the log cube ratio.
    p_signed_rank : float
        Two-sided p that the log cube ratios, less their bias, lie about 0 (Wilcoxon 1945).
    plain : PlainExponents or None
        Estimates that take the radii for exact.
    """

    used: int
    exponent: Estimate | Undefined
    exponent_plain: Estimate | Undefined
    residual_median: Estimate | Undefined
    area_ratio_median: Estimate | Undefined
    unsolvable: float
    unsolvable_expected: float
    p_cube_law: float
    scatter: float
    unsolvable_p: float = float("nan")
    exponent_common: tuple[float, float] = (float("nan"), float("nan"))
    residual_log_median: float = float("nan")
    residual_log_sd: float = float("nan")
    p_signed_rank: float = float("nan")
    plain: PlainExponents | None = None


def find_junctions(
    graph: CentrelineGraph,
    rooting: Rooting,
    radius_um: np.ndarray,
    se_um: np.ndarray,
    *,
    common_um: np.ndarray | None = None,
) -> Junctions:
    """Collect every node of three or more ends with its parent (on the root's side) and daughters.

    Not used, with the first reason that holds: the root lies here; fewer than two vessels leave;
    several vessels bring blood; a vessel on a loop has no flow to direct it; a vessel is not
    resolved; a vessel lies wholly in the junction's zone; a daughter is cut by the volume's edge
    within two of its radii; a radius is unknown.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.
    rooting : Rooting
        Its directions.
    radius_um, se_um : (m,) arrays
        Mean radius of each segment outside the zones, and its random standard error (0 or NaN:
        unknown).
    common_um : (m,) array, optional
        Systematic standard error, the same way for all vessels.

    Returns
    -------
    Junctions
        In order of their nodes.
    """
    common = np.zeros(graph.n_segments) if common_um is None else np.nan_to_num(common_um)
    child = np.lexsort((np.arange(graph.n_segments), -np.nan_to_num(radius_um), rooting.upstream))
    node = np.flatnonzero(graph.node_degree() >= 3)
    at = rooting.upstream[child]
    first, last = np.searchsorted(at, node), np.searchsorted(at, node, side="right")
    slot = np.arange(max(int((last - first).max(initial=0)), 2))
    inside = slot[None, :] < (last - first)[:, None]
    place = np.where(inside, first[:, None] + slot[None, :], 0)
    daughters = np.where(inside, child[place] if len(child) else -1, -1)
    parent = rooting.entered[node]

    def of_parent(value: np.ndarray) -> np.ndarray:
        return np.where(parent >= 0, value[parent], np.nan) if len(value) else np.zeros(0)

    def of_daughters(value: np.ndarray) -> np.ndarray:
        return np.where(inside, value[daughters], np.nan) if len(value) else np.zeros((0, 2))

    reason = _reasons(graph, rooting, node, parent, daughters, radius_um)
    return Junctions(
        node, parent, daughters, of_parent(radius_um), of_daughters(radius_um), of_parent(se_um),
        of_daughters(se_um), of_parent(common), of_daughters(common), reason,
    )  # fmt: skip


def junction_table(
    graph: CentrelineGraph, rooting: Rooting, found: Junctions, *, settings: JunctionSettings
) -> pd.DataFrame:
    """Return one row a junction, with the columns of the data contract.

    The intervals come from the random radius errors alone: that of the residual is log-normal, that
    of the exponent holds the values that the radii do not reject; without an upper bound its cell
    is empty. `angle_1_deg` is the wider daughter's.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.
    rooting : Rooting
        Its directions.
    found : Junctions
        Its junctions.
    settings : JunctionSettings
        Level of the intervals.

    Returns
    -------
    DataFrame
        In order of the nodes.
    """
    del rooting  # kept so that all tables of the graph are called alike
    a0, a, s0, s = found.relative(slice(None))
    known = (found.n_daughters >= 2) & np.isfinite(a0)
    known &= np.isfinite(np.where(found.daughters >= 0, a, 0.0)).all(axis=1)
    log3 = np.where(known, log_ratio(a0, a, 3.0), np.nan)
    _, _, variance = bias_and_variance(3.0, a0, a, s0, s)
    half = np.where(known & (variance > 0), _z(settings.level) * np.sqrt(variance), np.nan)
    low, high = exponent_intervals(a0, a, s0, s, level=settings.level)
    angle, _ = bifurcation_angles_deg(graph, found.node, found.parent, found.daughters, a0)
    two = found.n_daughters == 2
    best = optimal_angles_deg(a0, a[:, 0], a[:, 1])
    real = found.daughters >= 0
    thinnest = np.where(real, a, np.inf).min(axis=1, initial=np.inf)
    return pd.DataFrame({
        "node_id": found.node, "n_daughters": found.n_daughters,
        "parent_segment": _maybe(found.parent),
        "daughter_segments": _cells(found.daughters, real, "d"),
        "parent_radius_um": a0, "daughter_radii_um": _cells(a, real & np.isfinite(a), ".6g"),
        "cube_residual": np.expm1(log3), "cube_residual_low": np.expm1(log3 - half),
        "cube_residual_high": np.expm1(log3 + half), "cube_residual_log": log3,
        "exponent": np.where(known, junction_exponents(a0, a), np.nan),
        "exponent_low": np.where(known, low, np.nan),
        "exponent_high": np.where(known, high, np.nan),
        "area_ratio": np.where(known, np.exp(log_ratio(a0, a, 2.0)), np.nan),
        "asymmetry": np.where(known, thinnest / a[:, 0], np.nan),
        "angle_1_deg": angle[:, 0], "angle_2_deg": np.where(two, angle[:, 1], np.nan),
        "optimal_angle_1_deg": np.where(two, best[0], np.nan),
        "optimal_angle_2_deg": np.where(two, best[1], np.nan),
        "used": found.used, "reason": found.reason.astype(str),
    })  # fmt: skip


def summarise_junctions(found: Junctions, *, settings: JunctionSettings) -> JunctionSummary:
    """Return the pooled figures over the junctions that are used.

    Parameters
    ----------
    found : Junctions
        All junctions.
    settings : JunctionSettings
        Level of the intervals, seed of the draws.

    Returns
    -------
    JunctionSummary
        Undefined figures, with the reason, where fewer than three junctions can be used.
    """
    a0, a, s0, s = found.relative(found.used)
    n, nan = len(a0), float("nan")
    if n < 3:
        none = Undefined(f"{n} junctions can be used, three are needed")
        return JunctionSummary(n, none, none, none, none, nan, nan, nan, nan)
    pooled = pooled_exponent(a0, a, s0, s, level=settings.level)
    solved = junction_exponents(a0, a)
    expected, expected_p = expected_unsolvable(a0, a, s0, s, seed=settings.seed)
    log3, mu, _ = bias_and_variance(3.0, a0, a, s0, s)
    middle = float(np.median(log3))
    area = np.exp(log_ratio(a0, a, 2.0))
    return JunctionSummary(
        used=n, exponent=pooled.exponent,
        exponent_plain=_median(solved, settings.level, "no junction has an exponent"),
        residual_median=_median(np.expm1(log3), settings.level, ""),
        area_ratio_median=_median(area, settings.level, ""),
        unsolvable=float(np.mean(np.isnan(solved))), unsolvable_expected=expected,
        p_cube_law=pooled.p_cube_law, scatter=pooled.scatter, unsolvable_p=expected_p,
        exponent_common=_common_band(found, settings.level), residual_log_median=middle,
        residual_log_sd=1.4826 * float(np.median(np.abs(log3 - middle))),
        p_signed_rank=_signed_rank(log3 - mu), plain=plain_exponents(a0, a),
    )  # fmt: skip


def law_by_group(
    found: Junctions, group: ArrayLike, *, settings: JunctionSettings, name: str = "group"
) -> pd.DataFrame:
    """Pool the junctions used by group: the parents' orders, or classes of size.

    Parameters
    ----------
    found : Junctions
        All junctions.
    group : (n,) array_like
        Group of each junction, say `order[found.parent]`, or `np.floor(np.log2(size))` with the
        sizes of `junction_size_um`.
    settings : JunctionSettings
        Level of the intervals.
    name : str
        Name of the group's column.

    Returns
    -------
    DataFrame
        One row a group: number, median log cube ratio, pooled exponent with its interval (NaN where
        it is not defined), p of exponent 3.
    """
    group = np.asarray(group)
    rows = []
    for value in np.unique(group[found.used]):
        a0, a, s0, s = found.relative(found.used & (group == value))
        pooled = pooled_exponent(a0, a, s0, s, level=settings.level)
        g = pooled.exponent
        nan = float("nan")
        figures = (g.value, g.low, g.high) if isinstance(g, Estimate) else (nan, nan, nan)
        median = float(np.median(log_ratio(a0, a, 3.0)))
        rows.append((value, len(a0), median, *figures, pooled.p_cube_law))
    columns = [
        "n_junctions",
        "cube_residual_log_median",
        "exponent",
        "exponent_low",
        "exponent_high",
    ]
    return pd.DataFrame(rows, columns=[name, *columns, "p_cube_law"])


def junction_size_um(found: Junctions) -> np.ndarray:
    """Return a size of each junction whose error does not lean on that of its cube ratio.

    The parent's radius stands in the cube ratio's denominator, so that its error alone makes the
    ratio fall with it. The mean of ln a_0 and of ln of the daughters' cubic sum, weighted by
    precision (evenly where it is unknown), is uncorrelated with their difference.

    Parameters
    ----------
    found : Junctions
        All junctions.

    Returns
    -------
    (n,) array
        um; NaN where a radius is unknown.
    """
    a0, a, s0, s = found.relative(slice(None))
    log3, _, variance = bias_and_variance(3.0, a0, a, s0, s)
    own = np.nan_to_num(s0) ** 2
    share = np.where(variance > 0, own / np.where(variance > 0, variance / 9, 1.0), 0.5)
    return np.asarray(a0 * np.exp(share * log3 / 3))


def size_trend(found: Junctions, *, settings: JunctionSettings) -> Estimate | Undefined:
    """Fit the log cube ratio, less its bias, against ln of the junction's size.

    Parameters
    ----------
    found : Junctions
        All junctions; those used enter.
    settings : JunctionSettings
        Level of the interval.

    Returns
    -------
    Estimate or Undefined
        Slope per e-fold of size, by least squares with an interval that does not need equal scatter
        (White 1980, Econometrica 48:817, HC3); 0 where one law holds for all sizes.
    """
    a0, a, s0, s = found.relative(found.used)
    if len(a0) < 5:
        return Undefined(f"{len(a0)} junctions can be used, five are needed")
    log3, mu, _ = bias_and_variance(3.0, a0, a, s0, s)
    x, y = np.log(junction_size_um(found)[found.used]), log3 - mu
    x = x - x.mean()
    spread = float(np.sum(x**2))
    if spread <= 1e-12 * len(x):
        return Undefined("all junctions have one size")
    slope = float(np.sum(x * y)) / spread
    left = y - y.mean() - slope * x
    leverage = 1 / len(x) + x**2 / spread
    se = float(np.sqrt(np.sum((x * left / (1 - leverage)) ** 2))) / spread
    from scipy.stats import t  # noqa: PLC0415 - heavy to import

    half = float(t.ppf(0.5 + settings.level / 2, len(x) - 2)) * se
    return Estimate(slope, slope - half, slope + half, settings.level)


def shear_ratios(found: Junctions, flow_um3_per_s: np.ndarray) -> np.ndarray:
    """Return each daughter's wall shear stress over its parent's, at one viscosity.

    The equivalent reading of the cube law: where flow goes with the cubed radius, all are 1.

    Parameters
    ----------
    found : Junctions
        All junctions.
    flow_um3_per_s : (m,) array
        Flow of each segment; its sign does not matter.

    Returns
    -------
    (n, k) array
        NaN beyond the last daughter, and where the parent carries no flow.
    """
    size = np.abs(np.asarray(flow_um3_per_s, dtype=np.float64))
    with np.errstate(invalid="ignore", divide="ignore"):
        parent = np.where(found.parent >= 0, size[found.parent], np.nan) / found.parent_radius**3
        ratio = size[found.daughters] / found.daughter_radius**3 / parent[:, None]
    return np.where((found.daughters >= 0) & (parent > 0)[:, None], ratio, np.nan)


def _reasons(
    graph: CentrelineGraph, rooting: Rooting, node: np.ndarray, parent: np.ndarray,
    daughters: np.ndarray, radius_um: np.ndarray,
) -> np.ndarray:  # fmt: skip
    """Return why each junction is not used; the first rule that holds speaks."""
    reason = np.full(len(node), "", dtype=object)
    if not len(node):
        return reason
    members = np.concatenate([parent[:, None], daughters], axis=1)
    there = members >= 0

    def any_of(flag: np.ndarray) -> np.ndarray:
        return np.asarray((flag[members] & there).any(axis=1))

    incoming = np.bincount(rooting.downstream, minlength=graph.n_nodes)[node]
    free_um = graph.segment_sum(graph.step_um() * ~graph.point_in_zone)
    kind = graph.node_kind[rooting.downstream]
    cut = (graph.node_degree()[rooting.downstream] == 1) & (kind == NODE_KINDS.index("border"))
    short = cut & (free_um < 2 * np.nan_to_num(radius_um))
    in_zone = graph.segment_sum((~graph.point_in_zone).astype(float)) == 0
    rules = (
        (parent < 0, "the root lies here"),
        ((daughters >= 0).sum(axis=1) < 2, "fewer than two vessels leave"),
        (incoming > 1, "two vessels meet here (loop)"),
        (any_of(rooting.in_loop & ~rooting.by_flow), "no flow gives the direction on a loop"),
        (any_of(~graph.segment_resolved), "a vessel is not resolved"),
        (any_of(in_zone), "a vessel lies wholly in the junction's zone"),
        ((short[daughters] & (daughters >= 0)).any(axis=1), "a daughter is cut within two radii"),
        (any_of(~(radius_um > 0)), "a radius is unknown"),
    )
    for holds, text in reversed(rules):
        reason[holds] = text
    return reason


def _common_band(found: Junctions, level: float) -> tuple[float, float]:
    """Pooled exponents with all radii shifted by their systematic error, down and up."""
    a0, a, s0, s = found.relative(found.used)
    shift0, shift = found.parent_common[found.used], found.daughter_common[found.used]
    values = []
    for sign in (-1.0, 1.0):
        by = sign * _z(level)
        if not shift0.any() and not np.nan_to_num(shift).any():
            return float("nan"), float("nan")
        # A shift as large as the radius itself would leave nothing to take a logarithm of.
        parent, daughters = (
            np.maximum(a0 + by * shift0, 0.05 * a0),
            np.maximum(a + by * shift, 0.05 * a),
        )
        exponent = pooled_exponent(parent, daughters, s0, s, level=level).exponent
        values.append(exponent.value if isinstance(exponent, Estimate) else float("nan"))
    return values[0], values[1]


def _signed_rank(values: np.ndarray) -> float:
    # Exact radii leave only rounding, which has no ranks.
    values = values[np.abs(values) > 1e-12]
    if len(values) < 3:
        return float("nan")
    from scipy.stats import wilcoxon  # noqa: PLC0415 - heavy to import

    return float(wilcoxon(values).pvalue)


def _median(values: np.ndarray, level: float, reason: str) -> Estimate | Undefined:
    """Median with its distribution-free interval (order statistics, binomial)."""
    values = np.sort(values[np.isfinite(values)])
    n = len(values)
    if not n:
        return Undefined(reason or "no junction")
    from scipy.stats import binom  # noqa: PLC0415 - heavy to import

    k = int(binom.ppf((1 - level) / 2, n, 0.5))
    middle = float(np.median(values))
    # The k-th value from either end; none where even the extremes do not reach the level.
    low, high = (values[k - 1], values[n - k]) if k > 0 else (np.nan, np.nan)
    return Estimate(middle, float(low), float(high), level)


def _z(level: float) -> float:
    from scipy.stats import norm  # noqa: PLC0415 - heavy to import

    return float(norm.ppf(0.5 + level / 2))


def _maybe(numbers: np.ndarray) -> pd.Series:
    """Whole numbers with empty cells in place of the negative ones."""
    return pd.Series(numbers, dtype="Int64").where(pd.Series(numbers >= 0))


def _cells(values: np.ndarray, real: np.ndarray, form: str) -> list[str]:
    return [
        " ".join(format(v, form) for v in row[keep].tolist())
        for row, keep in zip(values, real, strict=True)
    ]
