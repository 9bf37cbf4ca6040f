"""The working grid: grey values on voxels that are nearly cubes, and its levels of half size."""

import itertools
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numba
import numpy as np

from .._checks import checked_spacing_um, checked_volume
from . import _enhance_kernels as kernels

__all__ = ["Level", "levels_of", "working_grid"]

_COARSE = 1.8  # an axis this many times coarser than the finest is interpolated


@dataclass(frozen=True, slots=True)
class Level:
    """Grey values averaged over 2**number voxels a side.

    `image` is (z, y, x); voxel i of an axis covers fine voxels i * 2**number onwards, so its centre
    lies at `(2**number * (i + 0.5) - 0.5) * fine spacing`.
    """

    number: int
    image: np.ndarray
    spacing_um: tuple[float, float, float]


def working_grid(
    volume: np.ndarray, *, spacing_um: tuple[float, float, float], limit: int = 6
) -> tuple[np.ndarray, tuple[float, float, float], tuple[int, int, int]]:
    """Interpolate coarse axes linearly between their planes, by a whole factor.

    Thinning and ridge filters lose thin vessels on strongly anisotropic voxels. Planes that were
    measured stay as they are (grid index = factor * index), nothing is added beyond the first and
    the last of them.

    Parameters
    ----------
    volume : (z, y, x) array
        Grey values.
    spacing_um : tuple of float
        Voxel edges z, y, x.
    limit : int
        Largest factor.

    Returns
    -------
    tuple
        The finer volume (the same array where no axis is coarse), its spacing, the factors.

    Examples
    --------
    >>> fine, spacing, factors = working_grid(np.zeros((3, 4, 4)), spacing_um=(3.0, 1.0, 1.0))
    >>> fine.shape, spacing, factors
    ((7, 4, 4), (1.0, 1.0, 1.0), (3, 1, 1))
    """
    volume = checked_volume("volume", volume)
    spacing_um = checked_spacing_um("spacing_um", spacing_um)
    finest = min(spacing_um)
    factors = [1, 1, 1]
    for axis in range(3):
        ratio = spacing_um[axis] / finest
        if ratio >= _COARSE and volume.shape[axis] > 1:
            factors[axis] = min(round(ratio), limit)
            volume = _interpolated(volume, axis, factors[axis])
    fine = tuple(s / f for s, f in zip(spacing_um, factors, strict=True))
    return volume, (fine[0], fine[1], fine[2]), (factors[0], factors[1], factors[2])


def levels_of(
    volume: np.ndarray, *, spacing_um: tuple[float, float, float], count: int
) -> list[Level]:
    """Return `count` levels, the first the volume itself, each the 2 x 2 x 2 mean of the last."""
    levels = [Level(0, volume, spacing_um)]
    while len(levels) < count and min(levels[-1].image.shape) >= 2:
        last = levels[-1]
        shape = tuple((n + 1) // 2 for n in last.image.shape)
        image = np.empty(shape, np.float32)
        in_threads(lambda a, b, v=last.image, o=image: kernels.halve_into(v, a, b, o), shape[0])
        spacing = tuple(2 * s for s in last.spacing_um)
        levels.append(Level(last.number + 1, image, (spacing[0], spacing[1], spacing[2])))
    return levels


def in_threads(work: Callable[[int, int], None], count: int, *, parts: int = 8) -> None:
    """Call work(start, stop) over `count` items cut in parts; the parts must be independent.

    As many threads as numba may use (`numba.set_num_threads`).
    """
    bounds = np.linspace(0, count, min(parts, count) + 1).astype(int)
    with ThreadPoolExecutor(numba.get_num_threads()) as pool:
        for future in [pool.submit(work, a, b) for a, b in itertools.pairwise(bounds.tolist())]:
            future.result()


def _interpolated(volume: np.ndarray, axis: int, factor: int) -> np.ndarray:
    moved = np.moveaxis(volume, axis, 0)
    count = (moved.shape[0] - 1) * factor + 1
    fine = np.empty((count, *moved.shape[1:]), volume.dtype)
    whole = np.issubdtype(volume.dtype, np.integer)
    for k in range(factor):
        if k == 0:
            fine[::factor] = moved
            continue
        mixed = moved[:-1] * np.float32(1 - k / factor) + moved[1:] * np.float32(k / factor)
        fine[k::factor] = np.rint(mixed) if whole else mixed
    return np.ascontiguousarray(np.moveaxis(fine, 0, axis))
