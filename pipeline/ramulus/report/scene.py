"""The interactive 3-D graph: plain data that the page's script turns into tubes.

Nothing goes through plotly's Python side; the page holds its script and these data, both deflated.
"""

import json
import zlib
from base64 import b64encode
from collections.abc import Iterator
from functools import cache
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from ..errors import UnusableInputError
from .canvas import length_unit
from .content import ReportContent, numbers
from .views import shown_segments

__all__ = ["QUANTITIES", "packed", "plotly_script", "scene", "scene_text"]

# Column, label, unit, whether the colours are logarithmic.
QUANTITIES = (
    ("radius_um", "radius", "µm", True),
    ("order", "order", "", False),
    ("pressure_pa", "pressure", "Pa", False),
    ("flow_um3_per_s", "flow", "µm³/s", True),
    ("wall_shear_stress_pa", "wall shear stress", "Pa", True),
    ("resistance_share", "share of the resistance", "", True),
    ("doubt", "doubt (half the radius interval over the radius)", "", False),
)
_SHOWN = (
    ("length_um", "length", "µm"), ("radius_um", "radius", "µm"),
    ("radius_um_low", "radius, low", "µm"), ("radius_um_high", "radius, high", "µm"),
    ("voxels_across", "voxels across", ""), ("tortuosity", "tortuosity", ""),
    ("order", "order", ""), ("strahler", "Strahler order", ""), ("generation", "generation", ""),
    ("pressure_pa", "pressure", "Pa"), ("flow_um3_per_s", "flow", "µm³/s"),
    ("velocity_um_per_s", "velocity", "µm/s"), ("wall_shear_stress_pa", "wall shear stress", "Pa"),
    ("resistance_share", "share of the resistance", ""),
)  # fmt: skip
_MOST_SEGMENTS = 8_000
_MOST_POINTS = 24_000
_LARGEST_SIDE = 320
_STEPS = 65535  # of a position, in 16 bits


def scene(content: ReportContent) -> dict[str, Any]:
    """Return the data of the 3-D view.

    Parameters
    ----------
    content : ReportContent
        The sample's results.

    Returns
    -------
    dict
        Ready for JSON; arrays are little-endian bytes in base64. `note` says what was left out
        where the graph is too large to be shown whole.
    """
    graph = content.graph
    segments = np.sort(shown_segments(graph, _MOST_SEGMENTS))
    index, counts, every = _kept_points(content, segments)
    table = _segment_values(content).iloc[segments]
    radius = graph.point_radius_um[index]
    mean = np.repeat(graph.segment_radius_um()[segments], counts)
    position = _positions(graph.point_position_um[index])
    return {
        "note": _note(graph.n_segments, len(segments), every),
        "segment": _array(segments, "<i4"),
        "count": _array(counts, "<i4"),
        "position": position,
        "radius": _array(np.where(np.isfinite(radius), radius, mean), "<f4"),
        "colours": [_colour(table, *quantity) for quantity in QUANTITIES],
        "shown": [
            {"label": label, "unit": unit, "values": _array(_short(numbers(table, name)), "<f4")}
            for name, label, unit in _SHOWN
            if np.isfinite(numbers(table, name)).any()
        ],
        "review": {str(k): text for k, text in _reviews(table, segments)},
        "images": {view: _image(image) for view, image in sorted(content.projections.items())},
        "spacing_um": list(graph.spacing_um),
        "unit": length_unit(_STEPS * position["step"]),
    }


def packed(text: str) -> str:
    """Return a text deflated, in base64: what the page's script unpacks.

    Examples
    --------
    >>> from base64 import b64decode
    >>> zlib.decompress(b64decode(packed("aaaa"))).decode()
    'aaaa'
    """
    return b64encode(zlib.compress(text.encode(), 5)).decode()


@cache
def plotly_script() -> str:
    """Return plotly's own script, as shipped in its package, packed.

    The package ships the full script alone (4.8 MB); packed it takes 2.0 MB of the page.
    """
    found = find_spec("plotly")  # without importing it, which takes as long as the packing
    if found is None or found.origin is None:
        msg = "the report needs the package 'plotly': pip install plotly"
        raise UnusableInputError(msg)
    script = Path(found.origin).parent / "package_data" / "plotly.min.js"
    return packed(script.read_text(encoding="utf-8"))


def scene_text(content: ReportContent) -> str:
    """Return the scene as packed JSON."""
    return packed(json.dumps(scene(content), separators=(",", ":"), allow_nan=False))


def _kept_points(
    content: ReportContent, segments: np.ndarray
) -> tuple[np.ndarray, np.ndarray, int]:
    """Return the points shown, how many of each segment, and that every so-manieth was taken."""
    graph = content.graph
    start, per = graph.point_offsets[segments], graph.points_per_segment[segments]
    room = max(_MOST_POINTS - 2 * len(segments), len(segments))
    every = max(1, int(np.ceil((int(per.sum()) - 2 * len(segments)) / room)))
    counts = (per - 2) // every + 2
    owner = np.repeat(np.arange(len(segments)), counts)
    within = np.arange(len(owner)) - np.repeat(np.cumsum(counts) - counts, counts)
    last = within == counts[owner] - 1
    return start[owner] + np.where(last, per[owner] - 1, within * every), counts, every


def _segment_values(content: ReportContent) -> pd.DataFrame:
    """Return the segments' table with their mean pressure and the doubt about their radius."""
    table, nodes = content.table("segments"), content.table("nodes")
    if len(table) != content.graph.n_segments:
        table = content.graph.to_frames()["segments"]
    ends = content.graph.segment_nodes
    pressure = numbers(nodes, "pressure_pa")
    known = len(pressure) == content.graph.n_nodes
    half = 0.5 * (numbers(table, "radius_um_high") - numbers(table, "radius_um_low"))
    return table.assign(
        pressure_pa=pressure[ends].mean(axis=1) if known else np.nan,
        doubt=half / numbers(table, "radius_um"),
    )


def _note(total: int, shown: int, every: int) -> str:
    if not total:
        return "The graph has no segment."
    notes = []
    if shown < total:
        notes.append(f"Shown are {shown:,} of {total:,} segments, the widest that have a radius.")
    if every > 1:
        notes.append(f"Along each, 1 of {every} points is shown.")
    return " ".join(notes)


def _positions(position_um: np.ndarray) -> dict[str, Any]:
    """Return x, y, z in 16 bits of their common range: a step is a 65,000th of the volume."""
    xyz = position_um[:, ::-1]
    low = xyz.min(axis=0) if len(xyz) else np.zeros(3)
    step = float(max((xyz - low).max() if len(xyz) else 0.0, 1e-9)) / _STEPS
    return {"low": low.tolist(), "step": step, "data": _array(np.rint((xyz - low) / step), "<u2")}


def _colour(table: pd.DataFrame, name: str, label: str, unit: str, log: bool) -> dict[str, Any]:  # noqa: FBT001 - a row of the table above
    values = numbers(table, name)
    values = np.abs(values) if name == "flow_um3_per_s" else values
    if log:
        values = np.where(values > 0, values, np.nan)
    known = values[np.isfinite(values)]
    entry: dict[str, Any] = {"name": name, "label": label, "unit": unit, "log": log, "values": None}
    if len(known):
        # The two ends of the colours leave out the most extreme hundredth where there are many.
        low, high = (
            np.percentile(known, [1, 99]) if len(known) > 200 else (known.min(), known.max())
        )
        entry |= {"low": float(low), "high": float(high), "values": _array(_short(values), "<f4")}
    return entry


def _reviews(table: pd.DataFrame, segments: np.ndarray) -> Iterator[tuple[int, str]]:
    if "review" not in table:
        return
    for segment, text in zip(segments.tolist(), table["review"].tolist(), strict=True):
        if isinstance(text, str) and text:
            yield segment, text


def _image(image: np.ndarray) -> dict[str, Any]:
    """Return a projection in 8 bits, small enough for the cuts beside the 3-D view."""
    high, wide = (max(1, int(np.ceil(n / _LARGEST_SIDE))) for n in image.shape)
    rows, columns = image.shape[0] // high, image.shape[1] // wide
    whole = image[: rows * high, : columns * wide]
    small = whole.reshape(rows, high, columns, wide).max(axis=(1, 3))
    dark, bright = np.percentile(small, [1, 99.7])
    grey = np.clip((small - dark) / max(bright - dark, 1e-9), 0, 1)
    return {
        "shape": list(small.shape),
        "every": [high, wide],
        "data": _array(np.rint(255 * grey), "u1"),
    }


def _short(values: np.ndarray) -> np.ndarray:
    """Round to four digits, which the page shows and which pack better."""
    size = np.where(np.isfinite(values) & (values != 0), np.abs(values), 1.0)
    step = 10.0 ** (np.floor(np.log10(size)) - 3)
    return np.round(values / step) * step


def _array(values: np.ndarray, kind: str) -> str:
    return b64encode(np.ascontiguousarray(values, dtype=kind).tobytes()).decode()
