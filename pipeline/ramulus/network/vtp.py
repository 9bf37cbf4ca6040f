"""VTK poly data (XML): each segment a line, radius at the points, the segment's columns at the cells."""

from xml.sax.saxutils import quoteattr

import numpy as np
import pandas as pd

from .graph import CentrelineGraph

__all__ = ["vtp_bytes"]


def vtp_bytes(graph: CentrelineGraph, segments: pd.DataFrame) -> bytes:
    """Return the graph as an ASCII .vtp file; positions are x, y, z in um."""
    points = graph.point_position_um[:, ::-1]
    columns = [c for c in segments.columns if segments[c].dtype.kind in "iufb" or str(segments[c].dtype) == "Int64"]
    cells = "".join(_array(c, segments[c].astype("float64").to_numpy()) for c in columns)
    text = f"""<?xml version="1.0"?>
<VTKFile type="PolyData" version="1.0" byte_order="LittleEndian">
<PolyData><Piece NumberOfPoints="{graph.n_points}" NumberOfVerts="0" NumberOfLines="{graph.n_segments}" NumberOfStrips="0" NumberOfPolys="0">
<PointData Scalars="radius_um">{_array("radius_um", graph.point_radius_um)}</PointData>
<CellData>{cells}</CellData>
<Points>{_array("Points", points, components=3)}</Points>
<Lines>{_array("connectivity", np.arange(graph.n_points))}{_array("offsets", graph.point_offsets[1:])}</Lines>
</Piece></PolyData></VTKFile>
"""
    return text.encode()


def _array(name: str, values: np.ndarray, *, components: int = 1) -> str:
    whole = values.dtype.kind in "iu"
    form = "%d" if whole else "%.7g"
    body = " ".join(form % v for v in np.nan_to_num(values.astype(float), nan=np.nan).ravel().tolist()) if not whole else " ".join(map(str, values.ravel().tolist()))
    kind = "Int64" if whole else "Float64"
    size = f' NumberOfComponents="{components}"' if components > 1 else ""
    return f'<DataArray type="{kind}" Name={quoteattr(name)}{size} format="ascii">{body}</DataArray>\n'
