"""Grey level of the surroundings, as a smooth map on a coarse level, and the noise of the image."""

import numpy as np

from .._settings import Settings, setting
from .grid import Level

__all__ = ["BackgroundSettings", "background_map", "noise_sd"]


class BackgroundSettings(Settings):
    """Settings of the background map."""

    percentile: float = setting(
        30.0, "the share of a neighbourhood's voxels taken to be darker than its background",
        unit="%", gt=0, lt=100, source="own phantom study",
    )  # fmt: skip
    window_um: float | None = setting(
        None,
        "edge of the neighbourhood; absent: 6 of the largest radii looked for",
        unit="um",
        gt=0,
    )


def background_map(
    levels: list[Level], *, radius_um: float, settings: BackgroundSettings
) -> tuple[np.ndarray, int]:
    """Return the background on the grid of one of the levels, and that level's index.

    A low percentile over a window that is wider than any vessel, then a Gaussian; computed on a
    level small enough for that to be cheap.

    Parameters
    ----------
    levels : list of Level
        As from `image.grid.levels_of`.
    radius_um : float
        Largest radius looked for.

    Returns
    -------
    tuple
        (z, y, x) float32 background in grey values; the level whose grid it has.
    """
    from scipy import ndimage as ndi  # noqa: PLC0415 - heavy to import

    window_um = settings.window_um or 6.0 * radius_um
    index = len(levels) - 1
    for k, level in enumerate(levels):
        if level.image.size <= 60_000 or max(window_um / s for s in level.spacing_um) <= 8:
            index = k
            break
    level = levels[index]
    size = [
        int(min(max(3, round(window_um / s)) | 1, 2 * n - 1, 15))
        for s, n in zip(level.spacing_um, level.image.shape, strict=True)
    ]
    image = level.image.astype(np.float32)
    low = ndi.percentile_filter(image, settings.percentile, size=size, mode="nearest")
    smooth = ndi.gaussian_filter(low, [max(0.5, s / 4) for s in size], mode="nearest")
    return smooth.astype(np.float32), index


def noise_sd(volume: np.ndarray) -> float:
    """Return the standard deviation of the voxels' noise.

    Median absolute deviation of the second difference along x, over every voxel of up to 16 evenly
    spaced planes; blur and vessels are smooth at that distance and hardly enter.
    """
    planes = np.unique(np.linspace(0, volume.shape[0] - 1, 16).astype(int))
    sample = np.asarray(volume[planes]).astype(np.float32)
    if sample.shape[2] < 3:
        return 0.0
    difference = sample[:, :, 2:] - 2 * sample[:, :, 1:-1] + sample[:, :, :-2]
    spread = 1.4826 * np.median(np.abs(difference - np.median(difference)))
    return float(spread / np.sqrt(6.0))
