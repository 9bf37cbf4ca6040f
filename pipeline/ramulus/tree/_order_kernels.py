"""Kernels of the ordering: walks over trees given as parent arrays."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def downward(parent, order):
    """Fill `order`, every parent before its daughters; return how many (fewer: a cycle)."""
    n = len(parent)
    count = np.zeros(n, np.int64)
    for i in range(n):
        if parent[i] >= 0:
            count[parent[i]] += 1
    tail = n
    # Peeling from the tips fills the list from its end.
    for i in range(n):
        if count[i] == 0:
            tail -= 1
            order[tail] = i
    head = n - 1
    while head >= tail:
        p = parent[order[head]]
        head -= 1
        if p >= 0:
            count[p] -= 1
            if count[p] == 0:
                tail -= 1
                order[tail] = p
    return n - tail


@numba.njit(cache=True, nogil=True)
def orders_up(parent, order, strahler, horsfield, magnitude):
    """Strahler, Horsfield and Shreve from the tips to the root, along `order` backwards."""
    n = len(parent)
    highest, times = np.zeros(n, np.int64), np.zeros(n, np.int64)
    tallest = np.zeros(n, np.int64)
    for k in range(n - 1, -1, -1):
        i = order[k]
        if highest[i] == 0:
            strahler[i], horsfield[i], magnitude[i] = 1, 1, 1
        else:
            strahler[i] = highest[i] + (1 if times[i] >= 2 else 0)
            horsfield[i] = tallest[i] + 1
        p = parent[i]
        if p >= 0:
            magnitude[p] += magnitude[i]
            tallest[p] = max(tallest[p], horsfield[i])
            if strahler[i] > highest[p]:
                highest[p], times[p] = strahler[i], 1
            elif strahler[i] == highest[p]:
                times[p] += 1


@numba.njit(cache=True, nogil=True)
def generations(parent, order, generation):
    """Count the junctions between each segment and its root."""
    for k in range(len(order)):
        i = order[k]
        generation[i] = 0 if parent[i] < 0 else generation[parent[i]] + 1


@numba.njit(cache=True, nogil=True)
def carry_down(parent, order, marked):
    """Mark every segment that lies below a marked one."""
    for k in range(len(order)):
        i = order[k]
        if parent[i] >= 0 and marked[parent[i]]:
            marked[i] = True


@numba.njit(cache=True, nogil=True)
def heirs(parent, order, rank, width, heir):
    """Find the daughter that carries each segment on: highest rank, then widest, then first."""
    for k in range(len(order)):
        i = order[k]
        p = parent[i]
        if p < 0:
            continue
        h = heir[p]
        if h < 0:
            heir[p] = i
        elif rank[i] != rank[h]:
            if rank[i] > rank[h]:
                heir[p] = i
        elif width[i] > width[h] or (width[i] == width[h] and i < h):
            heir[p] = i


@numba.njit(cache=True, nogil=True)
def keep_stems(parent, order, is_heir, rank):
    """Give each heir the rank of the segment that it carries on."""
    for k in range(len(order)):
        i = order[k]
        if is_heir[i]:
            rank[i] = rank[parent[i]]


@numba.njit(cache=True, nogil=True)
def diameter_walk(parent, order, diameter, cuts, out):
    """From the tips to the root: an order not below any daughter's, raised to the diameter's class.

    cuts[n - 1] lies between orders n and n + 1.
    """
    n, top = len(parent), len(cuts) + 1
    highest = np.ones(n, np.int64)
    for k in range(n - 1, -1, -1):
        i = order[k]
        m = highest[i]
        while m < top and diameter[i] > cuts[m - 1]:
            m += 1
        out[i] = m
        p = parent[i]
        if p >= 0:
            highest[p] = max(highest[p], m)


@numba.njit(cache=True, nogil=True)
def element_ids(parent, order, group, heir, out):
    """Segments of one order in series share an element; an element goes on into its heir alone."""
    number = 0
    for k in range(len(order)):
        i = order[k]
        p = parent[i]
        if group[i] <= 0:
            continue
        if p >= 0 and group[p] == group[i] and heir[p] == i:
            out[i] = out[p]
        else:
            out[i] = number
            number += 1
    return number


@numba.njit(cache=True, nogil=True)
def arc_starts(parent, order, element, length, start):
    """Arc length at which each segment begins within its element."""
    for k in range(len(order)):
        i = order[k]
        p = parent[i]
        if element[i] < 0:
            continue
        start[i] = start[p] + length[p] if p >= 0 and element[p] == element[i] else 0.0
