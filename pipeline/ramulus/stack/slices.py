"""A folder of TIFF slices, one plane a file, in the natural order of their names."""

import re
from pathlib import Path

import numpy as np

from ..errors import UnusableInputError
from .raw import RawImage
from .tiff import read_tiff

__all__ = ["SliceVolume", "read_slices", "slice_files"]


class SliceVolume:
    """A lazy (z, y, x) volume over one file a plane."""

    def __init__(self, files: list[Path], shape: tuple[int, int, int], dtype: str) -> None:
        self.files, self.shape, self.dtype = files, shape, np.dtype(dtype)
        self.ndim = 3

    def __getitem__(self, key: object) -> np.ndarray:
        """Read the planes asked for and index them."""
        keys = key if isinstance(key, tuple) else (key,)
        if Ellipsis in keys:
            at = keys.index(Ellipsis)
            keys = (*keys[:at], *[slice(None)] * (self.ndim + 1 - len(keys)), *keys[at + 1 :])
        keys = keys or (slice(None),)
        planes = np.arange(self.shape[0])[keys[0]]
        if np.ndim(planes) == 0:
            return self._plane(int(planes))[keys[1:]]
        return np.stack([self._plane(int(z))[keys[1:]] for z in planes])

    def _plane(self, z: int) -> np.ndarray:
        plane = read_tiff(self.files[z]).read(0, 0)[0]
        if plane.shape != self.shape[1:] or plane.dtype != self.dtype:
            msg = (
                f"{self.files[z].name}: a plane of {plane.shape} {plane.dtype}, expected"
                f" {self.shape[1:]}"
                f" {self.dtype} as the first"
            )
            raise UnusableInputError(msg)
        return np.asarray(plane)


def slice_files(folder: Path) -> list[Path]:
    """Return the folder's TIFF files in the natural order of their names."""
    files = [f for f in folder.iterdir() if f.suffix.lower() in (".tif", ".tiff") and f.is_file()]
    return sorted(
        files, key=lambda f: [int(t) if t.isdigit() else t for t in re.split(r"(\d+)", f.name)]
    )


def read_slices(folder: Path) -> RawImage:
    """Return what a folder of slices holds; gaps in the numbering are reported as problems."""
    files = slice_files(folder)
    if not files:
        msg = f"{folder.name}: the folder holds no TIFF file, expected one a plane"
        raise UnusableInputError(msg)
    first = read_tiff(files[0])
    if first.shape[0] != 1 or len(first.channels) != 1:
        msg = (
            f"{files[0].name}: found {first.shape[0]} planes and {len(first.channels)} channels,"
            " expected one plane a file"
        )
        raise UnusableInputError(msg)
    numbers = [int(m[-1]) for f in files if (m := re.findall(r"\d+", f.stem))]
    problems = []
    if len(numbers) == len(files):
        steps = np.diff(numbers)
        if len(steps) and (steps != steps[0]).any():
            gap = int(np.flatnonzero(steps != steps[0])[0])
            problems.append(f"the numbering has a gap after {files[gap].name}")
    shape = (len(files), first.shape[1], first.shape[2])
    volume = SliceVolume(files, shape, first.dtype)
    found = {axis: first.found[axis] for axis in "yx" if axis in first.found}
    if "z" in first.found:
        found["z"] = first.found["z"]
    return RawImage(
        shape, first.dtype, found, lambda channel, time_point: volume, "TIFF slices",  # noqa: ARG005
        problems=tuple(problems), header={"files": str(len(files))},
    )  # fmt: skip
