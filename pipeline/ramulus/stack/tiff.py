"""TIFF stacks: multi-page, BigTIFF, ImageJ and OME-TIFF with their spacing and unit."""

import logging
import re
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from xml.etree import ElementTree as ET

import numpy as np
import tifffile

from ..errors import UnusableInputError
from .raw import RawImage
from .spacing import AxisSpacing, Found

__all__ = ["read_tiff"]

_OME_UNITS = {"": "um", "µm": "um", "μm": "um"}


def read_tiff(path: Path) -> RawImage:
    """Return what a TIFF file holds; its pixels are read only when asked for.

    Raises
    ------
    UnusableInputError
        If the file is no complete TIFF, a colour photograph, or its axes cannot be told.
    """
    try:
        with _damage() as found, tifffile.TiffFile(path) as file:
            raw = _described(path, file)
    except UnusableInputError:
        raise
    except Exception as broken:
        msg = (
            f"{path.name}: not a readable TIFF ({type(broken).__name__}: {_short(broken)});"
            " expected a complete file"
        )
        raise UnusableInputError(msg) from broken
    if found:
        msg = f"{path.name}: the file is damaged or cut short ({_short(found[0])})"
        raise UnusableInputError(msg)
    return raw


@contextmanager
def _damage() -> Iterator[list[str]]:
    """Collect what tifffile finds broken: it logs that, and goes on with the part that is left."""
    found: list[str] = []
    thread = threading.get_ident()

    class Listener(logging.Handler):
        def emit(self, record: logging.LogRecord) -> None:
            text = record.getMessage()
            tag = re.search(r"TiffTag (\d+)", text)
            # Private tags (from 32768 on) hold nothing that is needed here.
            if record.thread == thread and not (tag and int(tag[1]) >= 32768):
                found.append(text)

    listener = Listener(level=logging.ERROR)
    logger = logging.getLogger("tifffile")
    logger.addHandler(listener)
    try:
        yield found
    finally:
        logger.removeHandler(listener)


def _described(path: Path, file: tifffile.TiffFile) -> RawImage:
    series = file.series[0]
    axes, shape = series.axes, series.shape
    page: Any = file.pages[0]
    if page.photometric in (tifffile.PHOTOMETRIC.RGB, tifffile.PHOTOMETRIC.PALETTE):
        msg = (
            f"{path.name}: a colour image ({page.photometric.name}, {shape}), expected grey values;"
            f" export one channel"
        )
        raise UnusableInputError(msg)
    if np.dtype(series.dtype).kind not in "uif":
        msg = f"{path.name}: found dtype {series.dtype}, expected integers or floats"
        raise UnusableInputError(msg)
    _check_length(path, file, series)
    found: Found = {}
    channels: list[str] = []
    if file.is_ome and file.ome_metadata:
        channels = _ome(file.ome_metadata, path.name, found)
    if file.is_imagej:
        _imagej(file.imagej_metadata or {}, page, found)
    sizes = dict(zip(axes, shape, strict=True))
    known = {"Z", "Y", "X", "C", "T", "S", "I", "Q"}
    if not {"Y", "X"} <= set(axes) or set(axes) - known:
        msg = f"{path.name}: found axes {axes} of shape {shape}, expected Z, Y, X and perhaps C, T"
        raise UnusableInputError(msg)
    # Plain multi-page files name their page axis I or Q: those are the planes.
    plane_axes = [a for a in axes if a in "IQ"]
    z_axis = "Z" if "Z" in axes else (plane_axes[0] if plane_axes else "")
    depth = sizes.get(z_axis, 1)
    n_channels, n_times = sizes.get("C", 1) * sizes.get("S", 1), sizes.get("T", 1)
    problems = []
    if depth == 1 and (n_channels > 4 or n_times > 1):
        swapped = "C" if n_channels > 4 else "T"
        problems.append(
            f"one plane but {sizes[swapped]} along {swapped}: were the axes swapped when it was"
            " saved?"
        )
    if not channels or len(channels) != n_channels:
        channels = [str(k) for k in range(n_channels)]
    full = "".join(axes)

    def read(channel: int, time_point: int) -> np.ndarray:
        return _read(path, full, z_axis, channel, time_point)

    return RawImage(
        (int(depth), int(sizes["Y"]), int(sizes["X"])), str(series.dtype), found, read,
        "OME-TIFF" if file.is_ome else "ImageJ TIFF" if file.is_imagej else "TIFF",
        tuple(channels), int(n_times), {"axes": full}, tuple(problems),
    )  # fmt: skip


def _read(path: Path, axes: str, z_axis: str, channel: int, time_point: int) -> np.ndarray:
    try:
        try:
            data: Any = tifffile.memmap(path, mode="r")
        except ValueError:
            data = tifffile.imread(path)
        with tifffile.TiffFile(path) as file:
            shape = file.series[0].shape
        data = data.reshape(shape)
        where: list[Any] = []
        rest = ""
        for axis in axes:
            if axis in ("C", "S"):
                where.append(channel)
            elif axis == "T":
                where.append(time_point)
            else:
                where.append(slice(None))
                rest += axis
        data = data[tuple(where)]
    except UnusableInputError:
        raise
    except Exception as broken:
        msg = (
            f"{path.name}: the pixels cannot be read ({type(broken).__name__}: {_short(broken)});"
            " is the file complete?"
        )
        raise UnusableInputError(msg) from broken
    order = [rest.index(a) for a in (z_axis, "Y", "X") if a]
    planes: np.ndarray = np.transpose(data, order)
    return planes if planes.ndim == 3 else planes[None]


def _check_length(path: Path, file: tifffile.TiffFile, series: Any) -> None:
    """Refuse a file that is shorter than its header says, before any memory is taken."""
    size = path.stat().st_size
    needed = int(np.prod(series.shape, dtype=np.int64)) * np.dtype(series.dtype).itemsize
    page = file.pages[0]
    plain = page.compression == tifffile.COMPRESSION.NONE
    if plain and needed > size:
        msg = (
            f"{path.name}: the header promises {needed} bytes of pixels, the file holds {size}; it"
            " is cut short"
        )
        raise UnusableInputError(msg)
    if not plain and needed > 4096 * max(size, 1):
        msg = (
            f"{path.name}: the header promises {needed} bytes from a file of {size}; refused as"
            " impossible"
        )
        raise UnusableInputError(msg)
    if file.is_imagej and len(file.pages) == 1:
        return
    for item in file.pages:
        for offset, count in zip(item.dataoffsets, item.databytecounts, strict=True):
            if offset + count > size:
                msg = f"{path.name}: a plane lies beyond the end of the file; it is cut short"
                raise UnusableInputError(msg)


def _ome(xml: str, name: str, found: Found) -> list[str]:
    if "<!DOCTYPE" in xml or "<!ENTITY" in xml:
        msg = f"{name}: its OME-XML declares entities, which no image needs; refused"
        raise UnusableInputError(msg)
    try:
        root = ET.fromstring(xml)  # noqa: S314 - declarations were refused above
    except ET.ParseError as broken:
        msg = f"{name}: its OME-XML is not well formed ({broken})"
        raise UnusableInputError(msg) from broken
    pixels = next((e for e in root.iter() if e.tag.rsplit("}", 1)[-1] == "Pixels"), None)
    if pixels is None:
        return []
    for axis in "ZYX":
        value = pixels.get(f"PhysicalSize{axis}")
        if value is not None:
            unit = pixels.get(f"PhysicalSize{axis}Unit", "um")
            found.setdefault(axis.lower(), []).append(
                AxisSpacing(_number(value), _OME_UNITS.get(unit, unit), "the OME-XML")
            )
    return [
        e.get("Name") or str(k)
        for k, e in enumerate(c for c in pixels if c.tag.rsplit("}", 1)[-1] == "Channel")
    ]


def _imagej(metadata: dict[str, Any], page: Any, found: Found) -> None:
    unit = str(metadata.get("unit", "")).replace("\\u00B5", "u").replace("µ", "u").strip()
    unit = "" if unit.lower() in ("pixel", "pixels") else unit
    spacing = metadata.get("spacing")
    if spacing is not None:
        found.setdefault("z", []).append(
            AxisSpacing(
                _number(spacing), str(metadata.get("zunit", unit)), "the ImageJ description"
            )
        )
    for axis, tag in (("y", "YResolution"), ("x", "XResolution")):
        if tag in page.tags:
            top, bottom = page.tags[tag].value
            if top:
                per_axis = str(metadata.get(f"{axis}unit", unit)).replace("\\u00B5", "u")
                found.setdefault(axis, []).append(
                    AxisSpacing(bottom / top, per_axis, f"the tag {tag}")
                )


def _number(value: Any) -> float:
    try:
        return float(value)
    except (TypeError, ValueError):
        return float("nan")


def _short(error: BaseException | str) -> str:
    return " ".join(str(error).split())[:120]
