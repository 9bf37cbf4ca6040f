"""What it takes to repeat a run: the program, the libraries, the machine."""

import hashlib
import os
import platform
import resource
import sys
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from . import __version__

__all__ = ["code_sha256", "libraries", "machine_facts", "peak_memory_mib", "program_facts"]

_LIBRARIES = (
    "numpy", "scipy", "numba", "pandas", "scikit-image", "networkx", "tifffile", "nibabel",
    "matplotlib", "plotly", "pyarrow",
)  # fmt: skip


@cache
def code_sha256() -> str:
    """Return the checksum of the package's source: a stored value of other code is of no use."""
    digest = hashlib.sha256()
    for file in sorted(Path(__file__).parent.rglob("*.py")):
        digest.update(file.read_bytes())
    return digest.hexdigest()


@cache
def _version(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:  # an environment without metadata
        return "unknown"


def libraries() -> dict[str, str]:
    """Return the versions of the libraries that results depend on."""
    return {name: _version(name) for name in _LIBRARIES}


def program_facts() -> dict[str, Any]:
    """Return the versions of the program, Python and the libraries."""
    return {
        "ramulus": __version__,
        "code_sha256": code_sha256(),
        "python": platform.python_version(),
        "libraries": libraries(),
    }


def machine_facts() -> dict[str, Any]:
    """Return what may differ from machine to machine and changes no result."""
    return {
        "system": platform.system(),
        "machine": platform.machine(),
        "processors": os.cpu_count(),
        "peak_memory_mib": peak_memory_mib(),
    }


def peak_memory_mib() -> float:
    """Return the most memory that this process has held so far, in MiB."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return round(peak / (2**20 if sys.platform == "darwin" else 2**10), 1)
