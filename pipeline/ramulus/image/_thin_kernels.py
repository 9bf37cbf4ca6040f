"""Kernels of the thinning: voxels as single bits, removed one by one in a given order.

A volume is padded by an empty voxel all round and held in words of 32 voxels each. A word also
repeats the voxel before its first and the one after its last, so that any voxel and its two
neighbours along x lie in one word (bits 0 to 33 of 64). A voxel's address is its number in this
layout; the rows beside, above and below lie at fixed word distances, so a neighbourhood of 27 bits
comes from nine words and no coordinate is ever computed.
"""

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
        set_bit(words, address)


@numba.njit(cache=True, nogil=True)
def set_bit(words, address):
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
