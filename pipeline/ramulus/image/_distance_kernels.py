"""Kernels of the exact Euclidean distance map, on foreground voxels only.

Squared distances are kept one per foreground voxel in raster order. Each pass lays the voxels of a
plane out so that the pass's axis is contiguous and takes the lower envelope of parabolas over each
run of foreground (Felzenszwalb & Huttenlocher 2012, Theory Comput 8:415-428).
"""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def rows_of(linear, rows, nx):
    """Column of each voxel, given by rising place in the flattened volume, and each row's start."""
    column = np.empty(len(linear), dtype=np.int32)
    row_start = np.empty(rows + 1, dtype=np.int64)
    row = 0
    row_start[0] = 0
    for i in range(len(linear)):
        while linear[i] >= (row + 1) * nx:
            row += 1
            row_start[row] = i
        column[i] = linear[i] - row * nx
    for later in range(row + 1, rows + 1):
        row_start[later] = len(linear)
    return column, row_start


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
    # A few values more than a row needs: row lengths of a power of two would share cache sets.
    lines = np.zeros((nx, rows + 17), dtype=np.float32)
    lowered = np.empty(rows, dtype=np.float32)
    vertex = np.empty(rows + 2, dtype=np.int64)
    border = np.empty(rows + 2, dtype=np.float64)
    filled = np.zeros(nx, dtype=np.bool_)
    scale = spacing * spacing
    for first_row in plane_rows:
        for k in range(rows):
            row = first_row + k * row_step
            for i in range(row_start[row], row_start[row + 1]):
                lines[column[i], k] = squared[i]
                filled[column[i]] = True
        for x in range(nx):
            if filled[x]:
                _lower_line(lines[x, :rows], scale, lowered, vertex, border)
        for k in range(rows):
            row = first_row + k * row_step
            for i in range(row_start[row], row_start[row + 1]):
                squared[i] = lines[column[i], k]
        for x in range(nx):
            if filled[x]:
                lines[x] = 0.0
                filled[x] = False


@numba.njit(cache=True, nogil=True)
def _lower_line(line, scale, lowered, vertex, border):
    """Replace each run of values above zero by the lower envelope of its parabolas.

    The background just outside a run stands at height 0. Beyond a face of the volume there is none.
    """
    n = len(line)
    first = 0
    while first < n:
        if line[first] == 0.0:
            first += 1
            continue
        last = first
        highest = line[first]
        while last + 1 < n and line[last + 1] != 0.0:
            last += 1
            highest = max(highest, line[last])
        stop = min(last + 2, n)
        if highest <= _NEAR * scale or last - first < 2 * _NEAR_STEPS:
            _search(line, max(first - 1, 0), first, last + 1, stop, scale, lowered)
        else:
            _envelope(
                line, max(first - 1, 0), first, last + 1, stop, scale, lowered, vertex, border
            )
        for place in range(first, last + 1):
            line[place] = lowered[place]
        first = last + 1


_NEAR_STEPS = 12
_NEAR = _NEAR_STEPS**2


@numba.njit(cache=True, nogil=True)
def _search(line, start, first, last, stop, scale, lowered):
    """Lowest parabola at each place by looking outwards: faster while distances are short."""
    for place in range(first, last):
        best = np.float64(line[place])
        step = 1
        while step * step * scale < best and (place - step >= start or place + step < stop):
            rise = step * step * scale
            if place - step >= start:
                best = min(best, rise + line[place - step])
            if place + step < stop:
                best = min(best, rise + line[place + step])
            step += 1
        lowered[place] = best


@numba.njit(cache=True, nogil=True)
def _envelope(line, start, first, last, stop, scale, lowered, vertex, border):
    """Lowest parabola at each place by the lower envelope: time in proportion to the run."""
    count = 0
    for place in range(start, stop):
        value = np.float64(line[place])
        if value == np.inf:
            continue
        cut = -np.inf
        while count > 0:
            p = vertex[count - 1]
            cut = 0.5 * (place + p + (value - line[p]) / (scale * (place - p)))
            if cut > border[count - 1]:
                break
            count -= 1
        vertex[count] = place
        border[count] = cut if count > 0 else -np.inf
        count += 1
    k = 0
    for place in range(first, last):
        while k + 1 < count and border[k + 1] < place:
            k += 1
        lowered[place] = np.inf
        if count > 0:
            step = place - vertex[k]
            lowered[place] = step * step * scale + line[vertex[k]]
