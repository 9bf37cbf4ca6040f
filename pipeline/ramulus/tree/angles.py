"""Bifurcation angles in space, and those that the radii make optimal."""

import numpy as np

from ..network.graph import CentrelineGraph

__all__ = ["leaving_directions", "optimal_angles_deg"]


def leaving_directions(graph: CentrelineGraph, radius_um: np.ndarray) -> np.ndarray:
    """(2 m, 3) unit vectors in which each segment leaves its two nodes (NaN where too short).

    The main axis of the centreline's points between one and three radii of the widest vessel at the
    node, at least four points. Row 2 i + side is segment i at that side.

    Parameters
    ----------
    radius_um : (m,) array
        Mean radius of each segment.
    """
    ends = graph.segment_nodes.ravel()
    widest = np.zeros(graph.n_nodes)
    np.maximum.at(widest, ends, np.repeat(np.nan_to_num(radius_um), 2))
    arc, per = graph.arc_um(), graph.points_per_segment
    length = graph.segment_length_um()
    out = np.full((2 * graph.n_segments, 3), np.nan)
    segment = graph.point_segment
    for side in (0, 1):
        along = arc if side == 0 else np.repeat(length, per) - arc
        unit = widest[graph.segment_nodes[:, side]]
        near = np.minimum(unit, 0.4 * length)
        far = np.maximum(np.minimum(3 * unit, length), near + 0.4 * length)
        chosen = (along >= np.repeat(near, per)) & (along <= np.repeat(far, per))
        count = np.bincount(segment[chosen], minlength=graph.n_segments)
        mean = np.stack([
            np.bincount(segment[chosen], weights=graph.point_position_um[chosen, a], minlength=graph.n_segments)
            for a in range(3)
        ], axis=1) / np.maximum(count, 1)[:, None]  # fmt: skip
        left = graph.point_position_um[chosen] - mean[segment[chosen]]
        along_left = along[chosen] - (
            np.bincount(segment[chosen], weights=along[chosen], minlength=graph.n_segments)
            / np.maximum(count, 1)
        )[segment[chosen]]
        # Regression of position on arc length: its slope is the direction.
        slope = np.stack([
            np.bincount(segment[chosen], weights=left[:, a] * along_left, minlength=graph.n_segments)
            for a in range(3)
        ], axis=1)  # fmt: skip
        norm = np.linalg.norm(slope, axis=1)
        good = (count >= 4) & (norm > 0)
        out[2 * np.flatnonzero(good) + side] = slope[good] / norm[good][:, None]
    return out


def optimal_angles_deg(parent_um: np.ndarray, first_um: np.ndarray, second_um: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Angles of both daughters to the parent's axis that minimise lumen volume (Murray 1926).

    cos t1 = (a0**4 + a1**4 - a2**4) / (2 a0**2 a1**2), t2 likewise (J Gen Physiol 9:835). NaN where no
    such angle exists.

    Examples
    --------
    >>> t1, t2 = optimal_angles_deg(1.0, 2 ** (-1 / 3), 2 ** (-1 / 3))
    >>> round(float(t1), 3)
    37.467
    """
    a0, a1, a2 = (np.asarray(r, dtype=float) ** 2 for r in (parent_um, first_um, second_um))
    with np.errstate(invalid="ignore", divide="ignore"):
        c1 = (a0**2 + a1**2 - a2**2) / (2 * a0 * a1)
        c2 = (a0**2 + a2**2 - a1**2) / (2 * a0 * a2)
        # Rounding may carry the cosine of a zero angle past one.
        c1, c2 = (np.where(np.abs(c) <= 1 + 1e-12, np.clip(c, -1, 1), np.nan) for c in (c1, c2))
        return np.degrees(np.arccos(c1)), np.degrees(np.arccos(c2))
