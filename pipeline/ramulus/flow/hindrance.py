"""Hydraulic hindrance of a vessel: the integral of (8 / pi) ds / r**4 along its profile."""

import numpy as np
from numpy.typing import ArrayLike

from ..errors import UnusableInputError
from ..network.graph import CentrelineGraph

__all__ = [
    "hindrance_per_um3", "hindrance_radius_um", "point_hindrance_per_um3",
    "segment_hindrance_per_um3",
]  # fmt: skip


def hindrance_per_um3(arc_um: ArrayLike, radius_um: ArrayLike) -> float:
    """Integrate the Hagen-Poiseuille hindrance, (8 / pi) ds / r**4, along one vessel.

    Laminar, developed flow, circular lumen (Sutera & Skalak 1993, Annu Rev Fluid Mech 25:1-19).
    Exact for cones, so coarse points cost nothing.

    Parameters
    ----------
    arc_um : (n,) array_like
        Arc length from the upstream node, strictly increasing, n >= 2.
    radius_um : (n,) array_like
        Lumen radius at each point, > 0; taken as linear between points.

    Returns
    -------
    float
        Hindrance in um**-3. Times 1e18 and the viscosity in Pa s: the resistance in Pa s m**-3.

    Raises
    ------
    UnusableInputError
        If the lengths differ, `arc_um` does not increase, or a radius is not positive.

    Examples
    --------
    >>> round(hindrance_per_um3([0, 1000], [5, 5]), 4)  # 10 um wide, 1 mm long
    4.0744
    """
    arc = np.asarray(arc_um, dtype=np.float64)
    radius = np.asarray(radius_um, dtype=np.float64)
    if arc.ndim != 1 or len(arc) < 2 or arc.shape != radius.shape:
        msg = (
            f"arc_um, radius_um: found shapes {arc.shape}, {radius.shape}, expected two of (n,), n"
            " >= 2"
        )
        raise UnusableInputError(msg)
    if not (np.diff(arc) > 0).all():
        msg = "arc_um: found a step that is not > 0 um, expected strictly increasing arc lengths"
        raise UnusableInputError(msg)
    if not (radius > 0).all():
        msg = f"radius_um: found {radius.min()!r}, expected radii > 0 um"
        raise UnusableInputError(msg)
    return float(np.sum(_cones(np.diff(arc), radius[:-1], radius[1:])))


def segment_hindrance_per_um3(graph: CentrelineGraph) -> np.ndarray:
    """(m,) hindrance of each segment over its points' radii; NaN where a radius is unknown.

    A segment of no length has none.
    """
    return graph.segment_sum(point_hindrance_per_um3(graph))


def point_hindrance_per_um3(graph: CentrelineGraph) -> np.ndarray:
    """(p,) hindrance of the stretch from the point before to each point; 0 at a first point."""
    step = graph.step_um()
    radius = graph.point_radius_um
    before = np.roll(radius, 1)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = _cones(step, before, radius)
    share[step == 0] = 0.0
    return share


def hindrance_radius_um(length_um: np.ndarray, hindrance: np.ndarray) -> np.ndarray:
    """Constant radius with the same length and hindrance; NaN where there is no hindrance."""
    with np.errstate(divide="ignore", invalid="ignore"):
        radius = (8.0 / np.pi * length_um / hindrance) ** 0.25
    return np.where(np.isfinite(radius), radius, np.nan)


def _cones(length: np.ndarray, start: np.ndarray, end: np.ndarray) -> np.ndarray:
    # Integral of ds / r**4 over a cone: L (a**2 + a b + b**2) / (3 a**3 b**3).
    return 8 / np.pi * length * (start**2 + start * end + end**2) / (3 * start**3 * end**3)
