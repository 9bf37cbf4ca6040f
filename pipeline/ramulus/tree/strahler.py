"""Topological orders of a rooted tree given as a parent array."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ..errors import UnusableInputError
from . import _order_kernels as kernels

__all__ = ["TopologicalOrders", "checked_parent", "topological_orders", "walking_order"]


@dataclass(frozen=True, slots=True)
class TopologicalOrders:
    """Orders of each segment by five rules.

    Parameters
    ----------
    strahler, horsfield, horton, magnitude, generation : (m,) int64
        As `topological_orders` says.
    """

    strahler: np.ndarray
    horsfield: np.ndarray
    horton: np.ndarray
    magnitude: np.ndarray
    generation: np.ndarray


def topological_orders(
    parent: ArrayLike, *, diameter_um: ArrayLike | None = None
) -> TopologicalOrders:
    """Order the segments of a tree or forest by how it branches.

    - Strahler (1952, Bull Geol Soc Am 63:1117): tips 1; two or more highest daughters n give n + 1,
      else the highest daughter's order.
    - Horsfield (Horsfield and Cumming 1968, J Appl Physiol 24:373): tips 1; highest daughter + 1.
    - Horton (1945, Bull Geol Soc Am 56:275): as Strahler, then each main stem keeps its order up to
      its source. The stem goes on into the daughter of highest Strahler order, among equals the
      widest, then the first.
    - Magnitude (Shreve 1966, J Geol 74:17): number of tips beyond the segment.
    - Generation: junctions between the root and the segment.

    Parameters
    ----------
    parent : (m,) array_like of int
        Parent segment of each, -1 at a root.
    diameter_um : (m,) array_like, optional
        Diameters, for Horton's stems alone.

    Returns
    -------
    TopologicalOrders
        One array a rule.

    Raises
    ------
    UnusableInputError
        If the parents hold a cycle or a number outside the tree.

    Examples
    --------
    A root with two daughters, one of which has two of its own:

    >>> topological_orders([-1, 0, 0, 1, 1]).strahler.tolist()
    [2, 2, 1, 1, 1]
    """
    above = checked_parent(parent)
    order = walking_order(above)
    m = len(above)
    strahler, horsfield, magnitude, generation = (np.zeros(m, np.int64) for _ in range(4))
    kernels.orders_up(above, order, strahler, horsfield, magnitude)
    kernels.generations(above, order, generation)
    width = np.zeros(m) if diameter_um is None else np.asarray(diameter_um, dtype=np.float64)
    horton = _keep_stems(above, order, strahler, width)
    return TopologicalOrders(strahler, horsfield, horton, magnitude, generation)


def checked_parent(parent: ArrayLike) -> np.ndarray:
    """Return the parents as contiguous int64.

    Parameters
    ----------
    parent : (m,) array_like of int
        Parent segment of each, -1 at a root.

    Returns
    -------
    (m,) int64 array
        The same numbers.

    Raises
    ------
    UnusableInputError
        If a number is below -1 or no segment's.

    Examples
    --------
    >>> checked_parent([-1, 0]).dtype
    dtype('int64')
    """
    above = np.ascontiguousarray(parent, dtype=np.int64)
    bad = above[(above < -1) | (above >= len(above))]
    if len(bad):
        msg = f"parent: found {int(bad[0])}, expected -1 or a segment from 0 to {len(above) - 1}"
        raise UnusableInputError(msg)
    return above


def walking_order(parent: ArrayLike) -> np.ndarray:
    """Return the segments so that every parent comes before its daughters.

    Parameters
    ----------
    parent : (m,) array_like of int
        Parent segment of each, -1 at a root.

    Returns
    -------
    (m,) int64 array
        Segment numbers; walk them backwards to go from the tips to the roots.

    Raises
    ------
    UnusableInputError
        If the parents hold a cycle or a number outside the tree.

    Examples
    --------
    >>> walking_order([1, -1, 0]).tolist()
    [1, 0, 2]
    """
    above = checked_parent(parent)
    order = np.empty(len(above), np.int64)
    placed = kernels.downward(above, order)
    if placed != len(above):
        ring = len(above) - placed
        msg = f"parent: found a ring of parents above {ring} segments, expected a tree or forest"
        raise UnusableInputError(msg)
    return order


def _keep_stems(
    parent: np.ndarray, order: np.ndarray, strahler: np.ndarray, width: np.ndarray
) -> np.ndarray:
    """Horton's orders: each heir takes the order of the stem that it carries on."""
    heir = np.full(len(parent), -1, np.int64)
    kernels.heirs(parent, order, strahler, width, heir)
    horton = strahler.copy()
    is_heir = np.zeros(len(parent), dtype=bool)
    is_heir[heir[heir >= 0]] = True
    kernels.keep_stems(parent, order, is_heir, horton)
    return horton
