"""The interactive 3-D graph: plain JSON for plotly, built without its slow validators."""

import json
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from ..line import Results

__all__ = ["plotly_script", "scene_json"]

_QUANTITIES = (
    ("radius_um", "radius in um"), ("order", "order"), ("flow_um3_per_s", "flow in um3/s"),
    ("wall_shear_stress_pa", "wall shear stress in Pa"), ("resistance_share", "share of the resistance"),
    ("doubt", "relative uncertainty of the radius"),
)  # fmt: skip
_SHOWN = (
    "segment_id", "length_um", "radius_um", "radius_um_low", "radius_um_high", "voxels_across", "order",
    "strahler", "flow_um3_per_s", "wall_shear_stress_pa", "resistance_share", "review",
)  # fmt: skip
_MOST_POINTS = 120_000


@cache
def plotly_script() -> str:
    """Return plotly's own script, shipped in its package."""
    return (files("plotly") / "package_data" / "plotly.min.js").read_text(encoding="utf-8")


def scene_json(results: "Results") -> str:
    """Return lines, colours for each quantity and the segments' figures as JSON.

    With more points than can be shown smoothly, points along the segments are left out and `thinned`
    says how many.
    """
    graph, table = results.graph, results.tables["segments"]
    every = max(1, int(np.ceil(graph.n_points / _MOST_POINTS)))
    keep = np.zeros(graph.n_points, bool)
    keep[::every] = True
    keep[graph.point_offsets[:-1]] = keep[graph.point_offsets[1:] - 1] = True
    owner = graph.point_segment[keep]
    position = np.round(graph.point_position_um[keep], 2)
    # A gap after each segment: one trace for all lines.
    last = np.flatnonzero(np.r_[np.diff(owner) != 0, True])
    place = np.arange(len(owner)) + np.searchsorted(last, np.arange(len(owner)), side="left")
    size = len(owner) + len(last)
    xyz: list[list[float | None]] = []
    for a in (2, 1, 0):
        column: list[float | None] = [None] * size
        for p, v in zip(place.tolist(), position[:, a].tolist(), strict=True):
            column[p] = v
        xyz.append(column)
    full_owner = np.full(size, -1)
    full_owner[place] = owner
    full_owner[full_owner < 0] = owner[last]
    half = (table["radius_um_high"] - table["radius_um_low"]) / 2
    table = table.assign(doubt=half / table["radius_um"])
    colours = {}
    for name, label in _QUANTITIES:
        value = table[name].astype(float)
        if name in ("flow_um3_per_s", "resistance_share", "radius_um"):
            value = np.log10(value.abs().where(value.abs() > 0))
            label = f"log10 of {label}"
        if value.notna().any():
            colours[name] = {"label": label, "value": _numbers(value.to_numpy(dtype=float))}
    shown = {
        c: _numbers(table[c].to_numpy(dtype=float)) if table[c].dtype.kind in "iuf" else table[c].astype(str).tolist()
        for c in _SHOWN
    }
    data: dict[str, Any] = {
        "x": xyz[0], "y": xyz[1], "z": xyz[2], "owner": full_owner.tolist(), "colours": colours,
        "segments": shown, "thinned": every,
    }  # fmt: skip
    # In a script element "</" would end it.
    return json.dumps(data, separators=(",", ":"), allow_nan=False).replace("</", "<\\/")


def _numbers(values: np.ndarray) -> list[float | None]:
    return [float(f"{v:.5g}") if np.isfinite(v) else None for v in values.tolist()]
