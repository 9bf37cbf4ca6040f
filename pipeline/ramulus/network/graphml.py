"""GraphML (http://graphml.graphdrawing.org): the graph with its tables' columns as attributes."""

from collections.abc import Iterator
from xml.sax.saxutils import escape, quoteattr

import numpy as np
import pandas as pd

__all__ = ["graphml_bytes"]

_NAMESPACE = "http://graphml.graphdrawing.org/xmlns"
# What XML 1.0 cannot hold, even escaped: control characters and lone surrogates.
_FORBIDDEN = dict.fromkeys(
    (*range(9), 11, 12, *range(14, 32), *range(0xD800, 0xE000), 0xFFFE, 0xFFFF),
    "\N{REPLACEMENT CHARACTER}",
)


def graphml_bytes(nodes: pd.DataFrame, segments: pd.DataFrame) -> bytes:
    """Return the graph as GraphML; nodes and edges keep their numbers, empty cells are left out.

    Written here and not by a graph library so that each column keeps one type, whatever its cells.

    Parameters
    ----------
    nodes : DataFrame
        The sample folder's nodes, with `node_id`.
    segments : DataFrame
        Its segments, with `segment_id`, `node_a` and `node_b`; each is an edge from a to b.

    Returns
    -------
    bytes
        The file, UTF-8.

    Examples
    --------
    >>> nodes = pd.DataFrame({"node_id": [0, 1], "radius_um": [2.0, None]})
    >>> segments = pd.DataFrame({"segment_id": [0], "node_a": [0], "node_b": [1]})
    >>> print(graphml_bytes(nodes, segments).decode().splitlines()[5])
    <node id="0"><data key="n0">2.0</data></node>
    """
    of_nodes, of_edges = nodes.drop(columns="node_id"), segments.drop(columns=["node_a", "node_b"])
    ends = zip(
        segments["segment_id"].tolist(), segments["node_a"].tolist(), segments["node_b"].tolist(),
        _cells(of_edges, "e"), strict=True,
    )  # fmt: skip
    lines = [
        '<?xml version="1.0" encoding="UTF-8"?>', f'<graphml xmlns="{_NAMESPACE}">',
        *_keys(of_nodes, "node"), *_keys(of_edges, "edge"),
        '<graph id="vessels" edgedefault="undirected">',
        *(f'<node id="{k}">{data}</node>'
          for k, data in zip(nodes["node_id"].tolist(), _cells(of_nodes, "n"), strict=True)),
        *(f'<edge id="{k}" source="{a}" target="{b}">{data}</edge>' for k, a, b, data in ends),
        "</graph>", "</graphml>", "",
    ]  # fmt: skip
    return "\n".join(lines).encode()


def _keys(table: pd.DataFrame, domain: str) -> Iterator[str]:
    for k, name in enumerate(table.columns):
        head = f'<key id="{domain[0]}{k}" for="{domain}" attr.name={quoteattr(_clean(str(name)))}'
        yield f'{head} attr.type="{_type(table[name])}"/>'


def _cells(table: pd.DataFrame, letter: str) -> Iterator[str]:
    """Yield the data elements of each row."""
    columns = [_data(table[name], f"{letter}{k}") for k, name in enumerate(table.columns)]
    if not columns:
        yield from [""] * len(table)
    yield from map("".join, zip(*columns, strict=True))


def _data(column: pd.Series, key: str) -> list[str]:
    known = column.notna().to_numpy()
    kind = _type(column)
    values = column.astype(object).tolist()
    if kind == "double":
        known = np.isfinite(column.to_numpy(dtype=float, na_value=np.nan))
        texts = [repr(float(v)) if k else "" for v, k in zip(values, known, strict=True)]
    elif kind == "boolean":
        texts = ["true" if k and v else "false" for v, k in zip(values, known, strict=True)]
    else:
        texts = [escape(_clean(str(v))) for v in values]
    pairs = zip(texts, known.tolist(), strict=True)
    return [f'<data key="{key}">{text}</data>' if k else "" for text, k in pairs]


def _type(column: pd.Series) -> str:
    if pd.api.types.is_bool_dtype(column.dtype):
        return "boolean"
    if pd.api.types.is_integer_dtype(column.dtype):
        return "long"
    return "double" if pd.api.types.is_float_dtype(column.dtype) else "string"


def _clean(text: str) -> str:
    return text.translate(_FORBIDDEN)
