"""Where a vessel that ends inside the volume ends: read in the grey values along its axis."""

import numpy as np

from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["tip_positions"]


def tip_positions(
    graph: CentrelineGraph, volume: np.ndarray, *, spacing_um: tuple[float, float, float],
    origin_um: tuple[float, float, float], segment: np.ndarray, s_um: np.ndarray, centre_um: np.ndarray,
    radius_um: np.ndarray, contrast: np.ndarray, background: np.ndarray, sigma_um: float,
) -> np.ndarray:  # fmt: skip
    """Return (n, 3) node positions for the blind ends, NaN elsewhere.

    From the outermost station a ray runs along the axis of the last stations; the lumen ends where
    the mean grey value over the inner half of the cross-section falls half way to the background.
    A rounded end of radius r shifts that place inwards by sigma**2 / r (mean curvature 1 / r), which
    is undone, and so is the mean depth of the rounded end over the inner half (0.067 r); the node is
    the centre of the rounded end, one radius inside it.

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
            grey += map_coordinates(volume, index, output=np.float64, order=1, mode="nearest").reshape(grey.shape)
        above = grey / 5 - (background[last] + 0.5 * contrast[last])[:, None]
        below = (above < 0) & (t[None, :] <= far[:, None])
        first = np.argmax(below, axis=1)
        found = below.any(axis=1) & (first > 0)
        k = np.maximum(first, 1)
        rows = np.arange(len(todo))
        f = above[rows, k - 1] / np.maximum(above[rows, k - 1] - above[rows, k], 1e-12)
        reach = (k - 1 + np.clip(f, 0, 1)) * step + sigma_um**2 / radius - radius + 0.067 * radius
        place = centre_um[last] + reach[:, None] * axis
        out[graph.segment_nodes[todo[found], side]] = place[found]
    return out


def _across(axis: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Two unit vectors across each axis."""
    helper = np.where(np.abs(axis[:, :1]) < 0.7, [[1.0, 0.0, 0.0]], [[0.0, 0.0, 1.0]])
    u = np.cross(axis, helper)
    u /= np.linalg.norm(u, axis=1)[:, None]
    return u, np.cross(axis, u)
