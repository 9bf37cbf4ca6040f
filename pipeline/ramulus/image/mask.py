"""The records between the image stages: `Mask` and `Skeleton`."""

from dataclasses import dataclass

import numpy as np

from .._checks import checked_spacing_um, checked_volume

__all__ = ["Mask", "Skeleton"]


@dataclass(frozen=True, slots=True)
class Mask:
    """Voxels taken as lumen: a (z, y, x) bool array that cannot be written to.

    The grid may be finer than the stack's along coarse axes; `origin_um` is the centre of voxel
    (0, 0, 0) and is the stack's own.
    """

    inside: np.ndarray
    spacing_um: tuple[float, float, float]
    origin_um: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def __post_init__(self) -> None:
        view = checked_volume("inside", self.inside, dtype=np.bool_).view()
        view.setflags(write=False)
        object.__setattr__(self, "inside", view)
        object.__setattr__(self, "spacing_um", checked_spacing_um("spacing_um", self.spacing_um))


@dataclass(frozen=True, slots=True)
class Skeleton:
    """Centreline voxels of a mask.

    Parameters
    ----------
    voxels : (n, 3) int64 array
        Indices z, y, x of the skeleton's voxels on the mask's grid, in raster order.
    distance_um : (n,) float32 array
        Distance of each to the nearest background voxel, centre to centre as `image.distance`
        defines it.
    shape, spacing_um, origin_um :
        The mask's grid.
    """

    voxels: np.ndarray
    distance_um: np.ndarray
    shape: tuple[int, int, int]
    spacing_um: tuple[float, float, float]
    origin_um: tuple[float, float, float] = (0.0, 0.0, 0.0)
