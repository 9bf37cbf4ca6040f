"""The sample folder's tables as files, and back into a graph."""

import io
from pathlib import Path

import numpy as np
import pandas as pd

from ..errors import UnusableInputError
from .graph import NODE_KINDS, RADIUS_METHODS, CentrelineGraph

__all__ = ["csv_bytes", "parquet_bytes", "read_folder"]


def csv_bytes(table: pd.DataFrame) -> bytes:
    """Return a table as CSV (RFC 4180: CRLF, header, UTF-8); undefined cells are empty.

    Text that a spreadsheet would take for a formula gets a leading apostrophe.
    """
    safe = table.copy()
    for name in safe.columns:
        if safe[name].dtype == object or str(safe[name].dtype) in ("string", "str"):
            safe[name] = [_harmless(v) for v in safe[name].tolist()]
        elif safe[name].dtype == bool:
            safe[name] = np.where(safe[name], "true", "false")
    return safe.to_csv(index=False, float_format="%.9g", lineterminator="\r\n").encode()


def parquet_bytes(table: pd.DataFrame) -> bytes:
    """Return a table as Parquet, the same bytes for the same table."""
    import pyarrow as pa  # noqa: PLC0415 - heavy to import
    import pyarrow.parquet as pq  # noqa: PLC0415

    out = io.BytesIO()
    arrow = pa.Table.from_pandas(table, preserve_index=False).replace_schema_metadata(None)
    pq.write_table(arrow, out, compression="zstd")
    return out.getvalue()


def read_folder(folder: Path | str) -> CentrelineGraph:
    """Read nodes.csv, segments.csv and points.parquet of a sample folder back into a graph.

    Raises
    ------
    UnusableInputError
        If a file or column is missing, or the tables contradict each other.
    """
    folder = Path(folder)
    nodes = _csv(folder / "nodes.csv", ["node_id", "kind", "z_um", "y_um", "x_um"])
    segments = _csv(folder / "segments.csv", ["segment_id", "node_a", "node_b"])
    points = _parquet(folder / "points.parquet")
    n, m = len(nodes), len(segments)
    for frame, column, count in ((nodes, "node_id", n), (segments, "segment_id", m)):
        if not np.array_equal(frame[column].to_numpy(), np.arange(count)):
            msg = f"{folder.name}: {column} is not 0, 1, 2 ... in order; found {frame[column].head(3).tolist()} ..."
            raise UnusableInputError(msg)
    owner = points["segment_id"].to_numpy()
    if len(owner) and ((np.diff(owner) < 0).any() or owner[0] != 0 or owner[-1] != m - 1):
        msg = f"{folder.name}: points.parquet is not sorted by the segments 0 to {m - 1} of segments.csv"
        raise UnusableInputError(msg)
    unknown = [k for k in nodes["kind"].unique().tolist() if k not in NODE_KINDS]
    if unknown:
        msg = f"{folder.name}: nodes.csv has the kind {unknown[0]!r}, expected one of {', '.join(NODE_KINDS)}"
        raise UnusableInputError(msg)
    offsets = np.searchsorted(owner, np.arange(m + 1))
    radius = points["radius_um"].to_numpy(dtype=float)
    se = (points["radius_um_high"].to_numpy(dtype=float) - radius) / 1.959963984540054
    method = points["radius_method"].map({k: i for i, k in enumerate(RADIUS_METHODS)}).fillna(0).to_numpy()
    p = len(points)
    kind = nodes["kind"].map({k: i for i, k in enumerate(NODE_KINDS)}).to_numpy()
    degree = np.bincount(segments[["node_a", "node_b"]].to_numpy().ravel(), minlength=n)
    # Inlets and outlets are chosen anew from what they are geometrically.
    kind = np.where(kind >= 3, np.where(degree == 1, 1, 0), kind)
    return CentrelineGraph(
        node_position_um=nodes[["z_um", "y_um", "x_um"]].to_numpy(dtype=float), node_kind=kind.astype(np.int8),
        segment_nodes=segments[["node_a", "node_b"]].to_numpy(dtype=np.int64), point_offsets=offsets.astype(np.int64),
        point_position_um=points[["z_um", "y_um", "x_um"]].to_numpy(dtype=float), point_radius_um=radius,
        point_radius_se_um=se, point_radius_common_um=np.zeros(p),
        point_radius_map_um=points["radius_map_um"].to_numpy(dtype=float) if "radius_map_um" in points else radius.copy(),
        point_method=method.astype(np.int8),
        point_in_zone=points["in_zone"].to_numpy(dtype=bool) if "in_zone" in points else np.zeros(p, bool),
        segment_resolved=_booleans(segments, m), segment_review=np.full(m, "", dtype=object),
    )  # fmt: skip


def _booleans(segments: pd.DataFrame, m: int) -> np.ndarray:
    if "resolved" not in segments:
        return np.ones(m, bool)
    return segments["resolved"].astype(str).str.lower().eq("true").to_numpy()


def _csv(path: Path, needed: list[str]) -> pd.DataFrame:
    try:
        table = pd.read_csv(path, keep_default_na=True)
    except FileNotFoundError as absent:
        msg = f"{path.parent.name}: no {path.name}; a graph folder holds nodes.csv, segments.csv, points.parquet"
        raise UnusableInputError(msg) from absent
    except (ValueError, OSError, UnicodeDecodeError) as broken:
        msg = f"{path.name}: not a readable CSV table ({' '.join(str(broken).split())[:100]})"
        raise UnusableInputError(msg) from broken
    return _with_columns(table, needed, path.name)


def _parquet(path: Path) -> pd.DataFrame:
    import pyarrow as pa  # noqa: PLC0415 - heavy to import
    import pyarrow.parquet as pq  # noqa: PLC0415

    try:
        table = pq.read_table(path).to_pandas()
    except FileNotFoundError as absent:
        msg = f"{path.parent.name}: no {path.name}; a graph folder holds nodes.csv, segments.csv, points.parquet"
        raise UnusableInputError(msg) from absent
    except (pa.ArrowException, OSError, ValueError) as broken:
        msg = f"{path.name}: not a readable Parquet table ({' '.join(str(broken).split())[:100]})"
        raise UnusableInputError(msg) from broken
    return _with_columns(table, ["segment_id", "z_um", "y_um", "x_um", "radius_um", "radius_um_high", "radius_method"], path.name)


def _with_columns(table: pd.DataFrame, needed: list[str], name: str) -> pd.DataFrame:
    missing = [c for c in needed if c not in table.columns]
    if missing:
        msg = f"{name}: no column {missing[0]!r}; found {', '.join(map(str, table.columns[:8]))}"
        raise UnusableInputError(msg)
    return table


def _harmless(value: object) -> object:
    if isinstance(value, str) and value[:1] in ("=", "+", "-", "@", "\t", "\r"):
        return "'" + value
    return value
