"""Diameter-defined Strahler orders.

Sources: Kassab 1993, Am J Physiol 265:H350; Jiang 1994, J Appl Physiol 76:882.

The iteration starts from Strahler's orders. D_n and S_n, mean and standard deviation of the
diameters of order n, give the cut between n and n + 1: ((D_n + S_n) + (D_n+1 - S_n+1)) / 2. Walking
from the tips to the root, each segment takes the order of its diameter between the cuts, but never
less than a daughter's; tips and cut ends have no daughters and go by diameter alone. D_n, S_n and
the cuts are found again, and so on.

- End: no segment changes its order, or less than 1 % of them do and the share falls no more; either
  is what the sources call a change below 1 %, and `converged` is true.
- A tree that does not settle: the share that changes rises again from above 1 %, or is still above
  it after `max_iterations`. Where diameters leave no gaps between orders the cuts then run away
  towards the thin vessels. The orders after the second turn are kept, as far as the sources went
  ("one or two", "two or three" cycles), `converged` is false and `note` says so.
- Start: Strahler's orders, all tips 1. They fix how many orders there can be, and each side branch
  of its parent's own order counts as a fork there; a start of one's own, or frozen cuts, avoid
  that.
- Missing orders: an order that empties is dropped, and the orders above it move down. Under frozen
  cuts nothing moves: an order without vessels stays empty.
- Crossing means: where a cut would not lie between the two means, it is their midpoint; where the
  mean of the higher order is the smaller, the two cuts round it fall together, and the order
  between them empties and is dropped.
- A single member has no spread: S_n = 0.
"""

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from .._settings import Settings, setting
from ..errors import UnusableInputError
from . import _order_kernels as kernels
from .elements import elements
from .strahler import checked_parent, topological_orders, walking_order

__all__ = ["DiameterOrders", "OrderSettings", "OrderStep", "TipLoss", "diameter_orders", "tip_loss"]

_SETTLED = 0.01  # Kassab 1993, Jiang 1994: change below 1 %
_KEPT = 2  # turns kept of an iteration that does not settle


class OrderSettings(Settings):
    """Settings of the ordering."""

    cuts_um: tuple[float, ...] | None = setting(
        None, "diameters that part the orders, frozen (for a cohort); absent: iteration finds them",
        unit="um",
    )  # fmt: skip
    basis: Literal["segments", "elements"] = setting(
        "segments", "what the means and cuts are taken over; elements: once the segments have"
        " settled, elements are formed and ordered the same way until they settle, too",
        source="Kassab 1993, Jiang 1994",
    )  # fmt: skip
    max_iterations: int = setting(50, "the iteration ends here", ge=1)


@dataclass(frozen=True, slots=True)
class OrderStep:
    """One turn of the iteration.

    Parameters
    ----------
    count : (k,) int64
        Members of each order.
    mean_um, sd_um : (k,) float64
        Mean and sample SD of their diameters.
    cuts_um : (k - 1,) float64
        The cuts that follow.
    """

    count: np.ndarray
    mean_um: np.ndarray
    sd_um: np.ndarray
    cuts_um: np.ndarray


@dataclass(frozen=True, slots=True)
class DiameterOrders:
    """Orders with the cuts that define them.

    Parameters
    ----------
    order : (m,) int64
        From 1 at the thinnest.
    cuts_um : (k - 1,) float64
        Diameters between orders n and n + 1.
    mean_um, sd_um : (k,) float64
        Mean and sample SD of the diameters of each order; NaN in an empty one.
    iterations : int
        Turns taken.
    converged : bool
        Whether it settled.
    note : str
        What there is to say about it; empty where no segment changes its order any more.
    steps : tuple of OrderStep
        The start and every turn up to the orders that are kept.
    """

    order: np.ndarray
    cuts_um: np.ndarray
    mean_um: np.ndarray
    sd_um: np.ndarray
    iterations: int
    converged: bool
    note: str
    steps: tuple[OrderStep, ...] = field(default=())


@dataclass(frozen=True, slots=True)
class TipLoss:
    """What becomes of the orders when the thinnest tips are lost.

    Parameters
    ----------
    share : float
        Of the tips that were taken off.
    orders : int
        Orders of what is left.
    shift : float
        Mean change of order of the segments that are left.
    changed : float
        Share of them whose order, counted from the top, changed.
    """

    share: float
    orders: int
    shift: float
    changed: float


def diameter_orders(
    parent: ArrayLike,
    diameter_um: ArrayLike,
    *,
    settings: OrderSettings | None = None,
    start: ArrayLike | None = None,
) -> DiameterOrders:
    """Order the segments of a rooted tree or forest by diameter.

    Parameters
    ----------
    parent : (m,) array_like of int
        Parent segment, -1 at a root.
    diameter_um : (m,) array_like
        Diameters, > 0.
    settings : OrderSettings, optional
        Frozen cuts, or how to iterate.
    start : (m,) array_like of int, optional
        Orders to start from, > 0; absent: Strahler's.

    Returns
    -------
    DiameterOrders
        Orders, cuts and the course of the iteration.

    Raises
    ------
    UnusableInputError
        If a diameter or a starting order is not positive, frozen cuts do not increase, or the
        parents hold a ring.

    Examples
    --------
    A trunk and two branches, one of which carries two twigs and the other is cut: Strahler's order
    1 becomes 2 by diameter.

    >>> diameter_orders([-1, 0, 0, 1, 1], [40, 20, 19, 10, 9]).order.tolist()
    [2, 2, 2, 1, 1]
    """
    settings = settings or OrderSettings()
    above = checked_parent(parent)
    diameter = _checked_diameter(above, diameter_um)
    walk = walking_order(above)
    if settings.cuts_um is not None:
        return _frozen(above, walk, diameter, np.asarray(settings.cuts_um, dtype=np.float64))
    first = topological_orders(above).strahler if start is None else _checked_start(above, start)
    found = _iterate(above, walk, diameter, _without_gaps(first), settings.max_iterations)
    if settings.basis == "elements":
        return _settle_elements(above, diameter, found, settings.max_iterations)
    return found


def tip_loss(
    parent: ArrayLike, diameter_um: ArrayLike, shares: tuple[float, ...] = (0.1, 0.2, 0.3)
) -> list[TipLoss]:
    """Take off the thinnest tips and order again: how much the orders hang on the smallest vessels.

    Parameters
    ----------
    parent : (m,) array_like of int
        Parent segment, -1 at a root.
    diameter_um : (m,) array_like
        Diameters, > 0.
    shares : tuple of float
        Shares of the tips to take off.

    Returns
    -------
    list of TipLoss
        One a share that leaves a segment.

    Examples
    --------
    >>> [loss.orders for loss in tip_loss([-1, 0, 0], [20, 10, 9], shares=(0.5,))]
    [1]
    """
    above = checked_parent(parent)
    diameter = _checked_diameter(above, diameter_um)
    before = diameter_orders(above, diameter).order
    tips = np.setdiff1d(np.arange(len(above)), above)
    thinnest = tips[np.argsort(diameter[tips], kind="stable")]
    losses = []
    for share in shares:
        kept = np.ones(len(above), dtype=bool)
        kept[thinnest[: round(share * len(tips))]] = False
        if not kept.any():
            continue
        number = np.full(len(above) + 1, -1, np.int64)
        number[np.flatnonzero(kept)] = np.arange(kept.sum())
        after = diameter_orders(number[above[kept]], diameter[kept]).order
        shift = after - before[kept]
        from_top = shift - (int(after.max()) - int(before.max()))
        losses.append(
            TipLoss(share, int(after.max()), float(shift.mean()), float(np.mean(from_top != 0)))
        )
    return losses


def _checked_diameter(parent: np.ndarray, diameter_um: ArrayLike) -> np.ndarray:
    diameter = np.ascontiguousarray(diameter_um, dtype=np.float64)
    if diameter.shape != parent.shape:
        msg = f"diameter_um: found shape {diameter.shape}, expected {parent.shape}"
        raise UnusableInputError(msg)
    bad = diameter[~(diameter > 0)]
    if len(bad):
        msg = f"diameter_um: found {float(bad[0])!r}, expected diameters > 0 um"
        raise UnusableInputError(msg)
    return diameter


def _checked_start(parent: np.ndarray, start: ArrayLike) -> np.ndarray:
    order = np.asarray(start, dtype=np.int64)
    if order.shape != parent.shape or (order < 1).any():
        lowest = int(order.min()) if order.size else None
        msg = f"start: found shape {order.shape}, lowest {lowest}; expected {parent.shape}, from 1"
        raise UnusableInputError(msg)
    return order


def _frozen(
    parent: np.ndarray, walk: np.ndarray, diameter: np.ndarray, cuts: np.ndarray
) -> DiameterOrders:
    if (np.diff(cuts) <= 0).any() or (cuts <= 0).any():
        msg = f"orders.cuts_um: found {cuts.tolist()}, expected increasing diameters > 0 um"
        raise UnusableInputError(msg)
    order = np.empty(len(parent), np.int64)
    kernels.diameter_walk(parent, walk, diameter, cuts, order)
    _, mean, sd = _moments(order, diameter, len(cuts) + 1)
    return DiameterOrders(order, cuts, mean, sd, 0, True, "cuts given")  # noqa: FBT003 - a record


def _iterate(
    parent: np.ndarray, walk: np.ndarray, diameter: np.ndarray, order: np.ndarray, limit: int
) -> DiameterOrders:
    """Turn until no segment changes its order, or until the share that does falls no more."""
    steps, early, least, turn = [_step(order, diameter)], order, 1.0, 0
    for turn in range(1, limit + 1):
        new = np.empty(len(parent), np.int64)
        kernels.diameter_walk(parent, walk, diameter, steps[-1].cuts_um, new)
        share = float(np.mean(new != order)) if len(new) else 0.0
        if share == 0:
            return _record(order, steps, turn, note="", converged=True)
        if share > least:
            break
        order, least = _without_gaps(new), share
        steps.append(_step(order, diameter))
        early = order if turn <= _KEPT else early
    if least < _SETTLED:
        note = f"{100 * least:.2g} % of the segments changed their order in the last turn"
        return _record(order, steps, turn, note=note, converged=True)
    note = (
        f"the iteration does not settle: never less than {100 * least:.2g} % of the segments change"
        f" their order; those after turn {min(turn, _KEPT)} are kept"
    )
    return _record(early, steps[: _KEPT + 1], turn, note=note, converged=False)


def _record(
    order: np.ndarray, steps: list[OrderStep], turn: int, *, note: str, converged: bool
) -> DiameterOrders:
    last = steps[-1]
    return DiameterOrders(
        order, last.cuts_um, last.mean_um, last.sd_um, turn, converged, note, tuple(steps)
    )


def _step(order: np.ndarray, diameter: np.ndarray) -> OrderStep:
    count, mean, sd = _moments(order, diameter, int(order.max()) if len(order) else 0)
    return OrderStep(count, mean, sd, _cuts(mean, sd))


def _moments(
    order: np.ndarray, diameter: np.ndarray, n: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Count, mean and sample SD per order; SD 0 for a single member, NaN where there is none."""
    count = np.bincount(order, minlength=n + 1)[1:]
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.bincount(order, weights=diameter, minlength=n + 1)[1:] / count
    left = (diameter - mean[order - 1]) ** 2
    square = np.bincount(order, weights=left, minlength=n + 1)[1:]
    sd = np.where(count > 0, np.sqrt(square / np.maximum(count - 1, 1)), np.nan)
    return count, mean, sd


def _cuts(mean: np.ndarray, sd: np.ndarray) -> np.ndarray:
    low, high = mean[:-1], mean[1:]
    cut = 0.5 * ((low + sd[:-1]) + (high - sd[1:]))
    between = (cut > np.minimum(low, high)) & (cut < np.maximum(low, high))
    cut = np.where(between, cut, 0.5 * (low + high))
    return np.maximum.accumulate(cut)


def _without_gaps(order: np.ndarray) -> np.ndarray:
    """Give the orders that occur the numbers 1, 2, 3 ... without gaps."""
    occurs = np.bincount(order) > 0
    return np.asarray(np.cumsum(occurs)[order], dtype=np.int64)


def _settle_elements(
    parent: np.ndarray, diameter: np.ndarray, found: DiameterOrders, limit: int
) -> DiameterOrders:
    """Order elements as segments were, form elements anew, until they stay; they can only merge."""
    order, steps, turns = found.order, found.steps, found.iterations
    while True:
        group = elements(parent, order, np.zeros(len(parent)), diameter)
        settled = _iterate(
            group.parent, walking_order(group.parent), group.diameter_um, group.order, limit
        )
        steps, turns = (*steps, *settled.steps), turns + settled.iterations
        new = settled.order[group.element_of_segment]
        if np.array_equal(new, order):
            return DiameterOrders(
                new, settled.cuts_um, settled.mean_um, settled.sd_um, turns, settled.converged,
                settled.note, steps,
            )  # fmt: skip
        order = new
