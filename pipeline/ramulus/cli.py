"""The commands: parse, call, print; no science here."""

import json
import sys
import traceback
from pathlib import Path
from typing import Annotated

import typer

from . import __version__
from .config import (
    Configuration, as_toml, explained_toml, load_configuration, preset_path, with_changes,
)
from .errors import RamulusError, UnusableInputError
from .inspection import inspect_lines
from .measure import measure, sample_configuration
from .phantom.phantom import make_phantom
from .phantom.save import save_phantom
from .progress import Reporter

app = typer.Typer(
    name="ramulus", no_args_is_help=True, add_completion=True, pretty_exceptions_enable=False,
    help="From a 3-D stack of blood vessels to a graph with radii, orders, cube law and resistance."
    " Research software: not a medical device, not for diagnosis or treatment decisions.",
)  # fmt: skip

ConfigOption = Annotated[Path | None, typer.Option("--config", help="TOML file with settings (see ramulus config).")]
PresetOption = Annotated[str, typer.Option("--preset", help="Shipped settings for a kind of image.")]
SetOption = Annotated[list[str] | None, typer.Option("--set", help="section.key=value; may be repeated.")]
SpacingOption = Annotated[tuple[float, float, float] | None, typer.Option("--spacing-um", help="Voxel edges Z Y X in um.")]
QuietOption = Annotated[bool, typer.Option("--quiet", help="Print errors only.")]
LogOption = Annotated[Path | None, typer.Option("--log", help="Also write what is done to this file.")]
DebugOption = Annotated[bool, typer.Option("--debug", help="Show where an error arose.")]


@app.command("measure")
def measure_command(
    source: Annotated[Path, typer.Argument(metavar="INPUT", help="A stack, a mask, a graph, or a sample TOML.")],
    out: Annotated[Path, typer.Option("--out", help="Folder for the results.")],
    config: ConfigOption = None, preset: PresetOption = "", spacing_um: SpacingOption = None,
    changes: SetOption = None, quiet: QuietOption = False, log: LogOption = None, debug: DebugOption = False,
) -> None:  # fmt: skip
    """Measure one sample: graph, radii, orders, cube law, resistance, QC report."""
    configuration = _configuration(config, preset, changes, spacing_um)
    name = ""
    if source.suffix.lower() == ".toml":
        configuration = load_configuration(source, changes=_with_spacing(changes, spacing_um))
        name = source.stem
        source, configuration = sample_configuration(source, configuration)
    with Reporter(quiet=quiet, log=log) as reporter:
        folder = measure(source, out=out, configuration=configuration, name=name, progress=reporter)
        reporter.done(_closing_lines(folder))


@app.command("inspect")
def inspect_command(
    source: Annotated[Path, typer.Argument(metavar="INPUT", help="A stack.")],
    config: ConfigOption = None, preset: PresetOption = "", spacing_um: SpacingOption = None,
    changes: SetOption = None, quiet: QuietOption = False, log: LogOption = None, debug: DebugOption = False,
) -> None:  # fmt: skip
    """Read only the header: shape, type, spacing and its origin, channels, the plan, every problem."""
    lines, usable = inspect_lines(source, _configuration(config, preset, changes, spacing_um))
    with Reporter(quiet=quiet, log=log) as reporter:
        reporter.done(lines)
    if not usable:
        raise typer.Exit(2)


@app.command("phantom")
def phantom_command(
    out: Annotated[Path, typer.Argument(metavar="OUT.tif", help="The stack to write; OUT.truth.json goes beside it.")],
    config: ConfigOption = None, seed: Annotated[int, typer.Option("--seed", min=0, help="Seed.")] = 1,
    changes: SetOption = None, quiet: QuietOption = False, log: LogOption = None, debug: DebugOption = False,
) -> None:  # fmt: skip
    """Draw a synthetic stack with its known graph."""
    settings = _configuration(config, "", changes, None).phantom
    with Reporter(quiet=quiet, log=log) as reporter:
        reporter("phantom", 0.0)
        stack, truth = make_phantom(settings, seed)
        beside = save_phantom(out, stack, truth, settings=settings, seed=seed)
        reporter.done([f"{out}: {stack.shape} voxels, {truth.n_segments} segments", f"{beside}: the truth"])


@app.command("config")
def config_command(
    explain: Annotated[bool, typer.Option("--explain", help="With the meaning, unit and source of each key.")] = False,
    preset: PresetOption = "", quiet: QuietOption = False, log: LogOption = None, debug: DebugOption = False,
) -> None:  # fmt: skip
    """Print the whole default configuration as TOML."""
    configuration = _configuration(None, preset, None, None)
    text = explained_toml(configuration) if explain else as_toml(configuration)
    with Reporter(quiet=quiet, log=log) as reporter:
        reporter.done([text.strip()])


@app.callback(invoke_without_command=True)
def version_option(version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False) -> None:
    """Answer --version."""
    if version:
        typer.echo(f"ramulus {__version__}")
        raise typer.Exit


def main() -> None:
    """Run a command; errors become one line and an exit status."""
    debug = "--debug" in sys.argv
    try:
        app(standalone_mode=True)
    except RamulusError as error:
        _fail(str(error), error.exit_status, debug=debug)
    except KeyboardInterrupt:
        _fail("interrupted; earlier results are as they were", 1, debug=False)
    except BrokenPipeError:
        sys.exit(0)
    except Exception as error:  # noqa: BLE001 - a user is never shown a traceback unasked
        _fail(f"internal error ({type(error).__name__}: {error}); --debug shows where", 1, debug=debug)


def _fail(message: str, status: int, *, debug: bool) -> None:
    if debug:
        traceback.print_exc()
    print("ramulus: " + " ".join(message.split()), file=sys.stderr)
    sys.exit(status)


def _configuration(config: Path | None, preset: str, changes: list[str] | None, spacing_um: tuple[float, float, float] | None) -> Configuration:
    if config is not None and preset:
        msg = f"--preset {preset}: found --config {config} too, expected one of them"
        raise UnusableInputError(msg)
    path = preset_path(preset) if preset else config
    configuration = load_configuration(path, changes=_with_spacing(changes, spacing_um))
    if configuration.input.region and path is not None and not Path(configuration.input.region).is_absolute():
        beside = path.parent / configuration.input.region
        if beside.exists():
            return with_changes(configuration, input={"region": str(beside)})
    return configuration


def _with_spacing(changes: list[str] | None, spacing_um: tuple[float, float, float] | None) -> list[str]:
    changes = list(changes or [])
    if spacing_um is not None:
        changes.append(f"input.spacing_um=[{', '.join(map(repr, map(float, spacing_um)))}]")
    return changes


def _closing_lines(folder: Path) -> list[str]:
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    lines = [
        f"{summary['sample']}: {summary['segments']} segments, {summary['junctions']} junctions,"
        f" {summary['loops']} loops, {summary['total_length_um'] / 1000:.4g} mm,"
        f" median radius {summary['radius_median_um']:.4g} um, {summary['orders']} orders",
    ]
    hindrance = summary["network_hindrance_per_um3"]
    if hindrance["value"] is not None:
        interval = f" ({hindrance['low']:.4g} to {hindrance['high']:.4g})" if hindrance["low"] is not None else ""
        lines.append(f"network hindrance {hindrance['value']:.4g} per um3{interval}")
    exponent = summary["junction_exponent"]
    if exponent["value"] is not None:
        lines.append(f"junction exponent {exponent['value']:.3g} ({exponent['low']:.3g} to {exponent['high']:.3g}) from {summary['junctions_used']} junctions")
    lines += [f"{flag['severity']}: {flag['message']}" for flag in summary["flags"]]
    page = folder / "report.html"
    lines.append(f"results in {folder}" + (f"; open {page}" if page.exists() else ""))
    return lines
