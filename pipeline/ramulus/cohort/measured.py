"""A cohort measured: each row of a manifest, unless it is finished, then the comparison."""

import json
from collections.abc import Callable, Iterable, Sequence
from functools import partial
from pathlib import Path
from typing import Any

from .._folder import is_finished, locked_folder, write_errors
from ..config import Configuration, load_configuration
from ..errors import UnusableInputError, WorkFailedError
from ..measure import measure
from ..provenance import code_sha256
from ..stack.open import file_sha256
from .cohort import checked_cohort, run_cohort, sample_folder
from .figures import FIGURES
from .manifest import ManifestRow
from .run import Progress
from .study import CohortResults
from .wording import finding, records

__all__ = ["closing_lines", "finished_sample", "measure_cohort", "measure_sample"]

Configurations = dict[Path | None, Configuration]


def measure_cohort(
    path: str | Path,
    out: str | Path,
    *,
    files: Sequence[Path] = (),
    changes: Sequence[str] = (),
    workers: int = 1,
    scheduler: str = "",
    on_progress: Callable[[Progress], None] = lambda _: None,
) -> CohortResults:
    """Check a manifest, measure its samples, take up those that are finished, compare, write.

    Parameters
    ----------
    path : str or Path
        The manifest.
    out : str or Path
        The cohort's folder; samples go into `samples/NAME` inside it.
    files : sequence of Path
        TOML files with the configuration of all samples, each over the one before; a sample's own
        goes over them. Its section `cohort` says how to compare.
    changes : sequence of str
        `section.key=value`, over all of them.
    workers, scheduler, on_progress : see `run_samples`
        Passed on.

    Returns
    -------
    CohortResults
        What was written.

    Raises
    ------
    UnusableInputError
        If the manifest, a configuration, the settings, the folder or the scheduler cannot be used.
    """
    out = Path(out).resolve()
    settings = load_configuration(*files, changes=changes).cohort
    manifest = checked_cohort(path, settings)
    _refuse_edits(manifest.rows)
    configurations = _configurations(manifest.rows, files, changes)
    with locked_folder(out), write_errors(out):
        return run_cohort(
            manifest,
            out,
            partial(measure_sample, out=out, configurations=configurations),
            settings=settings,
            finished=partial(finished_sample, out=out, configurations=configurations),
            workers=workers,
            scheduler=scheduler,
            on_progress=on_progress,
        )


def _refuse_edits(rows: Iterable[ManifestRow]) -> None:
    """Edits that would be passed over in silence would make the results untrue."""
    named = [row.sample for row in rows if row.edits is not None]
    if named:
        msg = (
            f"column edits: found edits for {', '.join(named[:5])}, expected none: a measurement "
            "replays no edits; leave the cells empty"
        )
        raise UnusableInputError(msg)


def _configurations(
    rows: Iterable[ManifestRow], files: Sequence[Path], changes: Sequence[str]
) -> Configurations:
    """Read every configuration that the manifest names; refuse with the problems of all."""
    found: Configurations = {None: load_configuration(*files, changes=changes)}
    problems = []
    for path in sorted({row.config for row in rows if row.config is not None}):
        try:
            found[path] = load_configuration(*files, path, changes=changes)
        except UnusableInputError as refusal:
            problems.append(str(refusal))
    if problems:
        raise UnusableInputError("; ".join(problems))
    return found


def measure_sample(row: ManifestRow, *, out: Path, configurations: Configurations) -> Path:
    """Measure one row into its folder.

    Parameters
    ----------
    row : ManifestRow
        The sample.
    out : Path
        The cohort's folder.
    configurations : dict
        By the file that a row names; None for the cohort's own.

    Returns
    -------
    Path
        The sample's folder.

    Raises
    ------
    UnusableInputError
        If the stack cannot be used.
    WorkFailedError
        If the work fails.
    """
    configuration = configurations[row.config]
    folder = sample_folder(out, row)
    return measure(row.stack, out=folder, configuration=configuration, name=row.sample)


def finished_sample(row: ManifestRow, *, out: Path, configurations: Configurations) -> Path | None:
    """Return a row's folder if its results are whole and are those that would be made now.

    Parameters
    ----------
    row, out, configurations : see `measure_sample`
        What would be measured.

    Returns
    -------
    Path or None
        None where a checksum fails, or the stack, the configuration or the version has changed.
    """
    folder = sample_folder(out, row)
    if not is_finished(folder):
        return None
    record = json.loads((folder / "run.json").read_bytes())
    configuration, before = configurations[row.config], record.get("configuration")
    same = (
        isinstance(before, dict)
        and _relevant(before) == _relevant(configuration.model_dump(mode="json"))
        and all(record.get(name) == value for name, value in _expected(row, configuration).items())
    )
    return folder if same else None


def _expected(row: ManifestRow, configuration: Configuration) -> dict[str, Any]:
    """Return what `run.json` says if the sample was measured as it would be now."""
    region = configuration.input.region
    try:
        digests = {
            "input_sha256": file_sha256(row.stack),
            "region_sha256": file_sha256(Path(region)) if region else "",
        }
    except (OSError, UnusableInputError):  # no image, or none any more: measuring will tell
        digests = {"input_sha256": ""}
    return digests | {"code_sha256": code_sha256()}


def _relevant(configuration: dict[str, Any]) -> dict[str, Any]:
    """Return the sections that touch a sample's results."""
    others = {"run", "cohort", "phantom"}
    return {name: part for name, part in configuration.items() if name not in others}


def closing_lines(results: CohortResults, out: Path) -> list[str]:
    """Say what came of a cohort, for the command's last lines.

    Parameters
    ----------
    results : CohortResults
        The cohort.
    out : Path
        Its folder.

    Returns
    -------
    list of str
        Counts, failures, the primary figures, where to look.

    Raises
    ------
    WorkFailedError
        If not one sample could be measured.
    """
    failed = len(results.failures)
    total = len(results.table)
    if failed == total:
        first = results.failures.iloc[0]
        msg = (
            f"all {total} samples failed, {first['sample']} with: {first['reason']}; "
            f"see {out / 'failures.csv'}"
        )
        raise WorkFailedError(msg)
    lines = [f"{total - failed} of {total} samples measured"]
    lines += [f"failed: {row.sample}: {row.reason}" for row in results.failures.itertuples()]
    primary = results.comparisons[results.comparisons["role"] == "primary"]
    lines += [f"{FIGURES[row['figure']].label}: {finding(row)}" for row in records(primary)]
    return [*lines, f"results in {out}; open {out / 'cohort.html'}"]
