"""From grey values to the mask: seeds by enhancement, boundaries by local half levels."""

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from .._settings import Settings, setting
from ..errors import UnusableInputError
from . import _segment_kernels as kernels
from .background import BackgroundSettings, background_map, noise_sd
from .enhance import TubeMap
from .grid import in_threads
from .mask import Mask
from .threshold import closed_lumens, threshold_mask

__all__ = ["SegmentSettings", "Segmented", "segment"]

_NOWHERE = np.float32(-1e30)
_CLEAR_OF_NOISE = 3.0
_RIVAL = 1.25  # a finer scale this many times stronger takes the place


class SegmentSettings(Settings):
    """Settings of the segmentation."""

    method: Literal["half_level", "otsu", "li", "triangle", "local_mean", "hysteresis", "fixed"] = (
        setting(
            "half_level",
            "where the boundary is: half way between each vessel's own grey level and its background"
            " (half_level), or a threshold on the grey values",
        )
    )
    threshold: float | None = setting(
        None, "grey value for method fixed, the high one for hysteresis"
    )
    threshold_low: float | None = setting(None, "low grey value for method hysteresis")
    contrast_min: float = setting(
        0.15, "a vessel counts from this share of the strong vessels' contrast in its planes",
        gt=0, lt=1, source="own phantom study",
    )  # fmt: skip
    noise_factor_high: float = setting(
        7.0, "a part needs one response of this many standard deviations of the noise", gt=0,
        source="own phantom study",
    )  # fmt: skip
    part_min_voxels: int = setting(12, "smaller parts are removed", unit="voxels", ge=1)
    cavity_max_um3: float | None = setting(
        None, "closed cavities up to this volume are filled; absent: all that do not reach a face",
        unit="um3", gt=0,
    )  # fmt: skip
    wall_stained: bool = setting(
        False, "the wall is bright and the lumen dark: close the lumens before measuring"
    )


@dataclass(frozen=True, slots=True)
class Segmented:
    """The mask with the facts that QC needs."""

    mask: Mask
    background: np.ndarray
    background_level: int
    reference_contrast: np.ndarray
    facts: dict[str, float]


def segment(
    tubes: TubeMap, *, settings: SegmentSettings, background: BackgroundSettings,
    region: np.ndarray | None = None, origin_um: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> Segmented:  # fmt: skip
    """Return the voxels taken as lumen.

    Each level's ridge voxels are seeds; a seed's threshold lies half way between the background and
    its own grey value and holds in its surroundings. A voxel is inside if its lightly smoothed grey
    value passes the threshold of any level. Parts without a strong seed are dropped.

    Parameters
    ----------
    tubes : TubeMap
        Responses on all levels.
    region : (z, y, x) bool array, optional
        Where vessels are looked for, on the working grid.

    Raises
    ------
    UnusableInputError
        If nothing, or nearly everything, comes out as vessel.
    """
    radius_um = math.sqrt(2) * max(s.sigma_um for s in tubes.scales)
    base, base_level = background_map(tubes.levels, radius_um=radius_um, settings=background)
    reference = _reference_contrast(tubes)
    fields, strong, seeds = _seed_fields(tubes, base, base_level, reference, settings)
    if settings.method == "half_level":
        inside = _inside(tubes, fields)
    else:
        inside = threshold_mask(
            tubes.levels[0].image, method=settings.method, threshold=settings.threshold,
            threshold_low=settings.threshold_low,
        )  # fmt: skip
        # One threshold finds its own parts: none needs a seed of the enhancement.
        strong = np.ones_like(strong)
    if settings.wall_stained:
        inside = closed_lumens(inside)
    if region is not None:
        inside &= region
    inside = _without_weak_parts(inside, strong, settings)
    inside = _filled(inside, settings, tubes.levels[0].spacing_um)
    fraction = float(np.count_nonzero(inside)) / inside.size
    if fraction == 0.0:
        msg = "segment: no vessel found; expected bright tubes (input.polarity, segment.* may help)"
        raise UnusableInputError(msg)
    mask = Mask(inside, tubes.levels[0].spacing_um, origin_um)
    return Segmented(
        mask, base, base_level, reference, {"seeds": float(seeds), "mask_fraction": fraction}
    )


def _reference_contrast(tubes: TubeMap) -> np.ndarray:
    """(z,) contrast of the strong vessels near each plane of the first level.

    The 90th percentile of the responses that pass the noise, over all levels, smoothed along z: it
    follows a loss of signal with depth, so that deep vessels are judged against their neighbours.
    """
    nz = tubes.levels[0].image.shape[0]
    planes = np.zeros(nz)
    count = np.zeros(nz)
    for k, response in enumerate(tubes.response):
        if response is None:
            continue
        for z in range(response.shape[0]):
            values = response[z][response[z] > 0]
            if len(values) < 20:
                continue
            height = math.e * float(np.percentile(values, 90))
            span = slice(z << k, min((z + 1) << k, nz))
            weight = len(values) * 4.0**k
            planes[span] += weight * height
            count[span] += weight
    from scipy.ndimage import gaussian_filter1d  # noqa: PLC0415 - heavy to import

    if not count.any():
        return np.zeros(nz)
    width = max(2.0, nz / 12)
    top = gaussian_filter1d(planes, width, mode="nearest")
    return top / np.maximum(gaussian_filter1d(count, width, mode="nearest"), 1e-30)


def _seed_fields(tubes, base, base_level, reference, settings):  # noqa: ANN001, ANN202
    fields, total = {}, 0
    finer: np.ndarray | None = None
    half_shape = tubes.levels[1].image.shape
    voxel_noise = noise_sd(tubes.levels[0].image)
    strong = np.zeros(half_shape, bool)
    for k, response in enumerate(tubes.response):
        if finer is not None:
            finer = _pooled(finer)
        if response is None:
            continue
        won = response if finer is None else _winning(response, finer)
        finer = response if finer is None else np.maximum(response, finer)
        level = tubes.levels[k]
        noise = max(s.noise for s in tubes.scales if s.level == k)
        fold = 2 if k == 0 else 1
        shape = half_shape if k == 0 else level.image.shape
        weight, level_sum = np.zeros(shape, np.float32), np.zeros(shape, np.float32)
        planes = np.minimum(np.arange(level.image.shape[0]) << k, len(reference) - 1)
        relative = settings.contrast_min * reference[planes]
        # A threshold must stand clear of the noise of the lightly smoothed image that it is held
        # against (1 2 1 along three axes leaves 0.23 of white noise, each level another 8**-0.5).
        clear = 2 * _CLEAR_OF_NOISE * 0.23 * voxel_noise * 8.0 ** (-0.5 * (max(k, 1) - 1))
        low = np.maximum(np.maximum(relative, math.e * 4.0 * noise), clear).astype(np.float32)
        high = np.maximum(relative, math.e * settings.noise_factor_high * noise).astype(np.float32)
        marks = np.zeros(shape, bool)
        total += kernels.gather_seeds(
            level.image, won, low, high, np.float32(clear), base, base_level - k, 0.25, 2.5,
            0, level.image.shape[0], fold, k, weight, level_sum, marks,
        )  # fmt: skip
        _mark_strong(strong, marks, max(k, 1) - 1)
        fields[k] = (_spread(weight), _spread(level_sum))
    return fields, strong, total


def _winning(response: np.ndarray, finer: np.ndarray) -> np.ndarray:
    """Responses that no finer scale beats in the cell or next to it.

    A thin vessel also looks like a wide and faint one to a coarse scale; the scale that fits
    answers with the larger response (u exp(-u), u = radius**2 / (2 sigma**2)).
    """
    from scipy.ndimage import maximum_filter  # noqa: PLC0415 - heavy to import

    rival = maximum_filter(finer, size=3, mode="nearest")
    return np.where(response * _RIVAL >= rival, response, np.float32(0))


def _pooled(values: np.ndarray) -> np.ndarray:
    """Maximum over 2 x 2 x 2 cells."""
    out = np.empty(tuple((n + 1) // 2 for n in values.shape), np.float32)
    in_threads(lambda a, b: kernels.half_maximum(values, a, b, out), out.shape[0])
    return out


def _spread(values: np.ndarray) -> np.ndarray:
    from scipy.ndimage import correlate1d  # noqa: PLC0415 - heavy to import

    taps = np.array([1, 4, 6, 4, 1], np.float32) / 16
    for axis in range(3):
        values = correlate1d(values, taps, axis=axis, mode="constant")
    return values


def _mark_strong(strong: np.ndarray, marks: np.ndarray, shift: int) -> None:
    """Set every half-size cell that lies in a marked cell of a coarser level."""
    if shift == 0:
        strong |= marks
        return
    index = [
        np.minimum(np.arange(n) >> shift, m - 1)
        for n, m in zip(strong.shape, marks.shape, strict=True)
    ]
    strong |= marks[np.ix_(*index)]


def _inside(tubes: TubeMap, fields: dict[int, tuple[np.ndarray, np.ndarray]]) -> np.ndarray:
    last = len(tubes.levels) - 1
    margin = np.full(tubes.levels[last].image.shape, _NOWHERE, np.float32)
    for k in range(last, 1, -1):
        image = tubes.levels[k - 1].image
        empty = np.zeros(tubes.levels[k].image.shape, np.float32)
        weight, level_sum = fields.get(k, (empty, empty))
        finer = np.empty(image.shape, np.float32)
        in_threads(
            lambda a, b, i=image, w=weight, s=level_sum, m=margin, f=finer: kernels.margin_into(
                i, w, s, m, a, b, f
            ),
            image.shape[0],
        )
        margin = finer
    image = tubes.levels[0].image
    empty = np.zeros(tubes.levels[1].image.shape, np.float32)
    w0, s0 = fields.get(0, (empty, empty))
    w1, s1 = fields.get(1, (empty, empty))
    inside = np.zeros(image.shape, bool)
    in_threads(
        lambda a, b: kernels.inside_into(image, w0, s0, w1, s1, margin, a, b, inside),
        image.shape[0],
    )
    return inside


def _without_weak_parts(
    inside: np.ndarray, strong: np.ndarray, settings: SegmentSettings
) -> np.ndarray:
    import cc3d  # noqa: PLC0415 - heavy to import

    labels, count = cc3d.connected_components(inside, connectivity=26, return_N=True)
    if not count:
        return inside
    sizes, marked = np.zeros(count + 1, np.int64), np.zeros(count + 1, bool)
    kernels.size_of_parts(labels, strong, sizes, marked)
    return _kept(labels, marked & (sizes >= settings.part_min_voxels))


def _kept(labels: np.ndarray, keep: np.ndarray) -> np.ndarray:
    out = np.empty(labels.shape, bool)
    in_threads(lambda a, b: kernels.keep_parts(labels, keep, a, b, out), labels.shape[0])
    return out


def _filled(
    inside: np.ndarray, settings: SegmentSettings, spacing_um: tuple[float, float, float]
) -> np.ndarray:
    """Fill cavities: 6-connected background that reaches no face of the volume."""
    import cc3d  # noqa: PLC0415 - heavy to import

    labels, count = cc3d.connected_components(~inside, connectivity=6, return_N=True)
    if count <= 1:
        return inside
    keep = np.zeros(count + 1, bool)
    for face in (
        labels[0],
        labels[-1],
        labels[:, 0],
        labels[:, -1],
        labels[:, :, 0],
        labels[:, :, -1],
    ):
        keep[np.unique(face)] = True
    if settings.cavity_max_um3 is not None:
        sizes = np.bincount(labels.ravel(), minlength=count + 1)
        keep |= sizes * math.prod(spacing_um) > settings.cavity_max_um3
    return ~_kept(labels, keep)
