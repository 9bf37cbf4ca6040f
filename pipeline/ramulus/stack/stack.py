"""The `Stack`: a lazy (z, y, x) image whose spacing is known, with where it came from."""

from dataclasses import dataclass, field, replace
from typing import Any, Literal

import numpy as np

from .._checks import checked_spacing_um
from ..errors import UnusableInputError

__all__ = ["Provenance", "Stack"]

SpacingOrigin = Literal["header", "user"]


@dataclass(frozen=True, slots=True)
class Provenance:
    """Where a stack came from; `header` holds what the reader found worth keeping."""

    path: str = ""
    format: str = "array"
    sha256: str = ""
    channel: str = ""
    time_point: int = 0
    header: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Stack:
    """A 3-D image with known spacing.

    Parameters
    ----------
    voxels : (z, y, x) array_like
        Grey values; lazy where the reader allows it (memory map, Zarr). Anything with shape, dtype
        and slicing that gives numpy arrays.
    spacing_um : tuple of float
        Edge of a voxel along z, y, x in micrometres.
    spacing_origin : tuple of str
        Per axis, "header" or "user".
    origin_um : tuple of float
        Position of the centre of voxel (0, 0, 0); zero but for crops.
    name : str
        The sample's name.
    provenance : Provenance
        File, format, checksum, channel.
    """

    voxels: Any
    spacing_um: tuple[float, float, float]
    spacing_origin: tuple[SpacingOrigin, SpacingOrigin, SpacingOrigin] = ("user", "user", "user")
    origin_um: tuple[float, float, float] = (0.0, 0.0, 0.0)
    name: str = "sample"
    provenance: Provenance = Provenance()

    def __post_init__(self) -> None:
        if len(self.voxels.shape) != 3 or 0 in self.voxels.shape:
            msg = f"voxels: found shape {tuple(self.voxels.shape)}, expected (z, y, x)"
            raise UnusableInputError(msg)
        object.__setattr__(self, "spacing_um", checked_spacing_um("spacing_um", self.spacing_um))

    @property
    def shape(self) -> tuple[int, int, int]:
        """Number of voxels along z, y, x."""
        z, y, x = self.voxels.shape
        return int(z), int(y), int(x)

    @property
    def size_um(self) -> tuple[float, float, float]:
        """Physical size along z, y, x, voxel edges included."""
        z, y, x = (n * s for n, s in zip(self.shape, self.spacing_um, strict=True))
        return z, y, x

    def read(self) -> np.ndarray:
        """Return all voxels as one numpy array (in memory)."""
        return np.asarray(self.voxels[...])

    def replace(self, **changes: Any) -> "Stack":
        """Return a stack with some fields changed."""
        return replace(self, **changes)
