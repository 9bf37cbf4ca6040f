"""The report's words: definitions, and the sample's figures as rows for reading."""

from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..quantities import pa_to_mmhg
from ..trust.flags import FLAG_RULES, Flag, FlagRule, rule_of
from .canvas import readable
from .content import ReportContent, estimate, numbers, plain_name

__all__ = [
    "CAUTION", "DEFINITIONS", "Row", "by_axis", "dominant_rows", "edit_rows", "figure_groups",
    "flag_rows", "headline", "resistance_rows", "rule_rows", "subtitle", "verdict",
]  # fmt: skip

CAUTION = (
    "Research software: not a medical device, not for diagnosis or treatment decisions. Follow your"
    " laboratory's and local rules for human and animal data, and have clinical questions answered"
    " by licensed professionals."
)

DEFINITIONS = {
    "segment": "vessel between two nodes, which are junctions, ends, or cuts by the volume's edge",
    "total length": "sum of the centrelines' arc lengths from node to node",
    "length density": "total length over the stack's volume",
    "vessel volume fraction": "share of the stack's voxels that are lumen",
    "free ends": "nodes with one segment; in brackets those that the volume's edge cuts",
    "loops": "segments less nodes plus connected parts",
    "radius": "radius of the circle with the lumen's area, from the grey values, outside the zones"
    " of the junctions",
    "smallest resolved radius": "radius below which this image cannot size a vessel",
    "orders": "diameter-defined Strahler orders (Kassab et al. 1993), 1 for the thinnest",
    "element": "vessels of one order in series",
    "branching ratio": "how many times fewer elements an order has than the one below it",
    "diameter ratio": "how many times wider an order is than the one below it",
    "length ratio": "how many times longer an order's elements are than those of the one below it",
    "ordered share": "share of the length that has an order",
    "cube residual": "(sum of the daughters' radius³ less the parent's radius³) over the parent's"
    " radius³, median over junctions; 0 where the cube law holds",
    "junction exponent": "x in: sum of the daughters' radiusˣ = the parent's radiusˣ, pooled over"
    " junctions and corrected for errors of the radii",
    "plain exponent": "median over the junctions that have an exponent; radius errors bias it",
    "area ratio": "sum of the daughters' radius² over the parent's radius², median over junctions",
    "hindrance": "(8 / π) times the integral of ds / radius⁴, solved from the inlet to all outlets"
    " at one pressure: the resistance at a viscosity of 1, a figure of geometry alone",
    "resistance": "pressure drop over flow, with the configured viscosity",
    "effective segments": "1 / sum of squared resistance shares: how many segments decide",
    "resistance share": "share of the flow's dissipation that takes place in a segment",
    "wall shear stress": "4 viscosity flow / (π radius³)",
    "cost excess": "Murray's cost of the network over the least cost for the same flows, less 1",
    "trunk taper": "B in: area = area at the inlet times exp(-B distance / radius at the inlet)",
    "interval": "95 %; random errors of the radii, and where stated the errors they share",
}

_GROUPS: dict[str, tuple[tuple[str, str, str, str], ...]] = {
    "Size": (
        ("segments", "segments", "", "segment"), ("junctions", "junctions", "", ""),
        ("free ends", "ends", "", "free ends"), ("connected parts", "components", "", ""),
        ("loops", "loops", "", "loops"), ("total length", "total_length_um", "µm", "total length"),
        ("length density", "length_density_per_mm2", "mm/mm³", "length density"),
        ("vessel volume fraction", "vessel_volume_fraction", "", "vessel volume fraction"),
        ("median radius", "radius_median_um", "µm", "radius"),
        (
            "smallest resolved radius", "smallest_resolved_radius_um", "µm",
            "smallest resolved radius",
        ),
    ),
    "Orders": (
        ("orders", "orders", "", "orders"),
        ("branching ratio", "branching_ratio", "", "branching ratio"),
        ("diameter ratio", "diameter_ratio", "", "diameter ratio"),
        ("length ratio", "length_ratio", "", "length ratio"),
        ("segments per element", "segments_per_element", "", "element"),
        ("ordered share of the length", "ordered_fraction", "", "ordered share"),
        ("trunk taper", "trunk_taper_b", "", "trunk taper"),
    ),
    "Law of branching": (
        ("junction exponent", "junction_exponent", "", "junction exponent"),
        ("plain exponent", "junction_exponent_plain", "", "plain exponent"),
        ("cube residual", "cube_residual_median", "", "cube residual"),
        ("area ratio", "area_ratio_median", "", "area ratio"),
        ("junctions used", "junctions_used", "", ""),
        ("share without an exponent", "junctions_unsolvable", "", ""),
        ("the same, expected from radius errors alone", "junctions_unsolvable_expected", "", ""),
    ),
    "Flow": (
        ("hindrance", "network_hindrance_per_um3", "µm⁻³", "hindrance"),
        ("resistance", "network_resistance_pa_s_per_m3", "Pa s/m³", "resistance"),
        ("inlet flow", "inlet_flow_um3_per_s", "µm³/s", ""),
        ("effective segments", "effective_segments", "", "effective segments"),
        ("cost excess", "murray_cost_excess", "", "cost excess"),
    ),
}  # fmt: skip
_HEADLINE = (
    "resistance", "hindrance", "junction exponent", "orders", "total length", "median radius",
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class Row:
    """One figure for reading."""

    name: str
    value: str
    interval: str
    unit: str
    reason: str
    meaning: str


def verdict(flags: Sequence[Flag]) -> tuple[str, str]:
    """Return the worst severity ("pass" without one) and what it asks for.

    Examples
    --------
    >>> verdict([])[0]
    'pass'
    """
    severities = {flag.severity for flag in flags}
    if "reject" in severities:
        return "reject", "Reject, unless the flags below can be answered"
    if "check" in severities:
        return "check", "Check the flags below before the sample enters a study"
    return "pass", "No flag speaks against this sample"


def subtitle(content: ReportContent) -> str:
    """Return what was measured in one line."""
    summary = content.summary
    shape, spacing = summary.get("shape"), summary.get("spacing_um")
    if not shape or not spacing:
        return "A vessel graph whose radii were given; there is no image."
    origin = sorted(set(summary.get("spacing_origin") or []))
    known = f" (spacing from the {' and the '.join(origin)})" if origin else ""
    return f"{by_axis(shape)} voxels of {by_axis(spacing)} µm along z, y, x{known}."


def by_axis(values: Sequence[float]) -> str:
    """Return three sizes as they are spoken.

    Examples
    --------
    >>> by_axis([96, 192, 1920]).encode("ascii", "replace")
    b'96 ? 192 ? 1,920'
    """
    return " \N{MULTIPLICATION SIGN} ".join(readable(v, 4) for v in values)


def figure_groups(content: ReportContent) -> dict[str, list[Row]]:
    """Return all figures of the summary by subject."""
    return {
        group: [_row(content.summary, *line) for line in lines] for group, lines in _GROUPS.items()
    }


def headline(groups: Mapping[str, Sequence[Row]]) -> list[Row]:
    """Return the figures that are asked for first."""
    by_name = {row.name: row for rows in groups.values() for row in rows}
    return [by_name[name] for name in _HEADLINE]


def _row(summary: Mapping[str, Any], name: str, key: str, unit: str, meaning: str) -> Row:
    entry = summary.get(key)
    value, low, high = estimate(entry)
    reason = str(entry.get("reason") or "") if isinstance(entry, Mapping) else ""
    if np.isfinite(value) and unit == "µm" and abs(value) >= 1e4:
        value, low, high, unit = value / 1e3, low / 1e3, high / 1e3, "mm"
    known = bool(np.isfinite([low, high]).all())
    interval = f"{readable(low, zeros=True)} to {readable(high, zeros=True)}" if known else ""
    shown = readable(value, zeros=known) if np.isfinite(value) else "not defined"
    if isinstance(entry, int):
        shown = readable(entry)
    if key == "ends" and summary.get("border_ends") is not None:
        shown += f" ({summary['border_ends']} at the border)"
    unit = unit if np.isfinite(value) else ""
    return Row(name, shown, interval, unit, reason, DEFINITIONS.get(meaning, ""))


def flag_rows(flags: Sequence[Flag]) -> Iterator[dict[str, str]]:
    """Yield each flag with value and limit in its unit, the limit's source and where to look."""
    known = {rule.code for rule in FLAG_RULES}
    for flag in flags:
        row = {"severity": flag.severity, "code": flag.code, "message": flag.message}
        if flag.code not in known:
            yield row | {"value": readable(flag.value), "limit": readable(flag.limit)}
            continue
        rule = rule_of(flag.code)
        side = "at most " if rule.side == "above" else "at least "
        side = "" if rule.unit == "yes or no" else side
        yield row | {
            "value": _in_unit(flag.value, rule), "limit": side + _in_unit(flag.limit, rule),
            "source": rule.source, "section": rule.section,
        }  # fmt: skip


def rule_rows(facts: Mapping[str, Any]) -> Iterator[dict[str, str]]:
    """Yield every rule with what this sample has and how it was judged."""
    for rule in FLAG_RULES:
        value = estimate(facts.get(rule.fact))[0]
        flag = rule.judged(value) if np.isfinite(value) else None
        outcome = (flag.severity if flag else "passed") if np.isfinite(value) else "not judged"
        limits = ", ".join(f"{s} {rule.side} {_in_unit(v, rule)}" for s, v in rule.limits)
        yield {
            "code": rule.code.replace("_", " "), "value": _in_unit(value, rule), "limits": limits,
            "outcome": outcome, "source": rule.source,
        }  # fmt: skip


def _in_unit(value: float, rule: FlagRule) -> str:
    if not np.isfinite(value):
        return "\N{EN DASH}"
    if rule.unit == "share":
        return f"{readable(100 * value)} %"
    if rule.unit == "yes or no":
        return "yes" if value > 0.5 else "no"
    return f"{readable(value)} times" if rule.unit == "times" else readable(value)


def dominant_rows(content: ReportContent) -> Iterator[dict[str, str]]:
    """Yield the segments that decide the resistance, with the place to look at."""
    table, graph = content.table("segments"), content.graph
    for segment in content.summary.get("dominant_segments") or []:
        if not 0 <= segment < min(len(table), graph.n_segments):
            continue
        row = table.iloc[[segment]]
        value = {name: float(numbers(row, name)[0]) for name in _DOMINANT}
        points = graph.points_of(segment)
        middle = graph.point_position_um[(points.start + points.stop) // 2]
        low, high = value["radius_um_low"], value["radius_um_high"]
        interval = f" ({readable(low)} to {readable(high)})" if np.isfinite(low + high) else ""
        review = row["review"].iloc[0] if "review" in row else ""
        yield {
            "segment": str(segment), "share": f"{100 * value['resistance_share']:.1f} %",
            "radius": readable(value["radius_um"]) + interval,
            "length": readable(value["length_um"]), "across": readable(value["voxels_across"]),
            "order": readable(value["order"]), "place": ", ".join(f"{v:,.0f}" for v in middle),
            "review": review if isinstance(review, str) else "",
        }  # fmt: skip


_DOMINANT = (
    "resistance_share", "radius_um", "radius_um_low", "radius_um_high", "length_um",
    "voxels_across", "order",
)  # fmt: skip


def resistance_rows(content: ReportContent) -> Iterator[dict[str, str]]:
    """Yield hindrance and resistance under each outlet rule and viscosity law."""
    table = content.table("resistance")
    names = ("hindrance_per_um3", "resistance_pa_s_per_m3")
    ends = {
        name: {s: (numbers(table, f"{name}{s}_low"), numbers(table, f"{name}{s}_high"))
               for s in ("", "_common")}
        for name in names
    }  # fmt: skip
    for k in range(len(table)):
        resistance = float(numbers(table, names[1])[k])
        row = {
            "rule": plain_name(table["outlet_rule"].iloc[k]),
            "viscosity": plain_name(table["viscosity"].iloc[k]),
            "outlets": readable(float(numbers(table, "n_outlets")[k])),
            "hindrance": readable(float(numbers(table, names[0])[k])),
            "resistance": readable(resistance),
            # 1 Pa s/m3 is 1e-9 Pa s/uL.
            "mmhg": readable(pa_to_mmhg(resistance) * 1e-9),
        }
        for suffix, name in (("", "random"), ("_common", "shared")):
            low, high = (float(v[k]) for v in ends[names[1]][suffix])
            known = np.isfinite(low) and np.isfinite(high)
            row[name] = f"{readable(low)} to {readable(high)}" if known else "\N{EN DASH}"
        yield row


def edit_rows(edits: Sequence[Mapping[str, Any]]) -> list[tuple[str, str, int]]:
    """Return what was changed, by whom, and how often.

    Examples
    --------
    >>> edit_rows([{"op": "remove", "reason": "spur", "author": "auto"}] * 2)
    [('remove: spur', 'automatic', 2)]
    """
    counts = Counter(
        (
            f"{edit.get('op', 'edit')}: {edit.get('reason', '')}".rstrip(": "),
            "automatic" if edit.get("author") == "auto" else "by hand",
        )
        for edit in edits
    )
    return [(what, who, n) for (what, who), n in sorted(counts.items())]
