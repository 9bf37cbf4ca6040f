"""Diameter-defined Strahler orders (Kassab 1993, Am J Physiol 265:H350; Jiang 1994, J Appl Physiol 76:882).

Start: Strahler orders. Then D_n and S_n, mean and standard deviation of the diameters of order n,
give the cut between n and n + 1: ((D_n + S_n) + (D_n+1 - S_n+1)) / 2. Walking from the tips, a
parent has its highest daughter's order, raised as long as it is wider than the cut above; tips and cut
ends go by diameter alone. Repeated until no segment changes order and D_n, S_n change by less than
1 %. An order that empties is dropped and the orders above move down. Where means cross, or the cut
would not lie between both means, the cut is their midpoint. A cycle of iterates ends the iteration
with the one of least spread within orders, and says so.
"""

from dataclasses import dataclass

import numpy as np

from .._settings import Settings, setting
from ..errors import UnusableInputError
from . import _order_kernels as kernels
from .strahler import topological_orders, walking_order

__all__ = ["DiameterOrders", "OrderSettings", "diameter_orders"]


class OrderSettings(Settings):
    """Settings of the ordering."""

    cuts_um: tuple[float, ...] | None = setting(
        None, "diameters that part the orders, frozen (for a cohort); absent: found by the iteration",
        unit="um",
    )  # fmt: skip
    max_iterations: int = setting(50, "the iteration ends here", ge=1)


@dataclass(frozen=True, slots=True)
class DiameterOrders:
    """Orders with the cuts that define them."""

    order: np.ndarray
    cuts_um: np.ndarray
    mean_um: np.ndarray
    sd_um: np.ndarray
    iterations: int
    converged: bool
    note: str


def diameter_orders(parent: np.ndarray, diameter_um: np.ndarray, *, settings: OrderSettings | None = None) -> DiameterOrders:
    """Order the segments of a rooted tree or forest by diameter.

    Parameters
    ----------
    parent : (m,) int array
        Parent segment, -1 at a root.
    diameter_um : (m,) array
        Diameters, > 0.

    Raises
    ------
    UnusableInputError
        If a diameter is not positive, or frozen cuts do not increase.
    """
    settings = settings or OrderSettings()
    parent = np.ascontiguousarray(parent, dtype=np.int64)
    diameter = np.ascontiguousarray(diameter_um, dtype=np.float64)
    if not (diameter > 0).all():
        msg = f"diameter_um: found {np.nanmin(diameter) if len(diameter) else None!r}, expected diameters > 0 um"
        raise UnusableInputError(msg)
    walk = walking_order(parent)
    if settings.cuts_um is not None:
        return _frozen(parent, walk, diameter, np.asarray(settings.cuts_um, dtype=np.float64))
    order = topological_orders(parent).strahler
    seen: list[np.ndarray] = []
    mean, sd = _moments(order, diameter)
    note, converged, iteration = "", False, 0
    for iteration in range(1, settings.max_iterations + 1):
        cuts = _cuts(mean, sd)
        new = np.empty_like(order)
        kernels.diameter_walk(parent, walk, diameter, cuts, new)
        new = _compact(new)
        new_mean, new_sd = _moments(new, diameter)
        if np.array_equal(new, order) and _settled(mean, sd, new_mean, new_sd):
            converged = True
            break
        if any(np.array_equal(new, old) for old in seen):
            cycle = [*seen, new]
            order = min(cycle, key=lambda o: _spread(o, diameter))
            mean, sd = _moments(order, diameter)
            note = "the iteration came back to earlier orders; the one of least spread within orders is kept"
            break
        seen.append(new)
        order, mean, sd = new, new_mean, new_sd
    if not converged and not note:
        note = f"no fixed point after {settings.max_iterations} iterations"
    return DiameterOrders(order, _cuts(mean, sd), mean, sd, iteration, converged, note)


def _frozen(parent, walk, diameter, cuts):  # noqa: ANN001, ANN202
    if (np.diff(cuts) <= 0).any():
        msg = f"orders.cuts_um: found {cuts.tolist()}, expected increasing diameters"
        raise UnusableInputError(msg)
    order = np.empty(len(parent), np.int64)
    kernels.diameter_walk(parent, walk, diameter, cuts, order)
    n = len(cuts) + 1
    count = np.bincount(order, minlength=n + 1)[1:]
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.bincount(order, weights=diameter, minlength=n + 1)[1:] / count
    return DiameterOrders(order, cuts, mean, np.full(n, np.nan), 0, True, "cuts given")


def _moments(order: np.ndarray, diameter: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Mean and sample SD per order; an order of one segment has SD 0."""
    n = int(order.max()) if len(order) else 0
    count = np.bincount(order, minlength=n + 1)[1:].astype(float)
    total = np.bincount(order, weights=diameter, minlength=n + 1)[1:]
    mean = total / count
    square = np.bincount(order, weights=(diameter - mean[order - 1]) ** 2, minlength=n + 1)[1:]
    return mean, np.sqrt(square / np.maximum(count - 1, 1))


def _cuts(mean: np.ndarray, sd: np.ndarray) -> np.ndarray:
    low, high = mean[:-1], mean[1:]
    cut = 0.5 * ((low + sd[:-1]) + (high - sd[1:]))
    middle = 0.5 * (low + high)
    between = (cut > np.minimum(low, high)) & (cut < np.maximum(low, high))
    cut = np.where(between, cut, middle)
    return np.maximum.accumulate(cut) if len(cut) else cut


def _compact(order: np.ndarray) -> np.ndarray:
    """Number the orders that occur 1, 2, 3 ... without gaps."""
    _, place = np.unique(order, return_inverse=True)
    return place.astype(np.int64) + 1


def _settled(mean: np.ndarray, sd: np.ndarray, new_mean: np.ndarray, new_sd: np.ndarray) -> bool:
    if len(mean) != len(new_mean):
        return False
    scale = np.maximum(np.abs(mean), 1e-12)
    return bool((np.abs(new_mean - mean) < 0.01 * scale).all() and (np.abs(new_sd - sd) < 0.01 * scale).all())


def _spread(order: np.ndarray, diameter: np.ndarray) -> float:
    mean, _ = _moments(order, diameter)
    return float(np.sum((diameter - mean[order - 1]) ** 2))
