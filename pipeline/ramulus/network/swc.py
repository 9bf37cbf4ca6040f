"""SWC: centreline trees as text, one point a line (id, type, x, y, z, radius, parent).

The format is that of Cannon et al. 1998, J Neurosci Methods 84:49-54 (recalled from memory).
"""

from collections import deque
from collections.abc import Iterable, Iterator
from pathlib import Path

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from ..errors import UnusableInputError
from ..quantities import length_to_um
from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["read_swc", "swc_text"]

_MAX_POINTS = 20_000_000
_LARGEST_ID = 2**53  # beyond it a float no longer tells neighbours apart
_HEADER = "# centreline tree; positions and radii in um; columns: id type x y z radius parent"


def read_swc(path: Path | str, *, unit: str = "um") -> CentrelineGraph:
    r"""Read an SWC tree or forest; unbranched points between nodes become one segment's points.

    The points without a parent become nodes of kind `inlet`. A point at its parent's place is
    merged into it, and so is an end that has no length. At a branching a branch takes its radius
    from its own next point on, since the point shared with its parent carries the parent's. A
    radius of 0 means that none is known (NaN). The types in the second column are not told apart.

    Parameters
    ----------
    path : path
        The file.
    unit : str
        Unit of the file's numbers, which the format does not hold.

    Returns
    -------
    CentrelineGraph
        Segments point away from the root.

    Raises
    ------
    UnusableInputError
        If a line is not seven finite numbers, an id repeats or is no whole number, a parent is
        missing, parents form a cycle, a radius is negative, or no step has a length; the line is
        named.

    Examples
    --------
    >>> from tempfile import TemporaryDirectory
    >>> with TemporaryDirectory() as folder:
    ...     file = Path(folder) / "fork.swc"
    ...     rows = ["1 0 0 0 0 2 -1", "2 0 9 0 0 2 1", "3 0 9 4 0 1.6 2", "4 0 9 0 4 1.6 2"]
    ...     _ = file.write_text("\n".join(rows))
    ...     read_swc(file, unit="mm").segment_length_um().tolist()
    [9000.0, 4000.0, 4000.0]
    """
    path = Path(path)
    scale = length_to_um(1.0, unit)
    rows, line_of = _read_rows(path)
    identity, parent_id = _whole_ids(rows, line_of, path.name)
    parent = _parents(identity, parent_id, line_of, path.name)
    _refuse_cycles(parent, line_of, path.name)
    return _as_graph(rows[:, [4, 3, 2]] * scale, rows[:, 5] * scale, parent, path.name)


def swc_text(graph: CentrelineGraph) -> str | None:
    """Return the graph as SWC in um, or None where it is no tree or forest.

    Every part starts at its inlet, else at a node that no segment leads to; parents stand before
    their children. An unknown radius is written as 0.

    Examples
    --------
    >>> line = CentrelineGraph.from_polylines(
    ...     [[0, 0, 0], [0, 0, 9]], [[0, 1]], [[[0, 0, 0], [0, 0, 9]]], [[2.5, 2.5]]
    ... )
    >>> print(swc_text(line).splitlines()[2])
    2 0 9 0 0 2.5 1
    """
    ends = graph.segment_nodes.T
    links = coo_array((np.ones(graph.n_segments), ends), (graph.n_nodes, graph.n_nodes))
    parts, _ = connected_components(links, directed=False)
    if graph.n_segments - graph.n_nodes + parts != 0:
        return None
    return "\n".join([_HEADER, *_swc_rows(graph)]) + "\n"


def _read_rows(path: Path) -> tuple[np.ndarray, np.ndarray]:
    rows, line_of = [], []
    try:
        # Comments may be in any encoding, numbers are not.
        with path.open(encoding="utf-8-sig", errors="replace") as file:
            for number, values in _numbered(file, path.name):
                rows.append(values)
                line_of.append(number)
    except OSError as broken:
        msg = f"{path.name}: cannot be read ({broken.strerror or broken})"
        raise UnusableInputError(msg) from broken
    if len(rows) < 2:
        msg = f"{path.name}: found {len(rows)} points, expected at least two"
        raise UnusableInputError(msg)
    return np.array(rows), np.array(line_of)


def _numbered(lines: Iterable[str], name: str) -> Iterator[tuple[int, list[float]]]:
    """Yield line numbers with the seven values of the lines that hold a point."""
    count = 0
    for number, line in enumerate(lines, start=1):
        text = line.split("#", 1)[0].split()
        if not text:
            continue
        try:
            values = [float(v) for v in text]
        except ValueError:
            values = []
        if len(values) != 7 or not np.isfinite(values).all():
            shown = ascii(line.strip()[:60])
            msg = f"{name}: line {number} is {shown}, expected id type x y z radius parent"
            raise UnusableInputError(msg)
        if values[5] < 0:
            msg = f"{name}: line {number} has the radius {values[5]}, expected a radius >= 0"
            raise UnusableInputError(msg)
        count += 1
        if count > _MAX_POINTS:
            msg = f"{name}: more than {_MAX_POINTS} points, expected fewer; read a part"
            raise UnusableInputError(msg)
        yield number, values


def _whole_ids(rows: np.ndarray, line_of: np.ndarray, name: str) -> tuple[np.ndarray, np.ndarray]:
    ids = rows[:, [0, 6]]
    bad = np.argwhere((ids != np.floor(ids)) | (np.abs(ids) > _LARGEST_ID))
    if len(bad):
        k, column = bad[0]
        which = ("id", "parent")[column]
        found = ids[k, column]
        msg = f"{name}: line {line_of[k]} has the {which} {found}, expected a whole number"
        raise UnusableInputError(msg)
    identity, parent_id = ids.astype(np.int64).T
    return identity, parent_id


def _parents(
    identity: np.ndarray, parent_id: np.ndarray, line_of: np.ndarray, name: str
) -> np.ndarray:
    """Return the row of each point's parent, -1 at a root."""
    order = np.argsort(identity, kind="stable")
    ids = identity[order]
    twice = np.flatnonzero(np.diff(ids) == 0)
    if len(twice):
        line = line_of[order[twice[0] + 1]]
        msg = f"{name}: line {line} repeats the id {ids[twice[0]]}, expected each id once"
        raise UnusableInputError(msg)
    place = np.minimum(np.searchsorted(ids, parent_id), len(ids) - 1)
    missing = np.flatnonzero((ids[place] != parent_id) & (parent_id != -1))
    if len(missing):
        k = missing[0]
        msg = (
            f"{name}: line {line_of[k]} names the parent {parent_id[k]}, expected the id of a point"
            " of the file, or -1"
        )
        raise UnusableInputError(msg)
    return np.where(parent_id == -1, -1, order[place])


def _refuse_cycles(parent: np.ndarray, line_of: np.ndarray, name: str) -> None:
    """Points that never reach a root, following parents by doubling, lie on or below a cycle."""
    jump = np.where(parent < 0, np.arange(len(parent)), parent)
    for _ in range(int(np.ceil(np.log2(len(parent) + 1))) + 1):
        jump = jump[jump]
    lost = np.flatnonzero(parent[jump] >= 0)
    if len(lost):
        line = line_of[lost[0]]
        msg = f"{name}: the parents of line {line} form a cycle, expected that they reach a root"
        raise UnusableInputError(msg)


def _as_graph(
    position: np.ndarray, radius: np.ndarray, parent: np.ndarray, name: str
) -> CentrelineGraph:
    position, radius, parent = _without_zero_steps(position, radius, parent)
    radius = np.where(radius > 0, radius, np.nan)
    children = np.bincount(parent[parent >= 0], minlength=len(parent))
    is_node = (children != 1) | (parent < 0)
    number = np.cumsum(is_node) - 1
    chains = [_chain(int(tip), parent, is_node) for tip in np.flatnonzero(is_node & (parent >= 0))]
    if not chains:
        msg = f"{name}: all points coincide with their parents, expected a tree with length"
        raise UnusableInputError(msg)
    ends = [(number[chain[0]], number[chain[-1]]) for chain in chains]
    radii = [radius[_own(chain, children)] for chain in chains]
    graph = CentrelineGraph.from_polylines(
        position[is_node], ends, [position[chain] for chain in chains], radii
    )
    kind = np.where(parent[is_node] < 0, NODE_KINDS.index("inlet"), graph.node_kind)
    # A root without a step is no vessel.
    return graph.replace(node_kind=kind.astype(np.int8)).select_segments(np.arange(len(chains)))


def _without_zero_steps(
    position: np.ndarray, radius: np.ndarray, parent: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Merge a point into its parent where both lie at one place."""
    above = np.maximum(parent, 0)
    same = (parent >= 0) & (position == position[above]).all(axis=1)
    target = np.where(same, parent, np.arange(len(parent)))
    while (target != target[target]).any():
        target = target[target]
    number = np.cumsum(~same) - 1
    merged = np.where(parent >= 0, number[target[above]], -1)
    return position[~same], radius[~same], merged[~same]


def _chain(tip: int, parent: np.ndarray, is_node: np.ndarray) -> list[int]:
    """Return the points from the next node above down to the given one."""
    chain = [tip, int(parent[tip])]
    while not is_node[chain[-1]]:
        chain.append(int(parent[chain[-1]]))
    return chain[::-1]


def _own(chain: list[int], children: np.ndarray) -> list[int]:
    """Return the points that a segment takes its radii from."""
    return [chain[1], *chain[1:]] if children[chain[0]] > 1 else chain


def _swc_rows(graph: CentrelineGraph) -> Iterator[str]:
    touching = _segments_at(graph)
    written = np.zeros(graph.n_nodes, dtype=np.int64)  # row numbers start at 1
    done = np.zeros(graph.n_segments, dtype=bool)
    count = 0
    for start in _starts(graph).tolist():
        if written[start] or not touching[start]:
            continue
        count += 1
        written[start] = count
        at = _walked(graph, touching[start][0], start)[0]
        yield _row(count, graph.node_position_um[start], graph.point_radius_um[at], -1)
        queue = deque([start])
        while queue:
            node = queue.popleft()
            for segment in (s for s in touching[node] if not done[s]):
                done[segment] = True
                last = int(written[node])
                for k in _walked(graph, segment, node)[1:]:
                    count += 1
                    yield _row(count, graph.point_position_um[k], graph.point_radius_um[k], last)
                    last = count
                other = int(graph.segment_nodes[segment].sum()) - node
                written[other] = count
                queue.append(other)


def _segments_at(graph: CentrelineGraph) -> list[list[int]]:
    touching: list[list[int]] = [[] for _ in range(graph.n_nodes)]
    for segment, (a, b) in enumerate(graph.segment_nodes.tolist()):
        touching[a].append(segment)
        touching[b].append(segment)
    return touching


def _starts(graph: CentrelineGraph) -> np.ndarray:
    """Return all nodes: inlets first, then those that no segment leads to, then the others."""
    led_to = np.bincount(graph.segment_nodes[:, 1], minlength=graph.n_nodes) > 0
    inlet = graph.node_kind == NODE_KINDS.index("inlet")
    return np.argsort(np.where(inlet, 0, np.where(led_to, 2, 1)), kind="stable")


def _walked(graph: CentrelineGraph, segment: int, node: int) -> range:
    """Return a segment's points in order from one of its nodes."""
    points = graph.points_of(segment)
    if graph.segment_nodes[segment, 0] == node:
        return range(points.start, points.stop)
    return range(points.stop - 1, points.start - 1, -1)


def _row(number: int, position_um: np.ndarray, radius_um: float, parent: int) -> str:
    z, y, x = (format(v, ".9g") for v in position_um.tolist())
    size = format(radius_um, ".9g") if np.isfinite(radius_um) else "0"
    return f"{number} 0 {x} {y} {z} {size} {parent}"
