"""The whole configuration: the stages' settings composed; the only module that knows TOML."""

import difflib
import json
import tomllib
from importlib import resources
from pathlib import Path
from typing import Any, Literal

from pydantic import BaseModel, ValidationError

from ._settings import Settings, setting
from .errors import UnusableInputError
from .line import LineSettings
from .phantom.phantom import PhantomSettings
from .stack.open import InputSettings
from .trust.twin import TwinSettings

__all__ = ["Configuration", "as_toml", "explained_toml", "load_configuration", "with_changes"]


class RunSettings(Settings):
    """How the work is done; none of it changes a result."""

    memory_gib: float = setting(8.0, "memory that a run may take", unit="GiB", gt=0)
    workers: int = setting(2, "threads", ge=1, le=256)


class ReportSettings(Settings):
    """Settings of the report."""

    level: Literal["full", "none"] = setting("full", "whether report.html and the figures are made")
    title: str = setting("", "title of the report; empty: the sample's name")


class Configuration(LineSettings):
    """Everything that can be set, section by section."""

    input: InputSettings = setting(InputSettings(), "input")
    twin: TwinSettings = setting(TwinSettings(), "the twin")
    report: ReportSettings = setting(ReportSettings(), "report")
    run: RunSettings = setting(RunSettings(), "how the work is done")
    phantom: PhantomSettings = setting(PhantomSettings(), "synthetic stacks (ramulus phantom)")

    def line(self) -> LineSettings:
        """Return the settings of the stages alone."""
        return LineSettings(**{name: getattr(self, name) for name in LineSettings.model_fields})


def load_configuration(path: Path | str | None, *, changes: list[str] | None = None) -> Configuration:
    """Read a TOML file (or take the defaults) and apply `section.key=value` changes.

    Raises
    ------
    UnusableInputError
        For an unreadable file, an unknown key (with the nearest known one) or a value that does not fit.
    """
    tree: dict[str, Any] = {}
    name = "configuration"
    if path is not None:
        name = Path(path).name
        tree = _read_toml(Path(path))
    for change in changes or []:
        _apply(tree, change)
    return _validated(tree, name)


def with_changes(configuration: Configuration, **sections: dict[str, Any]) -> Configuration:
    """Return the configuration with some keys of some sections changed."""
    tree = configuration.model_dump()
    for section, keys in sections.items():
        tree[section] |= keys
    return _validated(tree, "configuration")


def as_toml(configuration: BaseModel) -> str:
    """Return all keys as TOML; keys that are absent by default are left out."""
    return _toml(configuration, explain=False)


def explained_toml(configuration: BaseModel) -> str:
    """Return all keys as TOML, each with its meaning, unit, choices and source as a comment."""
    return _toml(configuration, explain=True)


def preset_path(name: str) -> Path:
    """Return the file of a shipped preset."""
    folder = Path(str(resources.files("ramulus"))) / "presets"
    folder = folder if folder.is_dir() else Path(__file__).parents[2] / "configs"
    known = sorted(f.stem for f in folder.glob("*.toml"))
    if name not in known:
        msg = f"--preset: found {name!r}, expected one of {', '.join(known)}{_nearest(name, known)}"
        raise UnusableInputError(msg)
    return folder / f"{name}.toml"


def _read_toml(path: Path) -> dict[str, Any]:
    try:
        with path.open("rb") as file:
            return tomllib.load(file)
    except FileNotFoundError as absent:
        msg = f"{path}: no such file"
        raise UnusableInputError(msg) from absent
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as broken:
        msg = f"{path.name}: not valid TOML ({broken})"
        raise UnusableInputError(msg) from broken
    except OSError as broken:
        msg = f"{path.name}: cannot be read ({broken.strerror or broken})"
        raise UnusableInputError(msg) from broken


def _apply(tree: dict[str, Any], change: str) -> None:
    key, equals, text = change.partition("=")
    parts = key.strip().split(".")
    if not equals or len(parts) < 2 or not all(parts):
        msg = f"--set: found {change!r}, expected section.key=value"
        raise UnusableInputError(msg)
    try:
        value = tomllib.loads(f"v = {text}")["v"]
    except tomllib.TOMLDecodeError:
        value = text  # a bare word is a string
    for part in parts[:-1]:
        tree = tree.setdefault(part, {})
        if not isinstance(tree, dict):
            msg = f"--set: {key!r} goes through a value, expected section.key"
            raise UnusableInputError(msg)
    tree[parts[-1]] = value


def _validated(tree: dict[str, Any], name: str) -> Configuration:
    try:
        return Configuration.model_validate(tree)
    except ValidationError as refused:
        error = refused.errors()[0]
        where = [str(p) for p in error["loc"]]
        key = ".".join(where)
        if error["type"] == "extra_forbidden":
            known = _known_keys(Configuration, where[:-1])
            msg = f"{name}: unknown key {key!r}{_nearest(where[-1], known)}"
        else:
            found = json.dumps(error["input"], default=str)[:80]
            msg = f"{name}: {key}: found {found}; {error['msg'][0].lower() + error['msg'][1:]}"
        raise UnusableInputError(msg) from refused


def _known_keys(model: type[BaseModel], where: list[str]) -> list[str]:
    for part in where:
        field = model.model_fields.get(part)
        inner = field.annotation if field else None
        if not (isinstance(inner, type) and issubclass(inner, BaseModel)):
            return []
        model = inner
    return list(model.model_fields)


def _nearest(word: str, known: list[str]) -> str:
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    if close:
        return f"; did you mean {close[0]!r}?"
    return f"; known are {', '.join(known[:12])}" if known else ""


def _toml(model: BaseModel, *, explain: bool, prefix: str = "") -> str:
    lines: list[str] = []
    sections: list[str] = []
    for name, field in type(model).model_fields.items():
        value = getattr(model, name)
        if isinstance(value, BaseModel):
            head = f"\n[{prefix}{name}]"
            if explain and field.description:
                head += f"  # {field.description}"
            sections.append(head + "\n" + _toml(value, explain=explain, prefix=f"{prefix}{name}."))
            continue
        if explain:
            lines.append(f"# {_explanation(field)}")
        if value is None:
            lines.append(f"# {name} =")
        else:
            lines.append(f"{name} = {_value(value)}")
    return "\n".join([*lines, *sections]) + ("\n" if lines else "")


def _explanation(field: Any) -> str:
    extra = field.json_schema_extra or {}
    text = field.description or ""
    if extra.get("unit"):
        text += f" [{extra['unit']}]"
    choices = getattr(field.annotation, "__args__", ())
    if choices and all(isinstance(c, str) for c in choices):
        text += f" (one of: {', '.join(choices)})"
    if extra.get("source"):
        text += f" (source: {extra['source']})"
    return text


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False)
    if isinstance(value, (tuple, list)):
        return "[" + ", ".join(_value(v) for v in value) + "]"
    return repr(value)
