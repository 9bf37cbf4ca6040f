"""Bifurcation angles in space, and those that the radii make optimal."""

import numpy as np
from numpy.typing import ArrayLike

from ..network.graph import CentrelineGraph

__all__ = ["bifurcation_angles_deg", "leaving_directions", "optimal_angles_deg"]

_SAMPLES = 9
_BATCH = 20_000


def bifurcation_angles_deg(
    graph: CentrelineGraph,
    node: np.ndarray,
    parent: np.ndarray,
    daughters: np.ndarray,
    reach_um: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Return the angle between each daughter and the parent's axis carried on, in three dimensions.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.
    node, parent : (n,) int arrays
        Junction nodes and the segment that brings to each; -1: none.
    daughters : (n, k) int array
        Segments that leave, -1 beyond the last.
    reach_um : (n,) array
        The parent's radius r0: directions are taken from r0 to 3 r0.

    Returns
    -------
    angle, se : (n, k) arrays
        Degrees, and the standard error by jackknife over the samples along the vessels, NaN where a
        vessel has no direction.
    """
    angle = np.full(daughters.shape, np.nan)
    se = np.full(daughters.shape, np.nan)
    for start in range(0, len(node), _BATCH):
        rows = slice(start, min(start + _BATCH, len(node)))
        onward = -leaving_directions(graph, parent[rows], node[rows], reach_um[rows])
        for k in range(daughters.shape[1]):
            leave = leaving_directions(graph, daughters[rows, k], node[rows], reach_um[rows])
            every = np.degrees(np.arccos(np.clip(np.sum(onward * leave, axis=2), -1, 1)))
            angle[rows, k] = every[:, 0]
            left = every[:, 1:] - every[:, 1:].mean(axis=1, keepdims=True)
            se[rows, k] = np.sqrt((_SAMPLES - 1) / _SAMPLES * np.sum(left**2, axis=1))
    return angle, se


def leaving_directions(
    graph: CentrelineGraph, segment: np.ndarray, node: np.ndarray, reach_um: np.ndarray
) -> np.ndarray:
    """Return unit vectors in which segments leave a node.

    The slope of the centreline's position on arc length from one to three `reach_um` off the node;
    a vessel shorter than 2.5 of them is taken over its far three fifths.

    Parameters
    ----------
    graph : CentrelineGraph
        The network.
    segment : (n,) int array
        Segments; -1: none.
    node : (n,) int array
        The end that each leaves.
    reach_um : (n,) array
        Radius of the junction's lumen.

    Returns
    -------
    (n, 1 + samples, 3) array
        The direction, then the directions with one sample left out in turn; NaN where there is
        none.
    """
    fraction, position = _sampled(graph, segment, node, reach_um)
    out = np.full((len(segment), 1 + _SAMPLES, 3), np.nan)
    for left_out in range(-1, _SAMPLES):
        kept = np.arange(_SAMPLES) != left_out
        x = fraction[kept] - fraction[kept].mean()
        slope = np.einsum("s,nsa->na", x, position[:, kept])
        norm = np.linalg.norm(slope, axis=1, keepdims=True)
        with np.errstate(invalid="ignore", divide="ignore"):
            out[:, left_out + 1] = np.where(norm > 0, slope / norm, np.nan)
    return out


def optimal_angles_deg(
    parent_um: ArrayLike, first_um: ArrayLike, second_um: ArrayLike, *, power: float = 2.0
) -> tuple[np.ndarray, np.ndarray]:
    """Return the angles of both daughters to the parent's axis that cost least.

    With a cost w = a**power per length, cos t1 = (w0^2 + w1^2 - w2^2) / (2 w0 w1), t2 likewise.
    Power 2 is that of lumen volume and of Murray's whole cost (Murray 1926, J Gen Physiol 9:835), 1
    of wall surface.

    Parameters
    ----------
    parent_um, first_um, second_um : array_like
        Radii.
    power : float
        Power of the radius in the cost per length.

    Returns
    -------
    first, second : arrays
        Degrees; NaN where no angle balances the three.

    Examples
    --------
    >>> t1, t2 = optimal_angles_deg(1.0, 2 ** (-1 / 3), 2 ** (-1 / 3))
    >>> round(float(t1), 3)
    37.467
    """
    w0, w1, w2 = (
        np.asarray(r, dtype=np.float64) ** power for r in (parent_um, first_um, second_um)
    )
    with np.errstate(invalid="ignore", divide="ignore"):
        c1 = (w0**2 + w1**2 - w2**2) / (2 * w0 * w1)
        c2 = (w0**2 + w2**2 - w1**2) / (2 * w0 * w2)
        # Rounding may carry the cosine of a zero angle past one.
        c1, c2 = (np.where(np.abs(c) <= 1 + 1e-12, np.clip(c, -1, 1), np.nan) for c in (c1, c2))
        return np.degrees(np.arccos(c1)), np.degrees(np.arccos(c2))


def _sampled(
    graph: CentrelineGraph, segment: np.ndarray, node: np.ndarray, reach_um: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Positions at evenly spaced arc lengths off the node, and where they lie between 0 and 1."""
    if not graph.n_segments:
        return np.linspace(0, 1, _SAMPLES), np.full((len(segment), _SAMPLES, 3), np.nan)
    fraction = np.linspace(0, 1, _SAMPLES)
    total = np.cumsum(graph.step_um())
    there, segment = segment >= 0, np.maximum(segment, 0)
    first, last = graph.point_offsets[segment], graph.point_offsets[segment + 1] - 1
    length = total[last] - total[first]
    reach = np.nan_to_num(reach_um)
    near = np.minimum(reach, 0.4 * length)
    far = np.minimum(3 * reach, length)
    along = near[:, None] + (far - near)[:, None] * fraction
    at_end = graph.segment_nodes[segment, 0] != node
    target = total[first][:, None] + np.where(at_end[:, None], length[:, None] - along, along)
    place = np.searchsorted(total, target, side="right") - 1
    place = np.clip(place, first[:, None], last[:, None] - 1)
    step = total[place + 1] - total[place]
    share = np.clip((target - total[place]) / np.where(step > 0, step, 1.0), 0.0, 1.0)
    before, after = graph.point_position_um[place], graph.point_position_um[place + 1]
    position = before + share[..., None] * (after - before)
    known = there & (length > 0) & np.isfinite(reach_um)
    return fraction, np.where(known[:, None, None], position, np.nan)
