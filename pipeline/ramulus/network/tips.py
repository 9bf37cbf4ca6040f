"""Where a vessel that ends inside the volume ends: read in the grey values along its axis."""

import numpy as np

from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["half_level_radii", "tip_positions"]

# Where a rounded end blurred with SD q radii falls to half, in radii beyond its centre: drawn with
# nine cells a radius and blurred numerically (tests repeat one value).
_BLUR = (0.0, 0.05, 0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.8, 1.0, 1.25, 1.5, 2.0, 4.0)
_HALF_LEVEL = (0.933, 0.93, 0.92, 0.888, 0.843, 0.802, 0.769, 0.746, 0.717, 0.701, 0.691, 0.685, 0.678, 0.667)  # fmt: skip


def half_level_radii(blur_radii: np.ndarray) -> np.ndarray:
    """Distance from a rounded end's centre to its half level, in radii, for a blur in radii."""
    return np.interp(blur_radii, _BLUR, _HALF_LEVEL)


def tip_positions(
    graph: CentrelineGraph, volume: np.ndarray, *, spacing_um: tuple[float, float, float],
    origin_um: tuple[float, float, float], segment: np.ndarray, s_um: np.ndarray, centre_um: np.ndarray,
    radius_um: np.ndarray, contrast: np.ndarray, background: np.ndarray, sigma_um: float,
) -> np.ndarray:  # fmt: skip
    """Return (n, 3) node positions for the blind ends, NaN elsewhere.

    From the outermost station a ray runs along the axis of the last stations; the lumen ends where
    the mean grey value over the inner half of the cross-section falls to half of its height inside.
    That place lies `_HALF_LEVEL` radii beyond the centre of the rounded end, between 0.93 (sharp: the
    mean depth of the cap) and 2/3 (blurred: the flat end of equal volume); the node is that centre.

    Parameters
    ----------
    segment, s_um, centre_um, radius_um, contrast, background : (k, ...) arrays
        The stations that were fitted, in order along each segment.
    sigma_um : float
        Blur of the image.
    """
    from scipy.ndimage import map_coordinates  # noqa: PLC0415 - heavy to import

    out = np.full((graph.n_nodes, 3), np.nan)
    start = np.searchsorted(segment, np.arange(graph.n_segments), side="left")
    stop = np.searchsorted(segment, np.arange(graph.n_segments), side="right")
    is_end = (graph.node_kind == NODE_KINDS.index("end")) & (graph.node_degree() == 1)
    length = graph.segment_length_um()
    step = 0.25 * min(spacing_um)
    for side in (0, 1):
        todo = np.flatnonzero(is_end[graph.segment_nodes[:, side]] & (stop - start >= 2))
        if not len(todo):
            continue
        last = start[todo] if side == 0 else stop[todo] - 1
        back = np.clip(last + (4 if side == 0 else -4), start[todo], stop[todo] - 1)
        axis = centre_um[last] - centre_um[back]
        axis /= np.maximum(np.linalg.norm(axis, axis=1), 1e-12)[:, None]
        radius = radius_um[last]
        left = s_um[last] if side == 0 else length[todo] - s_um[last]
        far = left + 2.0 * radius + 3.0 * sigma_um
        count = int(min(np.ceil(far.max() / step), 400))
        t = np.arange(count) * step
        u, v = _across(axis)
        grey = np.zeros((len(todo), count))
        for a, b in ((0, 0), (1, 0), (-1, 0), (0, 1), (0, -1)):
            place = centre_um[last] + 0.4 * radius[:, None] * (a * u + b * v)
            line = place[:, None, :] + t[None, :, None] * axis[:, None, :]
            index = ((line - np.asarray(origin_um)) / np.asarray(spacing_um)).reshape(-1, 3).T
            grey += map_coordinates(
                volume, index, output=np.float64, order=1, mode="nearest"
            ).reshape(grey.shape)
        inside = t[None, :] <= np.maximum(0.4 * radius, step)[:, None]
        height = (grey * inside).sum(axis=1) / inside.sum(axis=1) / 5 - background[last]
        above = grey / 5 - (background[last] + 0.5 * np.minimum(height, contrast[last]))[:, None]
        below = (above < 0) & (t[None, :] <= far[:, None])
        first = np.argmax(below, axis=1)
        found = below.any(axis=1) & (first > 0)
        k = np.maximum(first, 1)
        rows = np.arange(len(todo))
        f = above[rows, k - 1] / np.maximum(above[rows, k - 1] - above[rows, k], 1e-12)
        reach = (k - 1 + np.clip(f, 0, 1)) * step - half_level_radii(sigma_um / radius) * radius
        place = centre_um[last] + reach[:, None] * axis
        out[graph.segment_nodes[todo[found], side]] = place[found]
    return out


def _across(axis: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Two unit vectors across each axis."""
    helper = np.where(np.abs(axis[:, :1]) < 0.7, [[1.0, 0.0, 0.0]], [[0.0, 0.0, 1.0]])
    u = np.cross(axis, helper)
    u /= np.linalg.norm(u, axis=1)[:, None]
    return u, np.cross(axis, u)
