"""What `ramulus inspect` says of a stack, from its header alone."""

import json
from pathlib import Path

import numpy as np

from .config import Configuration
from .stack.open import describe

__all__ = ["expected_cost", "inspect_lines"]

# Microseconds a working voxel, seconds once, bytes a working voxel and once; measured with
# tests/benchmarks/bench_measure.py on two cores.
_US_PER_VOXEL, _SECONDS_ONCE = 0.25, 3.0
_BYTES_PER_VOXEL, _MIB_ONCE = 12.0, 350.0


def expected_cost(shape: tuple[int, int, int], spacing_um: tuple[float, float, float], itemsize: int) -> tuple[float, float]:
    """Return the expected seconds (twin and report left out) and the expected peak memory in MiB."""
    factors = [round(s / min(spacing_um)) if s / min(spacing_um) >= 1.8 else 1 for s in spacing_um]
    voxels = float(np.prod([n * f for n, f in zip(shape, factors, strict=True)]))
    seconds = _SECONDS_ONCE + voxels * _US_PER_VOXEL * 1e-6
    return seconds, _MIB_ONCE + voxels * (_BYTES_PER_VOXEL + itemsize) / 2**20


def inspect_lines(source: Path, configuration: Configuration) -> tuple[list[str], bool]:
    """Return the lines to print and whether the stack can be measured as configured."""
    report = describe(source, settings=configuration.input)
    lines = [
        f"{report.path}: {report.format}, {' x '.join(map(str, report.shape))} voxels (z y x), {report.dtype}",
    ]
    if report.spacing_um and report.spacing_origin:
        text = ", ".join(
            f"{axis} {size:.6g} ({origin})"
            for axis, size, origin in zip("zyx", report.spacing_um, report.spacing_origin, strict=True)
        )
        size = [n * s / 1000 for n, s in zip(report.shape, report.spacing_um, strict=True)]
        lines.append(f"spacing in um: {text}; volume {size[0]:.4g} x {size[1]:.4g} x {size[2]:.4g} mm")
        seconds, mebibytes = expected_cost(report.shape, report.spacing_um, np.dtype(report.dtype).itemsize)
        lines.append(f"expected: about {seconds:.0f} s (twin and report left out), {mebibytes / 1024:.2g} GiB of memory")
        if mebibytes / 1024 > configuration.run.memory_gib:
            lines.append(f"problem: more memory than run.memory_gib = {configuration.run.memory_gib}; measure a crop")
    lines.append(f"channels: {', '.join(report.channels)}; time points: {report.time_points}")
    if report.header:
        lines.append(f"header: {json.dumps(report.header)}")
    lines += [f"problem: {p}" for p in report.problems]
    usable = report.spacing_um is not None and not any("channel" in p for p in report.problems)
    return lines, usable
