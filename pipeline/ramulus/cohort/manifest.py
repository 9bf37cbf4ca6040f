"""Read a manifest: every row checked, every problem told at once, before anything is measured."""

import csv
import hashlib
import io
import re
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from unicodedata import normalize

from ..errors import UnusableInputError
from .figures import FIGURES

__all__ = ["Manifest", "ManifestRow", "read_manifest"]

COLUMNS = ("sample", "stack", "subject", "group", "batch", "config", "edits")
_FILES = ("stack", "config", "edits")
_RESERVED = {"status", "flags", "rejected_by", "reason"} | {
    f"{name}{end}" for name in FIGURES for end in ("", "_low", "_high")
}
_MOST_BYTES = 16 * 1024**2
_MOST_SHOWN = 20
_SAMPLE = re.compile(r"\w[\w .+@=,()-]{0,99}")
_DEVICES = re.compile(r"(?i)(con|prn|aux|nul|com\d|lpt\d)(\..*)?")
_NUMBER = re.compile(r"[+-]?(\d+([.,]\d*)?|[.,]\d+)([eE][+-]?\d+)?")


@dataclass(frozen=True, slots=True)
class ManifestRow:
    """One sample: its files with absolute paths, and who it belongs to.

    `subject` is the sample's own name where the manifest has none; `group` and `batch` are empty
    where unknown; `cells` holds the row as it was written, by column.
    """

    sample: str
    stack: Path
    subject: str
    group: str = ""
    batch: str = ""
    config: Path | None = None
    edits: Path | None = None
    cells: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Manifest:
    """The rows in the file's order, the columns, and the file's checksum."""

    path: Path
    columns: tuple[str, ...]
    rows: tuple[ManifestRow, ...]
    sha256: str

    @property
    def groups(self) -> tuple[str, ...]:
        """The groups in the order of their first sample."""
        return tuple(dict.fromkeys(row.group for row in self.rows if row.group))


def read_manifest(path: str | Path) -> Manifest:
    r"""Read and check a manifest.

    A CSV file (RFC 4180, UTF-8, comma) with a header: `sample` and `stack`, where known `subject`,
    `group`, `batch`, `config`, `edits`, and any others. Paths are relative to the manifest.

    Parameters
    ----------
    path : str or Path
        The manifest.

    Returns
    -------
    Manifest
        All rows, checked.

    Raises
    ------
    UnusableInputError
        One line with all problems found: columns, separators, names that cannot be a folder,
        duplicates, files that are not there, cells a spreadsheet would run, subjects in two groups.

    Examples
    --------
    >>> from pathlib import Path
    >>> folder = getfixture("tmp_path")
    >>> _ = (folder / "a.tif").write_bytes(b"")
    >>> _ = (folder / "study.csv").write_text("sample,stack,group\nm1,a.tif,control\n")
    >>> read_manifest(folder / "study.csv").rows[0].group
    'control'
    """
    path = Path(path).resolve()
    content = _content(path)
    columns, records = _records(path, content)
    problems = list(_column_problems(columns))
    if problems:
        raise _refusal(path, problems)
    problems += [
        problem for line, cells in records for problem in _cell_problems(line, cells, columns)
    ]
    cells = [
        (line, dict(zip(columns, values, strict=True)))
        for line, values in records
        if len(values) == len(columns)
    ]
    problems += _row_problems(path, cells)
    problems += _joint_problems(cells)
    if problems:
        raise _refusal(path, problems)
    rows = tuple(_row(path, row) for _, row in cells)
    return Manifest(path, columns, rows, hashlib.sha256(content).hexdigest())


def _content(path: Path) -> bytes:
    try:
        size = path.stat().st_size
        if not path.is_file():
            raise _refusal(path, ["it is not a file"])
        if size > _MOST_BYTES:
            raise _refusal(path, [f"it has {size} bytes, expected at most {_MOST_BYTES}"])
        return path.read_bytes()
    except OSError as failure:
        raise _refusal(path, [f"cannot be read: {failure.strerror}"]) from failure


def _records(path: Path, content: bytes) -> tuple[tuple[str, ...], list[tuple[int, list[str]]]]:
    """Return the header and the rows with their line numbers, blank lines left out."""
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as failure:
        problem = f"byte {failure.start} is not UTF-8; save it as CSV UTF-8"
        raise _refusal(path, [problem]) from failure
    if "\0" in text:
        raise _refusal(path, ["it holds a NUL character; expected CSV text"])
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    records: list[tuple[int, list[str]]] = []
    try:
        records.extend(
            (reader.line_num, [cell.strip() for cell in cells])
            for cells in reader
            if any(cell.strip() for cell in cells)
        )
    except csv.Error as failure:
        raise _refusal(path, [f"line {reader.line_num}: {failure}"]) from failure
    if not records:
        raise _refusal(path, ["it is empty; expected a header with the columns sample, stack"])
    return tuple(records[0][1]), records[1:]


def _column_problems(columns: tuple[str, ...]) -> Iterator[str]:
    for separator, name in ((";", "semicolons"), ("\t", "tabs"), ("|", "bars")):
        if len(columns) == 1 and separator in columns[0]:
            yield f"its columns are separated by {name}, expected commas"
            return
    for column, count in Counter(columns).items():
        if count > 1:
            yield f"column {column!r} stands {count} times, expected once"
        if not column:
            yield "a column has no name"
        elif column.lower() in COLUMNS and column not in COLUMNS:
            yield f"column {column!r}: write {column.lower()!r}"
        elif column in _RESERVED:
            yield f"column {column!r} is a column of the result; give it another name"
        elif _is_formula(column):
            yield f"column {column!r} begins like a formula"
    for column in ("sample", "stack"):
        if column not in [name.lower() for name in columns]:
            yield f"column {column!r} is missing; found {', '.join(columns)}"


def _cell_problems(line: int, values: list[str], columns: tuple[str, ...]) -> Iterator[str]:
    if len(values) != len(columns):
        yield f"line {line}: {len(values)} cells, expected {len(columns)}"
    for column, value in zip(columns, values, strict=False):
        if _is_formula(value):
            yield f"line {line}: {column} {value[:40]!r} begins like a formula"
        elif any(ord(letter) < 32 for letter in value):
            yield f"line {line}: {column} {value[:40]!r} holds a control character"


def _is_formula(value: str) -> bool:
    return value[:1] in "=+-@" and bool(value) and _NUMBER.fullmatch(value) is None


def _row_problems(path: Path, cells: list[tuple[int, dict[str, str]]]) -> Iterator[str]:
    for line, row in cells:
        sample = row["sample"]
        if not _can_be_folder(sample):
            yield (
                f"line {line}: sample {sample[:40]!r} cannot be a folder's name; expected up to "
                "100 letters, digits, spaces or _ . - + @ = , ( ), beginning with a letter or digit"
            )
        if not row["stack"]:
            yield f"line {line}: stack is empty"
        for column in _FILES:
            if row.get(column) and not _is_there(path, row[column], column):
                yield f"line {line}: {column} {row[column]!r} is not there"


def _can_be_folder(sample: str) -> bool:
    """Tell whether a name stays inside the output folder, on any file system."""
    plain = _SAMPLE.fullmatch(sample) is not None and not sample.endswith((".", " "))
    return plain and _DEVICES.fullmatch(sample) is None and len(sample.encode()) <= 200


def _is_there(path: Path, name: str, column: str) -> bool:
    try:
        found = path.parent / name
        return found.is_file() or (column == "stack" and found.is_dir())
    except OSError:  # a name too long for the file system
        return False


def _joint_problems(cells: list[tuple[int, dict[str, str]]]) -> Iterator[str]:
    if not cells:
        yield "it has a header and no sample"
    names = Counter(_folded(row["sample"]) for _, row in cells)
    for name, count in names.items():
        if count > 1 and name:
            lines = [str(line) for line, row in cells if _folded(row["sample"]) == name]
            yield f"sample {name!r} stands {count} times (lines {', '.join(lines)}), expected once"
    groups: dict[str, set[str]] = {}
    for _, row in cells:
        groups.setdefault(row.get("subject") or row["sample"], set()).add(row.get("group", ""))
    for subject, found in groups.items():
        if len(found) > 1:
            listed = ", ".join(repr(group) for group in sorted(found))
            yield f"subject {subject!r} is in the groups {listed}; expected one"
    without = [str(line) for line, row in cells if "batch" in row and not row["batch"]]
    if without and len(without) < len(cells):
        yield f"batch is empty in lines {', '.join(without[:_MOST_SHOWN])}; expected all or none"


def _folded(sample: str) -> str:
    """Return the name as a file system may see it that knows no case and one Unicode form."""
    return normalize("NFC", sample).casefold()


def _row(path: Path, cells: dict[str, str]) -> ManifestRow:
    def file(column: str) -> Path | None:
        return (path.parent / cells[column]).resolve() if cells.get(column) else None

    return ManifestRow(
        sample=cells["sample"],
        stack=(path.parent / cells["stack"]).resolve(),
        subject=cells.get("subject") or cells["sample"],
        group=cells.get("group", ""),
        batch=cells.get("batch", ""),
        config=file("config"),
        edits=file("edits"),
        cells=cells,
    )


def _refusal(path: Path, problems: list[str]) -> UnusableInputError:
    """Return one line with all problems; a very long list is cut, and says so."""
    shown = "; ".join(problems[:_MOST_SHOWN])
    more = f"; and {len(problems) - _MOST_SHOWN} more" if len(problems) > _MOST_SHOWN else ""
    many = f"{len(problems)} problems: " if len(problems) > 1 else ""
    return UnusableInputError(f"{path.name}: {many}{shown}{more}")
