"""Kernels of the exact Euclidean distance map, on foreground voxels only.

Squared distances are kept one per foreground voxel in raster order. Each pass lays the voxels of a
plane out so that the pass's axis is contiguous and takes the lower envelope of parabolas over each
run of foreground (Felzenszwalb & Huttenlocher 2012, Theory Comput 8:415-428).
"""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def square_along_rows(column, row_start, nx, spacing, squared):
    """First pass, along x: the squared distance to the nearest gap in the voxel's own row."""
    for row in range(len(row_start) - 1):
        first = row_start[row]
        while first < row_start[row + 1]:
            last = first
            while last + 1 < row_start[row + 1] and column[last + 1] == column[last] + 1:
                last += 1
            before = column[first] > 0
            after = column[last] < nx - 1
            for i in range(first, last + 1):
                gap = np.inf
                if before:
                    gap = (i - first + 1) * spacing
                if after:
                    gap = min(gap, (last - i + 1) * spacing)
                squared[i] = gap * gap
            first = last + 1


@numba.njit(cache=True, nogil=True)
def square_along_planes(column, row_start, nx, row_step, rows, plane_rows, spacing, squared):
    """Second or third pass: along the axis whose rows are `row_step` apart, for some planes.

    `plane_rows` holds the first row of each plane, `rows` how many rows a plane has.
    """
    lines = np.zeros((nx, rows), dtype=np.float32)
    vertex = np.empty(rows + 2, dtype=np.int64)
    height = np.empty(rows + 2, dtype=np.float64)
    border = np.empty(rows + 3, dtype=np.float64)
    filled = np.zeros(nx, dtype=np.bool_)
    for first_row in plane_rows:
        for k in range(rows):
            row = first_row + k * row_step
            for i in range(row_start[row], row_start[row + 1]):
                lines[column[i], k] = squared[i]
                filled[column[i]] = True
        for x in range(nx):
            if filled[x]:
                _lower_runs(lines[x], spacing, vertex, height, border)
        for k in range(rows):
            row = first_row + k * row_step
            for i in range(row_start[row], row_start[row + 1]):
                squared[i] = lines[column[i], k]
        for x in range(nx):
            if filled[x]:
                lines[x] = 0.0
                filled[x] = False


@numba.njit(cache=True, nogil=True)
def _lower_runs(line, spacing, vertex, height, border):
    """Replace each run of values above zero by the lower envelope of its parabolas."""
    n = len(line)
    first = 0
    while first < n:
        if line[first] == 0.0:
            first += 1
            continue
        last = first
        while last + 1 < n and line[last + 1] != 0.0:
            last += 1
        _lower_run(line, first, last, spacing * spacing, vertex, height, border)
        first = last + 1


@numba.njit(cache=True, nogil=True)
def _lower_run(line, first, last, scale, vertex, height, border):
    """Lower envelope over one run; background voxels just outside it stand at height 0."""
    count = 0
    for place in range(max(first - 1, 0), min(last + 1, len(line) - 1) + 1):
        value = np.float64(line[place]) / scale
        if value == np.inf:
            continue
        cut = -np.inf
        while count > 0:
            p = vertex[count - 1]
            cut = 0.5 * (place + p + (value - height[count - 1]) / (place - p))
            if cut > border[count - 1]:
                break
            count -= 1
        vertex[count] = place
        height[count] = value
        border[count] = cut if count > 0 else -np.inf
        count += 1
    if count == 0:
        return
    k = 0
    for place in range(first, last + 1):
        while k + 1 < count and border[k + 1] < place:
            k += 1
        step = place - vertex[k]
        line[place] = (step * step + height[k]) * scale
