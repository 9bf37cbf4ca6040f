"""Topological orders of a rooted tree given as a parent array."""

import numpy as np

from ..errors import UnusableInputError
from . import _order_kernels as kernels

__all__ = ["TopologicalOrders", "topological_orders", "walking_order"]

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class TopologicalOrders:
    """Orders of each segment by four rules."""

    strahler: np.ndarray
    horsfield: np.ndarray
    magnitude: np.ndarray
    generation: np.ndarray


def topological_orders(parent: np.ndarray) -> TopologicalOrders:
    """Order the segments of a tree or forest.

    Strahler (1952, Bull Geol Soc Am 63:1117): tips 1, two or more highest daughters n give n + 1, else
    the highest. Horsfield (Horsfield & Cumming 1968, J Appl Physiol 24:373): highest daughter + 1.
    Magnitude (Shreve 1966, J Geol 74:17): number of tips above. Generation: root 0.

    Parameters
    ----------
    parent : (m,) int array
        Parent segment of each, -1 at a root.

    Raises
    ------
    UnusableInputError
        If the parents hold a cycle.

    Examples
    --------
    A root with two daughters, one of which has two of its own:

    >>> topological_orders(np.array([-1, 0, 0, 1, 1])).strahler.tolist()
    [2, 2, 1, 1, 1]
    """
    parent = np.ascontiguousarray(parent, dtype=np.int64)
    order = walking_order(parent)
    strahler, horsfield, magnitude = (np.zeros(len(parent), np.int64) for _ in range(3))
    kernels.orders_up(parent, order, strahler, horsfield, magnitude)
    generation = np.zeros(len(parent), np.int64)
    for_children = order[parent[order] >= 0]
    _fill_generation(parent, for_children, generation)
    return TopologicalOrders(strahler, horsfield, magnitude, generation)


def walking_order(parent: np.ndarray) -> np.ndarray:
    """Return the segments so that every parent comes before its daughters."""
    parent = np.ascontiguousarray(parent, dtype=np.int64)
    order = np.empty(len(parent), np.int64)
    if kernels.downward(parent, order) != len(parent):
        msg = "parent: found a cycle of segments, expected a tree"
        raise UnusableInputError(msg)
    return order


def _fill_generation(parent: np.ndarray, order: np.ndarray, generation: np.ndarray) -> None:
    # Level by level: as many passes as the tree is deep, each vectorised.
    left = order
    ready = parent < 0
    level = 0
    while len(left):
        level += 1
        now = ready[parent[left]]
        generation[left[now]] = level
        ready_next = left[now]
        left = left[~now]
        ready = np.zeros(len(parent), bool)
        ready[ready_next] = True
