"""One sample's input, opened and checked before any work is done."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import psutil

from ._files import sha256_of
from ._folder import OWNED
from ._store import chained_key
from .config import Configuration
from .errors import UnusableInputError
from .network.graph import NODE_KINDS, CentrelineGraph
from .network.swc import read_swc
from .network.tables import read_folder
from .plan import Plan, plan_of
from .stack.open import InputSettings, open_stack, sample_name
from .stack.slices import slice_files
from .stack.stack import Stack
from .tree.root import RootSettings

__all__ = ["Intake", "available_gib", "kind_of", "open_input", "state_of"]

_GRAPH_FILES = ("nodes.csv", "segments.csv", "points.parquet")
_GRAPH_STAGES = ("network", "report")


@dataclass(frozen=True, slots=True)
class Intake:
    """What goes into the line.

    Parameters
    ----------
    kind : str
        "stack", "mask", "probability" or "graph".
    name : str
        The sample's.
    file : str
        Name of the input's file or folder.
    data : Stack or CentrelineGraph
        The input; a stack's voxels are not read yet.
    region : (z, y, x) bool array, optional
        Where vessels are looked for.
    sha256, region_sha256 : str
        Checksums of the input and of the region.
    plan : Plan
        What measuring it is expected to take.
    state : tuple
        Sizes and times of the input's files when it was opened.
    """

    kind: str
    name: str
    file: str
    data: Stack | CentrelineGraph
    region: np.ndarray | None
    sha256: str
    region_sha256: str
    plan: Plan
    state: tuple[tuple[int, int], ...]


def open_input(source: Path, configuration: Configuration, *, out: Path, name: str = "") -> Intake:
    """Open an input and check that it can be measured.

    Parameters
    ----------
    source : Path
        A stack, a mask, a graph file or a sample's folder.
    configuration : Configuration
        Says what it is and what its header does not.
    out : Path
        Where the results will go.
    name : str
        The sample's name; empty: the file's.

    Raises
    ------
    UnusableInputError
        If there is nothing at the path, it cannot be read, it would be overwritten by the results,
        or it is expected to take more memory than it may.
    """
    if not source.exists():
        msg = f"{source}: no such file or folder"
        raise UnusableInputError(msg)
    _refuse_to_overwrite(source, out)
    kind, name = kind_of(source, configuration.input), name or sample_name(source)
    state = state_of(source)
    left_out = [] if kind == "stack" and configuration.twin.mode != "off" else ["twin"]
    left_out += ["report"] if configuration.report.level == "none" else []
    if kind == "graph":
        graph, digest = _read_graph(source, configuration)
        plan = plan_of((1, 1, 1), (1.0, 1.0, 1.0), 1, without=left_out).only(_GRAPH_STAGES)
        return Intake(kind, name, source.name, graph, None, digest, "", plan, state)
    stack = open_stack(source, settings=configuration.input, name=name)
    itemsize = np.dtype(stack.voxels.dtype).itemsize
    plan = plan_of(stack.shape, stack.spacing_um, itemsize, without=left_out)
    _refuse_too_large(plan, configuration, source)
    region, region_digest = _region(configuration.input, stack.shape)
    digest = stack.provenance.sha256
    return Intake(kind, name, source.name, stack, region, digest, region_digest, plan, state)


def kind_of(source: Path, settings: InputSettings) -> str:
    """Return what an input holds: "stack", "mask", "probability" or "graph"."""
    if settings.kind != "auto":
        return settings.kind
    is_sample = source.is_dir() and (source / "segments.csv").exists()
    return "graph" if is_sample or source.suffix.lower() == ".swc" else "stack"


def available_gib(configuration: Configuration) -> float:
    """Return the memory that a run may take: as configured, else what is free."""
    return configuration.run.memory_gib or psutil.virtual_memory().available / 2**30


def state_of(source: Path) -> tuple[tuple[int, int], ...]:
    """Return sizes and times of the input's files, by which a change under the run is noticed."""
    files: Sequence[Path] = [source]
    if source.is_dir():
        tables = [source / name for name in _GRAPH_FILES]
        files = tables if tables[1].exists() else slice_files(source)
    try:
        return tuple((f.stat().st_size, f.stat().st_mtime_ns) for f in files)
    except OSError:
        return ()


def _refuse_to_overwrite(source: Path, out: Path) -> None:
    inside = source.resolve().parent == out.resolve() and source.name in OWNED
    if inside or source.resolve() == out.resolve():
        msg = f"--out: the results would replace the input {source}; choose another folder"
        raise UnusableInputError(msg)


def _refuse_too_large(plan: Plan, configuration: Configuration, source: Path) -> None:
    limit = available_gib(configuration)
    if plan.memory_gib > limit:
        msg = (
            f"{source.name}: expected to take {plan.memory_gib:.3g} GiB of memory, {limit:.3g} GiB"
            " may be used; measure a crop, or set run.memory_gib higher"
        )
        raise UnusableInputError(msg)


def _read_graph(source: Path, configuration: Configuration) -> tuple[CentrelineGraph, str]:
    if source.is_dir():
        digests = [sha256_of(source / name) for name in _GRAPH_FILES if (source / name).exists()]
        return read_folder(source), chained_key("", *digests)
    graph = read_swc(source, unit=configuration.input.graph_unit)
    roots = int((graph.node_kind == NODE_KINDS.index("inlet")).sum())
    if roots > 1 and configuration.root.inlet == RootSettings().inlet:
        msg = (
            f"{source.name}: found {roots} roots (points without a parent), expected one; make it a"
            " file for each tree, or name the inlets in root.inlet_um or root.inlet_nodes"
        )
        raise UnusableInputError(msg)
    return graph, sha256_of(source)


def _region(settings: InputSettings, shape: tuple[int, int, int]) -> tuple[np.ndarray | None, str]:
    """Read the region of interest; its grid is the stack's, whatever spacing its header states."""
    if not settings.region:
        return None, ""
    path = Path(settings.region)
    as_given = InputSettings(spacing_um=(1.0, 1.0, 1.0), spacing_override_reason="the stack's grid")
    mask = open_stack(path, settings=as_given)
    if mask.shape != shape:
        msg = f"input.region: {path.name} has {mask.shape} voxels, expected the stack's {shape}"
        raise UnusableInputError(msg)
    region = mask.read() > 0
    if not region.any():
        msg = f"input.region: {path.name} marks no voxel, expected voxels above 0"
        raise UnusableInputError(msg)
    return region, mask.provenance.sha256
