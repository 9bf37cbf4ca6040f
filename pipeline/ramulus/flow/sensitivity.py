"""How the resistance depends on each radius, and what radius errors make of it."""

import numpy as np

__all__ = [
    "effective_segments",
    "log_resistance_common",
    "log_resistance_sd",
    "monte_carlo_log_resistance",
]

from ..network.graph import CentrelineGraph
from .boundary import BoundaryConditions
from .hindrance import segment_hindrance_per_um3
from .solve import solve


def effective_segments(share: np.ndarray) -> float:
    """1 / sum of squared resistance shares: how many segments decide the resistance."""
    square = float(np.nansum(np.square(share)))
    return 1.0 / square if square > 0 else float("nan")


def log_resistance_sd(share: np.ndarray, relative_se: np.ndarray) -> float:
    """SD of ln R from independent radius errors, first order.

    d ln R / d ln r of a segment is -4 times its resistance share (Cohn 1950, Proc IRE 38:188, for
    dR / dR_e = (i_e / i)**2).
    """
    return float(4 * np.sqrt(np.nansum((share * relative_se) ** 2)))


def log_resistance_common(share: np.ndarray, relative_se: np.ndarray) -> float:
    """Shift of ln R from one error that all radii share, first order."""
    return float(4 * np.nansum(share * relative_se))


def monte_carlo_log_resistance(
    graph: CentrelineGraph,
    conditions: BoundaryConditions,
    *,
    relative_se: np.ndarray,
    draws: int,
    seed: int,
) -> np.ndarray:
    """(draws,) ln of the network's hindrance with lognormal radius errors, one factor a segment."""
    rng = np.random.default_rng(seed)
    hindrance = segment_hindrance_per_um3(graph)
    unit = np.ones(graph.n_segments)
    out = np.empty(draws)
    for k in range(draws):
        factor = np.exp(-4 * np.nan_to_num(relative_se) * rng.standard_normal(len(hindrance)))
        solved = solve(
            graph, conditions, viscosity_mpa_s=unit, hindrance_per_um3=hindrance * factor
        )
        out[k] = np.log(solved.network_resistance_pa_s_per_m3)
    return out
