"""Orders that mean the same in every sample: cuts found once on the whole cohort, then frozen."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from ..tree.diameter_orders import OrderSettings, diameter_orders
from ..tree.elements import elements, order_table
from .values import numbers

__all__ = ["PooledOrders", "pooled_orders"]


@dataclass(frozen=True, slots=True)
class PooledOrders:
    """The frozen cuts and, by sample, the order table that they give.

    Parameters
    ----------
    cuts_um : (k,) float
        Diameters that part the orders, increasing.
    tables : dict
        Order tables by sample; the columns that flow gives hold the resistance share alone.
    note : str
        What the iteration had to say; empty where it settled.
    """

    cuts_um: np.ndarray
    tables: dict[str, pd.DataFrame]
    note: str


def pooled_orders(segments: Mapping[str, pd.DataFrame]) -> PooledOrders:
    """Order the vessels of all samples as one forest, freeze the cuts, order each sample by them.

    Cuts that each sample finds for itself move with what its image shows, so that order 3 of one
    animal is not order 3 of another. Here the diameter-defined iteration (Kassab 1993, Am J Physiol
    265:H350) runs once over the trees of the whole cohort; each segment weighs the same.

    Parameters
    ----------
    segments : mapping
        `segments.csv` by sample, as text or numbers; segments without an order are left out.

    Returns
    -------
    PooledOrders
        With empty cuts and tables where no sample has an ordered segment.

    Examples
    --------
    >>> table = pd.DataFrame({"node_a": [0, 1, 1], "node_b": [1, 2, 3], "order": [2, 1, 1],
    ...     "radius_um": [10.0, 5.0, 5.0], "length_um": 100.0, "resistance_share": ""})
    >>> pooled_orders({"m1": table, "m2": table}).cuts_um
    array([15.])
    """
    trees = {sample: _tree(table) for sample, table in segments.items()}
    trees = {sample: tree for sample, tree in trees.items() if len(tree.parent)}
    if not trees:
        return PooledOrders(np.zeros(0), {}, "no sample has an ordered segment")
    offsets = np.cumsum([0, *(len(tree.parent) for tree in trees.values())])
    parents = [
        np.where(tree.parent >= 0, tree.parent + offset, -1)
        for tree, offset in zip(trees.values(), offsets, strict=False)
    ]
    diameters = [tree.diameter_um for tree in trees.values()]
    pooled = diameter_orders(
        np.concatenate(parents), np.concatenate(diameters), settings=OrderSettings()
    )
    cuts = tuple(float(cut) for cut in pooled.cuts_um)
    tables = {sample: _table(tree, cuts) for sample, tree in trees.items()}
    return PooledOrders(np.array(cuts), tables, pooled.note)


@dataclass(frozen=True, slots=True)
class _Tree:
    """The ordered segments of one sample: parent (-1 at a root), diameter, length, share."""

    parent: np.ndarray
    diameter_um: np.ndarray
    length_um: np.ndarray
    share: np.ndarray


def _tree(table: pd.DataFrame) -> _Tree:
    """Read a tree from segments; `node_a` is upstream: a parent ends where its daughters begin."""
    radius = numbers(table, "radius_um")
    kept = np.isfinite(numbers(table, "order")) & (radius > 0)
    start, end = (numbers(table, name)[kept] for name in ("node_a", "node_b"))
    diameter = 2 * radius[kept]
    # Where several vessels run into a node (a loop), the widest is the parent.
    into: dict[float, int] = {}
    for k in np.argsort(diameter, kind="stable"):
        into[end[k]] = int(k)
    parent = np.array([into.get(node, -1) for node in start], dtype=np.int64)
    return _Tree(
        _without_cycles(parent),
        diameter,
        numbers(table, "length_um")[kept],
        numbers(table, "resistance_share")[kept],
    )


def _without_cycles(parent: np.ndarray) -> np.ndarray:
    """Cut each ring of parents at one of its segments, which becomes a root."""
    state = np.zeros(len(parent), dtype=np.int8)  # 1: on the present way up, 2: done
    parent = parent.copy()
    for k in range(len(parent)):
        way, at = [], k
        while at >= 0 and state[at] == 0:
            state[at] = 1
            way.append(at)
            at = int(parent[at])
        if at >= 0 and state[at] == 1:
            parent[way[-1]] = -1
        state[way] = 2
    return parent


def _table(tree: _Tree, cuts: tuple[float, ...]) -> pd.DataFrame:
    """Return a sample's order table under the frozen cuts."""
    settings = OrderSettings(cuts_um=cuts)
    order = diameter_orders(tree.parent, tree.diameter_um, settings=settings).order
    found = elements(tree.parent, order, tree.length_um, tree.diameter_um)
    table = order_table(found, order, tree.length_um, tree.diameter_um)
    if np.isfinite(tree.share).any():
        share = np.bincount(order, np.nan_to_num(tree.share))
        table["resistance_share"] = share[table["order"].to_numpy()]
    return table
