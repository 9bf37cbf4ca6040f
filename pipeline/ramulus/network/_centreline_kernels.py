"""Kernels that smooth centrelines and resample them at an even step."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def smooth_lines(
    points,
    values,
    offsets,
    scale,
    slack,
    limit,
    step,
    capacity,
    out,
    out_values,
    counts,
    begin,
    end,
):
    """Smooth and resample segments begin:end; segment i's points start at capacity[i] in `out`.

    `scale` is the voxel edge along each axis, `slack` the RMS residual allowed in voxels; `counts`
    gets each segment's number of points.
    """
    finest = min(scale[0], scale[1], scale[2])
    strengths = np.empty(3)
    for axis in range(3):
        strengths[axis] = (scale[axis] / finest) ** 2
    for i in range(begin, end):
        first, stop = offsets[i], offsets[i + 1]
        even, even_values = evenly_spaced(points[first:stop], values[first:stop], finest, 2)
        line = np.empty_like(even)
        smooth_to_slack(even, np.ones(len(even)), scale, strengths, slack, limit, line)
        line, line_values = evenly_spaced(line, even_values, step, 2)
        counts[i] = len(line)
        for k in range(len(line)):
            out_values[capacity[i] + k] = line_values[k]
            for axis in range(3):
                out[capacity[i] + k, axis] = line[k, axis]


@numba.njit(cache=True, nogil=True)
def evenly_spaced(points, values, step, least):
    """Points about every `step` along a polyline, both ends included, with interpolated values."""
    n = len(points)
    arc = np.zeros(n)
    for i in range(1, n):
        square = 0.0
        for axis in range(3):
            square += (points[i, axis] - points[i - 1, axis]) ** 2
        arc[i] = arc[i - 1] + np.sqrt(square)
    count = max(least, int(np.rint(arc[n - 1] / step)) + 1)
    even, even_values = np.empty((count, 3)), np.empty(count)
    j = 0
    for k in range(count):
        place = arc[n - 1] * k / (count - 1)
        while j < n - 2 and arc[j + 1] < place:
            j += 1
        span = arc[j + 1] - arc[j]
        share = min(max((place - arc[j]) / span, 0.0), 1.0) if span > 0.0 else 0.0
        for axis in range(3):
            even[k, axis] = points[j, axis] * (1.0 - share) + points[j + 1, axis] * share
        even_values[k] = values[j] * (1.0 - share) + values[j + 1] * share
    for axis in range(3):
        even[0, axis], even[count - 1, axis] = points[0, axis], points[n - 1, axis]
    return even, even_values


@numba.njit(cache=True, nogil=True)
def smooth_to_slack(points, weight, scale, strengths, slack, limit, out):
    """Smooth as strongly as the slack allows, both ends held, then give back what was bent off.

    The strength along an axis is a common factor times `strengths`; the factor, at most `limit`, is
    the largest whose weighted RMS residual, in units of `scale`, is within `slack`. Smoothing pulls
    a curve towards its chord; smoothing the residual too and adding it back ("twicing", Tukey 1977,
    Exploratory Data Analysis, ch. 16), done twice, takes that back almost wholly.
    """
    n = len(points)
    if n < 4:
        for i in range(n):
            for axis in range(3):
                out[i, axis] = points[i, axis]
        return
    low, high = 0.0, limit
    factor = limit
    for turn in range(_TURNS):
        _penalised(points, weight, factor, strengths, out)
        if _residual(points, out, weight, scale) <= slack:
            low = factor
            if turn == 0:
                break
        else:
            high = factor
        factor = np.sqrt(max(low, 1e-3) * high)
    _penalised(points, weight, low, strengths, out)
    left, part = np.empty((n, 3)), np.empty((n, 3))
    for _ in range(2):
        for i in range(n):
            for axis in range(3):
                left[i, axis] = points[i, axis] - out[i, axis]
        _penalised(left, weight, low, strengths, part)
        for i in range(n):
            for axis in range(3):
                out[i, axis] += part[i, axis]


_TURNS = 16


@numba.njit(cache=True, nogil=True)
def _residual(points, line, weight, scale):
    """Weighted RMS distance of a line from its points, in units of `scale` along each axis."""
    square, total = 0.0, 0.0
    for i in range(len(points)):
        total += weight[i]
        for axis in range(3):
            square += weight[i] * ((line[i, axis] - points[i, axis]) / scale[axis]) ** 2
    return np.sqrt(square / total)


@numba.njit(cache=True, nogil=True)
def _penalised(points, weight, factor, strengths, out):
    """Minimise sum w (x - p)^2 + strength * sum (second difference)^2 per axis, both ends held.

    Whittaker 1923, Proc Edinburgh Math Soc 41:63-75. The matrix has five diagonals; it is factored
    as L D L' once for each strength.
    """
    n = len(points)
    m = n - 2
    pivot, near, far, right = np.empty(m), np.empty(m), np.empty(m), np.empty(m)
    for axis in range(3):
        out[0, axis], out[n - 1, axis] = points[0, axis], points[n - 1, axis]
        strength = factor * strengths[axis]
        if axis == 0 or strengths[axis] != strengths[axis - 1]:
            _factor(weight, strength, pivot, near, far)
        for i in range(m):
            right[i] = weight[i + 1] * points[i + 1, axis]
        first, last = points[0, axis], points[n - 1, axis]
        right[0] += 2.0 * strength * first
        right[m - 1] += 2.0 * strength * last
        if m > 1:
            right[1] -= strength * first
            right[m - 2] -= strength * last
        for i in range(m):
            if i >= 1:
                right[i] -= near[i - 1] * right[i - 1]
            if i >= 2:
                right[i] -= far[i - 2] * right[i - 2]
        for i in range(m - 1, -1, -1):
            right[i] /= pivot[i]
            if i < m - 1:
                right[i] -= near[i] * right[i + 1]
            if i < m - 2:
                right[i] -= far[i] * right[i + 2]
            out[i + 1, axis] = right[i]


@numba.njit(cache=True, nogil=True)
def _factor(weight, strength, pivot, near, far):
    """L D L' of the smoothing matrix over the inner points; `near`, `far` are L's diagonals."""
    m = len(pivot)
    for i in range(m):
        # Second differences centred on the held ends and on the inner points that reach this one.
        diagonal = 4.0 * strength
        if i > 0:
            diagonal += strength
        if i < m - 1:
            diagonal += strength
        pivot[i] = weight[i + 1] + diagonal
        if i >= 1:
            pivot[i] -= near[i - 1] ** 2 * pivot[i - 1]
        if i >= 2:
            pivot[i] -= far[i - 2] ** 2 * pivot[i - 2]
        if i < m - 1:
            value = -4.0 * strength
            if i >= 1:
                value -= near[i - 1] * pivot[i - 1] * far[i - 1]
            near[i] = value / pivot[i]
        if i < m - 2:
            far[i] = strength / pivot[i]
