"""The stages' values on disk, so that a run can be taken up where it stopped.

Plain arrays and records in one file a stage (npz: arrays, and their structure as JSON); no pickle.
Each part carries a checksum (CRC-32 of the zip format), and the file names the key that it was
stored under; whatever does not hold counts as absent.
"""

import hashlib
import json
import logging
import shutil
from collections.abc import Iterable
from contextlib import suppress
from dataclasses import fields, is_dataclass
from math import inf
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

__all__ = ["UnknownRecordError", "WorkStore", "chained_key"]


_SMALL_BYTES = 2**20
_BYTES_PER_SECOND = 100e6  # a slow disk, checksum included


class UnknownRecordError(TypeError):
    """A value holds a type that the store was not told about."""


class WorkStore:
    """Values by name and key in a folder.

    Parameters
    ----------
    folder : Path
        Where the values are kept; made when the first is stored.
    records : iterable of type
        The dataclasses that values may hold, at any depth.

    Examples
    --------
    >>> store = WorkStore(getfixture("tmp_path") / "work", records=())
    >>> store.save("thin", "k1", {"length_um": np.arange(3.0)})
    >>> store.load("thin", "k1")
    {'length_um': array([0., 1., 2.])}
    """

    def __init__(self, folder: Path, records: Iterable[type]) -> None:
        self.folder = folder
        self.records = {record.__name__: record for record in records}
        self.used: set[Path] = set()

    def load(self, name: str, key: str) -> Any:
        """Return the value; KeyError where there is none, or a damaged one (which is removed)."""
        path = self._path(name, key)
        try:
            with path.open("rb") as stream, np.load(stream, allow_pickle=False) as file:
                head = json.loads(file["head"].tobytes())
                if head["key"] != key:
                    raise KeyError(key)  # noqa: TRY301 - one way out for all that does not hold
                value = _unpacked(head["value"], file, self.records)
        except FileNotFoundError as absent:
            raise KeyError(key) from absent
        except MemoryError:
            raise
        except Exception as damaged:  # a damaged file can fail in any of its readers' ways
            logging.getLogger(__name__).info("stored stage %s is damaged; it is done again", name)
            with suppress(OSError):
                path.unlink()
            raise KeyError(key) from damaged
        self.used.add(path)
        return value

    def save(self, name: str, key: str, value: Any, *, seconds: float = inf) -> None:
        """Store a value beside its place and move it there.

        A large value that took few seconds to make is left out: making it again is quicker than
        the disk.

        Raises
        ------
        UnknownRecordError
            If the value holds a type that is not known here; nothing is stored.
        OSError
            If the disk refuses.
        """
        arrays: dict[str, np.ndarray] = {}
        head = json.dumps({"key": key, "value": _packed(value, arrays, self.records)})
        if sum(a.nbytes for a in arrays.values()) > max(_SMALL_BYTES, seconds * _BYTES_PER_SECOND):
            return
        self.folder.mkdir(exist_ok=True)
        path = self._path(name, key)
        part = path.with_suffix(".part")
        try:
            with part.open("wb") as file:
                np.savez(file, head=np.frombuffer(head.encode(), np.uint8), **arrays)  # type: ignore[arg-type]
            part.replace(path)
            self.used.add(path)
        except BaseException:
            with suppress(OSError):
                part.unlink()
            raise

    def keep_only_used(self) -> None:
        """Remove what was neither loaded nor saved through this object."""
        for path in set(self.folder.glob("*")) - self.used:
            path.unlink()

    def remove(self) -> None:
        """Remove the store and all it holds."""
        shutil.rmtree(self.folder, ignore_errors=True)

    def _path(self, name: str, key: str) -> Path:
        return self.folder / f"{name}-{key[:32]}.npz"


def chained_key(before: str, *parts: Any) -> str:
    """Return the key of a stage: that of all before it, and what the stage adds.

    Parameters
    ----------
    before : str
        The key of the stage before.
    parts : str, number, None, settings, or tuples and lists of them
        What the stage is given beside the values of stages before it. Anything else counts by its
        type alone: it came out of those stages.

    Examples
    --------
    >>> chained_key("k", "thin", 1.0) == chained_key("k", "thin", 1.0)
    True
    >>> chained_key("k", "thin", 1.0) == chained_key("k", "thin", 2.0)
    False
    """
    text = json.dumps([before, *(_described(part) for part in parts)], allow_nan=True)
    return hashlib.sha256(text.encode()).hexdigest()


def _described(part: Any) -> Any:
    if part is None or isinstance(part, (bool, int, float, str)):
        return part
    if isinstance(part, (tuple, list)):
        return [_described(item) for item in part]
    if hasattr(part, "model_dump_json"):
        return [type(part).__name__, part.model_dump_json()]
    return type(part).__name__


def _packed(value: Any, arrays: dict[str, np.ndarray], records: dict[str, type]) -> Any:
    """Return the value's structure as JSON; its arrays go into `arrays`."""

    def kept(array: np.ndarray) -> str:
        arrays[f"a{len(arrays)}"] = array
        return f"a{len(arrays) - 1}"

    if isinstance(value, np.generic):  # before float, which np.float64 is too
        return {"scalar": kept(np.asarray(value))}
    if value is None or isinstance(value, (bool, int, float, str)):
        return value
    if isinstance(value, (list, tuple)):
        kind = "tuple" if isinstance(value, tuple) else "list"
        return {kind: [_packed(item, arrays, records) for item in value]}
    if isinstance(value, dict):
        return {"dict": [[_packed(v, arrays, records) for v in item] for item in value.items()]}
    if isinstance(value, np.ndarray) and value.dtype == object:
        return {"objects": _packed(value.ravel().tolist(), arrays, records), "shape": value.shape}
    if isinstance(value, np.ndarray):
        return {"array": kept(value)}
    if isinstance(value, pd.DataFrame):
        return {"frame": kept(_frame_bytes(value))}
    name = type(value).__name__
    if is_dataclass(value) and records.get(name) is type(value):
        held = ((field.name, getattr(value, field.name)) for field in fields(value))
        return {"record": name, "fields": {k: _packed(v, arrays, records) for k, v in held}}
    msg = f"found {type(value).__name__}, expected arrays, plain values or a known record"
    raise UnknownRecordError(msg)


def _unpacked(tree: Any, arrays: Any, records: dict[str, type]) -> Any:
    if not isinstance(tree, dict):
        return tree
    if "tuple" in tree:
        return tuple(_unpacked(item, arrays, records) for item in tree["tuple"])
    if "list" in tree:
        return [_unpacked(item, arrays, records) for item in tree["list"]]
    if "dict" in tree:
        pairs = tree["dict"]
        return {_unpacked(k, arrays, records): _unpacked(v, arrays, records) for k, v in pairs}
    if "objects" in tree:
        flat = np.empty(int(np.prod(tree["shape"])), dtype=object)
        flat[:] = _unpacked(tree["objects"], arrays, records)
        return flat.reshape(tree["shape"])
    if "array" in tree:
        return arrays[tree["array"]]
    if "scalar" in tree:
        return arrays[tree["scalar"]][()]
    if "frame" in tree:
        return _frame(arrays[tree["frame"]])
    made = {name: _unpacked(item, arrays, records) for name, item in tree["fields"].items()}
    return records[tree["record"]](**made)


def _frame_bytes(frame: pd.DataFrame) -> np.ndarray:
    """Return a table as Arrow's stream format, which keeps pandas' types."""
    import pyarrow as pa  # noqa: PLC0415 - a third of a second at start-up

    table = pa.Table.from_pandas(frame)
    sink = pa.BufferOutputStream()
    with pa.ipc.new_stream(sink, table.schema) as writer:
        writer.write_table(table)
    return np.frombuffer(sink.getvalue(), np.uint8)


def _frame(data: np.ndarray) -> pd.DataFrame:
    import pyarrow as pa  # noqa: PLC0415 - a third of a second at start-up

    with pa.ipc.open_stream(pa.py_buffer(data)) as reader:
        frame: pd.DataFrame = reader.read_all().to_pandas()
    return frame
