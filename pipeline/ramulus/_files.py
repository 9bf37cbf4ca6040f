"""Files that are there whole or not at all, and their checksums."""

import hashlib
import os
from contextlib import suppress
from pathlib import Path
from tempfile import NamedTemporaryFile

__all__ = ["sha256_of", "write_whole"]


def write_whole(path: Path, content: bytes) -> str:
    """Write a file beside its place, move it there, and return its SHA-256.

    A reader sees the old file or the new one, never a part; after a crash a `.part` file may be
    left over, which nothing reads.
    """
    with NamedTemporaryFile(
        dir=path.parent, prefix=f".{path.name}.", suffix=".part", delete=False
    ) as file:
        beside = Path(file.name)
        try:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
            beside.chmod(0o666 & ~_umask())  # temporary files are for their owner alone
            beside.replace(path)
        except BaseException:
            with suppress(OSError):
                beside.unlink()
            raise
    return hashlib.sha256(content).hexdigest()


def _umask() -> int:
    """Return the process's umask; it can only be read by setting it."""
    mask = os.umask(0o022)
    os.umask(mask)
    return mask


def sha256_of(path: Path) -> str:
    """Return the SHA-256 of a file, read in pieces."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
