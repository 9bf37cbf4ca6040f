"""The sample folder's tables as files, and back into a graph."""

import csv
import io
import re
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from ..errors import UnusableInputError
from .graph import NODE_KINDS, RADIUS_METHODS, CentrelineGraph

__all__ = ["csv_bytes", "parquet_bytes", "read_folder"]

_Z95 = 1.959963984540054  # half width of a normal 95 % interval in standard errors
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_POSITION = ("z_um", "y_um", "x_um")
_NODE_COLUMNS = ("node_id", "kind", *_POSITION)
_SEGMENT_COLUMNS = ("segment_id", "node_a", "node_b")
_POINT_COLUMNS = ("segment_id", *_POSITION, "radius_um", "radius_um_high", "radius_method")


def csv_bytes(table: pd.DataFrame) -> bytes:
    r"""Return a table as CSV (RFC 4180, UTF-8) in which no cell is a formula to a spreadsheet.

    Text, a column's name too, that begins with =, +, -, @, a tab or a line's end and is no number
    gets an apostrophe before it. Undefined cells are empty, numbers have nine digits.

    Parameters
    ----------
    table : DataFrame
        Any table.

    Returns
    -------
    bytes
        The file, with a header and CRLF line ends.

    Examples
    --------
    >>> csv_bytes(pd.DataFrame({"note": ["=1+1", "-2.5"], "x_um": [0.1, None]}))
    b"note,x_um\r\n'=1+1,0.1\r\n-2.5,\r\n"
    """
    out = io.StringIO(newline="")
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow([_harmless(str(name)) for name in table.columns])
    columns = [_texts(table[name]) for name in table.columns]
    writer.writerows(zip(*columns, strict=True))
    return out.getvalue().encode("utf-8", "backslashreplace")


def parquet_bytes(table: pd.DataFrame) -> bytes:
    """Return a table as Parquet, the same bytes for the same table.

    Examples
    --------
    >>> table = pd.DataFrame({"radius_um": [1.5, 2.0]})
    >>> pd.read_parquet(io.BytesIO(parquet_bytes(table))).equals(table)
    True
    """
    import pyarrow as pa  # noqa: PLC0415 - heavy to import
    import pyarrow.parquet as pq  # noqa: PLC0415

    out = io.BytesIO()
    arrow = pa.Table.from_pandas(table, preserve_index=False).replace_schema_metadata(None)
    pq.write_table(arrow, out, compression="zstd")
    return out.getvalue()


def read_folder(folder: Path | str) -> CentrelineGraph:
    """Read nodes.csv, segments.csv and points.parquet of a sample folder back into a graph.

    The nodes of kind `inlet` stay inlets. Outlets were chosen by a rule of the flow and become what
    they are without it: cut ends where other ends were left blind, plain ends where every end was
    an outlet. The intervals of the radii are taken as random errors; columns that are not needed
    are not read.

    Parameters
    ----------
    folder : path
        A folder with the three files; others in it are not looked at.

    Returns
    -------
    CentrelineGraph
        Without the image's spacing and extent, which the tables do not hold.

    Raises
    ------
    UnusableInputError
        If a file or column is missing or holds what it cannot hold, or the tables contradict each
        other.
    """
    folder = Path(folder)
    nodes = _csv(folder / "nodes.csv", _NODE_COLUMNS)
    segments = _csv(folder / "segments.csv", _SEGMENT_COLUMNS)
    points = _parquet(folder / "points.parquet", _POINT_COLUMNS)
    _refuse_other_ids(nodes, "node_id", "nodes.csv")
    _refuse_other_ids(segments, "segment_id", "segments.csv")
    ends = _ends(segments, len(nodes))
    offsets = _offsets(points, len(segments))
    position = _numbers(nodes, _POSITION, "nodes.csv")
    along = _numbers(points, _POSITION, "points.parquet")
    _refuse_torn(along, position, ends, offsets)
    return CentrelineGraph(
        node_position_um=position, node_kind=_kinds(nodes, ends), segment_nodes=ends,
        point_offsets=offsets, point_position_um=along,
        segment_resolved=_flags(segments, "resolved", missing=True),
        segment_review=np.full(len(segments), "", dtype=object), **_radii(points),
    )  # fmt: skip


def _texts(column: pd.Series) -> list[str]:
    """Return a column's cells as they stand in the file."""
    known = column.notna().to_numpy()
    values = column.astype(object).tolist()
    if pd.api.types.is_bool_dtype(column.dtype):
        texts = [str(bool(v)).lower() if k else "" for v, k in zip(values, known, strict=True)]
    elif pd.api.types.is_float_dtype(column.dtype):
        texts = [f"{v:.9g}" if k else "" for v, k in zip(values, known, strict=True)]
    elif pd.api.types.is_integer_dtype(column.dtype):
        texts = [str(v) if k else "" for v, k in zip(values, known, strict=True)]
    else:
        texts = [_harmless(_text(v)) if k else "" for v, k in zip(values, known, strict=True)]
    return texts


def _text(value: Any) -> str:
    """Return one cell of a column without a type."""
    if isinstance(value, bool | np.bool_):
        return str(bool(value)).lower()
    return f"{value:.9g}" if isinstance(value, float) else str(value)


def _harmless(text: str) -> str:
    # What a spreadsheet may run: OWASP, "CSV Injection" (recalled from memory).
    if text[:1] in ("=", "+", "-", "@", "\t", "\r", "\n") and not _NUMBER.fullmatch(text):
        return f"'{text}"
    return text


def _csv(path: Path, needed: tuple[str, ...]) -> pd.DataFrame:
    try:
        table = pd.read_csv(path, encoding="utf-8-sig")
    except FileNotFoundError as absent:
        raise UnusableInputError(_absent(path)) from absent
    except (ValueError, OSError) as broken:
        msg = f"{path.name}: not a readable CSV table ({' '.join(str(broken).split())[:100]})"
        raise UnusableInputError(msg) from broken
    return _with_columns(table, needed, path.name)


def _parquet(path: Path, needed: tuple[str, ...]) -> pd.DataFrame:
    import pyarrow as pa  # noqa: PLC0415 - heavy to import
    import pyarrow.parquet as pq  # noqa: PLC0415

    try:
        table = pq.ParquetFile(path).read().to_pandas(ignore_metadata=True)
    except FileNotFoundError as absent:
        raise UnusableInputError(_absent(path)) from absent
    except (pa.ArrowException, OSError, ValueError) as broken:
        msg = f"{path.name}: not a readable Parquet table ({' '.join(str(broken).split())[:100]})"
        raise UnusableInputError(msg) from broken
    return _with_columns(table, needed, path.name)


def _absent(path: Path) -> str:
    wanted = "nodes.csv, segments.csv, points.parquet"
    return f"{path.parent.name}: found no {path.name}, expected a graph folder with {wanted}"


def _with_columns(table: pd.DataFrame, needed: tuple[str, ...], name: str) -> pd.DataFrame:
    missing = [c for c in needed if c not in table.columns]
    if missing:
        found = ", ".join(map(str, table.columns[:8]))
        msg = f"{name}: found no column {missing[0]!r} among {found}"
        raise UnusableInputError(msg)
    return table


def _refuse_other_ids(table: pd.DataFrame, column: str, name: str) -> None:
    if not np.array_equal(table[column].to_numpy(), np.arange(len(table))):
        found = ", ".join(map(str, table[column].head(3).tolist()))
        msg = f"{name}: {column} is {found} ..., expected 0, 1, 2 ... in order"
        raise UnusableInputError(msg)


def _ends(segments: pd.DataFrame, n_nodes: int) -> np.ndarray:
    if not len(segments):
        msg = "segments.csv: found no segment, expected at least one"
        raise UnusableInputError(msg)
    ends = _numbers(segments, ("node_a", "node_b"), "segments.csv")
    bad = np.flatnonzero(((ends < 0) | (ends >= n_nodes) | (ends != np.floor(ends))).any(axis=1))
    if len(bad):
        a, b = ends[bad[0]].tolist()
        msg = (
            f"segments.csv: segment {bad[0]} joins the nodes {a:.9g} and {b:.9g}, expected node"
            f" numbers from 0 to {n_nodes - 1}"
        )
        raise UnusableInputError(msg)
    return ends.astype(np.int64)


def _offsets(points: pd.DataFrame, n_segments: int) -> np.ndarray:
    """Return where each segment's points start; every segment has two points or more, in order."""
    owner = _numbers(points, ("segment_id",), "points.parquet")[:, 0]
    counts = np.bincount(owner.astype(np.int64)) if (owner >= 0).all() else np.zeros(0, np.int64)
    in_order = (np.diff(owner) >= 0).all() and (owner == np.floor(owner)).all()
    if len(counts) != n_segments or counts.min() < 2 or not in_order:
        msg = (
            f"points.parquet: its segment_id does not run through the {n_segments} segments of"
            " segments.csv in order, expected two points or more of each"
        )
        raise UnusableInputError(msg)
    return np.concatenate(([0], np.cumsum(counts))).astype(np.int64)


def _numbers(table: pd.DataFrame, columns: tuple[str, ...], name: str) -> np.ndarray:
    """Return finite numbers of some columns, (n, k) float64."""
    found = [_floats(table, column, name) for column in columns]
    for column, values in zip(columns, found, strict=True):
        bad = np.flatnonzero(~np.isfinite(values))
        if len(bad):
            found_here = f"{values[bad[0]]:.9g} in row {bad[0]}"
            msg = f"{name}: {column} is {found_here}, expected a finite number"
            raise UnusableInputError(msg)
    return np.stack(found, axis=1)


def _floats(table: pd.DataFrame, column: str, name: str) -> np.ndarray:
    try:
        return table[column].to_numpy(dtype=np.float64, na_value=np.nan)
    except (ValueError, TypeError) as broken:
        found = next((v for v in table[column].tolist() if not _is_number(v)), "text")
        msg = f"{name}: {column} holds {found!r:.60}, expected numbers"
        raise UnusableInputError(msg) from broken


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float | np.number) or bool(_NUMBER.fullmatch(str(value)))


def _refuse_torn(
    along: np.ndarray, position: np.ndarray, ends: np.ndarray, offsets: np.ndarray
) -> None:
    """Refuse segments whose points do not start and end at their nodes."""
    for side, rows in ((0, offsets[:-1]), (1, offsets[1:] - 1)):
        at_node = position[ends[:, side]]
        gap_um = np.linalg.norm(along[rows] - at_node, axis=1)
        # The CSV holds nine digits of what the Parquet file holds in full.
        bad = np.flatnonzero(gap_um > 1e-6 * (1 + np.abs(at_node).max(axis=1)))
        if len(bad):
            msg = (
                f"points.parquet: segment {bad[0]} {('starts', 'ends')[side]}"
                f" {gap_um[bad[0]]:.4g} um from its node {ends[bad[0], side]} of nodes.csv,"
                " expected it at the node"
            )
            raise UnusableInputError(msg)


def _kinds(nodes: pd.DataFrame, ends: np.ndarray) -> np.ndarray:
    index = {name: k for k, name in enumerate(NODE_KINDS)}
    unknown = [k for k in nodes["kind"].tolist() if k not in index]
    if unknown:
        expected = ", ".join(NODE_KINDS)
        msg = f"nodes.csv: kind is {unknown[0]!r:.60}, expected one of {expected}"
        raise UnusableInputError(msg)
    kind = nodes["kind"].map(index).to_numpy(dtype=np.int8)
    free = np.bincount(ends.ravel(), minlength=len(nodes)) == 1
    blind = np.isin(kind, (index["end"], index["border"])).any()
    as_end = index["border" if blind else "end"]
    outlet = kind == index["outlet"]
    return np.where(outlet, np.where(free, as_end, index["junction"]), kind).astype(np.int8)


def _radii(points: pd.DataFrame) -> dict[str, Any]:
    name, p = "points.parquet", len(points)
    radius, high = (_floats(points, c, name) for c in ("radius_um", "radius_um_high"))
    bad = np.flatnonzero((radius <= 0) | np.isinf(radius))
    if len(bad):
        msg = f"{name}: radius_um is {radius[bad[0]]:.9g} in row {bad[0]}, expected um > 0 or none"
        raise UnusableInputError(msg)
    index = {method: k for k, method in enumerate(RADIUS_METHODS)}
    has_map = "radius_map_um" in points
    return {
        "point_radius_um": radius,
        "point_radius_se_um": (high - radius) / _Z95,
        "point_radius_common_um": np.zeros(p),
        "point_radius_map_um": _floats(points, "radius_map_um", name)
        if has_map
        else radius * np.nan,
        "point_method": points["radius_method"].map(index).fillna(0).to_numpy(dtype=np.int8),
        "point_in_zone": _flags(points, "in_zone", missing=False),
    }


def _flags(table: pd.DataFrame, column: str, *, missing: bool) -> np.ndarray:
    if column not in table:
        return np.full(len(table), missing)
    return table[column].astype(str).str.lower().isin(("true", "1")).to_numpy(dtype=bool)
