"""Masks by one threshold on the grey values, and the closing of wall-stained lumens."""

import numpy as np

from ..errors import UnusableInputError

__all__ = ["closed_lumens", "threshold_mask"]


def threshold_mask(
    volume: np.ndarray, *, method: str, threshold: float | None = None, threshold_low: float | None = None,
    window_voxels: int = 31,
) -> np.ndarray:  # fmt: skip
    """Return the voxels above a threshold on lightly smoothed grey values (SD 0.7 voxels).

    Parameters
    ----------
    volume : (z, y, x) array
        Grey values, vessels bright.
    method : str
        otsu (Otsu 1979), li (Li & Tam 1998), triangle (Zack 1977), local_mean (the mean of the
        surroundings plus a fifth of the grey values' SD), hysteresis (above `threshold_low` and joined
        to a voxel above `threshold`), fixed (above `threshold`).

    Raises
    ------
    UnusableInputError
        If the method needs a threshold that is not given.
    """
    from scipy import ndimage as ndi  # noqa: PLC0415 - heavy to import
    from skimage import filters  # noqa: PLC0415 - heavy to import

    smooth = ndi.gaussian_filter(volume, 0.7, output=np.float32)
    if method == "fixed":
        return smooth > _given("segment.threshold", threshold, method)
    if method == "hysteresis":
        high = _given("segment.threshold", threshold, method)
        low = _given("segment.threshold_low", threshold_low, method)
        return np.asarray(filters.apply_hysteresis_threshold(smooth, low, high))
    if method == "local_mean":
        around = ndi.uniform_filter(smooth, window_voxels)
        return smooth > around + 0.2 * float(smooth.std())
    rule = {
        "otsu": filters.threshold_otsu,
        "li": filters.threshold_li,
        "triangle": filters.threshold_triangle,
    }
    return smooth > float(rule[method](smooth))


def closed_lumens(inside: np.ndarray) -> np.ndarray:
    """Fill what walls enclose: holes of the mask in any plane along z, y or x.

    A vessel whose wall is stained shows as a tube; planes across it hold its lumen as a hole.
    """
    from scipy.ndimage import binary_fill_holes  # noqa: PLC0415 - heavy to import

    filled = inside.copy()
    for axis in range(3):
        for k in range(inside.shape[axis]):
            where = (slice(None),) * axis + (k,)
            if inside[where].any():
                filled[where] |= binary_fill_holes(inside[where])
    return filled


def _given(name: str, value: float | None, method: str) -> float:
    if value is None:
        msg = f"{name}: found none, segment.method = {method!r} needs a grey value"
        raise UnusableInputError(msg)
    return value
