"""The whole configuration: the stages' settings composed; the only module that knows TOML."""

import json
import re
import textwrap
import tomllib
from collections.abc import Iterator, Sequence
from difflib import get_close_matches
from importlib import resources
from pathlib import Path
from typing import Any, Literal, get_args

from pydantic import BaseModel, ValidationError
from pydantic.fields import FieldInfo

from ._cohort_settings import CohortSettings
from ._settings import Settings, setting
from .errors import UnusableInputError
from .line import LineSettings
from .phantom.phantom import PhantomSettings
from .stack.open import InputSettings
from .trust.twin import TwinSettings

__all__ = [
    "Configuration",
    "ReportSettings",
    "RunSettings",
    "as_toml",
    "load_configuration",
    "preset_names",
    "preset_path",
]

_MOST_BYTES = 1024**2
_MOST_PROBLEMS = 5


class ReportSettings(Settings):
    """Settings of the report."""

    level: Literal["full", "none"] = setting("full", "whether report.html and its figures are made")
    title: str = setting("", "title of the report; empty: the sample's name")


class RunSettings(Settings):
    """How the work is done; none of it changes a result."""

    memory_gib: float | None = setting(
        None, "a stack that is expected to take more memory is refused; absent: what is free",
        unit="GiB", gt=0,
    )  # fmt: skip
    workers: int | None = setting(None, "threads; absent: one for each processor", ge=1, le=1024)
    keep_work: bool = setting(
        default=False,
        meaning="keep the stages' values (.work) when done, so that a run with other settings does"
        " only what depends on them",
    )


class Configuration(LineSettings):
    """Everything that can be set, section by section."""

    input: InputSettings = setting(InputSettings(), "what goes in")
    twin: TwinSettings = setting(TwinSettings(), "the twin: how well this kind of tree is measured")
    report: ReportSettings = setting(ReportSettings(), "the report")
    run: RunSettings = setting(RunSettings(), "how the work is done; changes no result")
    cohort: CohortSettings = setting(CohortSettings(), "how groups are compared (ramulus cohort)")
    phantom: PhantomSettings = setting(PhantomSettings(), "synthetic stacks (ramulus phantom)")

    def line(self) -> LineSettings:
        """Return the settings of the stages alone.

        Examples
        --------
        >>> Configuration().line() == LineSettings()
        True
        """
        return LineSettings(**{name: getattr(self, name) for name in LineSettings.model_fields})


def load_configuration(*files: Path | str, changes: Sequence[str] = ()) -> Configuration:
    """Read TOML files over the defaults, each over the one before, then apply changes.

    Parameters
    ----------
    files : path
        TOML files; `input.stack` and `input.region` in them are relative to the file.
    changes : sequence of str
        Each `section.key=value` with a TOML value; a bare word is text, nothing at all the default.

    Returns
    -------
    Configuration
        Checked.

    Raises
    ------
    UnusableInputError
        For an unreadable file, an unknown key (with the nearest known one) or a value that does not
        fit: one line that names the key, what was found and what would do.

    Examples
    --------
    >>> load_configuration(changes=["gauge.recentre=false"]).gauge.recentre
    False
    """
    tree: dict[str, Any] = {}
    names = []
    for file in map(Path, files):
        _merge(tree, _read_toml(file))
        names.append(file.name)
    for change in changes:
        _apply(tree, change)
        names.append("--set")
    return _validated(tree, " over ".join(reversed(dict.fromkeys(names))) or "configuration")


def as_toml(configuration: BaseModel, *, explain: bool = False, without: Sequence[str] = ()) -> str:
    """Return all keys as TOML, those that are absent as comments.

    Parameters
    ----------
    configuration : Configuration
        Or the settings of one stage.
    explain : bool
        With the meaning, unit, choices, limits and source of each key as a comment above it.
    without : sequence of str
        Sections to leave out.

    Examples
    --------
    >>> print(as_toml(ReportSettings(title="a"), explain=True))
    # whether report.html and its figures are made; one of: full, none
    level = "full"
    # title of the report; empty: the sample's name
    title = "a"
    """
    return "\n".join(_toml_lines(configuration, "", explain, set(without))).strip("\n")


def preset_names() -> list[str]:
    """Return the names of the shipped presets.

    Examples
    --------
    >>> "confocal" in preset_names()
    True
    """
    return sorted(file.stem for file in _preset_folder().glob("*.toml"))


def preset_path(name: str) -> Path:
    """Return the file of a shipped preset.

    Raises
    ------
    UnusableInputError
        With the nearest name, if there is none.
    """
    known = preset_names()
    if name not in known:
        msg = f"--preset: found {name!r}, expected one of {', '.join(known)}{_hint(name, known)}"
        raise UnusableInputError(msg)
    return _preset_folder() / f"{name}.toml"


def _preset_folder() -> Path:
    """Return where the presets are: in an installed package, or in the source tree."""
    shipped = Path(str(resources.files("ramulus"))) / "presets"
    return shipped if shipped.is_dir() else Path(__file__).parents[2] / "configs"


def _read_toml(path: Path) -> dict[str, Any]:
    try:
        size = path.stat().st_size
        if size > _MOST_BYTES:
            msg = f"{path.name}: found {size} bytes, expected settings of at most {_MOST_BYTES}"
            raise UnusableInputError(msg)
        tree = tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except OSError as refused:
        msg = f"{path}: cannot be read ({(refused.strerror or str(refused)).lower()})"
        raise UnusableInputError(msg) from refused
    except UnicodeDecodeError as broken:
        msg = f"{path.name}: byte {broken.start} is not UTF-8; save it as UTF-8"
        raise UnusableInputError(msg) from broken
    except (tomllib.TOMLDecodeError, RecursionError, ValueError) as broken:
        msg = f"{path.name}: not valid TOML ({' '.join(str(broken).split())[:200]})"
        raise UnusableInputError(msg) from broken
    section = tree.get("input")
    for key in ("stack", "region"):
        value = section.get(key) if isinstance(section, dict) else None
        if isinstance(section, dict) and isinstance(value, str) and value:
            section[key] = str(path.parent / value)
    return tree


def _merge(tree: dict[str, Any], over: dict[str, Any]) -> None:
    for key, value in over.items():
        if isinstance(value, dict) and isinstance(tree.get(key), dict):
            _merge(tree[key], value)
        else:
            tree[key] = value


def _apply(tree: dict[str, Any], change: str) -> None:
    key, equals, text = change.partition("=")
    *sections, last = key.strip().split(".")
    if not equals or not sections or not all(sections) or not last:
        msg = f"--set: found {change[:80]!r}, expected section.key=value"
        raise UnusableInputError(msg)
    node: Any = tree
    for section in sections:
        node = node.setdefault(section, {})
        if not isinstance(node, dict):
            msg = f"--set: {key!r} leads through a value, expected section.key"
            raise UnusableInputError(msg)
    if text.strip():
        node[last] = _value_of(text.strip(), _field([*sections, last]))
    else:
        node.pop(last, None)


def _value_of(text: str, field: FieldInfo | None) -> Any:
    """Read a TOML value; what is no TOML, or is meant for a key that holds text, is text."""
    try:
        value = tomllib.loads(f"v = {text}")["v"]
    except (tomllib.TOMLDecodeError, RecursionError, ValueError):
        return text
    if field is not None and field.annotation is str and not isinstance(value, str):
        return text
    return value


def _field(path: Sequence[str]) -> FieldInfo | None:
    model: Any = Configuration
    field = None
    for part in path:
        if not (isinstance(model, type) and issubclass(model, BaseModel)):
            return None
        field = model.model_fields.get(part)
        model = field.annotation if field else None
    return field


def _validated(tree: dict[str, Any], name: str) -> Configuration:
    try:
        # As JSON, where lists may become tuples but text no number and 1 no true.
        return Configuration.model_validate_json(json.dumps(tree, default=_refused), strict=True)
    except ValidationError as refused:
        problems = list(dict.fromkeys(_problem(error) for error in refused.errors()))
    except (TypeError, RecursionError) as refused:
        problems = [str(refused)]
    more = f"; and {len(problems) - _MOST_PROBLEMS} more" if len(problems) > _MOST_PROBLEMS else ""
    raise UnusableInputError(f"{name}: " + "; ".join(problems[:_MOST_PROBLEMS]) + more)


def _refused(value: Any) -> Any:
    msg = f"found the date {value}, expected numbers, text, true or false, or lists of them"
    raise TypeError(msg)


def _problem(error: Any) -> str:
    where = [str(part) for part in error["loc"]]
    key = ".".join(where)
    if error["type"] == "extra_forbidden":
        return f"unknown key {key!r}{_nearest(where)}"
    found = json.dumps(error["input"], ensure_ascii=False, default=str)
    found = found if len(found) <= 80 else found[:77] + "..."
    if error["type"] == "missing":
        return f"{'.'.join(where[:-1])}: found {found}, expected more values"
    words = error["msg"].replace("Input should be", "expected").replace("a valid ", "a ")
    words = words.replace("a boolean", "true or false").replace("a integer", "a whole number")
    return f"{key}: found {found}, {words[0].lower()}{words[1:].replace('a string', 'text')}"


def _nearest(where: list[str]) -> str:
    """Return a hint: the same key in another section, else the most alike in this one or in all."""
    every = list(_keys(Configuration, ""))
    elsewhere = [key for key in every if key.rpartition(".")[2] == where[-1]]
    if elsewhere:
        return f"; did you mean {' or '.join(map(repr, elsewhere[:3]))}?"
    section = _section(where[:-1])
    known = [".".join([*where[:-1], name]) for name in section.model_fields] if section else []
    word = ".".join(where)
    return _hint(word, known) or _hint(word, every, alike=0.8) or _listed(known)


def _section(where: Sequence[str]) -> type[BaseModel] | None:
    if not where:
        return Configuration
    field = _field(where)
    inner = field.annotation if field else None
    return inner if isinstance(inner, type) and issubclass(inner, BaseModel) else None


def _keys(model: type[BaseModel], before: str) -> Iterator[str]:
    for name, field in model.model_fields.items():
        yield before + name
        if isinstance(field.annotation, type) and issubclass(field.annotation, BaseModel):
            yield from _keys(field.annotation, f"{before}{name}.")


def _hint(word: str, known: Sequence[str], *, alike: float = 0.6) -> str:
    # Of a dotted name only the last part is compared: all keys of a section begin alike.
    last = {name.rpartition(".")[2]: name for name in known}
    close = get_close_matches(word.rpartition(".")[2], last, n=1, cutoff=alike)
    return f"; did you mean {last[close[0]]!r}?" if close else ""


def _listed(known: Sequence[str]) -> str:
    return f"; known here: {', '.join(known[:20])}" if known else ""


def _toml_lines(model: BaseModel, before: str, explain: bool, without: set[str]) -> Iterator[str]:  # noqa: FBT001
    fields = type(model).model_fields
    inner = [name for name in fields if isinstance(getattr(model, name), BaseModel)]
    for name in fields:
        if name not in inner and name not in without:
            value = getattr(model, name)
            if explain:
                yield from textwrap.wrap(
                    _explanation(fields[name]), 96, initial_indent="# ", subsequent_indent="#   "
                )
            yield f"# {name} = (absent)" if value is None else f"{name} = {_written(value)}"
    # What goes in comes first; all else in the order of the work.
    for name in sorted(inner, key=lambda name: name != "input"):
        if name not in without:
            yield ""
            if explain and fields[name].description:
                yield f"# {fields[name].description}"
            yield f"[{before}{name}]"
            yield from _toml_lines(getattr(model, name), f"{before}{name}.", explain, without)


def _explanation(field: FieldInfo) -> str:
    extra = field.json_schema_extra if isinstance(field.json_schema_extra, dict) else {}
    text = field.description or ""
    if extra.get("unit"):
        text += f" [{extra['unit']}]"
    choices = [c for c in get_args(field.annotation) if isinstance(c, str)]
    if choices:
        text += f"; one of: {', '.join(choices)}"
    limits = [
        f"{sign} {getattr(limit, name)}"
        for limit in field.metadata
        for name, sign in (("gt", ">"), ("ge", ">="), ("lt", "<"), ("le", "<="))
        if getattr(limit, name, None) is not None
    ]
    if limits:
        text += f"; {', '.join(limits)}"
    if extra.get("source"):
        text += f" (source: {extra['source']})"
    return text


def _written(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        text = json.dumps(value, ensure_ascii=False)
        return re.sub("[\x7f-\x9f]", lambda found: f"\\u{ord(found[0]):04x}", text)
    if isinstance(value, (tuple, list)):
        return "[" + ", ".join(_written(item) for item in value) + "]"
    return repr(value)
