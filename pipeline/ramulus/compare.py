"""Two runs of one sample: which figures differ, and what was different about the runs."""

import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ._folder import is_finished
from .errors import UnusableInputError

__all__ = ["Change", "Comparison", "compare"]


@dataclass(frozen=True, slots=True)
class Change:
    """One thing that differs; None where a run does not have it."""

    name: str
    first: Any
    second: Any

    @property
    def relative(self) -> float | None:
        """The second's value over the first's, less 1; None where that says nothing."""
        pair = [self.first, self.second]
        numbers = [v for v in pair if isinstance(v, (int, float)) and not isinstance(v, bool)]
        return numbers[1] / numbers[0] - 1 if len(numbers) == 2 and numbers[0] else None

    @property
    def words(self) -> str:
        """One line: name, both values, the change in per cent."""
        change = "" if self.relative is None else f"  ({100 * self.relative:+.3g} %)"
        return f"{self.name}  {_short(self.first)} -> {_short(self.second)}{change}"


@dataclass(frozen=True, slots=True)
class Comparison:
    """What changed between two runs, and why.

    Parameters
    ----------
    causes : tuple of Change
        Input, version, libraries, every key of the configuration that differs.
    figures : tuple of Change
        Figures of `summary.json` that differ.
    beyond : tuple of str
        The figures whose 95 % intervals do not overlap.
    flags : tuple of Change
        Flags that only one run raises.
    files : tuple of str
        Files that differ, by their checksums.
    """

    causes: tuple[Change, ...]
    figures: tuple[Change, ...]
    beyond: tuple[str, ...]
    flags: tuple[Change, ...]
    files: tuple[str, ...]

    def lines(self) -> Iterator[str]:
        """Say it for a person."""
        yield "what was different"
        yield from [f"  {cause.words}" for cause in self.causes] or ["  nothing"]
        yield "what changed"
        if not self.files:
            yield "  nothing: every file is the same"
            return
        for change in self.figures:
            far = "  beyond both intervals" if change.name in self.beyond else ""
            yield f"  {change.words}{far}"
        for change in self.flags:
            yield f"  flag {change.name} " + ("gone" if change.second is None else "new")
        yield f"  files: {', '.join(self.files)}"


def compare(first: Path | str, second: Path | str) -> Comparison:
    """Compare two finished folders of one sample.

    Parameters
    ----------
    first, second : path
        Folders of `ramulus measure`.

    Returns
    -------
    Comparison
        Causes and changes.

    Raises
    ------
    UnusableInputError
        If a folder is not one, or its run is not finished.
    """
    runs = [_run(Path(folder)) for folder in (first, second)]
    summaries = [_json(Path(folder) / "summary.json") for folder in (first, second)]
    flags = [{flag["code"]: flag["message"] for flag in s.pop("flags", [])} for s in summaries]
    estimates = [dict(_flat(summary, estimates=True)) for summary in summaries]
    figures = _changes(*(dict(_flat(summary)) for summary in summaries))
    beyond = [k for k in estimates[0] if _apart(estimates[0][k], estimates[1].get(k))]
    files = [set(run["files"].items()) for run in runs]
    return Comparison(
        _changes(*(dict(_causes(run)) for run in runs)),
        figures,
        tuple(k for k in beyond if any(change.name == k for change in figures)),
        _changes(*flags),
        tuple(sorted({name for name, _ in files[0] ^ files[1]})),
    )


def _run(folder: Path) -> dict[str, Any]:
    if not is_finished(folder):
        msg = f"{folder}: found no finished run, expected a folder of ramulus measure, unchanged"
        raise UnusableInputError(msg)
    return _json(folder / "run.json")


def _json(path: Path) -> dict[str, Any]:
    try:
        content = json.loads(path.read_bytes())
    except (OSError, ValueError) as broken:
        msg = f"{path}: cannot be read ({' '.join(str(broken).split())[:100]})"
        raise UnusableInputError(msg) from broken
    if not isinstance(content, dict):
        msg = f"{path}: found no table of figures, expected what ramulus measure wrote"
        raise UnusableInputError(msg)
    return content


def _causes(run: Mapping[str, Any]) -> Iterator[tuple[str, Any]]:
    """Yield all that may change a result; where and how fast it ran does not."""
    for name in ("input_sha256", "input_kind", "region_sha256", "ramulus", "code_sha256", "python"):
        yield name, run.get(name)
    others = {"run", "cohort", "phantom"}
    settings = {k: v for k, v in run.get("configuration", {}).items() if k not in others}
    yield from _flat(settings)
    yield from ((f"library {name}", found) for name, found in run.get("libraries", {}).items())


def _flat(
    tree: Mapping[str, Any], before: str = "", *, estimates: bool = False
) -> Iterator[tuple[str, Any]]:
    """Yield dotted names with values; an estimate by its value, or whole if asked for."""
    for name, value in tree.items():
        if isinstance(value, dict) and "value" in value:
            yield before + name, value if estimates else value["value"]
        elif isinstance(value, dict):
            yield from _flat(value, f"{before}{name}.", estimates=estimates)
        elif not estimates:
            yield before + name, value


def _changes(first: Mapping[str, Any], second: Mapping[str, Any]) -> tuple[Change, ...]:
    names = dict.fromkeys([*first, *second])
    pairs = ((name, first.get(name), second.get(name)) for name in names)
    return tuple(Change(name, a, b) for name, a, b in pairs if a != b)


def _apart(first: Mapping[str, Any], second: Mapping[str, Any] | None) -> bool:
    ends: list[Any] = [(e or {}).get(end) for e in (first, second) for end in ("low", "high")]
    if any(end is None for end in ends):
        return False
    return bool(ends[1] < ends[2] or ends[3] < ends[0])


def _short(value: Any) -> str:
    if value is None:
        return "(absent)"
    text = f"{value:.4g}" if isinstance(value, float) else str(value)
    return text if len(text) <= 40 else text[:37] + "..."
