"""Gather the samples' folders into the cohort's tables."""

import json
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from ..errors import WorkFailedError
from .figures import FIGURES
from .manifest import Manifest, ManifestRow
from .run import Outcome

__all__ = [
    "SampleResults",
    "cohort_table",
    "failures_table",
    "long_table",
    "read_results",
]

_AXES = ("z", "y", "x")
_PER_AXIS = ("spacing_um", "spacing_origin", "shape")
_OWNER = ("sample", "subject", "group", "batch")
_REJECT = "reject"


@dataclass(frozen=True, slots=True)
class SampleResults:
    """What a cohort needs of one sample's folder; the tables' cells are text, as written."""

    summary: dict[str, Any]
    orders: pd.DataFrame
    junctions: pd.DataFrame
    segments: pd.DataFrame


def read_results(folder: Path) -> SampleResults:
    """Read `summary.json`, `orders.csv`, `junctions.csv` and `segments.csv` of a finished sample.

    Parameters
    ----------
    folder : Path
        The sample's folder.

    Returns
    -------
    SampleResults
        The summary as read, the tables with text cells.

    Raises
    ------
    WorkFailedError
        If a file is missing or damaged.
    """
    path = folder / "summary.json"
    try:
        summary = json.loads(path.read_bytes())
        if not isinstance(summary, dict):
            msg = f"{path}: found {type(summary).__name__}, expected an object"
            raise WorkFailedError(msg)
        tables = {}
        for name in ("orders", "junctions", "segments"):
            path = folder / f"{name}.csv"
            tables[name] = pd.read_csv(path, dtype=str, keep_default_na=False)
    except (OSError, ValueError) as failure:
        msg = f"{path}: cannot be read: {failure}; measure the sample again"
        raise WorkFailedError(msg) from failure
    return SampleResults(summary, **tables)


def cohort_table(
    manifest: Manifest, outcomes: Sequence[Outcome], results: Mapping[str, SampleResults]
) -> pd.DataFrame:
    """Build `cohort.csv`: a row a sample, failed ones too.

    Parameters
    ----------
    manifest : Manifest
        The samples, with all their columns.
    outcomes : sequence of Outcome
        One per sample.
    results : mapping
        By sample, for those that are done.

    Returns
    -------
    DataFrame
        The manifest's columns (subject, group and batch always among them), each figure with `_low`
        and `_high`, then `status` (done, failed), `flags` (codes), `rejected_by` (the codes of
        severity reject) and `reason` (of a failure).
    """
    rows, figure_columns = [], dict[str, None]()
    of_sample = {outcome.sample: outcome for outcome in outcomes}
    for row in manifest.rows:
        found = results.get(row.sample)
        cells = _figure_cells(found.summary) if found else {}
        figure_columns |= dict.fromkeys(cells)
        rows.append(cells | _manifest_cells(row) | _state(of_sample[row.sample], found))
    head = list(dict.fromkeys([*_manifest_cells(manifest.rows[0]), *manifest.columns]))
    columns = [*head, *_ordered(figure_columns, taken=head), *_state_columns()]
    return pd.DataFrame(rows, columns=columns, dtype=object)  # counts stay whole numbers


def _manifest_cells(row: ManifestRow) -> dict[str, Any]:
    """Return the row's cells, the subject filled in where the manifest has none."""
    own = {"sample": row.sample, "stack": row.cells.get("stack", "")}
    own |= {"subject": row.subject, "group": row.group, "batch": row.batch}
    return own | {name: cell for name, cell in row.cells.items() if name not in own}


def _figure_cells(summary: Mapping[str, Any]) -> dict[str, Any]:
    """Spread a summary's figures over cells: estimates over three, axes over z, y, x."""
    cells: dict[str, Any] = {}
    for name, value in summary.items():
        if name in ("sample", "flags"):
            continue
        if isinstance(value, list):
            cells |= _list_cells(name, value)
        elif isinstance(value, dict):
            cells |= _estimate_cells(name, value)
        elif isinstance(value, bool | str):
            cells[name] = value
        else:
            cells |= _estimate_cells(name, {"value": value})
    return cells


def _estimate_cells(name: str, value: Mapping[str, Any]) -> dict[str, Any]:
    """Return value, low and high; of an object without "value", its numbers under both names."""
    if "value" not in value:
        numbers = {f"{name}_{key}": _number(cell) for key, cell in value.items()}
        return {
            key: cell for key, cell in numbers.items() if cell is not None and key.isidentifier()
        }
    found = {
        name: value["value"],
        f"{name}_low": value.get("low"),
        f"{name}_high": value.get("high"),
    }
    return {key: _number(cell) for key, cell in found.items()}


def _number(cell: Any) -> Any:
    """Return a finite number, or nothing."""
    if isinstance(cell, bool) or not isinstance(cell, int | float) or not math.isfinite(cell):
        return None
    return cell


def _list_cells(name: str, value: list[Any]) -> dict[str, Any]:
    """Return one cell per axis where the list has axes, else one cell with spaces."""
    if name not in _PER_AXIS or len(value) != 3:
        return {name: " ".join(map(str, value))}
    stem, unit = (name[:-3], "_um") if name.endswith("_um") else (name, "")
    return {f"{stem}_{axis}{unit}": part for axis, part in zip(_AXES, value, strict=True)}


def _state(outcome: Outcome, found: SampleResults | None) -> dict[str, Any]:
    flags = found.summary.get("flags", []) if found else []
    codes = [str(flag.get("code", "")) for flag in flags]
    rejected = [str(flag.get("code", "")) for flag in flags if flag.get("severity") == _REJECT]
    status = "done" if found else "failed"
    cells = (status, " ".join(codes), " ".join(rejected), outcome.reason)
    return dict(zip(_state_columns(), cells, strict=True))


def _state_columns() -> tuple[str, ...]:
    return "status", "flags", "rejected_by", "reason"


def _ordered(found: Mapping[str, None], *, taken: Sequence[str]) -> list[str]:
    """Return the figures' columns: known ones always, others as found, none of the manifest's."""
    known = [f"{name}{end}" for name in FIGURES for end in ("", "_low", "_high")]
    rest = [name for name in found if name not in known]
    return [name for name in (*rest, *known) if name not in taken]


def failures_table(manifest: Manifest, outcomes: Sequence[Outcome]) -> pd.DataFrame:
    """Build `failures.csv`: sample, stack, kind (input, work, died), reason.

    Parameters
    ----------
    manifest : Manifest
        The samples.
    outcomes : sequence of Outcome
        One per sample.

    Returns
    -------
    DataFrame
        A row per failed sample, in the manifest's order.
    """
    stacks = {row.sample: row.cells.get("stack", "") for row in manifest.rows}
    rows = [
        (outcome.sample, stacks[outcome.sample], outcome.kind, outcome.reason)
        for outcome in outcomes
        if outcome.folder is None
    ]
    return pd.DataFrame(rows, columns=["sample", "stack", "kind", "reason"])


def long_table(manifest: Manifest, tables: Mapping[str, pd.DataFrame]) -> pd.DataFrame:
    """Stack the samples' tables, each row with its sample, subject, group and batch.

    Parameters
    ----------
    manifest : Manifest
        Gives the order and who a sample belongs to.
    tables : mapping
        A table by sample, all with the same columns.

    Returns
    -------
    DataFrame
        The columns sample, subject, group, batch, then the tables' own.
    """
    parts = []
    for row in manifest.rows:
        table = tables.get(row.sample)
        if table is None:
            continue
        part = table.copy()
        for place, name in enumerate(_OWNER):
            part.insert(place, name, getattr(row, name))
        parts.append(part)
    if not parts:
        return pd.DataFrame(columns=list(_OWNER))
    return pd.concat(parts, ignore_index=True)
