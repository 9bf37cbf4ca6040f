"""Sub-voxel radii: a blurred disc is fitted to the grey values of cross-sections.

Where the image is a mask the same fit with known levels is an area-equivalent radius.
"""

import functools
from dataclasses import dataclass

import numpy as np

from .._settings import Settings, setting
from ..errors import UnusableInputError
from ..image.grid import in_threads
from . import _gauge_kernels as kernels
from .graph import RADIUS_METHODS, CentrelineGraph
from .recentre import recentre
from .tips import tip_positions
from .zones import zone_bounds_um

__all__ = ["Blur", "GaugeSettings", "Gauged", "blurred_disc_table", "gauge"]

_THIN = 2.5  # in SDs of the blur: below, a vessel's plateau does not show its contrast
_METHOD = {name: index for index, name in enumerate(RADIUS_METHODS)}


class GaugeSettings(Settings):
    """Settings of the gauging."""

    blur_sigma_um: tuple[float, float, float] | None = setting(
        None, "SD of the image's blur along z, y, x; absent: estimated from the wider vessels' edges",
        unit="um",
    )  # fmt: skip
    contrast_prior_sd: float = setting(
        0.15, "spread of vessels' contrast about the reference that thin vessels are judged by"
        " (SD of its logarithm, at least)", gt=0, source="methods study: 10 to 20 %",
    )  # fmt: skip
    recentre: bool = setting(True, "move the centreline to the lumen's fitted centre")
    smooth_diameters: float = setting(
        1.0, "length over which radii along a vessel are averaged", unit="diameters", ge=0
    )


@dataclass(frozen=True, slots=True)
class Blur:
    """The blur that the fits assume, voxel and interpolation included: SDs in um."""

    sigma_xy_um: float
    sigma_z_um: float
    origin: str
    log_sd: float
    stations: int


@dataclass(frozen=True, slots=True)
class Gauged:
    """The graph with radii, the blur, and the facts that QC needs."""

    graph: CentrelineGraph
    blur: Blur
    facts: dict[str, float]
    stations: dict[str, np.ndarray]


def gauge(
    graph: CentrelineGraph, volume: np.ndarray, *, spacing_um: tuple[float, float, float],
    origin_um: tuple[float, float, float] = (0.0, 0.0, 0.0), settings: GaugeSettings,
    known_levels: bool = False,
) -> Gauged:  # fmt: skip
    """Return the graph with a radius and its standard error at every point.

    Stations every half radius along each segment, outside the junctions' zones; at each the mean
    cross-section over one diameter of length is sampled and a disc blurred with the image's blur is
    fitted: radius, centre, inside and outside level. Radii are averaged along the vessel, carried to
    the points, and continued into the junctions' zones.

    Parameters
    ----------
    graph : CentrelineGraph
        Smoothed centrelines with `point_radius_map_um`.
    volume : (z, y, x) array
        Grey values, vessels bright, as measured (not on the working grid).
    known_levels : bool
        True for a mask: outside 0, inside 1.

    Raises
    ------
    UnusableInputError
        If the graph has no segment.
    """
    if not graph.n_segments:
        msg = "gauge: the graph has no segment, so there is nothing to size"
        raise UnusableInputError(msg)
    sampler = _Sampler(graph, volume, spacing_um, origin_um, known_levels)
    stations = _stations(graph, step_um=sampler.step_um)
    blur = _blur(sampler, stations, settings)
    fit = sampler.fit(stations, blur, stations["map_um"], None)
    if not known_levels:
        prior = _contrast_prior(fit, stations, blur, settings)
        if prior is not None:
            fit = _thin_again(sampler, stations, blur, fit, prior)
    return _carried(graph, stations, fit, blur, sampler, settings)


@functools.cache
def blurred_disc_table() -> np.ndarray:
    """(3, 201, 241): disc of radius R blurred with SD 1, its derivatives by distance and by R.

    Over R in 0..20 and distance - R in -6..6; the third at fixed distance - R.

    The non-central chi-squared distribution with two degrees of freedom gives it: the chance that
    a point blurred from the given distance falls inside the disc.
    """
    from scipy.special import chndtr  # noqa: PLC0415 - heavy to import

    radius = np.linspace(0.0, kernels.TABLE_R, 201)[:, None]
    shift = np.arange(-kernels.TABLE_SPAN, kernels.TABLE_SPAN + 1e-9, kernels.TABLE_D)[None, :]
    # Left of the centre the profile is mirrored, so that its slopes there are right as well.
    distance = np.abs(radius + shift)
    value = np.nan_to_num(chndtr(np.maximum(radius, 1e-9) ** 2, 2.0, distance**2))
    return np.ascontiguousarray(np.stack([
        value, np.gradient(value, kernels.TABLE_D, axis=1), np.gradient(value, radius[1, 0], axis=0),
    ]))  # fmt: skip


@dataclass(frozen=True, slots=True)
class _Fit:
    radius: np.ndarray
    se: np.ndarray
    contrast: np.ndarray
    background: np.ndarray
    shift: np.ndarray
    blur_slope: np.ndarray
    residual: np.ndarray
    sigma_xy: np.ndarray
    sigma_z: np.ndarray
    kept: np.ndarray
    good: np.ndarray
    frames: np.ndarray


class _Sampler:
    """What all fits of one graph and image share."""

    def __init__(self, graph, volume, spacing_um, origin_um, known_levels):  # noqa: ANN001
        self.graph, self.volume = graph, np.ascontiguousarray(volume)
        self.spacing_um = spacing_um
        self.inverse = 1.0 / np.asarray(spacing_um)
        self.origin = np.asarray(origin_um, dtype=np.float64)
        self.step_um = float(min(spacing_um))
        self.voxel_area = float(np.prod(spacing_um) ** (2 / 3))
        self.known_levels = known_levels
        self.arc = graph.arc_um()

    def fit(self, stations, blur, start_um, prior, *, free_blur=False):  # noqa: ANN001, ANN202
        n = len(stations["s"])
        out, frames = np.zeros((n, 12)), np.zeros((n, 3, 3))
        log_contrast, contrast_sd = (np.zeros(n), 0.0) if prior is None else prior
        floor = 0.3 * self.step_um
        arguments = (
            self.volume, self.inverse, self.origin, np.ascontiguousarray(self.graph.point_position_um),
            self.arc, self.graph.point_offsets, stations["segment"], stations["s"], stations["low"],
            stations["high"], np.maximum(start_um, floor), self.step_um, self.voxel_area,
            blur.sigma_xy_um, blur.sigma_z_um, log_contrast, contrast_sd, free_blur,
            self.known_levels, blurred_disc_table(),
        )  # fmt: skip
        in_threads(lambda a, b: kernels.gauge_stations(*arguments, a, b, out, frames), n, parts=32)
        good = (out[:, 11] > 0) & np.isfinite(out[:, :11]).all(axis=1)
        return _Fit(
            *(out[:, k] for k in range(4)),
            out[:, 4:6],
            *(out[:, k] for k in range(6, 11)),
            good,
            frames,
        )


def _stations(graph: CentrelineGraph, *, step_um: float) -> dict[str, np.ndarray]:
    """Stations every half radius, at least a voxel apart, between the zones; at least one each."""
    low, high = zone_bounds_um(graph, graph.point_radius_map_um)
    length = graph.segment_length_um()
    weight = graph.point_weight_um()
    mean_map = graph.segment_sum(weight * np.nan_to_num(graph.point_radius_map_um)) / np.maximum(
        graph.segment_sum(weight), 1e-12
    )
    middle = 0.5 * length
    inside = high > low
    low, high = np.where(inside, low, middle), np.where(inside, high, middle)
    pitch = np.maximum(step_um, 0.5 * mean_map)
    count = np.maximum(1, np.ceil((high - low) / pitch)).astype(np.int64)
    segment = np.repeat(np.arange(graph.n_segments), count)
    first = np.repeat(np.concatenate(([0], np.cumsum(count)[:-1])), count)
    k = np.arange(len(segment)) - first
    s = low[segment] + (k + 0.5) * ((high - low) / count)[segment]
    keep = (length > 0)[segment]
    segment, s = segment[keep], s[keep]
    return {
        "segment": segment, "s": s, "low": np.where(inside, low, 0.0)[segment],
        "high": np.where(inside, high, length)[segment],
        "map_um": _at(graph, graph.point_radius_map_um, segment, s), "inside": inside[segment],
    }  # fmt: skip


def _at(
    graph: CentrelineGraph, values: np.ndarray, segment: np.ndarray, s: np.ndarray
) -> np.ndarray:
    """Per-point values interpolated at arc lengths along given segments."""
    arc = graph.arc_um()
    start = np.concatenate(([0.0], np.cumsum(graph.segment_length_um() + 1.0)[:-1]))
    axis = arc + np.repeat(start, graph.points_per_segment)
    return np.interp(s + start[segment], axis, np.nan_to_num(values))


def _blur(sampler: _Sampler, stations: dict[str, np.ndarray], settings: GaugeSettings) -> Blur:
    spacing = np.asarray(sampler.spacing_um)
    if settings.blur_sigma_um is not None:
        # Voxel averaging (1/12) and linear interpolation (on average 1/6) blur too.
        total = np.sqrt(np.asarray(settings.blur_sigma_um) ** 2 + spacing**2 * (1 / 12 + 1 / 6))
        return Blur(float(np.hypot(*total[1:]) / np.sqrt(2)), float(total[0]), "given", 0.0, 0)
    xy, z = 0.8 * float(np.hypot(*spacing[1:]) / np.sqrt(2)), 0.8 * float(spacing[0])
    if sampler.known_levels:
        return Blur(xy * 0.625, z * 0.625, "voxels", 0.05, 0)
    start = Blur(xy, z, "assumed", 0.35, 0)
    wide = np.flatnonzero((stations["map_um"] > 2.0 * max(xy, 0.6 * z)) & stations["inside"])
    if len(wide) < 12:
        wide = np.flatnonzero((stations["map_um"] > 1.5 * xy) & stations["inside"])
    if len(wide) < 8:
        return start
    chosen = wide[np.unique(np.linspace(0, len(wide) - 1, 400).astype(int))]
    some = {name: values[chosen] for name, values in stations.items()}
    fit = sampler.fit(some, start, some["map_um"], None, free_blur=True)
    good = fit.good & (fit.kept > 0.6) & (fit.residual < 0.25 * fit.contrast)
    good &= fit.radius > 1.5 * fit.sigma_xy
    if good.sum() < 8:
        return start
    steep = np.abs(fit.frames[:, 2, 0])
    weight_z = good & (steep > 0.5)
    sigma_xy = float(np.median(fit.sigma_xy[good]))
    sigma_z = float(np.median(fit.sigma_z[weight_z])) if weight_z.sum() >= 8 else sigma_xy * z / xy
    spread = 1.4826 * float(np.median(np.abs(np.log(fit.sigma_xy[good] / sigma_xy))))
    return Blur(
        sigma_xy, sigma_z, "estimated", max(0.03, spread / np.sqrt(good.sum() / 4)), int(good.sum())
    )


def _thin_again(sampler, stations, blur, fit, prior):  # noqa: ANN001, ANN202
    """Fit the vessels that are thin against the blur once more, now with the contrast's prior.

    In wide vessels the plateau shows the contrast; a prior would only pull at it.
    """
    thin = np.flatnonzero(~fit.good | (fit.radius < _THIN * blur.sigma_xy_um))
    if not len(thin):
        return fit
    some = {name: values[thin] for name, values in stations.items()}
    start = np.where(fit.good, fit.radius, stations["map_um"])[thin]
    again = sampler.fit(some, blur, start, (prior[0][thin], prior[1]))
    merged = []
    for name in _Fit.__dataclass_fields__:
        values = getattr(fit, name).copy()
        values[thin] = getattr(again, name)
        merged.append(values)
    return _Fit(*merged)


def _contrast_prior(fit, stations, blur, settings):  # noqa: ANN001, ANN202
    """Reference contrast along z from vessels wide against the blur, and its spread."""
    sigma = np.hypot(blur.sigma_xy_um, 0.0)
    clean = fit.good & (fit.kept > 0.7) & (fit.residual < 0.3 * fit.contrast)
    wide = clean & (fit.radius > 2.2 * sigma)
    if wide.sum() < 10:
        wide = clean & (fit.radius > 1.6 * sigma)
    if wide.sum() < 10:
        return None
    z = fit.frames[:, 0, 0]
    value = np.log(fit.contrast[wide])
    centre = np.median(value)
    spread = 1.4826 * np.median(np.abs(value - centre))
    # Linear in depth where the wide vessels span it, by a robust line (median of pairwise slopes).
    span = np.ptp(z[wide])
    slope = 0.0
    if span > 0.5 * np.ptp(z) and wide.sum() >= 30:
        slope = _median_slope(z[wide], value)
        left = value - slope * (z[wide] - np.median(z[wide]))
        spread = 1.4826 * np.median(np.abs(left - np.median(left)))
        centre = np.median(left)
    log_contrast = centre + slope * (z - np.median(z[wide]))
    return log_contrast, float(max(settings.contrast_prior_sd, spread))


def _median_slope(x: np.ndarray, y: np.ndarray) -> float:
    order = np.argsort(x, kind="stable")
    x, y = x[order], y[order]
    half = len(x) // 2
    run = x[half : 2 * half] - x[:half]
    rise = y[half : 2 * half] - y[:half]
    ok = run > 1e-9
    return float(np.median(rise[ok] / run[ok])) if ok.any() else 0.0


def _carried(graph, stations, fit, blur, sampler, settings):  # noqa: ANN001, ANN202
    """Average along each vessel, carry to the points, continue into zones, move the centreline."""
    good = fit.good & (fit.kept > 0.35)
    good &= (fit.radius > 0.2 * stations["map_um"]) & (
        fit.radius < 4.0 * stations["map_um"] + blur.sigma_xy_um
    )
    radius, se, common = kernels.average_along(
        stations["segment"], stations["s"], fit.radius, fit.se, fit.blur_slope, good,
        settings.smooth_diameters, graph.n_segments,
    )  # fmt: skip
    common = np.abs(common) * blur.log_sd
    usable = np.isfinite(radius)
    centre = fit.frames[:, 0].copy()
    if settings.recentre:
        moved = np.einsum("kc,kca->ka", fit.shift, fit.frames[:, 1:])
        near = good & (
            np.linalg.norm(moved, axis=1) < np.maximum(0.7 * fit.radius, 1.5 * sampler.step_um)
        )
        centre[near] += moved[near]
    tip = tip_positions(
        graph, sampler.volume, spacing_um=sampler.spacing_um, origin_um=tuple(sampler.origin),
        segment=stations["segment"][usable], s_um=stations["s"][usable], centre_um=centre[usable],
        radius_um=radius[usable], contrast=fit.contrast[usable], background=fit.background[usable],
        sigma_um=float(np.cbrt(blur.sigma_xy_um**2 * blur.sigma_z_um)),
    )  # fmt: skip
    graph, point = recentre(
        graph, segment=stations["segment"][usable], s_um=stations["s"][usable], centre_um=centre[usable],
        values=np.stack([radius, se, common], axis=1)[usable], tip_um=tip, step_um=0.5 * sampler.step_um,
        slack_um=0.15 * sampler.step_um,
    )  # fmt: skip
    measured = np.isfinite(point[:, 0])
    low, high = zone_bounds_um(graph, np.where(measured, point[:, 0], graph.point_radius_map_um))
    arc = graph.arc_um()
    per = graph.points_per_segment
    # A segment that lies in zones altogether keeps what its stations say.
    whole = np.repeat(high <= low, per)
    zone = ((arc < np.repeat(low, per)) | (arc > np.repeat(high, per))) & ~whole
    method = np.where(
        measured, np.where(zone, _METHOD["continued"], _METHOD["fit"]), _METHOD["distance"]
    )
    if sampler.known_levels:
        method = np.where(method == _METHOD["fit"], _METHOD["volume"], method)
    half_voxel = 0.5 * sampler.step_um
    new = graph.replace(
        point_radius_um=np.where(
            measured, point[:, 0], np.maximum(graph.point_radius_map_um, half_voxel)
        ),
        point_radius_se_um=np.where(measured, point[:, 1], half_voxel),
        point_radius_common_um=np.where(measured, point[:, 2], 0.5 * half_voxel),
        point_method=method.astype(np.int8),
        point_in_zone=zone,
    )
    facts = {
        "stations": float(len(good)), "stations_fitted": float(good.mean()) if len(good) else 0.0,
        "blur_xy_um": blur.sigma_xy_um, "blur_z_um": blur.sigma_z_um,
        "residual_share": float(np.median(fit.residual[good] / fit.contrast[good])) if good.any() else 1.0,
    }  # fmt: skip
    kept = {
        "segment": stations["segment"], "s": stations["s"], "radius_um": fit.radius, "se_um": fit.se,
        "contrast": fit.contrast, "background": fit.background, "good": good, "residual": fit.residual,
        "position_um": fit.frames[:, 0], "shift_um": fit.shift,
    }  # fmt: skip
    return Gauged(new, blur, facts, kept)
