"""The last lines of `ramulus measure`: the main figures, the flags, and where to look."""

import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

__all__ = ["closing_lines"]


def closing_lines(folder: Path) -> Iterator[str]:
    """Yield a few lines about a sample's folder.

    Parameters
    ----------
    folder : Path
        A finished one.
    """
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    yield (
        f"{summary['sample']}: {summary['segments']} segments, {summary['junctions']} junctions,"
        f" {summary['loops']} loops, {summary['total_length_um'] / 1000:.4g} mm,"
        f" median radius {summary['radius_median_um']:.3g} um, {summary['orders']} orders"
    )
    yield f"network hindrance {_words(summary['network_hindrance_per_um3'])} per um3"
    exponent = _words(summary["junction_exponent"])
    yield f"junction exponent {exponent} from {summary['junctions_used']} junctions"
    yield from (f"{flag['severity']}: {flag['message']}" for flag in summary["flags"])
    page = folder / "report.html"
    yield f"results are in {folder}; open {page if page.exists() else folder / 'summary.json'}"


def _words(estimate: dict[str, Any]) -> str:
    if estimate["value"] is None:
        return f"not defined ({estimate['reason']})"
    text = f"{estimate['value']:.4g}"
    if estimate.get("low") is None:
        return text
    return f"{text} ({estimate['low']:.4g} to {estimate['high']:.4g})"
