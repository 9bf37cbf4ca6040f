"""The commands: parse, call, print; no science here.

Each command imports what it runs when it runs, so that `ramulus --help` and the shell's completion
answer at once.
"""

import sys
import traceback
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NoReturn

import typer

from . import __version__
from .errors import RamulusError, UnusableInputError
from .progress import Reporter

if TYPE_CHECKING:
    from .config import Configuration

__all__ = ["app", "main"]

app = typer.Typer(
    name="ramulus",
    add_completion=True,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="""From a 3-D stack of blood vessels to a graph with radii, branching orders, the law of
    branching at every junction and the network's resistance, each figure with its interval.

    Research software: not a medical device, not for diagnosis or treatment decisions.

    Exit status: 0 done; 1 the work failed; 2 the request or the input cannot be used.""",
)

Source = Annotated[
    Path,
    typer.Argument(
        metavar="INPUT",
        help="A stack (TIFF, a folder of TIFF slices, NIfTI ...), a mask, a vessel graph (SWC, or"
        " the folder of a sample), or a sample TOML whose input.stack names one.",
    ),
]
Out = Annotated[Path, typer.Option("--out", metavar="DIR", help="Folder for the results.")]
Config = Annotated[
    Path | None,
    typer.Option("--config", metavar="FILE.toml", help="Settings; see ramulus config --explain."),
]
Spacing = Annotated[
    tuple[float, float, float] | None,
    typer.Option("--spacing-um", metavar="Z Y X", help="Voxel edges in um, if the file has none."),
]
Changes = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="SECTION.KEY=VALUE", help="Change one setting; repeatable."),
]
Quiet = Annotated[bool, typer.Option("--quiet", help="Print errors only.")]
Log = Annotated[
    Path | None, typer.Option("--log", metavar="FILE", help="Add what is done to this file.")
]
Debug = Annotated[bool, typer.Option("--debug", help="Show where an error arose.")]


def _presets(incomplete: str) -> list[str]:
    from .config import preset_names

    return [name for name in preset_names() if name.startswith(incomplete)]


Preset = Annotated[
    str,
    typer.Option(
        "--preset", metavar="NAME", autocompletion=_presets,
        help="Shipped settings: confocal, two_photon, micro_ct, mr_angiography, demo.",
    ),
]  # fmt: skip


@app.command("measure")
def measure_command(
    source: Source,
    out: Out,
    config: Config = None,
    preset: Preset = "",
    spacing_um: Spacing = None,
    changes: Changes = None,
    quiet: Quiet = False,
    log: Log = None,
    debug: Debug = False,
) -> None:
    """Measure one sample: graph, radii, orders, law of branching, resistance, QC report.

    Settings are taken from the preset, then --config, then the sample TOML, then --set. A run that
    was stopped is taken up by running the same line again; earlier results stay until the new ones
    are complete.

    Example: ramulus measure stack.ome.tif --out results --spacing-um 2 0.5 0.5
    """
    with _session(quiet, log, debug) as reporter:
        from .closing import closing_lines
        from .measure import measure

        stack, name, configuration = _request(source, config, preset, spacing_um, changes)
        folder = measure(stack, out=out, configuration=configuration, name=name, progress=reporter)
        reporter.done(closing_lines(folder))


@app.command("inspect")
def inspect_command(
    source: Source,
    config: Config = None,
    preset: Preset = "",
    spacing_um: Spacing = None,
    changes: Changes = None,
    quiet: Quiet = False,
    log: Log = None,
    debug: Debug = False,
) -> None:
    """Read only the header: shape, type, spacing and where it is from, the plan, every problem.

    Exit status 2 if the input could not be measured with these settings.
    """
    with _session(quiet, log, debug) as reporter:
        from .inspection import inspect_lines

        stack, _, configuration = _request(source, config, preset, spacing_um, changes)
        lines, usable = inspect_lines(stack, configuration)
        reporter.done(lines)
    if not usable:
        raise typer.Exit(UnusableInputError.exit_status)


@app.command("cohort")
def cohort_command(
    manifest: Annotated[
        Path,
        typer.Argument(
            metavar="MANIFEST.csv",
            help="A row a sample: sample, stack, and where known subject, group, batch, config,"
            " edits; other columns are carried through.",
        ),
    ],
    out: Out,
    workers: Annotated[
        int, typer.Option("--workers", min=1, help="Samples measured at a time.")
    ] = 1,
    scheduler: Annotated[
        str,
        typer.Option(
            "--scheduler", metavar="ADDRESS", help="A dask scheduler whose workers measure them."
        ),
    ] = "",
    config: Config = None,
    preset: Preset = "",
    spacing_um: Spacing = None,
    changes: Changes = None,
    quiet: Quiet = False,
    log: Log = None,
    debug: Debug = False,
) -> None:
    """Measure every sample of a manifest, compare the groups, and report.

    All rows are checked first. A sample that fails is a row with its reason; the others go on. A
    run that was stopped is taken up by running the same line again.

    Example: ramulus cohort study.csv --out results --workers 4 --config study.toml
    """
    with _session(quiet, log, debug) as reporter:
        from .cohort.measured import closing_lines, measure_cohort

        files, given = _settings([config], preset, spacing_um, changes)
        results = measure_cohort(
            manifest, out, files=files, changes=given, workers=workers, scheduler=scheduler,
            on_progress=lambda told: reporter(told.words, told.done / told.total),
        )  # fmt: skip
        reporter.done(closing_lines(results, out))


@app.command("phantom")
def phantom_command(
    out: Annotated[
        Path, typer.Argument(metavar="OUT.tif", help="The stack; OUT.truth.json goes beside it.")
    ],
    config: Config = None,
    seed: Annotated[int, typer.Option("--seed", min=0, help="Seed of all that is random.")] = 1,
    changes: Changes = None,
    quiet: Quiet = False,
    log: Log = None,
    debug: Debug = False,
) -> None:
    """Draw a synthetic stack whose vessel graph is known.

    Settings are those of the section phantom.

    Example: ramulus phantom tree.ome.tif --seed 3 --set phantom.tree.exponent=2.7
    """
    with _session(quiet, log, debug) as reporter:
        from .phantom.phantom import make_phantom
        from .phantom.save import save_phantom

        settings = _configuration([config], "", None, changes).phantom
        reporter("phantom", 0.0)
        stack, truth = make_phantom(settings, seed)
        beside = save_phantom(out, stack, truth, settings=settings, seed=seed)
        size = " x ".join(map(str, stack.shape))
        reporter.done([f"{out}: {size} voxels, {truth.n_segments} segments", f"truth: {beside}"])


@app.command("config")
def config_command(
    explain: Annotated[
        bool, typer.Option("--explain", help="With the meaning, unit and source of each key.")
    ] = False,
    config: Config = None,
    preset: Preset = "",
    changes: Changes = None,
    quiet: Quiet = False,
    log: Log = None,
    debug: Debug = False,
) -> None:
    """Print the whole configuration as TOML: the defaults, or a preset's or a file's.

    Example: ramulus config --explain > settings.toml
    """
    with _session(quiet, log, debug) as reporter:
        from .config import as_toml

        configuration = _configuration([config], preset, None, changes)
        reporter.done([as_toml(configuration, explain=explain)])


@app.command("compare")
def compare_command(
    first: Annotated[Path, typer.Argument(metavar="DIR", help="Results of one run.")],
    second: Annotated[Path, typer.Argument(metavar="DIR", help="Results of another run.")],
    quiet: Quiet = False,
    log: Log = None,
    debug: Debug = False,
) -> None:
    """Compare two runs of one sample: what changed, and what was different about the runs."""
    with _session(quiet, log, debug) as reporter:
        from .compare import compare

        reporter.done(compare(first, second).lines())


@app.callback(invoke_without_command=True)
def _version(
    version: Annotated[bool, typer.Option("--version", help="Print the version.")] = False,
) -> None:
    if version:
        typer.echo(f"ramulus {__version__}")
        raise typer.Exit


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """Run a command; whatever goes wrong becomes one line and an exit status."""
    try:
        status = app(args=arguments, prog_name="ramulus", standalone_mode=False)
        sys.exit(status if isinstance(status, int) else 0)
    except typer.Abort:
        _end("interrupted", 1)
    except _UsageError as error:
        if type(error).__name__ == "NoArgsIsHelpError":
            print(error.format_message())  # noqa: T201 - what was asked for
            sys.exit(error.exit_code)
        command = error.ctx.command_path if error.ctx else "ramulus"
        _end(f"{error.format_message()} (see {command} --help)", error.exit_code)


_UsageError: Any = typer.BadParameter.__mro__[1]
"""What is wrong with a command line; newer Typers carry Click's class inside."""


@contextmanager
def _session(quiet: bool, log: Path | None, debug: bool) -> Iterator[Reporter]:  # noqa: FBT001
    """Report one command's progress, and end it in one line if it fails."""
    try:
        with Reporter(quiet=quiet, log=log) as reporter:
            yield reporter
    except RamulusError as error:
        _end(str(error), error.exit_status, debug=debug)
    except KeyboardInterrupt:
        _end("interrupted; earlier results are as they were", 1, debug=debug)
    except BrokenPipeError:  # the reader of our output has left: head, less
        sys.stderr.close()
        raise SystemExit(1) from None
    except MemoryError:
        _end("out of memory", 1, debug=debug)
    except Exception as error:  # noqa: BLE001 - a user is shown no traceback unasked
        words = f"{type(error).__name__}: {error}"
        _end(f"fault in the program ({words}); --debug shows where", 1, debug=debug)


def _end(message: str, status: int, *, debug: bool = False) -> NoReturn:
    if debug:
        traceback.print_exc()
    print("ramulus: " + " ".join(message.split()), file=sys.stderr)  # noqa: T201
    raise SystemExit(status)


def _request(
    source: Path,
    config: Path | None,
    preset: str,
    spacing_um: tuple[float, float, float] | None,
    changes: list[str] | None,
) -> tuple[Path, str, "Configuration"]:
    """Return the input, the sample's name where a TOML gives one, and the settings."""
    if source.suffix.lower() != ".toml":
        return source, "", _configuration([config], preset, spacing_um, changes)
    configuration = _configuration([config, source], preset, spacing_um, changes)
    if not configuration.input.stack:
        msg = f"{source}: found no input.stack, expected the file that it is about"
        raise UnusableInputError(msg)
    return Path(configuration.input.stack), source.stem, configuration


def _configuration(
    files: list[Path | None],
    preset: str,
    spacing_um: tuple[float, float, float] | None,
    changes: list[str] | None,
) -> "Configuration":
    from .config import load_configuration

    chosen, given = _settings(files, preset, spacing_um, changes)
    return load_configuration(*chosen, changes=given)


def _settings(
    files: list[Path | None],
    preset: str,
    spacing_um: tuple[float, float, float] | None,
    changes: list[str] | None,
) -> tuple[list[Path], list[str]]:
    """Return the files in the order in which they are laid over one another, and the changes."""
    from .config import preset_path

    chosen = [preset_path(preset)] if preset else []
    chosen += [file for file in files if file is not None]
    given = [] if spacing_um is None else [f"input.spacing_um={list(map(float, spacing_um))}"]
    return chosen, [*(changes or []), *given]
