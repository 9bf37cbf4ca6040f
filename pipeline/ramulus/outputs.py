"""One sample's results as the files of the data contract."""

import hashlib
import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any
from uuid import NAMESPACE_URL, uuid5

import numpy as np

from .image.mask import Mask
from .line import Results
from .network.graphml import graphml_bytes
from .network.swc import swc_text
from .network.tables import csv_bytes, parquet_bytes
from .network.vtp import vtp_bytes
from .trust.flags import Flag, raise_flags
from .trust.twin import Twin

__all__ = ["judged", "plain_json", "sample_files", "write_mask"]

_TABLES = ("nodes", "segments", "junctions", "orders", "connectivity", "resistance")


def judged(
    results: Results, twin: Twin | None, *, name: str
) -> tuple[dict[str, Any], Sequence[Flag]]:
    """Return the content of `summary.json`, and the flags, most severe first.

    Parameters
    ----------
    results : Results
        What the line found.
    twin : Twin, optional
        What it makes of a stack whose truth is known.
    name : str
        The sample's name.
    """
    facts = dict(results.facts)
    summary = {"sample": name} | results.summary | {"sample": name}
    if twin is not None:
        summary["twin"] = twin.to_json()
        blur_um = summary.get("smallest_resolved_radius_um") or 0.0
        if twin.smallest_resolved_radius_um:
            smallest_um = max(twin.smallest_resolved_radius_um, blur_um)
            summary["smallest_resolved_radius_um"] = smallest_um
        if twin.radius_bias is not None:
            facts["twin_radius_bias"] = abs(twin.radius_bias)
        if twin.junction_recall is not None:
            facts["twin_junction_recall_lost"] = 1.0 - twin.junction_recall
    flags = raise_flags(facts)
    shown = (k for k in sorted(facts) if isinstance(facts[k], (int, float, str)))
    summary["image"] = {k: facts[k] for k in shown}
    summary["flags"] = [flag.to_json() for flag in flags]
    return summary, flags


def sample_files(results: Results, summary: Mapping[str, Any]) -> dict[str, bytes]:
    """Return every file but the mask, the report and `run.json`, by its name."""
    tables = results.tables
    tree = swc_text(results.graph)
    why_not = "not written: the network has loops, which SWC cannot hold"
    summary = {**summary, "tree_swc": "written" if tree else why_not}
    files = {f"{name}.csv": csv_bytes(tables[name]) for name in _TABLES}
    files["points.parquet"] = parquet_bytes(tables["points"])
    files["network.graphml"] = graphml_bytes(tables["nodes"], tables["segments"])
    files["network.vtp"] = vtp_bytes(results.graph, tables["segments"])
    if tree:
        files["tree.swc"] = tree.encode()
    lines = (json.dumps(plain_json(edit), ensure_ascii=False) + "\n" for edit in results.edits)
    files["edits.jsonl"] = "".join(lines).encode()
    files["flow_settings.json"] = _json_bytes(results.flow_settings)
    files["summary.json"] = _json_bytes(summary)
    return files


def write_mask(path: Path, mask: Mask) -> None:
    """Write the mask as OME-TIFF (0 and 255, zlib) with its spacing in um.

    The same mask gives the same bytes: the identifier that OME asks for is made from the voxels,
    and no date is written.
    """
    import tifffile  # noqa: PLC0415 - heavy to import

    voxels = mask.inside.astype(np.uint8) * np.uint8(255)
    sizes = {f"PhysicalSize{a}": um for a, um in zip("ZYX", mask.spacing_um, strict=True)}
    units = {f"PhysicalSize{axis}Unit": "µm" for axis in "ZYX"}
    identity = uuid5(NAMESPACE_URL, hashlib.sha256(voxels.tobytes()).hexdigest())
    tifffile.imwrite(
        path, voxels, ome=True, photometric="minisblack", compression="zlib", software="ramulus",
        metadata={"axes": "ZYX", **sizes, **units, "Creator": "ramulus", "UUID": identity.urn},
    )  # fmt: skip


def plain_json(value: Any) -> Any:
    """Return a value that JSON can hold: Python's own types, null for what is not finite."""
    if isinstance(value, Mapping):
        return {str(k): plain_json(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain_json(v) for v in value]
    if isinstance(value, np.ndarray):
        return plain_json(value.tolist())
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value


def _json_bytes(value: Any) -> bytes:
    text = json.dumps(plain_json(value), indent=1, ensure_ascii=False, allow_nan=False)
    return (text + "\n").encode("utf-8", "backslashreplace")
