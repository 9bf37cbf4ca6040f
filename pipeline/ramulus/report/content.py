"""What a report shows, as plain data, and how its tables are read where columns may be absent."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from ..network.graph import CentrelineGraph
from ..trust.flags import Flag

__all__ = ["ReportContent", "estimate", "numbers", "plain_name"]


@dataclass(frozen=True, slots=True)
class ReportContent:
    """All that one sample's report is made of.

    Parameters
    ----------
    title : str
        Heading; the sample's name where it has none of its own.
    graph : CentrelineGraph
        The vessel graph.
    tables : mapping of str to DataFrame
        `nodes`, `segments`, `junctions`, `orders`, `connectivity`, `resistance` with the columns of
        the data contract; any may be absent or empty.
    summary : mapping
        As in summary.json; any figure may be absent. `summary["image"]` holds the facts that the
        QC rules judge.
    flags : sequence of Flag
        Raised flags, the most severe first.
    projections : mapping of str to array, optional
        Maximum projections of the image, "z" (y, x), "y" (z, x), "x" (z, y); empty without image.
    profiles : mapping, optional
        `contrast_by_plane` and `mean_by_plane`, one value a plane of the stack.
    twin : mapping, optional
        The twin's record, as in summary.json.
    edits : sequence of mapping, optional
        Edits of the graph, as in edits.jsonl.
    settings : str, optional
        The configuration as TOML.
    provenance : mapping, optional
        Names and values: input, checksum, versions.
    """

    title: str
    graph: CentrelineGraph
    tables: Mapping[str, pd.DataFrame]
    summary: Mapping[str, Any]
    flags: Sequence[Flag] = ()
    projections: Mapping[str, np.ndarray] = field(default_factory=dict)
    profiles: Mapping[str, Any] = field(default_factory=dict)
    twin: Mapping[str, Any] | None = None
    edits: Sequence[Mapping[str, Any]] = ()
    settings: str = ""
    provenance: Mapping[str, Any] = field(default_factory=dict)

    def table(self, name: str) -> pd.DataFrame:
        """Return a table, an empty one where it is absent."""
        found = self.tables.get(name)
        return pd.DataFrame() if found is None else found


def numbers(table: pd.DataFrame, column: str) -> np.ndarray:
    """Return a column as float64, NaN where it or a cell of it is undefined.

    Examples
    --------
    >>> numbers(pd.DataFrame({"order": pd.Series([1, None], dtype="Int64")}), "order").tolist()
    [1.0, nan]
    >>> numbers(pd.DataFrame({"order": [1]}), "radius_um").tolist()
    [nan]
    """
    if column not in table:
        return np.full(len(table), np.nan)
    return pd.to_numeric(table[column], errors="coerce").to_numpy(dtype=float, na_value=np.nan)


def plain_name(key: Any) -> str:
    """Return a key of a setting as words; a law that is named after its author keeps the capital.

    Examples
    --------
    >>> plain_name("all_ends"), plain_name("pries_1994")
    ('all ends', 'Pries 1994')
    """
    words = str(key).replace("_", " ")
    return words.capitalize() if words[-4:].isdigit() else words


def estimate(entry: Any) -> tuple[float, float, float]:
    """Return value, low and high of a figure of the summary, NaN where there is none.

    Examples
    --------
    >>> estimate({"value": 3.0, "low": 2.5, "high": 3.5, "level": 0.95}), estimate(7)
    ((3.0, 2.5, 3.5), (7.0, nan, nan))
    """
    if not isinstance(entry, Mapping):
        entry = {"value": entry}
    found = (entry.get(name) for name in ("value", "low", "high"))
    value, low, high = (np.nan if v is None else float(v) for v in found)
    return value, low, high
