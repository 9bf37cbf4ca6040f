"""What `ramulus inspect` says of an input, from its header alone."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from .config import Configuration
from .errors import UnusableInputError
from .intake import available_gib, kind_of
from .plan import plan_of
from .stack.open import StackReport, describe

__all__ = ["inspect_lines"]


def inspect_lines(source: Path | str, configuration: Configuration) -> tuple[list[str], bool]:
    """Return the lines to print, and whether the input can be measured as configured.

    Parameters
    ----------
    source : path
        A stack, a mask or a graph.
    configuration : Configuration
        As it would be measured with.

    Returns
    -------
    tuple
        Lines, and a bool.

    Raises
    ------
    UnusableInputError
        If there is nothing at the path, or its header cannot be read at all.
    """
    source = Path(source)
    if not source.exists():
        msg = f"{source}: no such file or folder"
        raise UnusableInputError(msg)
    if kind_of(source, configuration.input) == "graph":
        return [f"{source}", "format    a vessel graph; it is checked when it is read"], True
    report = describe(source, settings=configuration.input)
    return list(_lines(report, configuration)), _is_usable(report, configuration)


def _lines(report: StackReport, configuration: Configuration) -> Iterator[str]:
    yield report.path
    yield f"format    {report.format}, {report.dtype}"
    yield f"shape     {_product(report.shape)} voxels (z y x)"
    yield f"channels  {', '.join(report.channels)}; time points: {report.time_points}"
    yield from (f"header    {name}: {value}" for name, value in sorted(report.header.items()))
    problems = list(report.problems)
    if report.spacing_um and report.spacing_origin:
        axes = zip("zyx", report.spacing_um, report.spacing_origin, strict=True)
        yield "spacing   " + ", ".join(f"{a} {um:.6g} um ({whence})" for a, um, whence in axes)
        sizes = zip(report.shape, report.spacing_um, strict=True)
        yield f"size      {_product(f'{n * um / 1000:.4g}' for n, um in sizes)} mm"
        left_out = ["twin"] if configuration.twin.mode == "off" else []
        left_out += ["report"] if configuration.report.level == "none" else []
        plan = plan_of(
            report.shape, report.spacing_um, np.dtype(report.dtype).itemsize, without=left_out
        )
        finer = "as it is" if plan.grid == report.shape else "coarse axes interpolated"
        yield f"plan      worked on {_product(plan.grid)} voxels ({finer})"
        yield f"expected  about {_time(plan.total_seconds)}, {plan.memory_gib:.2g} GiB of memory"
        limit = available_gib(configuration)
        if plan.memory_gib > limit:
            problems.append(f"more memory than may be used ({limit:.3g} GiB): measure a crop")
    yield from (f"problem   {problem}" for problem in problems)
    if not problems:
        yield "problems  none found"


def _is_usable(report: StackReport, configuration: Configuration) -> bool:
    channel, many = configuration.input.channel, len(report.channels)
    chosen = channel in report.channels or (channel.isdigit() and int(channel) < many)
    return report.spacing_um is not None and (chosen or (many == 1 and not channel))


def _product(sizes: object) -> str:
    return " x ".join(map(str, sizes))  # type: ignore[call-overload]


def _time(seconds: float) -> str:
    return f"{seconds:.0f} s" if seconds < 120 else f"{seconds / 60:.0f} min"
