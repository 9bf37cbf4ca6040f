"""`report.html`: one file that opens with no network, and the figures it shows."""

import base64
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from ..quantities import pa_to_mmhg
from .figures import figures
from .scene import plotly_script, scene_json

if TYPE_CHECKING:
    from ..line import Results

__all__ = ["CAUTION", "write_report"]

CAUTION = (
    "Research software: not a medical device, not for diagnosis or treatment decisions. Follow your"
    " laboratory's and local rules for human and animal data, and have clinical questions answered by"
    " licensed professionals."
)

_DEFINITIONS = {
    "total length": "sum of the centrelines' arc lengths, from node to node",
    "median radius": "median over segments of the mean lumen radius outside junction zones",
    "orders": "diameter-defined Strahler orders (Kassab 1993)",
    "branching ratio": "10 to the power of minus the slope of log10 number of elements on order",
    "junction exponent": "x in: sum of daughters' radius^x = parent's radius^x, pooled and corrected for radius errors",
    "plain exponent": "median over the junctions that have an exponent; biased by radius errors",
    "cube residual": "(sum of daughters' radius^3 - parent's radius^3) / parent's radius^3, median",
    "area ratio": "sum of daughters' radius^2 / parent's radius^2, median",
    "hindrance": "(8 / pi) times the integral of ds / r^4, solved from the inlet to all outlets at one pressure; times viscosity it is the resistance",
    "resistance": "pressure drop over flow, with the configured viscosity",
    "effective segments": "1 / sum of squared resistance shares: how many segments decide the resistance",
    "cost excess": "Murray's cost of the network over its least cost for the same flows, less one",
    "trunk taper": "B in A = A0 exp(-B x / R0) along the trunk",
}


def write_report(
    results: "Results", *, summary: dict[str, Any], flags: list[Any], twin: dict[str, Any] | None, title: str,
    settings: str,
) -> dict[str, bytes]:  # fmt: skip
    """Return `report.html` and the figures as file contents.

    Parameters
    ----------
    results : Results
        What the line found.
    summary : dict
        As in summary.json.
    flags : list of Flag
        QC flags, most severe first.
    twin : dict, optional
        The twin's record.
    settings : str
        The configuration as TOML.
    """
    pictures = figures(results, summary)
    page = _template().render(
        title=title or summary["sample"], caution=CAUTION, verdict=_verdict(flags), flags=flags,
        figures={name.removesuffix(".png"): base64.b64encode(png).decode() for name, png in pictures.items()},
        rows=_rows(summary), dominant=_dominant(results, summary), resistance=_resistance(results), twin=twin,
        settings=settings, scene=scene_json(results), plotly=plotly_script(), summary=summary,
        reasons=_absent(results, pictures), edits=_edits(results),
    )  # fmt: skip
    return {"report.html": page.encode()} | {f"figures/{name}": png for name, png in pictures.items()}


@cache
def _template() -> Any:
    from jinja2 import Environment  # noqa: PLC0415 - heavy to import

    text = (files("ramulus.report") / "templates" / "report.html.j2").read_text(encoding="utf-8")
    environment = Environment(autoescape=True, trim_blocks=True, lstrip_blocks=True)
    environment.filters["short"] = _short
    return environment.from_string(text)


def _verdict(flags: list[Any]) -> dict[str, str]:
    severities = {f.severity for f in flags}
    if "reject" in severities:
        return {"class": "reject", "text": "Reject, unless the flags below can be answered"}
    if "check" in severities:
        return {"class": "check", "text": "Check the flags below before the sample enters the study"}
    return {"class": "pass", "text": "No flag speaks against this sample"}


def _short(value: Any) -> str:
    if value is None:
        return "not defined"
    if isinstance(value, float):
        return f"{value:.4g}"
    return str(value)


def _estimate(entry: Any) -> tuple[str, str]:
    """Text of a value with its interval, and the reason where it has none."""
    if isinstance(entry, dict):
        if entry.get("value") is None:
            return "not defined", entry.get("reason", "")
        text = f"{entry['value']:.4g}"
        if entry.get("low") is not None and entry["low"] == entry["low"]:  # noqa: PLR0124 - NaN
            text += f" ({entry['low']:.4g} to {entry['high']:.4g})"
        return text, entry.get("reason", "")
    return _short(entry), ""


def _rows(summary: dict[str, Any]) -> list[dict[str, str]]:
    flow = summary.get("inlet_flow_um3_per_s")
    items = [
        ("segments", summary["segments"], ""), ("junctions", summary["junctions"], ""),
        ("free ends (at the border)", f"{summary['ends']} ({summary['border_ends']})", ""),
        ("connected parts", summary["components"], ""), ("loops", summary["loops"], ""),
        ("total length", summary["total_length_um"] / 1000, "mm"),
        ("length density", summary.get("length_density_per_mm2"), "per mm2"),
        ("vessel volume fraction", summary.get("vessel_volume_fraction"), ""),
        ("median radius", summary["radius_median_um"], "um"),
        ("smallest radius that can be sized", summary.get("smallest_resolved_radius_um"), "um"),
        ("orders", summary["orders"], ""), ("branching ratio", summary["branching_ratio"], ""),
        ("diameter ratio", summary["diameter_ratio"], ""), ("length ratio", summary["length_ratio"], ""),
        ("segments per element", summary["segments_per_element"], ""),
        ("ordered share of the length", summary["ordered_fraction"], ""),
        ("junction exponent", summary["junction_exponent"], ""),
        ("plain exponent", summary["junction_exponent_plain"], ""),
        ("cube residual", summary["cube_residual_median"], ""),
        ("area ratio", summary["area_ratio_median"], ""),
        ("junctions used", summary["junctions_used"], ""),
        ("junctions without an exponent", summary["junctions_unsolvable"], ""),
        ("the same, expected from radius errors alone", summary["junctions_unsolvable_expected"], ""),
        ("hindrance", summary["network_hindrance_per_um3"], "per um3"),
        ("resistance", summary["network_resistance_pa_s_per_m3"], "Pa s/m3"),
        ("inlet flow", flow, "um3/s"), ("effective segments", summary["effective_segments"], ""),
        ("cost excess", summary["murray_cost_excess"], ""), ("trunk taper", summary["trunk_taper_b"], ""),
    ]  # fmt: skip
    rows = []
    for name, entry, unit in items:
        text, reason = _estimate(entry)
        rows.append({"name": name, "text": text, "unit": unit, "reason": reason, "meaning": _DEFINITIONS.get(name, "")})
    return rows


def _dominant(results: "Results", summary: dict[str, Any]) -> list[dict[str, Any]]:
    table = results.tables["segments"]
    chosen = table.iloc[summary["dominant_segments"]] if summary["dominant_segments"] else table.iloc[:0]
    out = []
    for row in chosen.to_dict("records"):
        a, b = (results.tables["nodes"].iloc[int(row[k])] for k in ("node_a", "node_b"))
        out.append(row | {"place": [0.5 * (a[c] + b[c]) for c in ("z_um", "y_um", "x_um")]})
    return out


def _resistance(results: "Results") -> list[dict[str, Any]]:
    rows = results.tables["resistance"].to_dict("records")
    return [r | {"mmhg": pa_to_mmhg(r["resistance_pa_s_per_m3"]) * 1e-9} for r in rows]


def _edits(results: "Results") -> list[tuple[str, int]]:
    counts: dict[str, int] = {}
    for edit in results.edits:
        counts[edit["reason"].split(" of ")[0]] = counts.get(edit["reason"].split(" of ")[0], 0) + 1
    return sorted(counts.items())


def _absent(results: "Results", pictures: dict[str, bytes]) -> dict[str, str]:
    """Why a figure is not there."""
    why = {
        "orders.png": "fewer than two orders: no ratio can be fitted",
        "cube_law.png": "no junction with a parent and measured daughters",
        "flow.png": "no flow: no path joins the inlet to an outlet",
        "planes.png": "no image, or too few planes",
        "projections.png": "no segment to draw", "radii.png": "no radius is known",
    }  # fmt: skip
    del results
    return {name.removesuffix(".png"): reason for name, reason in why.items() if name not in pictures}


