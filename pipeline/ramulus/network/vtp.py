"""VTK poly data (XML): each segment a line, radii at its points, its columns at the line."""

from base64 import b64encode
from collections.abc import Iterator
from xml.sax.saxutils import quoteattr

import numpy as np
import pandas as pd

from .graph import CentrelineGraph

__all__ = ["vtp_bytes"]

_TYPES = {"f": ("Float64", "<f8"), "i": ("Int64", "<i8"), "b": ("UInt8", "u1")}


def vtp_bytes(graph: CentrelineGraph, segments: pd.DataFrame) -> bytes:
    """Return the graph as a .vtp file; positions are x, y, z in um, undefined cells NaN.

    Numbers stand in base64: exact, and NaN can be read back, which the format's text form does not
    promise. Text columns are left out.

    Parameters
    ----------
    graph : CentrelineGraph
        The graph.
    segments : DataFrame
        The sample folder's segments, a row a segment.

    Returns
    -------
    bytes
        The file.

    Examples
    --------
    >>> line = CentrelineGraph.from_polylines(
    ...     [[0, 0, 0], [0, 0, 9]], [[0, 1]], [[[0, 0, 0], [0, 0, 9]]], [[2.5, 2.5]]
    ... )
    >>> b'NumberOfLines="1"' in vtp_bytes(line, line.to_frames()["segments"])
    True
    """
    counts = f'NumberOfPoints="{graph.n_points}" NumberOfLines="{graph.n_segments}"'
    none = 'NumberOfVerts="0" NumberOfStrips="0" NumberOfPolys="0"'
    lines = [
        '<?xml version="1.0"?>',
        '<VTKFile type="PolyData" version="1.0" byte_order="LittleEndian" header_type="UInt64">',
        f"<PolyData><Piece {counts} {none}>",
        '<PointData Scalars="radius_um">',
        _array("radius_um", graph.point_radius_um), "</PointData>",
        "<CellData>", *_cell_arrays(segments), "</CellData>",
        "<Points>", _array("Points", graph.point_position_um[:, ::-1]), "</Points>",
        "<Lines>", _array("connectivity", np.arange(graph.n_points)),
        _array("offsets", graph.point_offsets[1:]), "</Lines>",
        "</Piece></PolyData></VTKFile>", "",
    ]  # fmt: skip
    return "\n".join(lines).encode()


def _cell_arrays(segments: pd.DataFrame) -> Iterator[str]:
    for name in segments.columns:
        column = segments[name]
        if not pd.api.types.is_numeric_dtype(column.dtype):
            continue
        if column.isna().any() or pd.api.types.is_float_dtype(column.dtype):
            yield _array(str(name), column.to_numpy(dtype=float, na_value=np.nan))
        else:
            yield _array(str(name), column.to_numpy())


def _array(name: str, values: np.ndarray) -> str:
    kind, stored_as = _TYPES[values.dtype.kind]
    data = np.ascontiguousarray(values, dtype=stored_as).tobytes()
    body = b64encode(len(data).to_bytes(8, "little") + data).decode()
    size = f' NumberOfComponents="{values.shape[1]}"' if values.ndim > 1 else ""
    return (
        f'<DataArray type="{kind}" Name={quoteattr(name)}{size} format="binary">{body}</DataArray>'
    )
