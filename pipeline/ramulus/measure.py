"""The main job for one sample: the line, the twin, the flags and the report, in one folder.

Only here are stages timed, stored and taken up again, progress reported, and files written.
"""

import hashlib
import os
import platform
import resource
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numba
import numpy as np
import psutil

from . import __version__
from ._files import sha256_of
from ._folder import OWNED, locked_folder, publish, staged, write_errors
from ._store import UnknownRecordError, WorkStore, chained_key
from .analysis import Analysis
from .config import Configuration, as_toml
from .errors import UnusableInputError, WorkFailedError
from .image.enhance import ScaleResponse, TubeMap
from .image.grid import Level
from .image.mask import Mask, Skeleton
from .image.segment import Segmented
from .line import Results, analyse, analyse_graph, analyse_mask
from .network.gauge import Blur, Gauged
from .network.graph import NODE_KINDS, CentrelineGraph
from .network.swc import read_swc
from .network.tables import read_folder
from .outputs import judged, plain_json, sample_files, write_mask
from .plan import Plan, plan_of
from .report.page import write_report
from .stack.open import InputSettings, open_stack, sample_name
from .stack.slices import slice_files
from .stack.stack import Stack
from .tree.root import RootSettings
from .trust.twin import Twin, run_twin

__all__ = ["Progress", "available_gib", "code_sha256", "kind_of", "measure"]

Progress = Callable[[str, float], None]
"""Is told each stage as it begins, and the share of the expected time that lies before it."""

_RECORDS = (
    Analysis, Blur, CentrelineGraph, Gauged, Level, Mask, ScaleResponse, Segmented, Skeleton,
    TubeMap, Twin,
)  # fmt: skip
_LIBRARIES = (
    "numpy", "scipy", "numba", "pandas", "scikit-image", "networkx", "tifffile", "nibabel",
    "matplotlib", "plotly", "pyarrow",
)  # fmt: skip
_NOT_STORED = frozenset({"read", "grid", "report"})  # as quick to do as to read back
_GRAPH_FILES = ("nodes.csv", "segments.csv", "points.parquet")


def measure(
    source: Path | str,
    *,
    out: Path | str,
    configuration: Configuration | None = None,
    name: str = "",
    progress: Progress | None = None,
) -> Path:
    """Measure one sample into a folder.

    A run that was stopped is taken up where it was, by running it again. Earlier results stay
    until the new ones are complete.

    Parameters
    ----------
    source : path
        A stack, a mask, a graph file, or the folder of a sample that was measured before.
    out : path
        The folder; made where absent.
    configuration : Configuration, optional
        What differs from the defaults.
    name : str
        The sample's name; empty: the file's.
    progress : callable, optional
        Is told each stage and the share of the work before it.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    UnusableInputError
        If the source, the configuration or the folder cannot be used.
    WorkFailedError
        If the work on usable input fails.
    """
    started = time.time()
    source, out = Path(source), Path(out)
    configuration = configuration or Configuration()
    subject = _opened(source, configuration, name)
    _refuse_own_input(source, out)
    with locked_folder(out), _threads(configuration.run.workers), _failures(source):
        store = WorkStore(out / ".work", _RECORDS)
        stages = _Stages(store, subject.key, subject.plan, progress, out)
        results = _analysed(subject, configuration, stages)
        twin = _twin(subject, results, configuration, stages)
        summary, flags = judged(results, twin, name=subject.name)
        files = sample_files(results, summary)
        if configuration.report.level == "full":
            files |= stages.run(
                "report", write_report, results, summary=summary, flags=flags,
                twin=twin.to_json() if twin else None, title=configuration.report.title,
                settings=_settings_shown(configuration),
            )  # fmt: skip
        if _state(source) != subject.state:
            msg = f"{source.name}: changed while it was measured; nothing was written, run it again"
            raise WorkFailedError(msg)
        record = _record(subject, configuration, stages, started)
        _write(out, files, results.mask, record)
        store.keep_only_used() if configuration.run.keep_work else store.remove()
    if progress:
        progress("done", 1.0)
    return out


def kind_of(source: Path, settings: InputSettings) -> str:
    """Return what an input holds: "stack", "mask", "probability" or "graph"."""
    if settings.kind != "auto":
        return settings.kind
    is_table = source.is_dir() and (source / "segments.csv").exists()
    return "graph" if is_table or source.suffix.lower() == ".swc" else "stack"


def available_gib(configuration: Configuration) -> float:
    """Return the memory that a run may take: as configured, else what is free."""
    return configuration.run.memory_gib or psutil.virtual_memory().available / 2**30


@dataclass(frozen=True, slots=True)
class _Subject:
    """The input, opened and checked, before any work is done."""

    kind: str
    name: str
    file: str
    data: Stack | CentrelineGraph
    region: np.ndarray | None
    sha256: str
    region_sha256: str
    plan: Plan
    state: tuple[tuple[int, int], ...]

    @property
    def key(self) -> str:
        """What every stage depends on: the input's bytes, how they are read, and the program."""
        parts: list[Any] = [code_sha256(), *_versions().values()]
        parts += [self.kind, self.sha256, self.region_sha256]
        if isinstance(self.data, Stack):
            origin = self.data.provenance
            parts += [origin.channel, origin.time_point, self.data.spacing_um, self.data.origin_um]
        return chained_key("", *parts)


class _Stages:
    """Runs stages: tells, times, stores them, or takes what an earlier run stored."""

    def __init__(
        self, store: WorkStore, key: str, plan: Plan, progress: Progress | None, out: Path
    ) -> None:
        self.store, self.key, self.plan, self.progress, self.out = store, key, plan, progress, out
        self.seconds: dict[str, float] = {}
        self.resumed: list[str] = []

    def run(self, name: str, function: Callable[..., Any], *args: Any, **kwargs: Any) -> Any:
        """Run one stage; each depends on all before it and on what it is given."""
        if self.progress:
            self.progress(name, self.plan.share_before(name))
        start = time.perf_counter()
        named = [item for pair in sorted(kwargs.items()) for item in pair]
        self.key = chained_key(self.key, name, *args, *named)
        try:
            value = self.store.load(name, self.key)
            self.resumed.append(name)
        except KeyError:
            value = self._done(name, function, args, kwargs)
        self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - start
        return value

    def _done(self, name: str, function: Callable[..., Any], args: Any, kwargs: Any) -> Any:
        start = time.perf_counter()
        try:
            value = function(*args, **kwargs)
        except UnusableInputError:
            self.store.remove()  # there is nothing to take up
            raise
        if name not in _NOT_STORED:
            with write_errors(self.out):
                self._kept(name, value, time.perf_counter() - start)
        return value

    def _kept(self, name: str, value: Any, seconds: float) -> None:
        try:
            self.store.save(name, self.key, value, seconds=seconds)
        except UnknownRecordError:  # it can be done again; a test watches over this
            return


def _opened(source: Path, configuration: Configuration, name: str) -> _Subject:
    settings = configuration.input
    if not source.exists():
        msg = f"{source}: no such file or folder"
        raise UnusableInputError(msg)
    kind, name, state = kind_of(source, settings), name or sample_name(source), _state(source)
    off = {"twin": kind != "stack" or configuration.twin.mode == "off",
           "report": configuration.report.level == "none"}  # fmt: skip
    without = [stage for stage, left_out in off.items() if left_out]
    if kind == "graph":
        graph, digest = _read_graph(source, configuration)
        without += [
            "read",
            "grid",
            "enhance",
            "segment",
            "thin",
            "trace",
            "clean",
            "smooth",
            "gauge",
        ]
        plan = plan_of((1, 1, 1), (1.0, 1.0, 1.0), 1, without=without)
        return _Subject(kind, name, source.name, graph, None, digest, "", plan, state)
    stack = open_stack(source, settings=settings, name=name)
    plan = plan_of(stack.shape, stack.spacing_um, stack.voxels.dtype.itemsize, without=without)
    _refuse_too_large(plan, configuration, source)
    region, region_sha256 = _region(settings, stack.shape)
    digest = stack.provenance.sha256
    return _Subject(kind, name, source.name, stack, region, digest, region_sha256, plan, state)


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


def _refuse_too_large(plan: Plan, configuration: Configuration, source: Path) -> None:
    limit = available_gib(configuration)
    if plan.memory_gib > limit:
        msg = (
            f"{source.name}: expected to take {plan.memory_gib:.3g} GiB of memory, {limit:.3g} GiB"
            " may be used; measure a crop, or set run.memory_gib higher"
        )
        raise UnusableInputError(msg)


def _refuse_own_input(source: Path, out: Path) -> None:
    """Refuse an input that the results would overwrite."""
    inside = source.resolve().parent == out.resolve() and source.name in OWNED
    if inside or source.resolve() == out.resolve():
        msg = f"--out: the results would replace the input {source}; choose another folder"
        raise UnusableInputError(msg)


def _analysed(subject: _Subject, configuration: Configuration, stages: _Stages) -> Results:
    line, data = configuration.line(), subject.data
    if isinstance(data, CentrelineGraph):
        return analyse_graph(data, line, name=subject.name, step=stages.run)
    if subject.kind == "stack":
        dark = configuration.input.polarity == "dark"
        return analyse(data, line, region=subject.region, dark=dark, step=stages.run)
    if subject.kind == "probability":
        voxels = data.read()
        full = np.iinfo(voxels.dtype).max if voxels.dtype.kind in "ui" else 1.0
        data = data.replace(voxels=(voxels >= 0.5 * full).astype(np.uint8))
    return analyse_mask(data, line, step=stages.run)


def _twin(
    subject: _Subject, results: Results, configuration: Configuration, stages: _Stages
) -> Twin | None:
    if subject.kind != "stack" or not isinstance(subject.data, Stack):
        return None
    twin: Twin = stages.run(
        "twin", run_twin, results.graph, shape=subject.data.shape, facts=results.facts,
        line=configuration.line(), settings=configuration.twin,
    )  # fmt: skip
    return twin


def _settings_shown(configuration: Configuration) -> str:
    """Return what the report shows: what changes a result, without a path of this machine."""
    region = Path(configuration.input.region).name
    named = configuration.input.model_copy(update={"stack": "", "region": region})
    shown = configuration.model_copy(update={"input": named})
    return as_toml(shown, without=("run", "cohort", "phantom"))


def _record(
    subject: _Subject, configuration: Configuration, stages: _Stages, started: float
) -> dict[str, Any]:
    """Return what it takes to repeat the run; times and facts of the host stand here alone."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    seconds = {name: round(value, 3) for name, value in stages.seconds.items()}
    record = {
        "sample": subject.name, "ramulus": __version__, "code_sha256": code_sha256(),
        "python": platform.python_version(), "libraries": _versions(),
        "input": subject.file, "input_kind": subject.kind, "input_sha256": subject.sha256,
        "region_sha256": subject.region_sha256, "seed": configuration.twin.seed,
        "configuration": configuration.model_dump(mode="json"),
        "system": platform.system(), "machine": platform.machine(), "processors": os.cpu_count(),
        "started": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(started)),
        "seconds": seconds, "seconds_total": round(time.time() - started, 3),
        "stages_resumed": stages.resumed,
        "peak_memory_mib": round(peak / (2**20 if sys.platform == "darwin" else 2**10), 1),
    }  # fmt: skip
    return {name: plain_json(value) for name, value in record.items()}


def _write(out: Path, files: dict[str, bytes], mask: Mask | None, record: dict[str, Any]) -> None:
    with write_errors(out), staged(out) as staging:
        for name, content in files.items():
            place = staging / name
            place.parent.mkdir(exist_ok=True)
            place.write_bytes(content)
        if mask is not None:
            write_mask(staging / "mask.ome.tif", mask)
        publish(out, staging, record)


@contextmanager
def _failures(source: Path) -> Iterator[None]:
    """Turn what the machine refuses in the midst of the work into one line."""
    try:
        yield
    except MemoryError as failed:
        msg = f"{source.name}: out of memory; measure a crop, or on a machine with more"
        raise WorkFailedError(msg) from failed
    except OSError as failed:
        reason = (failed.strerror or str(failed)).lower()
        msg = f"{source.name}: cannot be read any more ({reason}); earlier results are as they were"
        raise WorkFailedError(msg) from failed


@contextmanager
def _threads(workers: int | None) -> Iterator[None]:
    most, before = numba.config.NUMBA_NUM_THREADS, numba.get_num_threads()  # type: ignore[attr-defined]
    numba.set_num_threads(min(workers or most, most))
    try:
        yield
    finally:
        numba.set_num_threads(before)


def _state(source: Path) -> tuple[tuple[int, int], ...]:
    """Return sizes and times of the input's files, by which a change under the run is noticed."""
    files: Sequence[Path] = [source]
    if source.is_dir():
        tables = [source / name for name in _GRAPH_FILES]
        files = tables if all(f.exists() for f in tables) else slice_files(source)
    try:
        return tuple((f.stat().st_size, f.stat().st_mtime_ns) for f in files)
    except OSError:
        return ()


@cache
def code_sha256() -> str:
    """Return the checksum of the package's source, so that no other code's values are taken."""
    digest = hashlib.sha256()
    for file in sorted(Path(__file__).parent.rglob("*.py")):
        digest.update(file.read_bytes())
    return digest.hexdigest()


def _versions() -> dict[str, str]:
    found = {}
    for name in _LIBRARIES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:  # an environment without metadata
            found[name] = "unknown"
    return found
