"""The report's charts: each a figure, or the reason why there is none to draw."""

from typing import TYPE_CHECKING, Any

import numpy as np

from ..quantities import pa_to_mmhg
from .canvas import BLUE, GREEN, INK, ORANGE, SOFT, chart, key, length_unit, log_ticks, readable
from .content import ReportContent, estimate, numbers, plain_name

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "cube_law", "cube_residuals", "dominance", "order_chart", "planes", "pressures", "radii",
    "radius_methods", "resistances", "thickness", "twin_errors",
]  # fmt: skip

_MOST_DOTS = 4000
_ORDER = "order (diameter-defined)"


def radii(content: ReportContent) -> "Figure | str":
    """Draw length by radius, what the image resolves apart from what it does not."""
    graph = content.graph
    radius, weight = graph.point_radius_um, graph.point_weight_um() / 1000
    use = np.isfinite(radius) & (radius > 0) & ~graph.point_in_zone
    if not use.any():
        return "no radius is known outside the junctions' zones"
    resolved = graph.segment_resolved[graph.point_segment]
    low, high = radius[use].min(), radius[use].max()
    edges = np.geomspace(low * 0.97, high * 1.03, 31)
    figure, axes = chart("Length by radius", x="radius in µm", y="length in mm", log="x")
    below = np.zeros(len(edges) - 1)
    for group, colour, name in (
        (use & resolved, BLUE, "resolved"), (use & ~resolved, ORANGE, "too thin to size"),
    ):  # fmt: skip
        if group.any():
            top = below + np.histogram(radius[group], bins=edges, weights=weight[group])[0]
            axes.stairs(top, edges, baseline=below, fill=True, color=colour, label=name)
            below = top
    axes.set_ylim(0, None)
    limit = estimate(content.summary.get("smallest_resolved_radius_um"))[0]
    if np.isfinite(limit):
        axes.axvline(limit, color=INK, linewidth=1.2, linestyle=(0, (4, 2)))
        words = f"smallest resolved radius {readable(limit)} µm"
        axes.plot([], [], color=INK, linewidth=1.2, linestyle=(0, (4, 2)), label=words)
    log_ticks(axes, "x")
    key(axes)
    return figure


def radius_methods(content: ReportContent) -> "Figure | str":
    """Compare the distance map's radii with those from the grey values."""
    graph = content.graph
    both = np.isfinite(graph.point_radius_um) & np.isfinite(graph.point_radius_map_um)
    both &= ~graph.point_in_zone & (graph.point_radius_um > 0) & (graph.point_radius_map_um > 0)
    if both.sum() < 2:
        return "there are not two kinds of radii to compare"
    index = np.flatnonzero(both)[:: max(1, int(both.sum()) // _MOST_DOTS)]
    measured, mapped = graph.point_radius_um[index], graph.point_radius_map_um[index]
    figure, axes = chart(
        "Two kinds of radii", x="radius from the grey values in µm",
        y="radius from the distance map in µm", log="xy",
    )  # fmt: skip
    axes.plot(measured, mapped, "o", color=BLUE, markersize=2, alpha=0.35, markeredgewidth=0)
    ends = [min(measured.min(), mapped.min()), max(measured.max(), mapped.max())]
    axes.plot(ends, ends, color=INK, linewidth=1, label="equal")
    log_ticks(axes, "x")
    log_ticks(axes, "y")
    key(axes)
    return figure


def planes(content: ReportContent) -> "Figure | str":
    """Draw vessel contrast and mean grey value along z, each as a share of its largest."""
    contrast = np.asarray(content.profiles.get("contrast_by_plane", ()), dtype=float)
    if len(contrast) < 3 or not np.nanmax(contrast, initial=0.0) > 0:
        return "there is no image, or it has fewer than three planes"
    spacing_um = content.graph.spacing_um[0]
    unit, um = length_unit(len(contrast) * spacing_um)
    figure, axes = chart("Attenuation along z", x=f"z in {unit}", y="share of the brightest plane")
    axes.plot(
        np.arange(len(contrast)) * spacing_um / um, contrast / np.nanmax(contrast), color=BLUE,
        linewidth=1.6, label="vessel contrast",
    )  # fmt: skip
    grey = np.asarray(content.profiles.get("mean_by_plane", ()), dtype=float)
    if len(grey) and np.nanmax(grey) > 0:
        axes.plot(
            np.arange(len(grey)) * spacing_um / um, grey / np.nanmax(grey), color=GREEN,
            linewidth=1.2, linestyle=(0, (5, 2)), label="mean grey value",
        )  # fmt: skip
    axes.set_ylim(min(0.0, *axes.get_ylim()), 1.08)
    key(axes)
    return figure


def thickness(content: ReportContent) -> "Figure | str":
    """Draw the radius along z: median and quartiles, weighted by length."""
    graph = content.graph
    z, radius = graph.point_position_um[:, 0], graph.point_radius_um
    weight = graph.point_weight_um()
    use = np.isfinite(radius) & (radius > 0) & (weight > 0)
    if use.sum() < 20 or np.ptp(z[use]) == 0:
        return "too few radii along z"
    edges = np.linspace(z[use].min(), z[use].max(), 13)
    slot = np.clip(np.searchsorted(edges, z[use], side="right") - 1, 0, 11)
    rows = [
        (
            0.5 * (edges[k] + edges[k + 1]),
            *_quantiles(radius[use][slot == k], weight[use][slot == k]),
        )
        for k in range(12)
        if (slot == k).sum() >= 3
    ]
    middle, low, median, high = np.array(rows).T
    unit, um = length_unit(float(np.ptp(z[use])))
    figure, axes = chart("Thickness along z", x=f"z in {unit}", y="radius in µm", log="y")
    middle = middle / um
    axes.fill_between(middle, low, high, color=BLUE, alpha=0.18, linewidth=0, label="quartiles")
    axes.plot(middle, median, "o-", color=BLUE, markersize=3.5, linewidth=1.2, label="median")
    log_ticks(axes, "y")
    key(axes)
    return figure


def _quantiles(values: np.ndarray, weight: np.ndarray) -> np.ndarray:
    """Return the weighted quartiles and median."""
    order = np.argsort(values, kind="stable")
    share = (np.cumsum(weight[order]) - 0.5 * weight[order]) / weight.sum()
    return np.asarray(np.interp([0.25, 0.5, 0.75], share, values[order]))


def order_chart(
    content: ReportContent, column: str, *, title: str, y: str, spread: str = "", ratio: str = ""
) -> "Figure | str":
    """Draw one column of the orders' table on a log scale, with the fitted ratio's line.

    Parameters
    ----------
    column, spread : str
        Columns of the value and of its standard deviation.
    ratio : str
        The figure of the summary that holds the ratio from order to order; empty: none is fitted.
    """
    table = content.table("orders")
    order, value = numbers(table, "order"), numbers(table, column)
    use = np.isfinite(order) & np.isfinite(value) & (value > 0)
    if use.sum() < 2:
        return "fewer than two orders have a value"
    order, value = order[use], value[use]
    figure, axes = chart(title, x=_ORDER, y=y, log="y")
    _ratio_line(axes, order, value, content.summary.get(ratio) if ratio else None)
    deviation = np.nan_to_num(numbers(table, spread)[use]) if spread else np.zeros(len(value))
    # Towards zero a bar on a log scale has no end: it stops at a tenth of the mean.
    axes.errorbar(
        order, value, yerr=[np.minimum(deviation, 0.9 * value), deviation], fmt="o", color=BLUE,
        markersize=5, elinewidth=1, capsize=2.5, label="mean ± SD" if spread else None,
    )  # fmt: skip
    axes.set_xticks(np.unique(order))
    axes.set_xlim(order.min() - 0.4, order.max() + 0.4)
    axes.margins(y=0.12)
    log_ticks(axes, "y")
    key(axes)
    return figure


def _ratio_line(axes: "Axes", order: np.ndarray, value: np.ndarray, entry: Any) -> None:
    ratio, low, high = estimate(entry)
    if not (np.isfinite(ratio) and ratio > 0):
        return
    # Numbers fall from order to order, sizes grow: the ratio is given as above 1.
    falls = np.polyfit(order, np.log(value), 1)[0] < 0
    slope = np.log(ratio) * (-1 if falls else 1)
    line = np.exp(np.log(value).mean() + slope * (order - order.mean()))
    words = f"ratio {readable(ratio)}"
    if np.isfinite(low) and np.isfinite(high):
        words += f" ({readable(low)} to {readable(high)})"
    axes.plot(order, line, color=ORANGE, linewidth=1.4, label=words)


def cube_law(content: ReportContent) -> "Figure | str":
    """Draw daughters' summed cubes over the parent's cube, with exponent 3 and the pooled one."""
    table = content.table("junctions")
    parent = numbers(table, "parent_radius_um") ** 3
    total = parent * (1 + numbers(table, "cube_residual"))
    known = np.isfinite(parent) & np.isfinite(total) & (parent > 0) & (total > 0)
    if not known.any():
        return "no junction has a parent and measured daughters"
    figure, axes = chart(
        "Cube law at the junctions", x="cube of the parent's radius in µm³",
        y="sum of the daughters' cubes in µm³", log="xy",
    )  # fmt: skip
    span = np.array([parent[known].min() * 0.7, parent[known].max() * 1.4])
    axes.plot(span, span, color=INK, linewidth=1, label="exponent 3")
    _exponent_line(axes, span, content.summary.get("junction_exponent"))
    used = known & _used(content)
    axes.plot(parent[used], total[used], "o", color=BLUE, markersize=4, alpha=0.8, label="used")
    rest = known & ~used
    if rest.any():
        axes.plot(
            parent[rest], total[rest], "o", markerfacecolor="none", color=SOFT, markersize=4,
            label="not used",
        )  # fmt: skip
    log_ticks(axes, "x")
    log_ticks(axes, "y")
    key(axes)
    return figure


def _exponent_line(axes: "Axes", span: np.ndarray, entry: Any) -> None:
    value, low, high = estimate(entry)
    if not (np.isfinite(value) and value > 0):
        return
    # Equal daughters under exponent g carry 2**(1 - 3 / g) of the parent's cube.
    factor = [2 ** (1 - 3 / max(g, 0.1)) for g in (value, low, high)]
    words = f"pooled {readable(value)} (equal daughters)"
    axes.plot(span, factor[0] * span, color=ORANGE, linewidth=1.4, label=words)
    if np.isfinite(factor).all():
        axes.fill_between(
            span, factor[1] * span, factor[2] * span, color=ORANGE, alpha=0.2, linewidth=0
        )


def cube_residuals(content: ReportContent) -> "Figure | str":
    """Draw the residuals of the cube law by the parent's order, and their medians."""
    table, segments = content.table("junctions"), content.table("segments")
    residual = numbers(table, "cube_residual_log")
    parent = numbers(table, "parent_segment")
    orders = numbers(segments, "order")
    known = np.isfinite(residual) & (parent >= 0) & (parent < len(orders)) & _used(content)
    if not known.any():
        return "no junction that is used has a residual"
    order = orders[parent[known].astype(int)]
    ordered = order >= 1
    residual, order = residual[known][ordered], order[ordered]
    if not len(order):
        return "no parent has an order"
    figure, axes = chart(
        "Residuals of the cube law", x="order of the parent", y="ln of the cubes' ratio",
    )  # fmt: skip
    axes.axhline(0, color=INK, linewidth=1)
    jitter = (np.arange(len(order)) * 7 % 11 - 5) * 0.035
    axes.plot(order + jitter, residual, "o", color=BLUE, markersize=3.5, alpha=0.6)
    for k in np.unique(order):
        middle = float(np.median(residual[order == k]))
        axes.plot([k - 0.3, k + 0.3], [middle, middle], color=ORANGE, linewidth=2)
    axes.plot([], [], color=ORANGE, linewidth=2, label="median")
    axes.yaxis.set_major_formatter(lambda value, _: readable(value))
    axes.set_xticks(np.unique(order))
    axes.set_xlim(order.min() - 0.6, order.max() + 0.6)
    key(axes)
    return figure


def _used(content: ReportContent) -> np.ndarray:
    table = content.table("junctions")
    if "used" not in table:
        return np.ones(len(table), dtype=bool)
    return table["used"].fillna(value=False).to_numpy(dtype=bool)


def pressures(content: ReportContent) -> "Figure | str":
    """Draw the mean pressure at the vessels' upstream and downstream ends, by order."""
    table = content.table("orders")
    order, entry, leave = (
        numbers(table, c) for c in ("order", "pressure_in_pa", "pressure_out_pa")
    )
    known = np.isfinite(entry) & np.isfinite(leave)
    if not known.any():
        return "no order carries flow"
    figure, axes = chart(
        "Pressure by order", x=f"{_ORDER}, the inlet's on the left", y="mean pressure in Pa (mmHg)"
    )
    axes.plot(
        order[known], entry[known], "o-", color=BLUE, markersize=5, linewidth=1.2,
        label="upstream ends",
    )  # fmt: skip
    axes.plot(
        order[known], leave[known], "s--", color=ORANGE, markersize=4.5, linewidth=1.2,
        label="downstream ends",
    )  # fmt: skip
    axes.set_xticks(order[known])
    axes.set_xlim(order[known].max() + 0.5, order[known].min() - 0.5)
    axes.yaxis.set_major_formatter(lambda pa, _: f"{pa:,.0f} ({pa_to_mmhg(pa):.0f})")
    axes.set_position((0.225, 0.16, 0.745, 0.7))
    axes.yaxis.set_label_coords(-0.235, 0.5)
    key(axes)
    return figure


def dominance(content: ReportContent) -> "Figure | str":
    """Draw how few segments hold how much of the resistance."""
    share = numbers(content.table("segments"), "resistance_share")
    share = np.sort(share[np.isfinite(share) & (share > 0)])[::-1]
    if not len(share):
        return "no segment carries flow"
    figure, axes = chart(
        "Vessels that decide the resistance", x="number of segments, the largest shares first",
        y="share of the resistance", log="x",
    )  # fmt: skip
    count = np.arange(1, len(share) + 1)
    axes.plot(count, np.cumsum(share), color=BLUE, linewidth=1.8, label="cumulative share")
    effective = estimate(content.summary.get("effective_segments"))[0]
    if np.isfinite(effective):
        words = f"effective segments {readable(effective)}"
        axes.axvline(effective, color=ORANGE, linewidth=1.4, label=words)
    axes.set_ylim(0, 1.04)
    axes.set_xlim(0.9, max(len(share), 2) * 1.1)
    log_ticks(axes, "x")
    key(axes)
    return figure


def resistances(content: ReportContent) -> "Figure | str":
    """Draw the resistance under each outlet rule and viscosity law, with both intervals."""
    table = content.table("resistance")
    name = "resistance_pa_s_per_m3"
    value = numbers(table, name)
    known = np.flatnonzero(np.isfinite(value) & (value > 0))
    if not len(known):
        return "no path joins the inlet to an outlet"
    figure, axes = chart("Resistance by outlet rule and viscosity", x="Pa s/m³", y="", log="x")
    axes.set_position((0.4, 0.16, 0.57, 0.7))
    rows = np.arange(len(known))
    for suffix, colour, width, words in (
        ("_common", ORANGE, 5.0, "shared error"), ("", BLUE, 1.6, "random error"),
    ):  # fmt: skip
        low, high = (numbers(table, f"{name}{suffix}_{end}")[known] for end in ("low", "high"))
        if np.isfinite(low).any():
            axes.hlines(
                rows, low, high, color=colour, linewidth=width, label=words,
                alpha=0.45 if suffix else 1.0,
            )  # fmt: skip
    axes.plot(value[known], rows, "o", color=BLUE, markersize=5)
    names = [
        f"{plain_name(table['outlet_rule'].iloc[k])}, {plain_name(table['viscosity'].iloc[k])}"
        for k in known
    ]
    axes.set_yticks(rows, names)
    axes.set_ylim(len(known) - 0.4, -0.6)
    left, right = axes.get_xlim()
    axes.set_xlim(left * 0.8, right * 1.25)
    log_ticks(axes, "x")
    key(axes)
    return figure


def twin_errors(content: ReportContent) -> "Figure | str":
    """Draw the errors of the twin's radii by their true size."""
    rows = (content.twin or {}).get("radius_classes") or []
    if not rows:
        return "no radius of a twin could be compared"
    labels = [_class_name(row["low_voxels"], row["high_voxels"]) for row in rows]
    median = np.array([100 * row["median"] for row in rows])
    spread = np.array([100 * row["p90_absolute"] for row in rows])
    place = np.arange(len(rows))
    figure, axes = chart("Errors of the twin's radii", x="true radius in voxels", y="error in %")
    axes.axhline(0, color=INK, linewidth=1)
    axes.vlines(place, -spread, spread, color=BLUE, linewidth=6, alpha=0.25, label="90 % within")
    axes.plot(place, median, "o", color=BLUE, markersize=5, label="median")
    axes.set_xticks(place, labels)
    axes.set_xlim(-0.6, len(rows) - 0.4)
    key(axes)
    return figure


def _class_name(low: float, high: float) -> str:
    return f"{low:g} and more" if high > 1e6 else f"{low:g} to {high:g}"
