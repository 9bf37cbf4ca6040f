"""Open any stack that ramulus reads, or only describe it from its header."""

import hashlib
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np

from .._settings import Settings, setting
from ..errors import RamulusError, SpacingError, UnusableInputError
from .nifti import read_nifti
from .raw import RawImage
from .slices import read_slices, slice_files
from .spacing import combined_spacing
from .stack import Provenance, Stack
from .tiff import read_tiff

__all__ = [
    "InputSettings",
    "StackReport",
    "checked_grey_values",
    "describe",
    "file_sha256",
    "open_stack",
]


class InputSettings(Settings):
    """What the input is, and what its header does not say."""

    kind: Literal["auto", "stack", "mask", "probability", "graph"] = setting(
        "auto", "what the input holds; auto: a graph for SWC files and sample folders, else a stack"
    )
    stack: str = setting("", "the file, where a sample TOML names it (relative to the TOML)")
    spacing_um: tuple[float, float, float] | None = setting(
        None, "voxel edges z, y, x, where the header has none", unit="um"
    )
    spacing_override_reason: str = setting(
        "", "why spacing_um holds although the header says otherwise; recorded"
    )
    channel: str = setting("", "name or number of the channel, where there are several")
    time_point: int = setting(0, "number of the time point", ge=0)
    polarity: Literal["bright", "dark"] = setting(
        "bright", "vessels brighter or darker than the tissue"
    )
    region: str = setting(
        "", "file of a region-of-interest mask on the same grid; empty: everywhere"
    )
    graph_unit: Literal["um", "mm"] = setting("um", "unit of an SWC file's numbers")


@dataclass(frozen=True, slots=True)
class StackReport:
    """What a header says, and every problem found in it."""

    path: str
    format: str
    shape: tuple[int, int, int]
    dtype: str
    spacing_um: tuple[float, float, float] | None
    spacing_origin: tuple[str, str, str] | None
    channels: tuple[str, ...]
    time_points: int
    header: dict[str, str]
    problems: tuple[str, ...]


def open_stack(path: Path | str, *, settings: InputSettings, name: str = "") -> Stack:
    """Open one channel and time point of a file as a `Stack`.

    Raises
    ------
    UnusableInputError
        If the file cannot be used; its spacing is absent or contradictory (SpacingError).
    """
    path = Path(path)
    raw = _raw(path)
    spacing, origin = combined_spacing(
        raw.found,
        user_um=settings.spacing_um,
        name=path.name,
        override=settings.spacing_override_reason,
    )
    channel = _channel(raw, settings, path.name)
    if settings.time_point >= raw.time_points:
        msg = f"input.time_point: found {settings.time_point}, {path.name} has {raw.time_points}"
        raise UnusableInputError(msg)
    return Stack(
        voxels=raw.read(channel, settings.time_point), spacing_um=spacing, spacing_origin=origin,
        name=name or sample_name(path),
        provenance=Provenance(str(path.name), raw.format, file_sha256(path), raw.channels[channel],
                              settings.time_point, raw.header),
    )  # fmt: skip


def describe(path: Path | str, *, settings: InputSettings) -> StackReport:
    """Return what the header says with all problems; no voxel is read."""
    path = Path(path)
    raw = _raw(path)
    problems = list(raw.problems)
    spacing, origin = None, None
    try:
        spacing, origin = combined_spacing(
            raw.found,
            user_um=settings.spacing_um,
            name=path.name,
            override=settings.spacing_override_reason,
        )
    except SpacingError as absent:
        problems.append(str(absent))
    try:
        _channel(raw, settings, path.name)
    except UnusableInputError as unclear:
        problems.append(str(unclear))
    if min(raw.shape) < 4:
        problems.append(
            f"{path.name}: {raw.shape} voxels; fewer than 4 along an axis is no stack to trace"
        )
    if spacing and max(spacing) > 5.5 * min(spacing):
        problems.append(
            f"{path.name}: voxels are {max(spacing) / min(spacing):.2g} times coarser along one"
            " axis"
        )
    return StackReport(
        str(path), raw.format, raw.shape, raw.dtype, spacing, origin, raw.channels, raw.time_points,
        raw.header, tuple(problems),
    )  # fmt: skip


def checked_grey_values(volume: np.ndarray, *, name: str) -> np.ndarray:
    """Return the values if all are finite and not all equal.

    Raises
    ------
    UnusableInputError
        With the number and the first place of values that are not finite, or for a constant stack.
    """
    if volume.dtype.kind == "f":
        bad = ~np.isfinite(volume)
        if bad.any():
            first = tuple(int(i) for i in np.argwhere(bad)[0])
            msg = (
                f"{name}: {int(bad.sum())} voxels are not finite, the first at (z, y, x) ="
                f" {first}; mend or mask them"
            )
            raise UnusableInputError(msg)
    low, high = volume.min(), volume.max()
    if low == high:
        msg = f"{name}: every voxel is {low}, expected an image with vessels in it"
        raise UnusableInputError(msg)
    return volume


def file_sha256(path: Path) -> str:
    """Return the checksum of a file, or of a folder's slices in their order."""
    digest = hashlib.sha256()
    for file in slice_files(path) if path.is_dir() else [path]:
        with file.open("rb") as stream:
            while block := stream.read(1 << 20):
                digest.update(block)
    return digest.hexdigest()


def sample_name(path: Path) -> str:
    """Return the file's name without its endings."""
    name = path.name
    for ending in (".ome.tiff", ".ome.tif", ".nii.gz", ".nii", ".tiff", ".tif", ".swc", ".npy"):
        if name.lower().endswith(ending):
            return name[: -len(ending)] or name
    return path.stem or name


def _raw(path: Path) -> RawImage:
    if not path.exists():
        msg = f"{path}: no such file or folder"
        raise UnusableInputError(msg)
    try:
        if path.is_dir():
            return read_slices(path)
        if path.stat().st_size == 0:
            msg = f"{path.name}: the file is empty"
            raise UnusableInputError(msg)
        lower = path.name.lower()
        if lower.endswith((".nii", ".nii.gz")):
            return read_nifti(path)
        if lower.endswith((".tif", ".tiff")):
            return read_tiff(path)
        if lower.endswith(".npy"):
            return _read_npy(path)
    except RamulusError:
        raise
    except OSError as broken:
        msg = f"{path.name}: cannot be read ({broken.strerror or broken})"
        raise UnusableInputError(msg) from broken
    msg = (
        f"{path.name}: no reader for this ending; expected TIFF, a folder of TIFF slices, NIfTI or"
        " .npy"
    )
    raise UnusableInputError(msg)


def _read_npy(path: Path) -> RawImage:
    try:
        data: Any = np.load(path, mmap_mode="r", allow_pickle=False)
    except (ValueError, OSError, EOFError) as broken:
        msg = f"{path.name}: not a readable .npy array ({' '.join(str(broken).split())[:120]})"
        raise UnusableInputError(msg) from broken
    if data.ndim != 3 or data.size == 0 or data.dtype.kind not in "uifb":
        msg = (
            f"{path.name}: found shape {data.shape} of {data.dtype}, expected (z, y, x) of numbers"
        )
        raise UnusableInputError(msg)
    z, y, x = data.shape
    return RawImage((z, y, x), str(data.dtype), {}, lambda channel, time_point: data, "npy")  # noqa: ARG005


def _channel(raw: RawImage, settings: InputSettings, name: str) -> int:
    if not settings.channel:
        if len(raw.channels) > 1:
            msg = (
                f"{name}: {len(raw.channels)} channels ({', '.join(raw.channels)}); choose one"
                " with --set input.channel=..."
            )
            raise UnusableInputError(msg)
        return 0
    if settings.channel in raw.channels:
        return raw.channels.index(settings.channel)
    if settings.channel.isdigit() and int(settings.channel) < len(raw.channels):
        return int(settings.channel)
    msg = f"input.channel: found {settings.channel!r}, {name} has {', '.join(raw.channels)}"
    raise UnusableInputError(msg)
