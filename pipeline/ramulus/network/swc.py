"""SWC: centreline trees as text, one point a line (id, type, x, y, z, radius, parent)."""

from collections.abc import Iterator
from pathlib import Path

import numpy as np

from ..errors import UnusableInputError
from ..quantities import length_to_um
from .graph import NODE_KINDS, CentrelineGraph

__all__ = ["read_swc", "swc_text"]

_MAX_POINTS = 20_000_000


def read_swc(path: Path | str, *, unit: str = "um") -> CentrelineGraph:
    """Read an SWC tree or forest; unbranched points between nodes become one segment's points.

    The points without a parent become nodes of kind `inlet`.

    Steps of length zero are dropped. Soma and other types are not told apart.

    Parameters
    ----------
    unit : str
        Unit of the file's numbers.

    Raises
    ------
    UnusableInputError
        If a line is not seven numbers, ids repeat, a parent is missing, parents form a cycle, a radius
        is negative or a number is not finite: the line is named.
    """
    path = Path(path)
    scale = length_to_um(1.0, unit)
    identity, rows, line_of = _read_rows(path)
    order = np.argsort(identity, kind="stable")
    twice = np.flatnonzero(np.diff(identity[order]) == 0)
    if len(twice):
        where = line_of[order[twice[0] + 1]]
        msg = f"{path.name}: line {where} repeats the id {identity[order[twice[0]]]}, expected each id once"
        raise UnusableInputError(msg)
    parent_id = rows[:, 6].astype(np.int64)
    place = np.searchsorted(identity[order], parent_id)
    place = np.minimum(place, len(identity) - 1)
    parent = np.where(identity[order][place] == parent_id, order[place], -2)
    parent = np.where(parent_id == -1, -1, parent)
    if (parent == -2).any():
        k = int(np.flatnonzero(parent == -2)[0])
        msg = f"{path.name}: line {line_of[k]} names the parent {parent_id[k]}, which the file does not hold"
        raise UnusableInputError(msg)
    _refuse_cycles(parent, line_of, path.name)
    position = rows[:, [4, 3, 2]] * scale
    return _segments(position, rows[:, 5] * scale, parent, path.name)


def swc_text(graph: CentrelineGraph) -> str | None:
    """Return the graph as SWC in um, or None where it is no tree or forest.

    Each part is written from the first node of its first segment on; parents come before children.
    """
    from scipy.sparse import coo_array  # noqa: PLC0415 - heavy to import
    from scipy.sparse.csgraph import connected_components  # noqa: PLC0415

    a, b = graph.segment_nodes.T
    parts, _ = connected_components(coo_array((np.ones(len(a)), (a, b)), (graph.n_nodes,) * 2), directed=False)
    if graph.n_segments - graph.n_nodes + parts != 0:
        return None
    lines = ["# centreline tree; positions and radii in um; columns: id type x y z radius parent"]
    lines.extend(_swc_rows(graph))
    return "\n".join(lines) + "\n"


def _read_rows(path: Path) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rows, line_of = [], []
    try:
        with path.open(encoding="utf-8", errors="strict") as file:
            for number, line in enumerate(file, start=1):
                text = line.split("#", 1)[0].split()
                if not text:
                    continue
                try:
                    values = [float(v) for v in text]
                except ValueError:
                    values = []
                if len(values) != 7 or not np.isfinite(values).all():
                    msg = f"{path.name}: line {number} is {line.strip()[:60]!r}, expected id type x y z radius parent"
                    raise UnusableInputError(msg)
                if values[5] < 0:
                    msg = f"{path.name}: line {number} has the radius {values[5]}, expected a radius >= 0"
                    raise UnusableInputError(msg)
                rows.append(values)
                line_of.append(number)
                if len(rows) > _MAX_POINTS:
                    msg = f"{path.name}: more than {_MAX_POINTS} points; refused"
                    raise UnusableInputError(msg)
    except UnicodeDecodeError as broken:
        msg = f"{path.name}: not a text file ({broken.reason})"
        raise UnusableInputError(msg) from broken
    except OSError as broken:
        msg = f"{path.name}: cannot be read ({broken.strerror or broken})"
        raise UnusableInputError(msg) from broken
    if len(rows) < 2:
        msg = f"{path.name}: found {len(rows)} points, expected at least two"
        raise UnusableInputError(msg)
    table = np.array(rows)
    return table[:, 0].astype(np.int64), table, np.array(line_of)


def _refuse_cycles(parent: np.ndarray, line_of: np.ndarray, name: str) -> None:
    """Points that never reach a root, following parents by doubling, lie on a cycle."""
    jump = np.where(parent < 0, np.arange(len(parent)), parent)
    for _ in range(int(np.ceil(np.log2(len(parent) + 1))) + 1):
        jump = jump[jump]
    lost = parent[jump] >= 0
    if lost.any():
        msg = f"{name}: line {line_of[np.flatnonzero(lost)[0]]} lies on a cycle of parents, expected a tree"
        raise UnusableInputError(msg)


def _segments(position: np.ndarray, radius: np.ndarray, parent: np.ndarray, name: str) -> CentrelineGraph:
    position, radius, parent = _without_zero_steps(position, radius, parent)
    n = len(parent)
    children = np.bincount(parent[parent >= 0], minlength=n)
    is_node = (children != 1) | (parent < 0)
    node_number = np.full(n, -1)
    node_number[is_node] = np.arange(is_node.sum())
    ends, lines, radii = [], [], []
    for tip in np.flatnonzero(is_node & (parent >= 0)).tolist():
        chain = [tip]
        while True:
            up = int(parent[chain[-1]])
            chain.append(up)
            if is_node[up]:
                break
        chain.reverse()
        ends.append((node_number[chain[0]], node_number[tip]))
        lines.append(position[chain])
        # The first point's radius is the parent vessel's: the branch's own starts with its next point.
        own = radius[chain].copy()
        if parent[chain[0]] >= 0 and len(chain) > 2:
            own[0] = own[1]
        elif parent[chain[0]] >= 0:
            own[0] = own[-1]
        radii.append(own)
    if not ends:
        msg = f"{name}: all points coincide, expected a tree with length"
        raise UnusableInputError(msg)
    radii = [np.where(r > 0, r, np.nan) for r in radii]
    graph = CentrelineGraph.from_polylines(position[is_node], ends, lines, radii)
    kind = graph.node_kind.copy()
    kind[parent[is_node] < 0] = NODE_KINDS.index("inlet")
    return graph.replace(node_kind=kind)


def _without_zero_steps(position, radius, parent):  # noqa: ANN001, ANN202
    """Merge a point into its parent where both lie at one place."""
    has = parent >= 0
    step = np.ones(len(parent))
    step[has] = np.linalg.norm(position[has] - position[parent[has]], axis=1)
    same = has & (step == 0)
    target = np.where(same, parent, np.arange(len(parent)))
    while (target != target[target]).any():
        target = target[target]
    keep = ~same
    number = np.cumsum(keep) - 1
    new_parent = np.where(parent >= 0, number[target[np.maximum(parent, 0)]], -1)
    return position[keep], radius[keep], new_parent[keep]


def _swc_rows(graph: CentrelineGraph) -> Iterator[str]:
    touching: list[list[int]] = [[] for _ in range(graph.n_nodes)]
    for segment, (a, b) in enumerate(graph.segment_nodes.tolist()):
        touching[a].append(segment)
        touching[b].append(segment)
    written = np.full(graph.n_nodes, -1, dtype=np.int64)
    done = np.zeros(graph.n_segments, dtype=bool)
    count = 0

    def row(position: np.ndarray, radius: float, parent: int) -> str:
        nonlocal count
        count += 1
        z, y, x = (format(v, ".6g") for v in position.tolist())
        size = format(radius, ".6g") if np.isfinite(radius) else "0"
        return f"{count} 0 {x} {y} {z} {size} {parent}"

    for start in graph.segment_nodes[:, 0].tolist():
        if written[start] >= 0:
            continue
        first = touching[start][0]
        points = graph.points_of(first)
        at = points.start if graph.segment_nodes[first, 0] == start else points.stop - 1
        yield row(graph.node_position_um[start], float(graph.point_radius_um[at]), -1)
        written[start] = count
        queue = [start]
        while queue:
            node = queue.pop(0)
            for segment in touching[node]:
                if done[segment]:
                    continue
                done[segment] = True
                points = graph.points_of(segment)
                forward = graph.segment_nodes[segment, 0] == node
                index = np.arange(points.start, points.stop)
                index = index if forward else index[::-1]
                last = int(written[node])
                for k in index[1:].tolist():
                    yield row(graph.point_position_um[k], float(graph.point_radius_um[k]), last)
                    last = count
                other = int(graph.segment_nodes[segment, 1 if forward else 0])
                written[other] = count
                queue.append(other)
