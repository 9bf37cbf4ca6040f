"""The main job for one sample: the line, the twin, the flags and the report, stored whole or not at all.

Only here are files written, stages timed and progress reported. Every file is made in a staging
folder beside the others and moved into its place; `run.json` goes last and names the checksum of
each. A folder without a valid `run.json` is unfinished.
"""

import fcntl
import json
import os
import platform
import resource
import shutil
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

from ._files import sha256_of
from .config import Configuration, as_toml, with_changes
from .errors import UnusableInputError, WorkFailedError
from .image.mask import Mask
from .line import Results, analyse, analyse_graph, analyse_mask
from .network.graphml import graphml_bytes
from .network.swc import read_swc, swc_text
from .network.tables import csv_bytes, parquet_bytes, read_folder
from .network.vtp import vtp_bytes
from .report.page import write_report
from .stack.open import InputSettings, file_sha256, open_stack, sample_name
from .trust.flags import Flag, raise_flags
from .trust.twin import run_twin

__all__ = ["Progress", "finished", "measure"]

Progress = Callable[[str, float], None]
_TABLES = ("nodes", "segments", "junctions", "orders", "connectivity", "resistance")
_STAGES = ("read", "grid", "enhance", "segment", "thin", "trace", "clean", "smooth", "gauge", "network", "twin", "report")


@dataclass
class _Clock:
    """Runs stages, keeps their times, tells the progress."""

    progress: Progress | None
    seconds: dict[str, float] = field(default_factory=dict)

    def step(self, name: str, function: Callable[..., Any], *args: Any, **kwargs: Any) -> Any:
        if self.progress:
            self.progress(name, _STAGES.index(name) / len(_STAGES) if name in _STAGES else 0.0)
        start = time.perf_counter()
        try:
            return function(*args, **kwargs)
        finally:
            self.seconds[name] = self.seconds.get(name, 0.0) + time.perf_counter() - start


def measure(
    source: Path | str, *, out: Path | str, configuration: Configuration, name: str = "",
    progress: Progress | None = None,
) -> Path:  # fmt: skip
    """Measure one sample into a folder.

    Parameters
    ----------
    source : path
        A stack, a mask, a graph file, or a sample folder of ramulus.
    out : path
        The folder; made where absent. Earlier results stay until the new ones are complete.
    progress : callable, optional
        Called with a stage's name and the share of the work done.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    UnusableInputError
        If the source or the folder cannot be used.
    WorkFailedError
        If the work on usable input fails.
    """
    source, out = Path(source), Path(out)
    if not source.exists():
        msg = f"{source}: no such file or folder"
        raise UnusableInputError(msg)
    with _locked(out), _disk_errors(out):
        clock = _Clock(progress)
        started = time.time()
        checksum, results = _results(source, configuration, name or sample_name(source), clock)
        twin = None
        if results.mask is not None and configuration.input.kind != "mask":
            twin = clock.step(
                "twin", run_twin, results.graph, shape=tuple(results.summary["shape"]), facts=results.facts,
                line=configuration.line(), settings=configuration.twin,
            )  # fmt: skip
        summary, flags = _judged(results, twin, name or sample_name(source))
        files = _contents(results, summary, flags)
        if configuration.report.level == "full":
            pages = clock.step("report", write_report, results, summary=summary, flags=flags,
                               twin=twin.to_json() if twin else None, title=configuration.report.title,
                               settings=as_toml(configuration))  # fmt: skip
            files |= pages
        run = _run_record(source, checksum, configuration, clock, started)
        _store(out, files, results.mask, run)
    return out


def finished(folder: Path) -> bool:
    """Whether a folder holds a complete run: `run.json` is valid and every checksum holds."""
    try:
        run = json.loads((folder / "run.json").read_text(encoding="utf-8"))
        return all(sha256_of(folder / name) == digest for name, digest in run["files"].items())
    except (OSError, ValueError, KeyError, AttributeError):
        return False


def _results(source: Path, configuration: Configuration, name: str, clock: _Clock) -> tuple[str, Results]:
    settings = configuration.input
    kind = settings.kind
    if kind == "auto":
        graph_folder = source.is_dir() and (source / "segments.csv").exists()
        kind = "graph" if source.suffix.lower() == ".swc" or graph_folder else "stack"
    line = configuration.line()
    if kind == "graph":
        folder = source.is_dir()
        graph = read_folder(source) if folder else read_swc(source, unit=settings.graph_unit)
        checksum = sha256_of(source / "segments.csv") if folder else file_sha256(source)
        return checksum, analyse_graph(graph, line, name=name, step=clock.step)
    stack = open_stack(source, settings=settings, name=name)
    checksum = stack.provenance.sha256
    if kind == "mask":
        return checksum, analyse_mask(stack, line, step=clock.step)
    region = _region(settings, stack.shape)
    dark = settings.polarity == "dark"
    return checksum, analyse(stack, line, region=region, dark=dark, step=clock.step)


def _region(settings: InputSettings, shape: tuple[int, int, int]) -> np.ndarray | None:
    if not settings.region:
        return None
    path = Path(settings.region)
    mask = open_stack(path, settings=InputSettings(spacing_um=settings.spacing_um, spacing_override_reason="as the stack's"))
    if mask.shape != shape:
        msg = f"input.region: {path.name} has {mask.shape} voxels, expected the stack's {shape}"
        raise UnusableInputError(msg)
    region = mask.read() > 0
    if not region.any():
        msg = f"input.region: {path.name} marks no voxel"
        raise UnusableInputError(msg)
    return region


def _judged(results: Results, twin: Any, name: str) -> tuple[dict[str, Any], list[Flag]]:
    facts = dict(results.facts)
    summary = {"sample": name} | results.summary
    if twin is not None:
        summary["twin"] = twin.to_json()
        if twin.smallest_resolved_radius_um:
            summary["smallest_resolved_radius_um"] = max(
                twin.smallest_resolved_radius_um, summary["smallest_resolved_radius_um"] or 0.0
            )
        if twin.radius_bias is not None:
            facts["twin_radius_bias"] = abs(twin.radius_bias)
        if twin.junction_recall is not None:
            facts["twin_junction_recall_lost"] = 1.0 - twin.junction_recall
    flags = raise_flags(facts)
    summary["image"] = {k: facts[k] for k in sorted(facts) if isinstance(facts[k], (int, float, str))}
    summary["flags"] = [f.to_json() for f in flags]
    return summary, flags


def _contents(results: Results, summary: dict[str, Any], flags: list[Flag]) -> dict[str, bytes]:
    del flags
    files = {f"{name}.csv": csv_bytes(results.tables[name]) for name in _TABLES}
    files["points.parquet"] = parquet_bytes(results.tables["points"])
    files["network.graphml"] = graphml_bytes(results.tables["nodes"], results.tables["segments"])
    files["network.vtp"] = vtp_bytes(results.graph, results.tables["segments"])
    tree = swc_text(results.graph)
    summary["tree_swc"] = "written" if tree else "not written: the network has loops, SWC holds trees only"
    if tree:
        files["tree.swc"] = tree.encode()
    files["edits.jsonl"] = "".join(json.dumps(e, ensure_ascii=False) + "\n" for e in results.edits).encode()
    files["flow_settings.json"] = _json(results.flow_settings)
    files["summary.json"] = _json(summary)
    return files


def _json(value: Any) -> bytes:
    return (json.dumps(_clean(value), indent=1, ensure_ascii=False, allow_nan=False) + "\n").encode()


def _clean(value: Any) -> Any:
    """JSON has no NaN: null in its place; numpy scalars become Python's."""
    if isinstance(value, dict):
        return {str(k): _clean(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_clean(v) for v in value]
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value


def _run_record(source: Path, checksum: str, configuration: Configuration, clock: _Clock, started: float) -> dict[str, Any]:
    libraries = ("numpy", "scipy", "numba", "scikit-image", "pandas", "tifffile", "nibabel", "networkx")
    return {
        "ramulus": version("ramulus"), "libraries": {name: version(name) for name in libraries},
        "python": platform.python_version(), "machine": platform.machine(), "cpus": os.cpu_count(),
        "input": source.name, "input_sha256": checksum,
        "configuration": configuration.model_dump(mode="json"), "started": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(started)),
        "seconds": {k: round(v, 3) for k, v in clock.seconds.items()},
        "seconds_total": round(time.time() - started, 3),
        "peak_memory_mib": round(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024, 1),
    }  # fmt: skip


def _store(out: Path, files: dict[str, bytes], mask: Mask | None, run: dict[str, Any]) -> None:
    staging = out / ".staging"
    shutil.rmtree(staging, ignore_errors=True)
    staging.mkdir()
    try:
        for name, content in files.items():
            place = staging / name
            place.parent.mkdir(parents=True, exist_ok=True)
            with place.open("wb") as file:
                file.write(content)
                file.flush()
                os.fsync(file.fileno())
        if mask is not None:
            _write_mask(staging / "mask.ome.tif", mask)
        names = sorted(str(p.relative_to(staging)) for p in staging.rglob("*") if p.is_file())
        run["files"] = {name: sha256_of(staging / name) for name in names}
        (staging / "run.json").write_bytes(_json(run))
        # Until the new run.json is in place the folder counts as unfinished.
        (out / "run.json").unlink(missing_ok=True)
        for stale in _owned(out):
            if stale not in run["files"]:
                (out / stale).unlink(missing_ok=True)
        for name in [*names, "run.json"]:
            target = out / name
            target.parent.mkdir(parents=True, exist_ok=True)
            (staging / name).replace(target)
    finally:
        shutil.rmtree(staging, ignore_errors=True)


def _owned(out: Path) -> Iterator[str]:
    """Files of earlier runs that a new run may not write again."""
    yield from ("tree.swc", "mask.ome.tif", "report.html")
    for figure in (out / "figures").glob("*.png"):
        yield f"figures/{figure.name}"


def _write_mask(path: Path, mask: Mask) -> None:
    import tifffile  # noqa: PLC0415 - heavy to import

    z, y, x = mask.spacing_um
    tifffile.imwrite(
        path, mask.inside.astype(np.uint8) * 255, ome=True, compression="zlib", photometric="minisblack",
        metadata={
            "axes": "ZYX", "PhysicalSizeZ": z, "PhysicalSizeY": y, "PhysicalSizeX": x,
            "PhysicalSizeZUnit": "um", "PhysicalSizeYUnit": "um", "PhysicalSizeXUnit": "um",
            "UUID": "urn:uuid:00000000-0000-0000-0000-000000000000",
        },
    )  # fmt: skip


@contextmanager
def _locked(out: Path) -> Iterator[None]:
    """Hold the folder for one run; a second run is refused."""
    made = False
    try:
        if out.exists() and not out.is_dir():
            msg = f"--out: {out} is a file, expected a folder"
            raise UnusableInputError(msg)
        made = not out.exists()
        out.mkdir(parents=True, exist_ok=True)
        lock = (out / ".lock").open("a")
    except OSError as refused:
        msg = f"--out: {out} cannot be written ({refused.strerror}); choose another folder"
        raise UnusableInputError(msg) from refused
    try:
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError as held:
            msg = f"--out: another run is writing to {out}; wait for it or choose another folder"
            raise UnusableInputError(msg) from held
        except OSError:
            pass  # a file system without locks: the check is left out
        yield
    finally:
        lock.close()
        (out / ".lock").unlink(missing_ok=True)
        if made and not any(out.iterdir()):
            out.rmdir()


@contextmanager
def _disk_errors(out: Path) -> Iterator[None]:
    try:
        yield
    except OSError as failed:
        msg = f"--out: {out}: {failed.strerror or failed}; nothing that was there is lost, free the disk or choose another folder"
        raise UnusableInputError(msg) from failed
    except MemoryError as failed:
        msg = "the memory was not enough; use a region (input.region), a crop, or a machine with more"
        raise WorkFailedError(msg) from failed


def sample_configuration(path: Path, configuration: Configuration) -> tuple[Path, Configuration]:
    """Return the stack that a sample TOML names (relative to the TOML) and the configuration without it."""
    named = configuration.input.stack
    if not named:
        msg = f"{path.name}: input.stack is empty, expected the stack's file"
        raise UnusableInputError(msg)
    return (path.parent / named), with_changes(configuration, input={"stack": ""})
