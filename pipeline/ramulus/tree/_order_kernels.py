"""Kernels of the ordering: walks over trees given as parent arrays."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def downward(parent, order):
    """Fill `order` with segments, every parent before its daughters; returns how many (less: a cycle)."""
    n = len(parent)
    count = np.zeros(n, np.int64)
    for i in range(n):
        if parent[i] >= 0:
            count[parent[i]] += 1
    head, tail = 0, n
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
    highest, times, tallest = np.zeros(n, np.int64), np.zeros(n, np.int64), np.zeros(n, np.int64)
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
def diameter_walk(parent, order, diameter, cuts, out):
    """From the tips: by diameter; a parent gets its highest daughter's order, one more if wider than
    the cut above it. cuts[n - 1] lies between orders n and n + 1.
    """
    n, top = len(parent), len(cuts) + 1
    highest = np.zeros(n, np.int64)
    for k in range(n - 1, -1, -1):
        i = order[k]
        if highest[i] == 0:
            m = 1
            while m < top and diameter[i] > cuts[m - 1]:
                m += 1
            out[i] = m
        else:
            m = highest[i]
            while m < top and diameter[i] > cuts[m - 1]:
                m += 1
            out[i] = m
        p = parent[i]
        if p >= 0:
            highest[p] = max(highest[p], out[i])


@numba.njit(cache=True, nogil=True)
def element_ids(parent, order, group, out):
    """Segments of one order in series share an element; at a fork of equals the first goes on."""
    n = len(parent)
    taken = np.zeros(n, np.bool_)
    number = 0
    for k in range(n):
        i = order[k]
        p = parent[i]
        if p >= 0 and group[p] == group[i] and group[i] > 0 and not taken[p]:
            out[i] = out[p]
            taken[p] = True
        elif group[i] > 0:
            out[i] = number
            number += 1
    return number
