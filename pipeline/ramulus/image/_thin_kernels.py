"""Kernels of the thinning: voxels as single bits, removed one by one in a given order.

A volume is padded by an empty voxel all round and held in words of 32 voxels each. A word also
repeats the voxel before its first and the one after its last, so that any voxel and its two
neighbours along x lie in one word (bits 0 to 33 of 64). A voxel's address is its number in this
layout; the rows beside, above and below lie at fixed word distances, so a neighbourhood of 27 bits
comes from nine words and no coordinate is ever computed.
"""

import heapq

import numba
import numpy as np

from ._simple_points import CENTRE, is_simple

# A key holds, from the top: 15 bits of distance level, 40 of the hash of a block of 4 x 4 x 16
# voxels, 8 of the hash of the place within the block. Voxels of one block are thus removed close
# together in time, which keeps their words in the cache.
_LEVEL_SHIFT = 48
_ROUNDS = (0x9E3779B1, 0x85EBCA77, 0xC2B2AE3D)
TOP_LEVEL = (1 << 15) - 1


@numba.njit(cache=True, nogil=True)
def _shuffled(number, half):
    """Hash a number of 2 * half bits one to one (a Feistel network over its two halves)."""
    low = (1 << half) - 1
    left, right = number >> half, number & low
    for factor in _ROUNDS:
        left, right = right, left ^ (((right + 1) * factor >> 17) & low)
    return (left << half) | right


@numba.njit(cache=True, nogil=True)
def _unshuffled(number, half):
    """Undo `_shuffled`."""
    low = (1 << half) - 1
    left, right = number >> half, number & low
    for k in range(len(_ROUNDS)):
        factor = _ROUNDS[len(_ROUNDS) - 1 - k]
        left, right = right ^ (((left + 1) * factor >> 17) & low), left
    return (left << half) | right


@numba.njit(cache=True, nogil=True)
def order_keys(linear, distance_um, level_um, ny, nx):
    """Number each voxel for the order of removal: distance level, then a one-to-one hash of place.

    The hash depends on the voxel's place in the whole volume alone; no two voxels share a key.
    """
    keys = np.empty(len(linear), dtype=np.int64)
    blocks_y, blocks_x = (ny + 3) >> 2, (nx + 15) >> 4
    for i in range(len(linear)):
        row = linear[i] // nx
        z = row // ny
        y, x = row - z * ny, linear[i] - row * nx
        block = _shuffled(((z >> 2) * blocks_y + (y >> 2)) * blocks_x + (x >> 4), 20)
        inner = ((z & 3) << 6) | ((y & 3) << 4) | (x & 15)
        inner = _shuffled(inner ^ (block & 255), 4)
        level = min(np.int64(distance_um[i] / level_um + 0.5), TOP_LEVEL)
        keys[i] = (level << _LEVEL_SHIFT) | (block << 8) | inner
    return keys


@numba.njit(cache=True, nogil=True)
def addresses_of_keys(keys, ny, nx, row_bits):
    """Read the voxels' bit addresses back from their keys."""
    addresses = np.empty(len(keys), dtype=np.int64)
    blocks_y, blocks_x = (ny + 3) >> 2, (nx + 15) >> 4
    for i in range(len(keys)):
        block = (keys[i] >> 8) & ((1 << 40) - 1)
        inner = _unshuffled(keys[i] & 255, 4) ^ (block & 255)
        block = _unshuffled(block, 20)
        row = block // blocks_x
        plane = row // blocks_y
        z = (plane << 2) | (inner >> 6)
        y = ((row - plane * blocks_y) << 2) | ((inner >> 4) & 3)
        x = ((block - row * blocks_x) << 4) | (inner & 15)
        addresses[i] = ((z + 1) * (ny + 2) + y + 1) * row_bits + x + 1
    return addresses


@numba.njit(cache=True, nogil=True)
def levels_of_keys(keys):
    """Read the voxels' distance levels back from their keys."""
    levels = np.empty(len(keys), dtype=np.int16)
    for i in range(len(keys)):
        levels[i] = keys[i] >> _LEVEL_SHIFT
    return levels


@numba.njit(cache=True, nogil=True)
def addresses_of(linear, ny, nx, row_bits):
    """Bit addresses of voxels given by their place in the flattened volume."""
    addresses = np.empty(len(linear), dtype=np.int64)
    for i in range(len(linear)):
        addresses[i] = address_of(linear[i], ny, nx, row_bits)
    return addresses


@numba.njit(cache=True, nogil=True)
def address_of(linear, ny, nx, row_bits):
    """Bit address in the padded volume of one voxel of the flattened volume."""
    row = linear // nx
    return (row + 2 * (row // ny) + ny + 3) * row_bits + (linear - row * nx) + 1


@numba.njit(cache=True, nogil=True)
def set_bits(words, addresses):
    """Set the bits at these addresses."""
    for address in addresses:
        _set_bit(words, address)


@numba.njit(cache=True, nogil=True)
def _set_bit(words, address):
    word, place = address >> 5, address & 31
    words[word] |= 2 << place
    if place == 0:
        words[word - 1] |= 1 << 33
    elif place == 31:
        words[word + 1] |= 1


@numba.njit(cache=True, nogil=True)
def _clear_bit(words, address):
    word, place = address >> 5, address & 31
    words[word] &= ~(2 << place)
    if place == 0:
        words[word - 1] &= ~(1 << 33)
    elif place == 31:
        words[word + 1] &= ~1


@numba.njit(cache=True, nogil=True)
def neighbourhood(words, address, row_words, plane_words):
    """27 bits round a voxel, bit 9 dz + 3 dy + dx."""
    shift = address & 31
    code = 0
    word = (address >> 5) - plane_words - row_words
    for dz in range(3):
        at = word + dz * plane_words
        code |= ((words[at] >> shift) & 7) << (9 * dz)
        code |= ((words[at + row_words] >> shift) & 7) << (9 * dz + 3)
        code |= ((words[at + 2 * row_words] >> shift) & 7) << (9 * dz + 6)
    return code


@numba.njit(cache=True, nogil=True)
def erode(words, addresses, levels, held, keep_ends, row_words, plane_words):
    """Remove simple voxels level by level, pass after pass, until none is left; clear their bits.

    Within a level the wall is taken off first, voxel by voxel in the order given. Then come rounds
    that remove voxels which were simple when the round began and still are: a thin plateau of equal
    distance is worn down evenly from its rim, not eaten into at random.
    With `keep_ends` a voxel with one neighbour stays; held voxels stay. The three arrays are
    compacted in place; returns how many voxels are left.
    """
    count = len(addresses)
    ready = np.empty(count, dtype=np.bool_)
    changed = True
    while changed:
        kept = 0
        first = 0
        while first < count:
            stop = first
            while stop < count and levels[stop] == levels[first]:
                stop += 1
            begin = kept
            for i in range(first, stop):
                addresses[kept] = addresses[i]
                levels[kept] = levels[i]
                held[kept] = held[i]
                kept += 1
            kept = _wear_down(
                words, addresses, held, ready, begin, kept, keep_ends, row_words, plane_words
            )
            first = stop
        changed = kept < count
        count = kept
    return count


@numba.njit(cache=True, nogil=True)
def _wear_down(words, addresses, held, ready, begin, stop, keep_ends, row_words, plane_words):
    """Remove what can be removed of one level, whose voxels stand at begin:stop; return its end."""
    for i in range(begin, stop):
        code = neighbourhood(words, addresses[i], row_words, plane_words)
        ready[i] = not held[i] and _count_bits(code) > _SHEET and is_simple(code)
        if ready[i]:
            _clear_bit(words, addresses[i])
    while True:
        kept = begin
        for i in range(begin, stop):
            if not ready[i]:
                addresses[kept] = addresses[i]
                held[kept] = held[i]
                kept += 1
        stop = kept
        for i in range(begin, stop):
            ready[i] = not held[i] and _is_removable(
                neighbourhood(words, addresses[i], row_words, plane_words), keep_ends
            )
        removed = 0
        for i in range(begin, stop):
            ready[i] = ready[i] and _is_removable(
                neighbourhood(words, addresses[i], row_words, plane_words), keep_ends
            )
            if ready[i]:
                _clear_bit(words, addresses[i])
                removed += 1
        if removed == 0:
            return stop


# A voxel on the rim of a sheet one voxel thick has at most eight neighbours beside itself; some
# more are allowed for rims of sheets two voxels thick.
_SHEET = 11


@numba.njit(cache=True, nogil=True)
def _count_bits(code):
    """Return how many of 27 bits are set."""
    code -= (code >> 1) & 0x5555555
    code = (code & 0x3333333) + ((code >> 2) & 0x3333333)
    code = (code + (code >> 4)) & 0x0F0F0F0F
    return (code * 0x01010101 >> 24) & 0xFF


@numba.njit(cache=True, nogil=True)
def _is_removable(code, keep_ends):
    others = code & ~CENTRE
    if keep_ends and others & (others - 1) == 0:
        return False
    return is_simple(code)


@numba.njit(cache=True, nogil=True)
def strip(words, addresses, order, start, neighbour, held, keep_ends, row_words, plane_words):
    """Remove simple voxels of a set of lines until none is left, each line from its end inwards.

    Voxels are tried in the order given; where one goes its neighbours are tried next, so a spur of
    any length goes at once. Held voxels stay, with `keep_ends` those with one neighbour too.
    Returns which voxels are left; their bits alone stay set.
    """
    left = np.ones(len(addresses), dtype=np.bool_)
    stack = np.empty(len(neighbour) + 1, dtype=np.int64)
    for first in order:
        stack[0] = first
        height = 1
        while height > 0:
            height -= 1
            i = stack[height]
            if held[i] or not left[i]:
                continue
            code = neighbourhood(words, addresses[i], row_words, plane_words)
            if not _is_removable(code, keep_ends):
                continue
            _clear_bit(words, addresses[i])
            left[i] = False
            for k in range(start[i], start[i + 1]):
                if left[neighbour[k]]:
                    stack[height] = neighbour[k]
                    height += 1
    return left


@numba.njit(cache=True, nogil=True)
def neighbour_lists(identifiers, offsets):
    """Adjacency of sorted identifiers, neighbours being those that differ by an offset.

    `offsets` are the positive half of the neighbourhood; returns (start, neighbour), the
    neighbours of voxel i at neighbour[start[i]:start[i + 1]], in rising order.
    """
    n = len(identifiers)
    degree = np.zeros(n + 1, dtype=np.int64)
    for offset in offsets:
        j = 0
        for i in range(n):
            wanted = identifiers[i] + offset
            while j < n and identifiers[j] < wanted:
                j += 1
            if j < n and identifiers[j] == wanted:
                degree[i] += 1
                degree[j] += 1
    start = np.zeros(n + 1, dtype=np.int64)
    for i in range(n):
        start[i + 1] = start[i] + degree[i]
    neighbour = np.empty(start[n], dtype=np.int64)
    fill = start.copy()
    for back in (True, False):
        for k in range(len(offsets)):
            offset = offsets[len(offsets) - 1 - k] if back else offsets[k]
            j = 0
            for i in range(n):
                wanted = identifiers[i] + offset
                while j < n and identifiers[j] < wanted:
                    j += 1
                if j < n and identifiers[j] == wanted:
                    if back:
                        neighbour[fill[j]] = i
                        fill[j] += 1
                    else:
                        neighbour[fill[i]] = j
                        fill[i] += 1
    return start, neighbour


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
def label_sets(start, neighbour, member):
    """Number the connected sets of member voxels in order of their first voxel; -1 elsewhere."""
    n = len(start) - 1
    label = np.full(n, -1, dtype=np.int64)
    stack = np.empty(n, dtype=np.int64)
    count = 0
    for seed in range(n):
        if not member[seed] or label[seed] >= 0:
            continue
        label[seed] = count
        stack[0] = seed
        height = 1
        while height > 0:
            height -= 1
            i = stack[height]
            for k in range(start[i], start[i + 1]):
                j = neighbour[k]
                if member[j] and label[j] < 0:
                    label[j] = count
                    stack[height] = j
                    height += 1
        count += 1
    return label, count


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
            _set_bit(words, address)
            if count == len(added):
                longer = np.empty(2 * count, dtype=np.int64)
                for i in range(count):
                    longer[i] = added[i]
                added = longer
            added[count] = address
            count += 1
    return added[:count]
