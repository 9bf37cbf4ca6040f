"""Murray's cost: pumping power and the upkeep of blood, and how far from the least it is."""

from dataclasses import dataclass

import numpy as np

from .._settings import Settings, setting

__all__ = ["CostSettings", "MurrayCost", "murray_cost"]


class CostSettings(Settings):
    """Settings of Murray's cost."""

    metabolic_w_per_m3: float | None = setting(
        None, "power that a volume of blood costs; absent: the value under which this network's"
        " whole cost is least above its optimum, so that the excess speaks of the radii alone",
        unit="W/m3", gt=0, source="Murray 1926, PNAS 12:207",
    )  # fmt: skip


@dataclass(frozen=True, slots=True)
class MurrayCost:
    """Cost of each segment and of the tree, in W, and the radius that would be optimal."""

    cost_w: np.ndarray
    optimal_radius_um: np.ndarray
    least_w: np.ndarray
    metabolic_w_per_m3: float
    excess: float


def murray_cost(
    flow_um3_per_s: np.ndarray, radius_um: np.ndarray, length_um: np.ndarray,
    viscosity_mpa_s: np.ndarray, *, settings: CostSettings,
) -> MurrayCost:  # fmt: skip
    """Return 8 mu L Q**2 / (pi a**4) + K pi a**2 L of each segment, and where it would be least.

    The least lies at a**6 = 16 mu Q**2 / (pi**2 K) and is (3 pi / 2) K L a**2 (Murray 1926, PNAS
    12:207).

    Parameters
    ----------
    flow_um3_per_s, radius_um, length_um, viscosity_mpa_s : (m,) arrays
        Of each segment; those without flow or radius are left out.
    settings : CostSettings
        The metabolic constant K.

    Returns
    -------
    MurrayCost
        Per segment, NaN where it is left out; the excess over the least of all, NaN without flow.

    Examples
    --------
    >>> flow, radius, length = np.array([4.20749e7]), np.array([50.0]), np.array([500.0])
    >>> cost = murray_cost(flow, radius, length, np.array([3.5]),
    ...                    settings=CostSettings(metabolic_w_per_m3=642.857))
    >>> float(cost.optimal_radius_um[0].round(3)), float(f"{cost.cost_w[0]:.4g}")
    (50.0, 3.787e-09)
    """
    q = np.abs(np.asarray(flow_um3_per_s, dtype=float)) * 1e-18
    a, length = np.asarray(radius_um, dtype=float) * 1e-6, np.asarray(length_um, dtype=float) * 1e-6
    mu = np.asarray(viscosity_mpa_s, dtype=float) * 1e-3
    flows = np.isfinite(q) & (q > 0) & np.isfinite(a) & (a > 0)
    viscous = np.where(flows, 8 * mu * length * q**2 / (np.pi * a**4), np.nan)
    volume = np.where(flows, np.pi * a**2 * length, np.nan)
    k = settings.metabolic_w_per_m3
    if k is None:
        # The least cost goes with K**(2/3), so the ratio to it is least at K volume = 2 viscous.
        whole = float(np.nansum(volume))
        k = 2 * float(np.nansum(viscous)) / whole if whole > 0 else float("nan")
    best = (16 * mu * q**2 / (np.pi**2 * k)) ** (1 / 6)
    least = np.where(flows, 1.5 * np.pi * k * length * best**2, np.nan)
    cost = viscous + k * volume
    total = float(np.nansum(least))
    excess = float(np.nansum(cost)) / total - 1 if total > 0 else float("nan")
    return MurrayCost(cost, np.where(flows, best * 1e6, np.nan), least, float(k), excess)
