"""Kernels that find vessel ends on a first skeleton and lead them to the lumen's end."""

import heapq

import numba
import numpy as np

from ._simple_points import CENTRE, is_simple
from ._thin_kernels import neighbourhood, set_bit


@numba.njit(cache=True, nogil=True)
def geodesic(start, neighbour, position_um, sources):
    """Dijkstra from several sources: distance, the voxel before on the path, and the source."""
    n = len(start) - 1
    distance = np.full(n, np.inf)
    before = np.full(n, -1, dtype=np.int64)
    source = np.full(n, -1, dtype=np.int64)
    heap = [(0.0, np.int64(0)) for _ in range(0)]
    for s in sources:
        distance[s] = 0.0
        source[s] = s
        heapq.heappush(heap, (0.0, np.int64(s)))
    while len(heap) > 0:
        reached, i = heapq.heappop(heap)
        if reached > distance[i]:
            continue
        for k in range(start[i], start[i + 1]):
            j = neighbour[k]
            dz = position_um[i, 0] - position_um[j, 0]
            dy = position_um[i, 1] - position_um[j, 1]
            dx = position_um[i, 2] - position_um[j, 2]
            through = reached + np.sqrt(dz * dz + dy * dy + dx * dx)
            if through < distance[j]:
                distance[j] = through
                before[j] = i
                source[j] = source[i]
                heapq.heappush(heap, (through, np.int64(j)))
    return distance, before, source


@numba.njit(cache=True, nogil=True)
def accept_tips(
    tips, is_cap, is_tip_root, distance, before, start, neighbour, position_um, radius, marked,
    inside, spacing_um, protrusion,
):  # fmt: skip
    """Tell which candidate tips stand out from what is marked, in the order given.

    The path from a tip is followed back to the first marked voxel. A cap is accepted when it lies
    outside the inscribed ball there. A free tip is accepted when the lumen's end lies further
    outside the parent's wall than `protrusion` times the ball's radius, or times the branch's own
    diameter where that is more. The wall is the ball's, or what is found in the tip's direction
    from the marked line a little before and after. The path of an accepted tip is marked.
    """
    accepted = np.zeros(len(tips), dtype=np.bool_)
    queue = np.empty(_NEARBY, dtype=np.int64)
    walls = np.empty((2, _NEARBY), dtype=np.float64)
    for k in range(len(tips)):
        tip = tips[k]
        base = tip
        while base >= 0 and not marked[base]:
            base = before[base]
        if base < 0 or base == tip:
            continue
        ball = radius[base]
        run = distance[tip] - distance[base]
        if before[base] < 0 and is_tip_root[base]:
            # The first path of a part without loops, from end to end: it has no parent but its own
            # widest place.
            widest = ball
            i = tip
            while i != base:
                widest = max(widest, radius[i])
                i = before[i]
            beyond = run + radius[tip] + radius[base] - 2.0 * widest
            accepted[k] = run > widest if is_cap[k] else beyond > 2.0 * protrusion * widest
        elif is_cap[k]:
            accepted[k] = run > ball
        elif run + radius[tip] - ball > protrusion * ball:
            own = 0.0
            i = tip
            while i != base:
                if distance[i] - distance[base] > ball:
                    own = max(own, radius[i])
                i = before[i]
            needed = protrusion * max(ball, 2.0 * own)
            if run + radius[tip] - ball > needed:
                wall = wall_beside(
                    base, tip, 2.0 * own, start, neighbour, position_um, marked,
                    inside, spacing_um, queue, walls,
                )  # fmt: skip
                accepted[k] = run + radius[tip] - max(ball, wall) > needed
        if accepted[k]:
            i = tip
            while i != base:
                marked[i] = True
                i = before[i]
    return accepted


_NEARBY = 64


@numba.njit(cache=True, nogil=True)
def wall_beside(
    base, tip, apart, start, neighbour, position_um, marked, inside, spacing_um, queue, walls
):
    """Distance from the marked line to the wall in the direction of a tip, beside its base.

    It is taken from marked voxels between one and two times `apart` from the base: the median of
    each of the line's two sides, and of these the smaller. On one side of a slanting branch the
    rays may run down the branch itself; beside a mere bulge both sides reach as far.
    """
    queue[0] = base
    length, at = 1, 0
    side = np.zeros(3)
    found = np.zeros(2, dtype=np.int64)
    while at < length:
        i = queue[at]
        at += 1
        away = _distance(position_um, i, base)
        if away > apart:
            along = 0.0
            for axis in range(3):
                off = position_um[i, axis] - position_um[base, axis]
                if found[0] == 0:
                    side[axis] = off
                along += off * side[axis]
            which = 0 if along >= 0.0 else 1
            if found[which] < _NEARBY:
                wall = _ray(inside, position_um, i, base, tip, spacing_um)
                _insert(walls[which], found[which], wall)
                found[which] += 1
        if away > 2.0 * apart:
            continue
        for k in range(start[i], start[i + 1]):
            j = neighbour[k]
            known = not marked[j]
            for m in range(length):
                known = known or queue[m] == j
            if not known and length < _NEARBY:
                queue[length] = j
                length += 1
    least = 0.0
    for which in range(2):
        n = found[which]
        if n > 0:
            middle = walls[which, (n - 1) // 2]
            least = middle if which == 0 else min(least, middle)
    return least


@numba.njit(cache=True, nogil=True)
def _insert(values, count, value):
    """Put a value in its place among `count` sorted ones."""
    k = count
    while k > 0 and values[k - 1] > value:
        values[k] = values[k - 1]
        k -= 1
    values[k] = value


@numba.njit(cache=True, nogil=True)
def _ray(inside, position_um, i, base, tip, spacing_um):
    """Distance from voxel i to the wall in the direction from base to tip, no further than that."""
    length = _distance(position_um, base, tip)
    stride = 0.5 * min(spacing_um[0], spacing_um[1], spacing_um[2])
    travelled = 0.0
    place = np.empty(3, dtype=np.int64)
    while travelled < length:
        within = True
        for axis in range(3):
            step = (position_um[tip, axis] - position_um[base, axis]) / length
            at = (position_um[i, axis] + travelled * step) / spacing_um[axis]
            place[axis] = int(np.floor(at + 0.5))
            within = within and 0 <= place[axis] < inside.shape[axis]
        if not within or not inside[place[0], place[1], place[2]]:
            break
        travelled += stride
    return travelled


@numba.njit(cache=True, nogil=True)
def _distance(position_um, i, j):
    square = 0.0
    for axis in range(3):
        square += (position_um[i, axis] - position_um[j, axis]) ** 2
    return np.sqrt(square)


_STEEP = 0.3


@numba.njit(cache=True, nogil=True)
def blunt_ends(tips, start, neighbour, position_um, radius, reach):
    """Find where each free end's axis stops and which way it points.

    From the tip inwards, while the path does not fork and for `reach` radii, the axis' end is the
    place with the greatest radius less half its distance from the tip: the path towards the edge of
    a blunt end loses radius faster than that, a tapering vessel more slowly. Returns the voxel of
    the end and one about two radii further in, -1 where the path has no such place.
    """
    end = np.full(len(tips), -1, dtype=np.int64)
    inner = np.full(len(tips), -1, dtype=np.int64)
    for k in range(len(tips)):
        last, i = np.int64(-1), tips[k]
        run, best_run, best, widest = 0.0, 0.0, -np.inf, 0.0
        while i >= 0:
            widest = max(widest, radius[i])
            if radius[i] - _STEEP * run > best:
                best, best_run = radius[i] - _STEEP * run, run
                end[k] = i
                inner[k] = -1
            elif inner[k] < 0 and run - best_run >= 2.0 * radius[end[k]]:
                inner[k] = i
            if run > reach * widest:
                break
            following = np.int64(-1)
            if start[i + 1] - start[i] <= 2:
                for m in range(start[i], start[i + 1]):
                    if neighbour[m] != last:
                        following = neighbour[m]
            if following >= 0:
                step = 0.0
                for axis in range(3):
                    step += (position_um[i, axis] - position_um[following, axis]) ** 2
                run += np.sqrt(step)
            last, i = i, following
        if inner[k] < 0 and last != end[k]:
            inner[k] = last
    return end, inner


@numba.njit(cache=True, nogil=True)
def run_out(inside, words, end_um, direction_um, radius_um, spacing_um, row_words, plane_words):
    """Set the voxels on each straight line from an end outwards, while it stays in the lumen.

    A line also stops where another voxel would change the topology, or after three radii. Returns
    the addresses that were set.
    """
    added = np.empty(64, dtype=np.int64)
    count = 0
    stride = 0.5 * min(spacing_um[0], spacing_um[1], spacing_um[2])
    unit = np.empty(3)
    for k in range(len(end_um)):
        square = 0.0
        for axis in range(3):
            square += direction_um[k, axis] ** 2
        for axis in range(3):
            unit[axis] = direction_um[k, axis] / np.sqrt(square)
        last = np.int64(-1)
        for step in range(int(3.0 * radius_um[k] / stride) + 1):
            z = int(np.floor((end_um[k, 0] + step * stride * unit[0]) / spacing_um[0] + 0.5))
            y = int(np.floor((end_um[k, 1] + step * stride * unit[1]) / spacing_um[1] + 0.5))
            x = int(np.floor((end_um[k, 2] + step * stride * unit[2]) / spacing_um[2] + 0.5))
            if not (0 <= z < inside.shape[0] and 0 <= y < inside.shape[1]):
                break
            if not (0 <= x < inside.shape[2] and inside[z, y, x]):
                break
            address = 32 * ((z + 1) * plane_words + (y + 1) * row_words) + x + 1
            if address == last:
                continue
            last = address
            if step == 0:
                continue
            code = neighbourhood(words, address, row_words, plane_words)
            if code & CENTRE or not is_simple(code):
                break
            set_bit(words, address)
            if count == len(added):
                longer = np.empty(2 * count, dtype=np.int64)
                for i in range(count):
                    longer[i] = added[i]
                added = longer
            added[count] = address
            count += 1
    return added[:count]
