"""The main job for one sample: the line, the twin, the flags and the report, in one folder.

Only here are stages timed, stored and taken up again, progress reported, and files written.
"""

import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numba
import numpy as np

from ._folder import locked_folder, publish, staged, write_errors
from ._store import UnknownRecordError, WorkStore, chained_key
from .analysis import Analysis
from .config import Configuration, as_toml
from .errors import UnusableInputError, WorkFailedError
from .image.enhance import ScaleResponse, TubeMap
from .image.grid import Level
from .image.mask import Mask, Skeleton
from .image.segment import Segmented
from .intake import Intake, open_input, state_of
from .line import Results, analyse, analyse_graph, analyse_mask
from .network.gauge import Blur, Gauged
from .network.graph import CentrelineGraph
from .outputs import judged, plain_json, sample_files, write_mask
from .plan import Plan
from .provenance import code_sha256, libraries, machine_facts, program_facts
from .report.page import write_report
from .stack.stack import Stack
from .trust.twin import Twin, run_twin

__all__ = ["Progress", "measure"]

Progress = Callable[[str, float], None]
"""Is told each stage as it begins, and the share of the expected time that lies before it."""

_RECORDS = (
    Analysis, Blur, CentrelineGraph, Gauged, Level, Mask, ScaleResponse, Segmented, Skeleton,
    TubeMap, Twin,
)  # fmt: skip
_NOT_STORED = frozenset({"read", "grid", "report"})  # as quick to do as to read back


def measure(
    source: Path | str,
    *,
    out: Path | str,
    configuration: Configuration | None = None,
    name: str = "",
    progress: Progress | None = None,
) -> Path:
    """Measure one sample into a folder.

    A run that was stopped is taken up where it was by running it again. Earlier results stay until
    the new ones are complete.

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
    with _failures(source):
        intake = open_input(source, configuration, out=out, name=name)
    with locked_folder(out), _threads(configuration.run.workers), _failures(source):
        store = WorkStore(out / ".work", _RECORDS)
        stages = _Stages(store, _first_key(intake), intake.plan, progress, out)
        results = _analysed(intake, configuration, stages)
        twin = _twin(intake, results, configuration, stages)
        files = _made(intake, results, twin, configuration, stages)
        if state_of(source) != intake.state:
            msg = f"{source.name}: changed while it was measured; nothing was written, run it again"
            raise WorkFailedError(msg)
        _write(out, files, results.mask, _record(intake, configuration, stages, started))
        store.keep_only_used() if configuration.run.keep_work else store.remove()
    if progress:
        progress("done", 1.0)
    return out


class _Stages:
    """Runs stages: tells, times, stores them, or takes what an earlier run stored."""

    def __init__(
        self, store: WorkStore, key: str, plan: Plan, progress: Progress | None, out: Path
    ) -> None:
        self.store, self.key, self.plan, self.progress, self.out = store, key, plan, progress, out
        self.seconds: dict[str, float] = {}
        self.resumed: list[str] = []

    def run(self, name: str, function: Callable[..., Any], *args: Any, **kwargs: Any) -> Any:
        """Run one stage; it depends on all before it and on what it is given."""
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
        except UnknownRecordError:  # then it is done again; a test watches over this
            return


def _first_key(intake: Intake) -> str:
    """Return what every stage depends on: the program, the input's bytes, how they are read."""
    parts: list[Any] = [code_sha256(), *libraries().values()]
    parts += [intake.kind, intake.sha256, intake.region_sha256]
    if isinstance(intake.data, Stack):
        origin = intake.data.provenance
        parts += [origin.channel, origin.time_point]
        parts += [intake.data.spacing_um, intake.data.origin_um]
    return chained_key("", *parts)


def _analysed(intake: Intake, configuration: Configuration, stages: _Stages) -> Results:
    line, data = configuration.line(), intake.data
    if isinstance(data, CentrelineGraph):
        return analyse_graph(data, line, name=intake.name, step=stages.run)
    if intake.kind == "stack":
        dark = configuration.input.polarity == "dark"
        return analyse(data, line, region=intake.region, dark=dark, step=stages.run)
    if intake.kind == "probability":
        data = data.replace(voxels=_likely(data.read()))
    return analyse_mask(data, line, step=stages.run)


def _likely(probability: np.ndarray) -> np.ndarray:
    """Return 1 where a probability is one half or more; integers count their type's range as 1."""
    whole = probability.dtype.kind in "ui"
    full = np.iinfo(probability.dtype).max if whole else 1.0
    return (probability >= 0.5 * full).astype(np.uint8)


def _twin(
    intake: Intake, results: Results, configuration: Configuration, stages: _Stages
) -> Twin | None:
    if intake.kind != "stack" or not isinstance(intake.data, Stack):
        return None
    twin: Twin = stages.run(
        "twin", run_twin, results.graph, shape=intake.data.shape, facts=results.facts,
        line=configuration.line(), settings=configuration.twin,
    )  # fmt: skip
    return twin


def _made(
    intake: Intake, results: Results, twin: Twin | None, configuration: Configuration,
    stages: _Stages,
) -> dict[str, bytes]:  # fmt: skip
    summary, flags = judged(results, twin, name=intake.name)
    files = sample_files(results, summary)
    if configuration.report.level == "full":
        files |= stages.run(
            "report", write_report, results, summary=summary, flags=flags,
            twin=twin.to_json() if twin else None, title=configuration.report.title,
            settings=_settings_shown(configuration), provenance=_provenance_shown(intake),
        )  # fmt: skip
    return files


def _provenance_shown(intake: Intake) -> dict[str, str]:
    """Return what the report shows of a run: nothing that differs between two of the same."""
    facts = program_facts()
    versions = ", ".join(f"{name} {number}" for name, number in facts["libraries"].items())
    return {
        "input": intake.file, "read as": intake.kind, "SHA-256 of the input": intake.sha256,
        "ramulus": facts["ramulus"], "SHA-256 of its source": facts["code_sha256"],
        "Python": facts["python"], "libraries": versions,
    }  # fmt: skip


def _settings_shown(configuration: Configuration) -> str:
    """Return what the report shows: what changes a result, without a path of this machine."""
    region = Path(configuration.input.region).name
    named = configuration.input.model_copy(update={"stack": "", "region": region})
    shown = configuration.model_copy(update={"input": named})
    return as_toml(shown, without=("run", "cohort", "phantom"))


def _record(
    intake: Intake, configuration: Configuration, stages: _Stages, started: float
) -> dict[str, Any]:
    """Return what it takes to repeat the run; times and facts of the machine stand here alone."""
    record = {
        "sample": intake.name, **program_facts(),
        "input": intake.file, "input_kind": intake.kind, "input_sha256": intake.sha256,
        "region_sha256": intake.region_sha256, "seed": configuration.twin.seed,
        "configuration": configuration.model_dump(mode="json"), **machine_facts(),
        "started": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(started)),
        "seconds": {name: round(value, 3) for name, value in stages.seconds.items()},
        "seconds_total": round(time.time() - started, 3), "stages_resumed": stages.resumed,
    }  # fmt: skip
    return {name: plain_json(value) for name, value in record.items()}


def _write(
    out: Path, files: Mapping[str, bytes], mask: Mask | None, record: dict[str, Any]
) -> None:
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
        msg = f"{source.name}: cannot be read ({reason}); earlier results are as they were"
        raise WorkFailedError(msg) from failed


@contextmanager
def _threads(workers: int | None) -> Iterator[None]:
    """Let numba's loops, and what asks numba for their number, run in so many threads."""
    most: int = numba.config.NUMBA_NUM_THREADS  # type: ignore[attr-defined]
    before = numba.get_num_threads()
    numba.set_num_threads(min(workers or most, most))
    try:
        yield
    finally:
        numba.set_num_threads(before)
