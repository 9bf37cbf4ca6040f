"""Draw a vessel graph as a microscope or scanner would see it: a `Stack` whose truth is known."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy import ndimage as ndi
from scipy.spatial import cKDTree

from .._checks import checked_spacing_um
from .._settings import Settings, setting
from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph
from ..stack.stack import Stack
from ._draw_kernels import reduce_planes, signal_planes

__all__ = ["DrawSettings", "Scene", "compose", "draw", "draw_slab"]

_SLAB_PLANES = 32  # planes drawn at a time; bounds memory, never the result
_TRUNCATE = 4.0  # the blur's kernel ends at so many sigma, as scipy's gaussian_filter does
_STREAMS = {"gradient": 1, "filling": 2, "debris": 3, "flicker": 4, "noise": 5}


class DrawSettings(Settings):
    """What the image adds to the vessels: blur, contrast, background, faults and noise."""

    sigma_um: tuple[float, float, float] = setting(
        (1.0, 1.0, 1.0), "Gaussian blur (SD) along z, y, x; 0 for none", unit="um"
    )
    contrast: float = setting(100.0, "grey step from background to a filled lumen", gt=0)
    background: float = setting(40.0, "grey level of the background", ge=0)
    background_gradient: float = setting(
        0.0, "relative change of the background over the volume, in a random direction", ge=0, lt=2
    )
    uneven_filling: float = setting(
        0.0, "SD of the relative brightness along the vessels", ge=0, le=0.5
    )
    uneven_length_um: float = setting(
        80.0, "wavelength of the uneven filling along the vessels", unit="um", gt=0
    )
    dim_thin_power: float = setting(
        0.0, "brightness goes with (radius / widest radius) to this power", ge=0
    )
    attenuation_length_um: float = setting(
        0.0, "depth over which all signal falls by 1/e along z; 0 for no loss", unit="um", ge=0
    )
    flicker: float = setting(0.0, "SD of the relative brightness from slice to slice", ge=0, lt=0.5)
    debris: int = setting(0, "number of bright specks outside the vessels", ge=0)
    debris_radius_um: tuple[float, float] = setting(
        (1.0, 3.0), "thinnest and widest speck", unit="um"
    )
    debris_clearance_um: float = setting(
        2.0, "smallest gap between a speck and a vessel", unit="um", ge=0
    )
    wall_um: float = setting(
        0.0, "thickness of a stained wall around the lumen; 0 for filled vessels", unit="um", ge=0
    )
    lumen_level: float = setting(
        0.0, "brightness of the lumen relative to the stained wall", ge=0, le=1
    )
    snr: float = setting(8.0, "contrast over the SD of the noise; 0 for no noise", ge=0)
    noise: Literal["gaussian", "poisson"] = setting(
        "gaussian", "poisson: shot noise and Gaussian read noise; snr then holds in a filled lumen"
    )
    read_noise_share: float = setting(
        0.25, "share of the read noise in the variance of a filled lumen (poisson)", ge=0, le=1
    )
    noise_correlation_voxels: float = setting(
        0.0, "Gaussian SD that correlates the noise within a slice, its SD kept", ge=0
    )
    polarity: Literal["bright", "dark"] = setting("bright", "vessels brighter or darker")
    dtype: Literal["uint8", "uint16", "float32"] = setting("uint8", "type of the grey values")
    oversampling: int = setting(
        0,
        "fine cells per voxel and axis where it is blurred; 0 takes 2 to 4, so that the blur's SD "
        "spans at least 1.5 of them",
        source="edge response within 0.01 of the exact one, computed for steps at any offset",
        ge=0,
        le=8,
    )


@dataclass(frozen=True, slots=True)
class Scene:
    """A graph made ready to be drawn: primitives in the image's frame and the fine grid.

    Parameters
    ----------
    settings : DrawSettings
        How the image looks.
    seed : int
        Seed of everything random.
    shape, spacing_um, origin_um : tuple
        The image's grid, z, y, x.
    starts, ends : (p, 3) float64
        Ends of the round cones, relative to the centre of voxel (0, 0, 0).
    radii, brightness : (p, 2) float64
        At either end.
    flatness : (p,) float64
        Narrow over wide axis of the cross-section; 1 is a circle.
    wide_axis : (p, 3) float64
        Unit vector of the wide axis.
    factors : (3,) int64
        Fine cells per voxel along z, y, x.
    """

    settings: DrawSettings
    seed: int
    shape: tuple[int, int, int]
    spacing_um: tuple[float, float, float]
    origin_um: tuple[float, float, float]
    starts: np.ndarray
    ends: np.ndarray
    radii: np.ndarray
    brightness: np.ndarray
    flatness: np.ndarray
    wide_axis: np.ndarray
    factors: np.ndarray


def draw(
    graph: CentrelineGraph,
    *,
    settings: DrawSettings,
    seed: int,
    shape: tuple[int, int, int] | None = None,
    origin_um: tuple[float, float, float] = (0.0, 0.0, 0.0),
    flatness: np.ndarray | None = None,
    wide_axis: np.ndarray | None = None,
    name: str = "phantom",
) -> Stack:
    """Draw the whole image of a vessel graph.

    Every segment is the union of round cones along its points: balls whose centres and radii run
    linearly from point to point. Vessels are joined (no brighter where they overlap), averaged over
    each voxel, blurred, lit, and made noisy. A vessel that ends in a `border` node runs on beyond
    the volume. The image is the same however many threads draw it.

    Parameters
    ----------
    graph : CentrelineGraph
        Vessels with a radius at every point; its `spacing_um` and `extent_um` give the grid.
    settings : DrawSettings
        Blur, contrast, background, faults, noise.
    seed : int
        Seed of everything random, >= 0.
    shape : tuple of int, optional
        Voxels along z, y, x, instead of extent over spacing.
    origin_um : tuple of float
        Position of the centre of voxel (0, 0, 0) in the graph's frame.
    flatness : (m,) array_like, optional
        Narrow over wide axis of each segment's elliptical cross-section, of area pi radius**2.
    wide_axis : (m, 3) array_like, optional
        Direction of the wide axis, z, y, x, across the segment.
    name : str
        The stack's name.

    Returns
    -------
    Stack
        The image.

    Raises
    ------
    UnusableInputError
        If a radius is not known, or the grid is not.

    Examples
    --------
    >>> from ramulus.network.graph import CentrelineGraph
    >>> line = [[4.0, 4.0, -0.5], [4.0, 4.0, 19.5]]
    >>> tube = CentrelineGraph.from_polylines(
    ...     line, [[0, 1]], [line], [[2.0, 2.0]], node_kind=[2, 2],
    ...     spacing_um=(1.0, 1.0, 1.0), extent_um=(9.0, 9.0, 20.0))
    >>> plain = DrawSettings(sigma_um=(0, 0, 0), contrast=1, background=0, snr=0, dtype="float32")
    >>> image = draw(tube, settings=plain, seed=0).read()
    >>> round(float(image.sum()) / 20, 1)  # pi 2**2 = 12.57
    12.6
    """
    scene = compose(
        graph, settings=settings, seed=seed, shape=shape, origin_um=origin_um, flatness=flatness,
        wide_axis=wide_axis,
    )  # fmt: skip
    voxels = np.empty(scene.shape, dtype=settings.dtype)
    for z0 in range(0, scene.shape[0], _SLAB_PLANES):
        z1 = min(z0 + _SLAB_PLANES, scene.shape[0])
        voxels[z0:z1] = draw_slab(scene, z0, z1)
    return Stack(voxels, scene.spacing_um, origin_um=scene.origin_um, name=name)


def compose(
    graph: CentrelineGraph,
    *,
    settings: DrawSettings,
    seed: int,
    shape: tuple[int, int, int] | None = None,
    origin_um: tuple[float, float, float] = (0.0, 0.0, 0.0),
    flatness: np.ndarray | None = None,
    wide_axis: np.ndarray | None = None,
) -> Scene:
    """Make a graph ready to be drawn slab by slab.

    Parameters
    ----------
    graph, settings, seed, shape, origin_um, flatness, wide_axis
        As in `draw`.

    Returns
    -------
    Scene
        For `draw_slab`.

    Raises
    ------
    UnusableInputError
        If a radius is not known, or the grid is not.
    """
    spacing = checked_spacing_um("graph.spacing_um", graph.spacing_um)
    if shape is None:
        nz, ny, nx = (round(e / s) for e, s in zip(graph.extent_um, spacing, strict=True))
        shape = (nz, ny, nx)
    if min(shape) < 1:
        msg = f"shape: found {shape}, expected voxels along every axis; give the graph an extent_um"
        raise UnusableInputError(msg)
    if not (np.isfinite(graph.point_radius_um).all() and (graph.point_radius_um > 0).all()):
        msg = "point_radius_um: found a radius that is not > 0, expected one at every point to draw"
        raise UnusableInputError(msg)
    sigma_voxels = np.asarray(settings.sigma_um) / spacing
    starts, ends, radii, brightness, flat, axis = _cones(
        graph, settings, seed, shape, np.asarray(origin_um), flatness, wide_axis
    )
    return Scene(
        settings=settings, seed=seed, shape=shape, spacing_um=spacing, origin_um=origin_um,
        starts=starts, ends=ends, radii=radii, brightness=brightness, flatness=flat,
        wide_axis=axis, factors=_factors(sigma_voxels, settings),
    )  # fmt: skip


def draw_slab(scene: Scene, z0: int, z1: int) -> np.ndarray:
    """Draw the slices z0 to z1 - 1; a voxel does not depend on the slab that it is drawn in.

    Parameters
    ----------
    scene : Scene
        From `compose`.
    z0, z1 : int
        First slice and the slice after the last.

    Returns
    -------
    (z1 - z0, y, x) array
        Grey values of the settings' dtype.

    Raises
    ------
    UnusableInputError
        If the slices do not lie in the volume.
    """
    if not 0 <= z0 < z1 <= scene.shape[0]:
        msg = f"z0, z1: found {z0}, {z1}, expected slices within 0..{scene.shape[0]}"
        raise UnusableInputError(msg)
    signal = _signal(scene, z0, z1)
    grey = np.empty(signal.shape, dtype=scene.settings.dtype)
    for k in range(z1 - z0):
        grey[k] = _slice(scene, z0 + k, signal[k])
    return grey


# ---------------------------------------------------------------------- from graph to cones


def _cones(
    graph: CentrelineGraph,
    settings: DrawSettings,
    seed: int,
    shape: tuple[int, int, int],
    origin_um: np.ndarray,
    flatness: np.ndarray | None,
    wide_axis: np.ndarray | None,
) -> tuple[np.ndarray, ...]:
    """Return starts, ends, radii, brightness, flatness and wide axis of all round cones."""
    later = np.ones(graph.n_points, dtype=bool)
    later[graph.point_offsets[:-1]] = False
    last = np.flatnonzero(later)
    position, radius = graph.point_position_um - origin_um, graph.point_radius_um
    segment = graph.point_segment[last]
    q = np.ones(graph.n_segments) if flatness is None else np.asarray(flatness, dtype=np.float64)
    axis = np.zeros((graph.n_segments, 3)) if wide_axis is None else np.asarray(wide_axis, float)
    starts, ends = position[last - 1], position[last]
    radii = np.stack([radius[last - 1], radius[last]], axis=1)
    beyond = _beyond_the_border(graph, settings, shape, origin_um)
    starts, ends = np.concatenate([starts, beyond[0]]), np.concatenate([ends, beyond[1]])
    radii = np.concatenate([radii, np.stack([beyond[2], beyond[2]], axis=1)])
    segment = np.concatenate([segment, beyond[3]])
    longest_um = np.maximum(2 * radii.max(axis=1), 8 * min(graph.spacing_um))
    if settings.uneven_filling > 0:  # brightness runs linearly along a cone
        longest_um = np.minimum(longest_um, settings.uneven_length_um / 8)
    starts, ends, radii, source = _short(starts, ends, radii, longest_um)
    segment = segment[source]
    light = _filling(starts, ends, radii, settings, seed)
    q, axis = q[segment], axis[segment]
    specks, size = _debris(starts, ends, radii, settings, seed, shape, graph.spacing_um)
    n = len(specks)
    return (
        np.concatenate([starts, specks]), np.concatenate([ends, specks]),
        np.concatenate([radii, np.stack([size, size], axis=1)]),
        np.concatenate([light, np.ones((n, 2))]),
        np.concatenate([q, np.ones(n)]), np.concatenate([axis, np.zeros((n, 3))]),
    )  # fmt: skip


def _beyond_the_border(
    graph: CentrelineGraph,
    settings: DrawSettings,
    shape: tuple[int, int, int],
    origin_um: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Carry vessels that the volume's edge cuts on beyond it: starts, ends, radii, segments."""
    spacing = np.asarray(graph.spacing_um)
    low, high = -0.5 * spacing, (np.asarray(shape) - 0.5) * spacing
    reach_um = 4 * np.asarray(settings.sigma_um).max() + 2 * spacing.max() + settings.wall_um
    degree = graph.node_degree()
    found: list[tuple[np.ndarray, np.ndarray, float, int]] = []
    for segment, nodes in enumerate(graph.segment_nodes):
        points = graph.points_of(segment)
        line = graph.point_position_um[points] - origin_um
        radius = graph.point_radius_um[points]
        for node, path, r in ((nodes[0], line[::-1], radius[0]), (nodes[1], line, radius[-1])):
            tip = path[-1]
            gap = np.minimum(tip - low, high - tip)
            kind = NODE_KINDS[graph.node_kind[node]]
            cut = kind == "border" or (kind != "end" and (gap < spacing).any())
            if degree[node] != 1 or not cut:
                continue
            step = _end_direction(path, r)
            face = int(np.argmin(gap / spacing))
            outward = np.sign(tip[face] - 0.5 * (low + high)[face]) * step[face]
            length = (reach_um + 2 * r) / max(outward, 0.1)
            found.append((tip, tip + step * length, float(r), segment))
    if not found:
        return np.zeros((0, 3)), np.zeros((0, 3)), np.zeros(0), np.zeros(0, dtype=np.int64)
    starts, ends, radii, segments = zip(*found, strict=True)
    return np.array(starts), np.array(ends), np.array(radii), np.array(segments, dtype=np.int64)


def _end_direction(path: np.ndarray, radius: float) -> np.ndarray:
    """Return the unit vector along the last radius of a path, or along its last step."""
    away = np.linalg.norm(path[:-1] - path[-1], axis=1)
    far = np.flatnonzero(away >= radius)
    back = path[far[-1]] if len(far) else path[0]
    step = path[-1] - back
    return np.asarray(step / np.linalg.norm(step))


def _short(
    starts: np.ndarray, ends: np.ndarray, radii: np.ndarray, longest_um: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Cut long cones into pieces, so that the box around each stays small."""
    length = np.linalg.norm(ends - starts, axis=1)
    pieces = np.maximum(1, np.ceil(length / longest_um))
    source = np.repeat(np.arange(len(starts)), pieces.astype(np.int64))
    first = np.concatenate(([0], np.cumsum(pieces)[:-1])).astype(np.int64)
    within = np.arange(len(source)) - first[source]
    u, v = (within / pieces[source])[:, None], ((within + 1) / pieces[source])[:, None]
    a, b, ra, rb = starts[source], ends[source], radii[source, :1], radii[source, 1:]
    cut = np.concatenate([ra + u * (rb - ra), ra + v * (rb - ra)], axis=1)
    return a + u * (b - a), a + v * (b - a), cut, source


def _filling(
    starts: np.ndarray, ends: np.ndarray, radii: np.ndarray, settings: DrawSettings, seed: int
) -> np.ndarray:
    """Brightness at both ends of each cone: a smooth random field, dimmer where asked if thin."""
    light = np.ones((len(starts), 2))
    if settings.uneven_filling > 0:
        rng = np.random.default_rng([seed, _STREAMS["filling"]])
        waves = rng.normal(size=(16, 3))
        waves /= np.linalg.norm(waves, axis=1, keepdims=True)
        waves *= 2 * np.pi / (settings.uneven_length_um * rng.uniform(0.7, 1.6, (16, 1)))
        phase = rng.uniform(0, 2 * np.pi, 16)
        for k, place in enumerate((starts, ends)):
            field = np.sqrt(2 / 16) * np.cos(place @ waves.T + phase).sum(axis=1)
            light[:, k] = np.clip(1 + settings.uneven_filling * field, 0.2, 2.0)
    if settings.dim_thin_power > 0 and len(radii):
        light *= (radii / radii.max()) ** settings.dim_thin_power
    return light


def _debris(
    starts: np.ndarray,
    ends: np.ndarray,
    radii: np.ndarray,
    settings: DrawSettings,
    seed: int,
    shape: tuple[int, int, int],
    spacing_um: tuple[float, float, float],
) -> tuple[np.ndarray, np.ndarray]:
    """Return centres and radii of specks that keep clear of the vessels."""
    if not settings.debris:
        return np.zeros((0, 3)), np.zeros(0)
    rng = np.random.default_rng([seed, _STREAMS["debris"]])
    n = 20 * settings.debris
    centre = rng.uniform(size=(n, 3)) * np.asarray(shape) * spacing_um - 0.5 * np.asarray(
        spacing_um
    )
    size = rng.uniform(*settings.debris_radius_um, size=n)
    axis_points = np.concatenate([starts, 0.5 * (starts + ends), ends])
    if len(axis_points):
        reach = np.concatenate([radii[:, 0], radii.max(axis=1), radii[:, 1]])
        # a wide vessel further away may be nearer with its wall: look at several axis points
        near = np.arange(1, min(64, len(axis_points)) + 1)
        far, which = cKDTree(axis_points).query(centre, k=near)
        gap = np.min(far - reach[which], axis=1) - settings.wall_um
        clear = gap - size >= settings.debris_clearance_um
        centre, size = centre[clear], size[clear]
    return centre[: settings.debris], size[: settings.debris]


# ---------------------------------------------------------------------- from cones to signal


def _factors(sigma_voxels: np.ndarray, settings: DrawSettings) -> np.ndarray:
    """Fine cells per voxel: enough for the sampled Gaussian to stand for the true one."""
    if settings.oversampling:
        return np.full(3, settings.oversampling, dtype=np.int64)
    with np.errstate(divide="ignore"):
        wanted = np.where(sigma_voxels > 0, np.clip(np.ceil(1.5 / sigma_voxels), 2, 4), 1)
    return np.asarray(wanted, dtype=np.int64)


def _signal(scene: Scene, z0: int, z1: int) -> np.ndarray:
    """Blurred share of filled lumen in each voxel of a slab, times the filling's brightness."""
    spacing = np.asarray(scene.spacing_um)
    step = spacing / scene.factors
    weights = [
        _weights(sigma / h, int(k))
        for sigma, h, k in zip(scene.settings.sigma_um, step, scene.factors, strict=True)
    ]
    halo = np.array([(len(w) - k) // 2 for w, k in zip(weights, scene.factors, strict=True)])
    origin = -0.5 * spacing + 0.5 * step - halo * step
    origin[0] = -0.5 * spacing[0] + 0.5 * step[0]  # planes are counted from the volume's first
    fine_shape = np.asarray(scene.shape) * scene.factors + 2 * halo
    first = int(z0 * scene.factors[0] - halo[0])
    n_planes = int((z1 - z0) * scene.factors[0] + 2 * halo[0])
    low, high = np.minimum(scene.starts, scene.ends), np.maximum(scene.starts, scene.ends)
    reach = scene.radii.max(axis=1) / np.sqrt(scene.flatness) + scene.settings.wall_um
    reach += 0.5 * np.linalg.norm(step)  # a cell is touched up to half its diagonal from its centre
    first_um = origin[0] + first * step[0]
    members, offsets = _members(low[:, 0] - reach, high[:, 0] + reach, first_um, step[0], n_planes)
    planes = np.zeros((n_planes, *scene.shape[1:]), dtype=np.float32)
    # thin vessels (below 2.5 voxels) get sub-cells of 1/6 voxel, others of 1/4
    splits = np.clip(np.ceil(np.outer((6, 4), step) / spacing.min()), 2, 30).astype(np.int64)
    signal_planes(
        first, members, offsets, _squeezed(scene), low, high, reach, scene.brightness, origin, step,
        splits, 2.5 * float(spacing.min()), scene.settings.wall_um, scene.settings.lumen_level,
        fine_shape[1:], scene.factors, weights[1], weights[2], planes,
    )  # fmt: skip
    signal = np.zeros((z1 - z0, *scene.shape[1:]))
    reduce_planes(planes, weights[0], int(scene.factors[0]), signal)
    return signal


def _weights(sigma_cells: float, factor: int) -> np.ndarray:
    """Weights of the fine cells around a voxel: the blur, then the mean over the voxel's cells."""
    radius = int(_TRUNCATE * sigma_cells + 0.5)
    x = np.arange(-radius, radius + 1)
    kernel = np.exp(-0.5 * (x / sigma_cells) ** 2) if sigma_cells > 0 else np.ones(1)
    return np.convolve(kernel / kernel.sum(), np.full(factor, 1 / factor))


def _squeezed(scene: Scene) -> tuple[np.ndarray, ...]:
    """Return the cones as the kernels take them; axes and lengths where ellipses are circles."""
    axes = scene.ends - scene.starts
    wide, narrow = np.sqrt(scene.flatness)[:, None], 1 / np.sqrt(scene.flatness)[:, None]
    part = (axes * scene.wide_axis).sum(axis=1, keepdims=True)
    axes = narrow * axes + (wide - narrow) * part * scene.wide_axis
    lengths = np.linalg.norm(axes, axis=1)
    fall = scene.radii[:, 0] - scene.radii[:, 1]
    safe = np.where(lengths > 0, lengths, 1.0)
    sines = np.where(lengths > 0, fall / safe, 1.0)  # a ball: its start holds its end
    return (
        scene.starts, axes / safe[:, None], lengths, sines, scene.radii, scene.flatness,
        scene.wide_axis,
    )  # fmt: skip


def _members(
    low_um: np.ndarray, high_um: np.ndarray, first_um: float, step_um: float, n_planes: int
) -> tuple[np.ndarray, np.ndarray]:
    """Return which cones may touch each fine plane, and where each plane's list starts."""
    begin = np.clip(np.ceil((low_um - first_um) / step_um), 0, n_planes).astype(np.int64)
    end = np.clip(np.floor((high_um - first_um) / step_um) + 1, 0, n_planes).astype(np.int64)
    count = np.maximum(end - begin, 0)
    cone = np.repeat(np.arange(len(count)), count)
    ahead = np.concatenate(([0], np.cumsum(count)[:-1])).astype(np.int64)
    plane = begin[cone] + np.arange(len(cone)) - ahead[cone]
    order = np.lexsort((cone, plane))
    offsets = np.searchsorted(plane[order], np.arange(n_planes + 1))
    return cone[order], offsets


# ---------------------------------------------------------------------- from signal to grey values


def _slice(scene: Scene, z: int, signal: np.ndarray) -> np.ndarray:
    """Grey values of one slice, from its own random stream."""
    settings = scene.settings
    sign = 1.0 if settings.polarity == "bright" else -1.0
    loss = 1.0
    if settings.attenuation_length_um > 0:
        loss = float(np.exp(-z * scene.spacing_um[0] / settings.attenuation_length_um))
    if settings.flicker > 0:
        rng = np.random.default_rng([scene.seed, _STREAMS["flicker"], z])
        loss *= max(0.1, 1 + settings.flicker * rng.normal())
    grey = loss * (_background(scene, z) + sign * settings.contrast * signal)
    grey += _noise(scene, z, grey)
    if settings.dtype == "float32":
        return grey.astype(np.float32)
    top = np.iinfo(settings.dtype).max
    return np.clip(np.rint(grey), 0, top).astype(settings.dtype)


def _background(scene: Scene, z: int) -> np.ndarray:
    """Background of one slice: a level with a linear change across the volume."""
    settings = scene.settings
    if settings.background_gradient == 0:
        return np.full(scene.shape[1:], settings.background)
    rng = np.random.default_rng([scene.seed, _STREAMS["gradient"]])
    slope = rng.normal(size=3)
    slope /= np.abs(slope).sum()  # so that the whole change is met from corner to corner
    share = [np.arange(n) / max(n - 1, 1) - 0.5 for n in scene.shape]
    place = slope[0] * share[0][z] + slope[1] * share[1][:, None] + slope[2] * share[2]
    return np.asarray(settings.background * (1 + settings.background_gradient * place))


def _noise(scene: Scene, z: int, grey: np.ndarray) -> np.ndarray:
    """Noise of one slice."""
    settings = scene.settings
    if settings.snr == 0:
        return np.zeros(grey.shape)
    rng = np.random.default_rng([scene.seed, _STREAMS["noise"], z])
    sd = settings.contrast / settings.snr
    if settings.noise == "gaussian":
        return sd * _correlated(rng.standard_normal(grey.shape), settings.noise_correlation_voxels)
    lumen = settings.background + (settings.contrast if settings.polarity == "bright" else 0.0)
    per_photon = (1 - settings.read_noise_share) * sd**2 / lumen
    level = np.maximum(grey, 0.0)
    shot = per_photon * rng.poisson(level / per_photon) - level if per_photon > 0 else 0.0
    read = np.sqrt(settings.read_noise_share) * sd * rng.standard_normal(grey.shape)
    return _correlated(shot + read, settings.noise_correlation_voxels)


def _correlated(noise: np.ndarray, sigma_voxels: float) -> np.ndarray:
    """Smooth white noise within its slice and restore its SD."""
    if sigma_voxels == 0:
        return noise
    impulse = np.zeros(8 * int(np.ceil(sigma_voxels)) + 3)
    impulse[len(impulse) // 2] = 1.0
    gain = np.square(ndi.gaussian_filter1d(impulse, sigma_voxels)).sum()
    return np.asarray(ndi.gaussian_filter(noise, sigma_voxels, mode="wrap") / gain)
