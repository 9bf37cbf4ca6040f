"""A cohort from its manifest to its folder: check all, measure each, compare, write."""

import json
import platform
import time
from collections.abc import Callable
from difflib import get_close_matches
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from .._cohort_settings import CohortSettings
from .._files import write_whole
from ..errors import UnusableInputError
from ..network.tables import csv_bytes
from .figures import checked_figures
from .manifest import Manifest, ManifestRow, read_manifest
from .page import cohort_page
from .run import MeasureSample, Progress, run_samples
from .study import CohortResults, gather

__all__ = ["checked_cohort", "run_cohort", "sample_folder", "write_cohort"]

_PACKAGES = ("ramulus", "numpy", "scipy", "pandas", "statsmodels")


def run_cohort(
    manifest: Manifest,
    out: Path,
    measure_sample: MeasureSample,
    *,
    settings: CohortSettings,
    finished: Callable[[ManifestRow], Path | None] = lambda _: None,
    workers: int = 1,
    scheduler: str = "",
    on_progress: Callable[[Progress], None] = lambda _: None,
) -> CohortResults:
    """Measure the samples of a manifest and write the cohort's folder.

    Parameters
    ----------
    manifest : Manifest
        As `checked_cohort` gives it.
    out : Path
        The cohort's folder; made if need be.
    measure_sample : callable
        Measures a row into `sample_folder(out, row)` and returns that folder.
    settings : CohortSettings
        How groups are compared.
    finished, workers, scheduler, on_progress : see `run_samples`
        Passed on.

    Returns
    -------
    CohortResults
        What was written.
    """
    started = time.time()
    out.mkdir(parents=True, exist_ok=True)
    outcomes = run_samples(
        manifest.rows,
        measure_sample,
        finished=finished,
        workers=workers,
        scheduler=scheduler,
        on_progress=on_progress,
    )
    results = gather(manifest, outcomes, settings)
    write_cohort(results, out, started=started)
    return results


def checked_cohort(path: str | Path, settings: CohortSettings) -> Manifest:
    """Read a manifest and check the cohort's settings against it, before anything is measured.

    Parameters
    ----------
    path : str or Path
        The manifest.
    settings : CohortSettings
        Primary figures and reference group.

    Returns
    -------
    Manifest
        All rows, checked.

    Raises
    ------
    UnusableInputError
        If the manifest has problems, a primary figure is unknown, or the reference group is absent.
    """
    checked_figures("cohort.primary_figures", settings.primary_figures)
    manifest = read_manifest(path)
    name = settings.reference_group
    if name and name not in manifest.groups:
        near = get_close_matches(name, manifest.groups, n=1) or manifest.groups
        found = ", ".join(near) or "no group at all"
        msg = f"cohort.reference_group: {name!r} is no group of {manifest.path.name}; found {found}"
        raise UnusableInputError(msg)
    return manifest


def sample_folder(out: Path, row: ManifestRow) -> Path:
    """Return where a sample's results belong.

    Parameters
    ----------
    out : Path
        The cohort's folder.
    row : ManifestRow
        The sample.

    Returns
    -------
    Path
        `samples/NAME` inside it.
    """
    return out / "samples" / row.sample


def write_cohort(results: CohortResults, out: Path, *, started: float) -> None:
    """Write the cohort's files, each whole or not at all, `run.json` last.

    Parameters
    ----------
    results : CohortResults
        The cohort.
    out : Path
        An existing folder.
    started : float
        When the run began, in seconds since the epoch; goes into `run.json` alone.
    """
    versions = {name: found for name in _PACKAGES if (found := _version(name))}
    contents = {
        "cohort.csv": csv_bytes(results.table),
        "orders_long.csv": csv_bytes(results.orders),
        "junctions_long.csv": csv_bytes(results.junctions),
        "comparisons.csv": csv_bytes(results.comparisons),
        "failures.csv": csv_bytes(results.failures),
        "cohort.html": cohort_page(results, versions).encode("utf-8", "backslashreplace"),
    }
    (out / "run.json").unlink(missing_ok=True)  # until it is back, the folder is unfinished
    files = {name: write_whole(out / name, content) for name, content in contents.items()}
    record = _record(results, versions, started) | {"files": files}
    text = json.dumps(record, indent=1, ensure_ascii=False, allow_nan=False)
    write_whole(out / "run.json", text.encode() + b"\n")


def _record(results: CohortResults, versions: dict[str, str], started: float) -> dict[str, Any]:
    table = results.table
    return {
        "kind": "cohort",
        "versions": versions | {"python": platform.python_version()},
        "manifest": {"name": results.manifest.path.name, "sha256": results.manifest.sha256},
        "configuration": {"cohort": results.settings.model_dump(mode="json")},
        "orders_cuts_um": [float(cut) for cut in results.cuts_um],
        "samples": dict(zip(table["sample"], table["status"], strict=True)),
        "started": time.strftime("%Y-%m-%dT%H:%M:%SZ", time.gmtime(started)),
        "seconds": round(time.time() - started, 3),
        "host": platform.platform(),
    }


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:  # a source tree that is not installed
        return ""
