"""Multi-scale tube enhancement in micrometres: where bright vessels of which width may be."""

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from .._checks import checked_spacing_um, checked_volume
from .._settings import Settings, setting
from ..errors import UnusableInputError
from . import _enhance_kernels as kernels
from .grid import Level, in_threads, levels_of

__all__ = ["EnhanceSettings", "ScaleResponse", "TubeMap", "enhance", "tube_response"]

FilterName = Literal["contrast", "sato", "frangi", "jerman"]
_CODES = {
    "contrast": kernels.CONTRAST, "sato": kernels.SATO, "frangi": kernels.FRANGI,
    "jerman": kernels.JERMAN,
}  # fmt: skip
_TRUNCATE = 3.5


class EnhanceSettings(Settings):
    """Settings of the tube enhancement."""

    filter: FilterName = setting(
        "contrast",
        "shape measure: contrast (geometric mean of the two cross curvatures), sato, frangi, jerman",
        source="Sato 1998 MedIA 2:143; Frangi 1998 MICCAI; Jerman 2016 IEEE TMI 35:2107",
    )
    radius_min_um: float | None = setting(
        None, "smallest radius looked for; absent: 1.4 working voxels", unit="um", gt=0
    )
    radius_max_um: float | None = setting(
        None, "largest radius looked for; absent: half the stack's shortest side, 40 voxels at most",
        unit="um", gt=0,
    )  # fmt: skip
    sigmas_um: tuple[float, ...] | None = setting(
        None, "the scales themselves, in place of the range of radii", unit="um"
    )
    noise_factor: float = setting(
        4.0, "a response counts from this many standard deviations of the scale's noise", gt=0,
        source="own phantom study",
    )  # fmt: skip


@dataclass(frozen=True, slots=True)
class ScaleResponse:
    """One scale of the enhancement: its level, sigma, and the noise of its response."""

    level: int
    sigma_um: float
    noise: float


@dataclass(frozen=True, slots=True)
class TubeMap:
    """Responses a level: `response[k]` (float32, grey values) on `levels[k]`'s grid.

    At the axis of a tube of contrast A whose radius fits the scale (radius = sqrt(2) sigma) the
    response is A / e; `amplitude` undoes that.
    """

    levels: list[Level]
    response: list[np.ndarray | None]
    best_scale: list[np.ndarray | None]
    scales: list[ScaleResponse]

    @staticmethod
    def amplitude(response: np.ndarray) -> np.ndarray:
        """Contrast of the tube that a response speaks of."""
        return math.e * response


def enhance(
    volume: np.ndarray, *, spacing_um: tuple[float, float, float], settings: EnhanceSettings
) -> TubeMap:
    """Enhance bright tubes over all scales; large scales run on levels of reduced size.

    Parameters
    ----------
    volume : (z, y, x) array
        Grey values on the working grid.
    spacing_um : tuple of float
        Voxel edges z, y, x.
    settings : EnhanceSettings
        Filter and scales.

    Returns
    -------
    TubeMap
        Response and best scale for each level that holds a scale.
    """
    spacing_um = checked_spacing_um("spacing_um", spacing_um)
    sigmas = _sigmas_um(volume.shape, spacing_um, settings)
    coarse = max(spacing_um)
    numbers = [max(0, int(math.floor(math.log2(s / coarse) + 1e-6))) for s in sigmas]
    levels = levels_of(volume, spacing_um=spacing_um, count=max([*numbers, 2]) + 1)
    numbers = [min(n, len(levels) - 1) for n in numbers]
    response: list[np.ndarray | None] = [None] * len(levels)
    best: list[np.ndarray | None] = [None] * len(levels)
    scales = []
    for index, (sigma, number) in enumerate(zip(sigmas, numbers, strict=True)):
        level = levels[number]
        noise = _noise(level, sigma)
        scales.append(ScaleResponse(number, sigma, noise))
        if response[number] is None:
            response[number] = np.zeros(level.image.shape, np.float32)
            best[number] = np.zeros(level.image.shape, np.uint8)
        _respond(level, sigma, settings.noise_factor * noise, _CODES[settings.filter], index,
                 response[number], best[number])  # fmt: skip
    return TubeMap(levels, response, best, scales)


def tube_response(
    volume: np.ndarray, *, spacing_um: tuple[float, float, float], sigmas_um: tuple[float, ...],
    filter: FilterName = "frangi", parameter: float | None = None,  # noqa: A002 - the trade's word
) -> np.ndarray:  # fmt: skip
    """Return a published filter's own response, the maximum over the scales.

    All scales run at full resolution. `parameter` is c of Frangi (absent: half the largest norm of
    the curvatures over all scales) or tau of Jerman (absent: 0.75).
    """
    volume = checked_volume("volume", volume)
    spacing_um = checked_spacing_um("spacing_um", spacing_um)
    level = Level(0, volume, spacing_um)
    code = _CODES[filter]
    out = np.zeros(volume.shape, np.float32)
    best = np.zeros(volume.shape, np.uint8)
    value = 0.0
    if filter == "frangi":
        value = parameter or 0.5 * max(_largest(level, s, kernels.NORM) for s in sigmas_um)
    for index, sigma in enumerate(sigmas_um):
        if filter == "jerman":
            value = (parameter or 0.75) * _largest(level, sigma, kernels.THIRD)
        _respond(level, sigma, 0.0, code, index, out, best, published=True, parameter=value)
    return out


def _sigmas_um(
    shape: tuple[int, ...], spacing_um: tuple[float, float, float], settings: EnhanceSettings
) -> list[float]:
    if settings.sigmas_um is not None:
        if not settings.sigmas_um or min(settings.sigmas_um) <= 0:
            msg = f"enhance.sigmas_um: found {settings.sigmas_um!r}, expected lengths > 0 um"
            raise UnusableInputError(msg)
        return sorted(settings.sigmas_um)
    coarse = max(spacing_um)
    shortest = min(n * s for n, s in zip(shape, spacing_um, strict=True))
    smallest = settings.radius_min_um or math.sqrt(2) * coarse
    largest = settings.radius_max_um or max(smallest, min(shortest / 2, 40 * coarse))
    if largest < smallest:
        msg = f"enhance.radius_max_um: found {largest} um, expected at least radius_min_um = {smallest}"
        raise UnusableInputError(msg)
    first = smallest / math.sqrt(2)
    steps = max(1, round(2 * math.log2(largest / smallest)) + 1)
    return [first * math.sqrt(2) ** k for k in range(steps)]


def _taps(sigma_um: float, level: Level) -> list[np.ndarray]:
    # What the level's averaging has smoothed already is taken off; in voxels, per axis.
    done = (1.0 - 4.0**-level.number) / 12.0
    taps = []
    for edge in level.spacing_um:
        variance = max((sigma_um / edge) ** 2 - done, 0.0)
        half = max(1, math.ceil(_TRUNCATE * math.sqrt(variance)))
        x = np.arange(-half, half + 1)
        weight = np.exp(-0.5 * x * x / variance) if variance > 0 else (x == 0).astype(float)
        taps.append((weight / weight.sum()).astype(np.float32))
    return taps


def _respond(level, sigma, floor, code, index, response, best, *, published=False, parameter=0.0):  # noqa: ANN001, ANN202
    taps = _taps(sigma, level)
    inverse = np.array([1.0 / s for s in level.spacing_um])
    mode = code if published else code + kernels.WEIGHED
    ny = level.image.shape[1]
    nz = level.image.shape[0]
    strips = range(0, ny, 64)
    halves = np.linspace(0, nz, 3 if nz >= 64 else 2).astype(int)
    boxes = [
        np.array([z0, z1, y, min(y + 64, ny)])
        for z0, z1 in zip(halves[:-1], halves[1:], strict=True)
        for y in strips
    ]

    def work(start: int, stop: int) -> None:
        for box in boxes[start:stop]:
            kernels.respond_strip(
                level.image, box, taps[0], taps[1], taps[2], inverse, sigma * sigma, floor, mode,
                parameter, index, response, best,
            )  # fmt: skip

    in_threads(work, len(boxes), parts=len(boxes))


def _largest(level: Level, sigma: float, code: int) -> float:
    out = np.zeros(level.image.shape, np.float32)
    best = np.zeros(level.image.shape, np.uint8)
    _respond(level, sigma, 0.0, code, 0, out, best, published=True)
    return float(out.max())


def _noise(level: Level, sigma: float) -> float:
    """Robust SD of sigma**2 times one curvature, from up to 27 sample blocks of the level.

    The median absolute deviation ignores vessels as long as they are the minority. The blocks'
    places depend on the shape alone.
    """
    taps = _taps(sigma, level)
    size = 24
    halo = [len(t) // 2 + 1 for t in taps]
    samples = []
    starts = [
        sorted({int(s) for s in np.linspace(0, max(n - size, 0), 3)}) for n in level.image.shape
    ]
    inverse2 = 1.0 / level.spacing_um[2] ** 2
    for z in starts[0]:
        for y in starts[1]:
            for x in starts[2]:
                block = level.image[
                    max(z - halo[0], 0) : z + size + halo[0],
                    max(y - halo[1], 0) : y + size + halo[1],
                    max(x - halo[2], 0) : x + size + halo[2],
                ].astype(np.float32)
                for axis in range(3):
                    block = _smoothed(block, taps[axis], axis)
                inner = block[:, :, 2:] - 2 * block[:, :, 1:-1] + block[:, :, :-2]
                samples.append((inner * (inverse2 * sigma * sigma)).ravel())
    values = np.concatenate(samples)
    return float(1.4826 * np.median(np.abs(values - np.median(values))))


def _smoothed(block: np.ndarray, taps: np.ndarray, axis: int) -> np.ndarray:
    from scipy.ndimage import correlate1d

    return correlate1d(block, taps, axis=axis, mode="reflect")
