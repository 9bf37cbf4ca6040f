"""Kernels of the thinning: voxels as single bits, removed one by one in a given order.

A volume is an array of 32-bit words, one bit a voxel, padded by an empty voxel all round. A voxel's
address is its bit number; the row above, below, before and behind lie at fixed word distances, so a
neighbourhood of 27 bits comes from nine pairs of words and no coordinate is ever computed.
"""

import heapq

import numba
import numpy as np

from ._simple_points import CENTRE, is_simple


@numba.njit(cache=True, nogil=True)
def set_bits(words, addresses, on):
    """Set or clear the bits at these addresses."""
    for address in addresses:
        word = address >> 5
        bit = 1 << (address & 31)
        if on:
            words[word] = np.uint32(np.int64(words[word]) | bit)
        else:
            words[word] = np.uint32(np.int64(words[word]) & ~bit)


@numba.njit(cache=True, nogil=True)
def neighbourhood(words, address, row_words, plane_words):
    """27 bits round a voxel, bit 9 dz + 3 dy + dx."""
    corner = address - 1
    word = (corner >> 5) - plane_words - row_words
    shift = corner & 31
    code = 0
    for dz in range(3):
        for dy in range(3):
            at = word + dz * plane_words + dy * row_words
            pair = np.int64(words[at]) | ((np.int64(words[at + 1]) & 3) << 32)
            code |= ((pair >> shift) & 7) << (9 * dz + 3 * dy)
    return code


@numba.njit(cache=True, nogil=True)
def erode(words, addresses, anchored, keep_ends, row_words, plane_words):
    """Remove simple voxels in the order given, pass after pass, until none is left; clear `words`.

    `addresses` and `anchored` are compacted in place; returns how many voxels stay. With
    `keep_ends` a voxel with one neighbour stays. Anchored voxels stay.
    """
    count = len(addresses)
    changed = True
    while changed:
        changed = False
        kept = 0
        for i in range(count):
            address = addresses[i]
            stays = anchored[i]
            if not stays:
                code = neighbourhood(words, address, row_words, plane_words)
                others = code & ~CENTRE
                stays = keep_ends and others & (others - 1) == 0
                stays = stays or not is_simple(code)
            if stays:
                addresses[kept] = address
                anchored[kept] = anchored[i]
                kept += 1
            else:
                words[address >> 5] = np.uint32(
                    np.int64(words[address >> 5]) & ~(1 << (address & 31))
                )
                changed = True
        count = kept
    return count


@numba.njit(cache=True, nogil=True)
def add_while_simple(words, addresses, row_words, plane_words):
    """Set bits one after another while each is new and leaves the topology as it is."""
    for i in range(len(addresses)):
        code = neighbourhood(words, addresses[i], row_words, plane_words)
        if code & CENTRE or not is_simple(code):
            return i
        word = addresses[i] >> 5
        words[word] = np.uint32(np.int64(words[word]) | (1 << (addresses[i] & 31)))
    return len(addresses)


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
def accept_tips(order, is_cap, distance, before, radius, marked, protrusion):
    """Walk back from each candidate tip to what is marked already; keep the tips that protrude.

    A tip is kept when the part of its path outside the ball of the place where it meets the marked
    set is long enough: longer than `protrusion` times its own radius there (or half the ball's, if
    that is more) for a free tip, longer than nothing for a cap. A kept path is marked. Returns for
    each candidate the voxel where the vessel ends: the place after which the radius falls faster
    than half the path's gain (the sides of a blunt end) is cut off; -1 where it is not kept.
    """
    ending = np.full(len(order), -1, dtype=np.int64)
    for k in range(len(order)):
        tip = order[k]
        if marked[tip]:
            continue
        base = tip
        while base >= 0 and not marked[base]:
            base = before[base]
        if base < 0:
            continue
        ball = radius[base]
        own = 0.0
        best = tip
        best_worth = -np.inf
        i = tip
        while i != base:
            run = distance[i] - distance[base]
            if run > ball:
                own = max(own, radius[i])
            worth = radius[i] + 0.5 * run
            if worth > best_worth:
                best_worth = worth
                best = i
            i = before[i]
        run = distance[tip] - distance[base]
        if is_cap[k]:
            if run <= ball:
                continue
            best = tip
        elif run + radius[tip] - ball <= protrusion * max(own, 0.5 * ball):
            continue
        ending[k] = best
        i = best
        while i != base:
            marked[i] = True
            i = before[i]
    return ending
