"""Kernels of the cleaning: chains of segments through nodes of degree two, and smoothing."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def chains(segment_nodes, degree, ends_at, ends_offset, chain, flip, offsets, chain_nodes):
    """Order segments into chains that run through degree-2 nodes; returns the number of chains.

    ends_at lists, node by node, 2 * segment + side. A closed ring without any other node starts at
    its first segment's first node.
    """
    m = len(segment_nodes)
    done = np.zeros(m, np.bool_)
    n_chain, top = 0, 0
    offsets[0] = 0
    for turn in range(2):
        for s in range(m):
            if done[s]:
                continue
            side = 0
            if turn == 0:
                a, b = segment_nodes[s, 0], segment_nodes[s, 1]
                if degree[a] == 2 and degree[b] == 2:
                    continue
                side = 0 if degree[a] != 2 else 1
            here, entry = s, side
            chain_nodes[n_chain, 0] = segment_nodes[s, side]
            while True:
                done[here] = True
                chain[top], flip[top] = here, entry == 1
                top += 1
                leave = segment_nodes[here, 1 - entry]
                chain_nodes[n_chain, 1] = leave
                if degree[leave] != 2:
                    break
                follow = -1
                for k in range(ends_offset[leave], ends_offset[leave + 1]):
                    if ends_at[k] != 2 * here + (1 - entry):
                        follow = ends_at[k]
                if follow < 0 or done[follow // 2]:
                    break
                here, entry = follow // 2, follow % 2
            n_chain += 1
            offsets[n_chain] = top
    return n_chain


@numba.njit(cache=True, nogil=True)
def penalised(points, weight, strength, out):
    """Minimise sum w |x - p|^2 + strength * sum |second difference|^2 with both ends held."""
    n = len(points)
    for a in range(3):
        for i in range(n):
            out[i, a] = points[i, a]
    if n < 4:
        return
    m = n - 2
    d0, d1, d2 = np.empty(m), np.zeros(m), np.zeros(m)
    right = np.empty((m, 3))
    for i in range(m):
        left_row = 1.0 if i > 0 else 0.0
        right_row = 1.0 if i < m - 1 else 0.0
        d0[i] = weight[i + 1] + strength * (4.0 + left_row + right_row)
        if i < m - 1:
            d1[i] = -4.0 * strength
        if i < m - 2:
            d2[i] = strength
        for a in range(3):
            right[i, a] = weight[i + 1] * points[i + 1, a]
    for a in range(3):
        right[0, a] += 2.0 * strength * points[0, a]
        if m > 1:
            right[1, a] -= strength * points[0, a]
        right[m - 1, a] += 2.0 * strength * points[n - 1, a]
        if m > 1:
            right[m - 2, a] -= strength * points[n - 1, a]
    # L D L' of the pentadiagonal matrix.
    l1, l2 = np.zeros(m), np.zeros(m)
    for i in range(m):
        if i >= 1:
            d0[i] -= l1[i - 1] ** 2 * d0[i - 1]
        if i >= 2:
            d0[i] -= l2[i - 2] ** 2 * d0[i - 2]
        if i < m - 1:
            value = d1[i]
            if i >= 1:
                value -= l1[i - 1] * d0[i - 1] * l2[i - 1]
            l1[i] = value / d0[i]
        if i < m - 2:
            l2[i] = d2[i] / d0[i]
    for a in range(3):
        for i in range(m):
            if i >= 1:
                right[i, a] -= l1[i - 1] * right[i - 1, a]
            if i >= 2:
                right[i, a] -= l2[i - 2] * right[i - 2, a]
        for i in range(m):
            right[i, a] /= d0[i]
        for i in range(m - 1, -1, -1):
            if i < m - 1:
                right[i, a] -= l1[i] * right[i + 1, a]
            if i < m - 2:
                right[i, a] -= l2[i] * right[i + 2, a]
        for i in range(m):
            out[i + 1, a] = right[i, a]


@numba.njit(cache=True, nogil=True)
def smooth_to_slack(points, weight, slack, limit, out):
    """Smooth as strongly as an RMS residual of `slack` allows, at most with strength `limit`."""
    n = len(points)
    if n < 4:
        out[:, :] = points
        return
    low, high = 1e-3, limit
    total = 0.0
    for i in range(n):
        total += weight[i]
    for k in range(18):
        strength = limit if k == 0 else np.sqrt(low * high)
        penalised(points, weight, strength, out)
        square = 0.0
        for i in range(n):
            for a in range(3):
                square += weight[i] * (out[i, a] - points[i, a]) ** 2
        if np.sqrt(square / total) <= slack:
            if k == 0:
                return
            low = strength
        elif k == 0:
            continue
        else:
            high = strength
    penalised(points, weight, low, out)


@numba.njit(cache=True, nogil=True)
def resample_line(points, values, step, out_points, out_values):
    """Points every `step` (evenly) along a polyline, both ends included; returns how many."""
    n = len(points)
    arc = np.zeros(n)
    for i in range(1, n):
        d = 0.0
        for a in range(3):
            d += (points[i, a] - points[i - 1, a]) ** 2
        arc[i] = arc[i - 1] + np.sqrt(d)
    count = max(2, int(round(arc[n - 1] / step)) + 1)
    j = 0
    for k in range(count):
        t = arc[n - 1] * k / (count - 1)
        while j < n - 2 and arc[j + 1] < t:
            j += 1
        span = arc[j + 1] - arc[j]
        f = (t - arc[j]) / span if span > 0 else 0.0
        f = min(max(f, 0.0), 1.0)
        for a in range(3):
            out_points[k, a] = points[j, a] * (1 - f) + points[j + 1, a] * f
        out_values[k] = values[j] * (1 - f) + values[j + 1] * f
    for a in range(3):
        out_points[0, a], out_points[count - 1, a] = points[0, a], points[n - 1, a]
    return count


@numba.njit(cache=True, nogil=True)
def smooth_all(points, values, offsets, slack, limit, step, capacity, out_points, out_values, counts):
    """Smooth and resample every segment; results start at capacity[i]."""
    for i in range(len(offsets) - 1):
        a, b = offsets[i], offsets[i + 1]
        line = np.empty((b - a, 3))
        smooth_to_slack(points[a:b], np.ones(b - a), slack, limit, line)
        start = capacity[i]
        counts[i] = resample_line(
            line, values[a:b], step, out_points[start : capacity[i + 1]], out_values[start : capacity[i + 1]]
        )
