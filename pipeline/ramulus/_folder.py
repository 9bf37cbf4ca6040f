"""A sample's folder: locked while a run writes to it, its files there all together or not at all.

New files are made in `.staging`. When they are complete the earlier ones step aside into `.before`,
the new ones move in, `run.json` last, and `.before` goes. Whatever stops that on the way, the
earlier results come back: at once, or at the next start if the process was killed.
"""

import fcntl
import json
import os
import shutil
import socket
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from errno import EDQUOT, ENOSPC
from pathlib import Path
from typing import IO

from ._files import sha256_of
from .errors import UnusableInputError

__all__ = ["OWNED", "is_finished", "locked_folder", "publish", "staged", "write_errors"]

OWNED = (
    "summary.json", "nodes.csv", "segments.csv", "points.parquet", "junctions.csv", "orders.csv",
    "connectivity.csv", "resistance.csv", "flow_settings.json", "network.graphml", "network.vtp",
    "tree.swc", "mask.ome.tif", "report.html", "edits.jsonl", "run.json",
)  # fmt: skip
"""The data contract's files (and figures/*.png): what a run may replace or remove, nothing else."""

_STAGING, _BEFORE, _LOCK = ".staging", ".before", ".lock"


@contextmanager
def locked_folder(out: Path) -> Iterator[None]:
    """Make the folder if need be and hold it for one run; mend what a killed run left.

    A folder that this made and that stays empty is removed again.

    Raises
    ------
    UnusableInputError
        If the folder cannot be made or written, or another run holds it.
    """
    made = not out.exists()
    with write_errors(out):
        if not made and not out.is_dir():
            msg = f"--out: {out} is a file, expected a folder"
            raise UnusableInputError(msg)
        out.mkdir(parents=True, exist_ok=True)
        lock = _locked(out)
    try:
        with write_errors(out):
            shutil.rmtree(out / _STAGING, ignore_errors=True)
            _bring_back(out)
        yield
    finally:
        with suppress(OSError):
            (out / _LOCK).unlink()
        lock.close()
        if made:
            with suppress(OSError):
                out.rmdir()


@contextmanager
def write_errors(out: Path) -> Iterator[None]:
    """Turn what the file system refuses into one line."""
    try:
        yield
    except OSError as refused:
        space = "free some space or " if refused.errno in (ENOSPC, EDQUOT) else ""
        reason = (refused.strerror or str(refused)).lower()
        msg = (
            f"--out: cannot write to {out}: {reason}; earlier results are as they were;"
            f" {space}choose another folder"
        )
        raise UnusableInputError(msg) from refused


@contextmanager
def staged(out: Path) -> Iterator[Path]:
    """Give an empty folder inside `out` to make files in; it is gone afterwards."""
    staging = out / _STAGING
    shutil.rmtree(staging, ignore_errors=True)
    staging.mkdir()
    try:
        yield staging
    finally:
        shutil.rmtree(staging, ignore_errors=True)


def publish(out: Path, staging: Path, record: Mapping[str, object]) -> None:
    """Move the staged files into their places, with `run.json` last.

    Parameters
    ----------
    out, staging : Path
        The sample's folder and the folder of `staged`.
    record : mapping
        What `run.json` says; the checksum of every staged file is added as `files`.
    """
    names = _files_of(staging)
    files = {name: sha256_of(staging / name) for name in names}
    text = json.dumps({**record, "files": files}, indent=1, ensure_ascii=False, allow_nan=False)
    (staging / "run.json").write_text(text + "\n", encoding="utf-8", newline="")
    for name in [*names, "run.json"]:
        _sync(staging / name)
    try:
        _step_aside(out)
        for name in [*names, "run.json"]:
            _move(staging / name, out / name)
    except BaseException:
        _bring_back(out)
        raise
    with suppress(OSError):  # all is there; only a power cut just now could undo the moves
        _sync(out)
    shutil.rmtree(out / _BEFORE, ignore_errors=True)


def is_finished(folder: Path) -> bool:
    """Tell whether `run.json` is there, can be read, and every checksum in it holds.

    Examples
    --------
    >>> is_finished(Path("no such folder"))
    False
    """
    try:
        files = json.loads((folder / "run.json").read_bytes())["files"]
        inside = folder.resolve()
        return bool(files) and all(
            (inside / name).resolve().is_relative_to(inside) and sha256_of(inside / name) == digest
            for name, digest in files.items()
        )
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return False


def _locked(out: Path) -> IO[str]:
    """Return the open lock file, locked by the system, which frees it if we are killed."""
    path = out / _LOCK
    while True:
        lock = path.open("a+", encoding="utf-8")
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as held:
            raise _held(out, lock) from held
        except OSError:  # a file system without locks: what the file says has to do
            lock.seek(0)
            if _works(lock.read()):
                raise _held(out, lock) from None
        # Between opening and locking the last holder may have removed the file: then try again.
        with suppress(FileNotFoundError):
            if os.path.samestat(os.fstat(lock.fileno()), path.stat()):
                break
        lock.close()
    lock.truncate(0)
    lock.write(f"{os.getpid()} {socket.gethostname()}")
    lock.flush()
    return lock


def _held(out: Path, lock: IO[str]) -> UnusableInputError:
    lock.seek(0)
    process, _, host = lock.read(300).partition(" ")
    lock.close()
    msg = (
        f"--out: process {process or '?'} on {host or '?'} is writing to {out};"
        " wait for it or choose another folder"
    )
    return UnusableInputError(msg)


def _works(holder: str) -> bool:
    process, _, host = holder.partition(" ")
    if not process.isdigit():
        return False
    if host != socket.gethostname():
        return True
    try:
        os.kill(int(process), 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return int(process) != os.getpid()


def _step_aside(out: Path) -> None:
    """Move an earlier run's files into `.before`, `run.json` first: without it nothing counts."""
    before = out / _BEFORE
    shutil.rmtree(before, ignore_errors=True)
    before.mkdir()
    for name in _owned(out):
        _move(out / name, before / name)


def _bring_back(out: Path) -> None:
    """Undo a move that was stopped: earlier files return, new ones go.

    With `run.json` in its place the move was complete, and only `.before` is left to remove.
    """
    before = out / _BEFORE
    if not before.is_dir():
        return
    if not (out / "run.json").exists():
        earlier = _files_of(before)
        # All earlier files are in `.before` unless the move stopped while they stepped aside; the
        # list that goes with them tells which of those in place are theirs.
        theirs = _listed(before / "run.json")
        for name in _owned(out):
            if name in earlier or name not in theirs:
                (out / name).unlink()
        for name in sorted(earlier, key=lambda name: name == "run.json"):
            _move(before / name, out / name)
    shutil.rmtree(before, ignore_errors=True)


def _listed(record: Path) -> set[str]:
    try:
        return set(json.loads(record.read_bytes())["files"])
    except (OSError, ValueError, KeyError, TypeError):
        return set()


def _owned(out: Path) -> list[str]:
    """Return the contract's files that are there, `run.json` first."""
    names = [name for name in reversed(OWNED) if (out / name).is_file()]
    return names + [f"figures/{path.name}" for path in sorted((out / "figures").glob("*.png"))]


def _files_of(folder: Path) -> list[str]:
    return sorted(str(path.relative_to(folder)) for path in folder.rglob("*") if path.is_file())


def _move(path: Path, place: Path) -> None:
    place.parent.mkdir(exist_ok=True)
    path.replace(place)


def _sync(path: Path) -> None:
    """Have the system put a file or a folder on the disk now."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
