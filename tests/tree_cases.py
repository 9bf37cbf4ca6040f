"""Trees for the tests: worked examples, random ones, graphs of them, trees grown from tables."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from hypothesis import strategies as st

from ramulus.network.graph import CentrelineGraph

REFERENCE = Path(__file__).parent / "reference"


def table(name):
    return pd.read_csv(REFERENCE / f"{name}.csv")


def rows_of(name, **values):
    """Return the rows of a reference table that hold the values."""
    frame = table(name)
    for column, value in values.items():
        frame = frame[frame[column] == value]
    return frame


def worked_tree():
    """Return the worked tree of thirteen segments, numbered from 0; columns as in its table."""
    frame = table("worked_tree")
    frame["parent"] = frame["parent"].fillna(0).astype(int) - 1
    return frame


@st.composite
def parents(draw, *, most=40, roots=3):
    """Draw a forest: each segment's parent, in shuffled numbering."""
    n = draw(st.integers(1, most))
    above = [-1]
    for k in range(1, n):
        may_root = sum(p < 0 for p in above) < roots
        above.append(draw(st.integers(-1 if may_root else 0, k - 1)))
    number = np.array(draw(st.permutations(range(n))))
    return relabelled(np.array(above), number)


def relabelled(parent, number):
    """Return the parents after segment k has become segment number[k]."""
    out = np.full(len(parent), -1)
    out[number] = np.where(parent >= 0, number[parent], -1)
    return out


def daughters_of(parent):
    return [np.flatnonzero(parent == k).tolist() for k in range(len(parent))]


def graph_of(parent, diameter_um, length_um, *, seed=0, points=5, **fields):
    """Lay a tree out in space: straight segments of the lengths given, in random directions."""
    random = np.random.default_rng(seed)
    m = len(parent)
    roots = np.flatnonzero(np.asarray(parent) < 0)
    place = {int(r): 1000.0 * k * np.ones(3) for k, r in enumerate(roots)}
    nodes = list(place.values())
    start_of = {int(r): k for k, r in enumerate(roots)}
    ends, lines, radii, number = [None] * m, [None] * m, [None] * m, {}
    left = list(roots)
    while left:
        k = int(left.pop())
        begin = start_of[k] if parent[k] < 0 else number[parent[k]]
        step = random.normal(size=3)
        far = nodes[begin] + length_um[k] * step / np.linalg.norm(step)
        number[k] = len(nodes)
        nodes.append(far)
        ends[k] = (begin, number[k])
        lines[k] = np.linspace(nodes[begin], far, points)
        radii[k] = np.full(points, diameter_um[k] / 2)
        left.extend(np.flatnonzero(np.asarray(parent) == k))
    return CentrelineGraph.from_polylines(nodes, ends, lines, radii, **fields)


def network(node_um, ends, radius_um=1.0, *, points=4, **fields):
    """Lay a network of straight segments."""
    node_um = np.asarray(node_um, dtype=float)
    radius = np.broadcast_to(np.asarray(radius_um, dtype=float), (len(ends),))
    lines = [np.linspace(node_um[a], node_um[b], points) for a, b in ends]
    radii = [np.full(points, r) for r in radius]
    return CentrelineGraph.from_polylines(node_um, ends, lines, radii, **fields)


def solve_flow(graph, sources):
    """Solve unit resistors densely: sources at 1, every other free end at 0; flow from a to b."""
    n = graph.n_nodes
    a, b = graph.segment_nodes.T
    fixed = np.zeros(n, dtype=bool)
    pressure = np.zeros(n)
    fixed[graph.node_degree() == 1] = True
    fixed[sources] = True
    pressure[sources] = 1.0
    laplacian = np.zeros((n, n))
    for u, v in zip(a, b, strict=True):
        laplacian[u, u] += 1
        laplacian[v, v] += 1
        laplacian[u, v] -= 1
        laplacian[v, u] -= 1
    free = ~fixed
    right = -laplacian[np.ix_(free, fixed)] @ pressure[fixed]
    pressure[free] = np.linalg.lstsq(laplacian[np.ix_(free, free)], right, rcond=None)[0]
    flow = pressure[a] - pressure[b]
    return np.where(np.abs(flow) < 1e-12, 0.0, flow)


@dataclass(frozen=True)
class Grown:
    """A tree grown from a table: parents, and what each segment's order and element should be."""

    parent: np.ndarray
    order: np.ndarray
    element: np.ndarray


def grow(matrix, lowest, random):
    """Grow a tree from a connectivity matrix (index [m - 1, n - 1]) down to the lowest order.

    Daughters are dealt out evenly, so that their numbers are those of the matrix up to rounding.
    Same-order daughters spring from the side, the two highest of the others from the far end.
    """
    top = len(matrix)
    parent, order, element = [], [], []
    # Per order: the segment that each of its elements springs from.
    waiting = {n: [] for n in range(lowest, top + 1)}
    waiting[top].append(-1)
    number = 0
    for n in range(top, lowest - 1, -1):
        mean, shift = matrix[lowest - 1 : n, n - 1], random.random(n - lowest + 1)
        for k, spring in enumerate(waiting[n]):  # grows by the same-order daughters
            dealt = np.floor((k + 1) * mean + shift) - np.floor(k * mean + shift)
            lower = np.repeat(np.arange(lowest, n), dealt[:-1].astype(int)).tolist()
            side = lower[:-2] + [n] * int(dealt[-1])
            random.shuffle(side)
            first = len(parent)
            parent += [spring, *range(first, first + len(side))]
            order += [n] * (len(side) + 1)
            element += [number] * (len(side) + 1)
            number += 1
            for j, m in enumerate(side):
                waiting[m].append(first + j)
            for m in lower[-2:]:
                waiting[m].append(first + len(side))
    return Grown(np.array(parent), np.array(order), np.array(element))


def drawn_diameters(order, mean, sd, random):
    """Draw normal diameters by order (index order - 1) that stay between the published cuts."""
    cuts = 0.5 * ((mean[:-1] + sd[:-1]) + (mean[1:] - sd[1:]))
    low, high = np.append(0.05 * mean[0], cuts), np.append(cuts, np.inf)
    out = np.full(len(order), np.nan)
    left = np.arange(len(order))
    while len(left):
        n = order[left] - 1
        out[left] = random.normal(mean[n], sd[n])
        left = left[(out[left] <= low[n]) | (out[left] > high[n])]
    return out


def matrix_of(frame, value):
    """Turn long rows of daughter and parent orders into a matrix, without capillaries (order 0)."""
    frame = frame[frame["daughter_order"] > 0]
    top = int(frame["parent_order"].max())
    matrix = np.zeros((top, top))
    matrix[frame["daughter_order"] - 1, frame["parent_order"] - 1] = frame[value]
    return matrix
