"""Kernel that lays lines through station centres."""

import numba
import numpy as np

from ._centreline_kernels import smooth_to_slack


@numba.njit(cache=True, nogil=True)
def lines(points, map_um, arc, offsets, segment_nodes, node, trim, keep_from, keep_to, segment, s_um,
          centre, values, step_um, slack_um):  # fmt: skip
    """Points, carried values (the map's radius last) and number of points of each segment."""
    m, c = len(segment_nodes), values.shape[1]
    counts = np.zeros(m, np.int64)
    capacity = 1024
    out = np.empty((capacity, 3))
    carried = np.empty((capacity, c + 1))
    top, k = 0, 0
    n = len(segment)
    for i in range(m):
        a, b = offsets[i], offsets[i + 1]
        while k < n and segment[k] < i:
            k += 1
        begin = k
        while k < n and segment[k] == i:
            k += 1
        stations = k - begin
        size = stations + 2 if stations else b - a
        line, smooth = np.empty((size, 3)), np.empty((size, 3))
        column = np.full((size, c + 1), np.nan)
        if stations:
            for j in range(stations):
                line[j + 1] = centre[begin + j]
                column[j + 1, :c] = values[begin + j]
                column[j + 1, c] = interpolated(arc, map_um, a, b, s_um[begin + j])
            column[0], column[size - 1] = column[1], column[size - 2]
            line[0], line[size - 1] = node[segment_nodes[i, 0]], node[segment_nodes[i, 1]]
            smooth_to_slack(line, np.ones(size), np.ones(3), np.ones(3), slack_um, 30.0, smooth)
        else:
            for j in range(size):
                line[j] = points[a + j]
                column[j, c] = map_um[a + j]
            line[0], line[size - 1] = node[segment_nodes[i, 0]], node[segment_nodes[i, 1]]
            smooth[:, :] = line
        total = np.zeros(size)
        for j in range(1, size):
            d = 0.0
            for x in range(3):
                d += (smooth[j, x] - smooth[j - 1, x]) ** 2
            total[j] = total[j - 1] + np.sqrt(d)
        count = max(3, int(np.ceil(total[size - 1] / step_um)) + 1)
        while top + count > capacity:
            capacity *= 2
            grown = np.empty((capacity, 3))
            grown[:top] = out[:top]
            out = grown
            grown = np.empty((capacity, c + 1))
            grown[:top] = carried[:top]
            carried = grown
        j = 0
        for q in range(count):
            t = total[size - 1] * q / (count - 1)
            while j < size - 2 and total[j + 1] < t:
                j += 1
            span = total[j + 1] - total[j]
            f = min(max((t - total[j]) / span, 0.0), 1.0) if span > 0 else 0.0
            for x in range(3):
                out[top + q, x] = smooth[j, x] * (1 - f) + smooth[j + 1, x] * f
            for x in range(c + 1):
                carried[top + q, x] = column[j, x] * (1 - f) + column[j + 1, x] * f
        out[top], out[top + count - 1] = smooth[0], smooth[size - 1]
        counts[i] = count
        top += count
    return out[:top].copy(), carried[:top].copy(), counts


@numba.njit(cache=True, nogil=True)
def interpolated(arc, values, a, b, t):
    """Linear interpolation of values[a:b] at arc length t."""
    low, high = a, b - 1
    while high - low > 1:
        middle = (low + high) // 2
        if arc[middle] <= t:
            low = middle
        else:
            high = middle
    span = arc[high] - arc[low]
    f = min(max((t - arc[low]) / span, 0.0), 1.0) if span > 0 else 0.0
    return values[low] * (1 - f) + values[high] * f
