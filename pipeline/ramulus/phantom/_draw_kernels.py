"""Kernels of `draw`: coverage of one fine plane by round cones, and the weighted reductions."""

import numba
import numpy as np

_FAR = 1e30


@numba.njit(cache=True, nogil=True)
def cone_distance(along, square, length, radius_start, radius_end):
    """Return the signed distance to a round cone and the place along its axis (0 to 1).

    The cone is the union of the balls between two ends whose radii run linearly. The point lies
    `along` the axis from the start and its squared distance from the start is `square`. In the
    plane of the axis (y across it) the cone's flank is the straight line tangent to both end
    circles; w runs along that line.
    """
    fall = radius_start - radius_end
    if length <= abs(fall):  # one ball holds the other
        if fall >= 0.0:
            return np.sqrt(square) - radius_start, 0.0
        return np.sqrt(max(square - 2.0 * along * length + length**2, 0.0)) - radius_end, 1.0
    across = np.sqrt(max(square - along * along, 0.0))
    sine = fall / length
    cosine = np.sqrt(1.0 - sine * sine)
    w = along * cosine - across * sine
    if w <= 0.0:
        return np.sqrt(square) - radius_start, 0.0
    if w >= length * cosine:
        return np.sqrt((along - length) ** 2 + across * across) - radius_end, 1.0
    return along * sine + across * cosine - radius_start, w / (length * cosine)


@numba.njit(cache=True, nogil=True)
def _distance(z, y, x, p, starts, ends, radii, flatness, wide_axis):
    """Signed distance to primitive p and the place along it."""
    dz, dy, dx = z - starts[p, 0], y - starts[p, 1], x - starts[p, 2]
    az, ay, ax = ends[p, 0] - starts[p, 0], ends[p, 1] - starts[p, 1], ends[p, 2] - starts[p, 2]
    if flatness[p] != 1.0:
        return _flat_distance(dz, dy, dx, az, ay, ax, p, radii, flatness, wide_axis)
    length = np.sqrt(az * az + ay * ay + ax * ax)
    along = (az * dz + ay * dy + ax * dx) / length if length > 0.0 else 0.0
    return cone_distance(along, dz * dz + dy * dy + dx * dx, length, radii[p, 0], radii[p, 1])


@numba.njit(cache=True, nogil=True)
def _flat_distance(dz, dy, dx, az, ay, ax, p, radii, flatness, wide_axis):
    """Signed distance to an elliptical cone, measured where the ellipse is squeezed to a circle.

    It is brought back by the length of the squeezed distance's gradient, which is exact to first
    order at the surface.
    """
    q = flatness[p]
    wide, narrow = np.sqrt(q), 1.0 / np.sqrt(q)
    uz, uy, ux = wide_axis[p, 0], wide_axis[p, 1], wide_axis[p, 2]
    d_wide = (wide - narrow) * (dz * uz + dy * uy + dx * ux)
    a_wide = (wide - narrow) * (az * uz + ay * uy + ax * ux)
    dz, dy, dx = narrow * dz + d_wide * uz, narrow * dy + d_wide * uy, narrow * dx + d_wide * ux
    az, ay, ax = narrow * az + a_wide * uz, narrow * ay + a_wide * uy, narrow * ax + a_wide * ux
    length = np.sqrt(az * az + ay * ay + ax * ax)
    along = (az * dz + ay * dy + ax * dx) / length if length > 0.0 else 0.0
    square = dz * dz + dy * dy + dx * dx
    distance, place = cone_distance(along, square, length, radii[p, 0], radii[p, 1])
    oz, oy, ox = dz - place * az, dy - place * ay, dx - place * ax
    off = oz * oz + oy * oy + ox * ox
    share = (oz * uz + oy * uy + ox * ux) ** 2 / off if off > 0.0 else 1.0
    return distance / np.sqrt(share * q + (1.0 - share) / q), place


@numba.njit(cache=True, nogil=True)
def _ramp(distance, width, size, cell_square):
    """Share of a small cell that lies inside a surface at this signed distance from its centre.

    The width is the cell's SD along the normal times sqrt(12), so that the mean over positions is
    the cell's. Across the normal a round surface of radius `size` bends away from its tangent plane
    by the curvature times half the cell's mean square there; one of the two directions is curved.
    """
    bend = max(cell_square - width * width, 0.0) / (48.0 * size)
    return min(1.0, max(0.0, 0.5 - (distance + bend) / width))


@numba.njit(cache=True, nogil=True)
def _window(low, high, origin, step, n):
    """Return the first index and the one after the last whose cell centres lie in low..high."""
    first = max(0, int(np.ceil((low - origin) / step)))
    after = min(n, int(np.floor((high - origin) / step)) + 1)
    return first, after


@numba.njit(cache=True, nogil=True)
def _row(z, y, p, starts, ends, reach, origin_x, step_x, nx):
    """Return the cells of one row that may lie within `reach` of primitive p's axis."""
    rest = reach * reach
    for k in range(2):
        place = z if k == 0 else y
        low, high = min(starts[p, k], ends[p, k]), max(starts[p, k], ends[p, k])
        gap = max(low - place, place - high, 0.0)
        rest -= gap * gap
    if rest <= 0.0:
        return 0, 0
    half = np.sqrt(rest)
    low, high = min(starts[p, 2], ends[p, 2]), max(starts[p, 2], ends[p, 2])
    return _window(low - half, high + half, origin_x, step_x, nx)


@numba.njit(cache=True, nogil=True)
def cover_plane(
    z, chosen, starts, ends, radii, brightness, flatness, wide_axis, origin, step, splits, wall,
    lumen_level, plane,
):  # fmt: skip
    """Fill one fine plane (y, x) with coverage times brightness.

    Far from every surface a cell is full or empty. A cell that a surface may cross is split into
    `splits` sub-cells, each covered by the ramp of its signed distance to the union.
    """
    ny, nx = plane.shape
    half_cell = 0.5 * np.sqrt(step[0] ** 2 + step[1] ** 2 + step[2] ** 2)
    nearest = np.full((ny, nx), _FAR)
    light = np.zeros((ny, nx))
    size = np.ones((ny, nx))
    first_row = np.empty(len(chosen), dtype=np.int64)
    after_row = np.empty(len(chosen), dtype=np.int64)
    reach = np.empty(len(chosen))
    for item in range(len(chosen)):
        p = chosen[item]
        reach[item] = max(radii[p, 0], radii[p, 1]) / np.sqrt(flatness[p]) + wall + 2.0 * half_cell
        low = min(starts[p, 1], ends[p, 1]) - reach[item]
        high = max(starts[p, 1], ends[p, 1]) + reach[item]
        first_row[item], after_row[item] = _window(low, high, origin[1], step[1], ny)
        for i in range(first_row[item], after_row[item]):
            y = origin[1] + i * step[1]
            j0, j1 = _row(z, y, p, starts, ends, reach[item], origin[2], step[2], nx)
            for j in range(j0, j1):
                if nearest[i, j] < -2.0 * half_cell:  # known to be full
                    continue
                x = origin[2] + j * step[2]
                distance, place = _distance(z, y, x, p, starts, ends, radii, flatness, wide_axis)
                if distance < nearest[i, j]:
                    nearest[i, j] = distance
                    light[i, j] = (1.0 - place) * brightness[p, 0] + place * brightness[p, 1]
                    size[i, j] = (1.0 - place) * radii[p, 0] + place * radii[p, 1]

    index, n_edge = _fill_whole_cells(nearest, light, half_cell, wall, lumen_level, plane)
    if n_edge == 0:
        return
    sub_distance = np.full((n_edge, splits[0] * splits[1] * splits[2]), _FAR)
    for item in range(len(chosen)):
        p = chosen[item]
        for i in range(first_row[item], after_row[item]):
            y = origin[1] + i * step[1]
            j0, j1 = _row(z, y, p, starts, ends, reach[item], origin[2], step[2], nx)
            for j in range(j0, j1):
                if index[i, j] < 0:
                    continue
                x = origin[2] + j * step[2]
                distance, place = _distance(z, y, x, p, starts, ends, radii, flatness, wide_axis)
                if distance <= nearest[i, j] + 2.0 * half_cell:  # else never nearest in this cell
                    _split(
                        z, y, x, p, starts, ends, radii, flatness, wide_axis, step, splits,
                        sub_distance[index[i, j]],
                    )  # fmt: skip
    _fill_edge_cells(sub_distance, index, light, size, step, splits, wall, lumen_level, plane)


@numba.njit(cache=True, nogil=True)
def _fill_whole_cells(nearest, light, half_cell, wall, lumen_level, plane):
    """Fill the cells that no surface crosses; number the others."""
    index = np.full(plane.shape, -1, dtype=np.int64)
    n_edge = 0
    for i in range(plane.shape[0]):
        for j in range(plane.shape[1]):
            if nearest[i, j] >= wall + half_cell:
                plane[i, j] = 0.0
            elif nearest[i, j] <= -half_cell:
                plane[i, j] = light[i, j] * (lumen_level if wall > 0 else 1.0)
            else:
                index[i, j] = n_edge
                n_edge += 1
    return index, n_edge


@numba.njit(cache=True, nogil=True)
def _split(z, y, x, p, starts, ends, radii, flatness, wide_axis, step, splits, sub_distance):
    """Lower the sub-cells' distances to primitive p's where it is nearer."""
    s = 0
    for u in range(splits[0]):
        sub_z = z + ((u + 0.5) / splits[0] - 0.5) * step[0]
        for v in range(splits[1]):
            sub_y = y + ((v + 0.5) / splits[1] - 0.5) * step[1]
            for w in range(splits[2]):
                sub_x = x + ((w + 0.5) / splits[2] - 0.5) * step[2]
                distance, _ = _distance(
                    sub_z, sub_y, sub_x, p, starts, ends, radii, flatness, wide_axis
                )
                sub_distance[s] = min(sub_distance[s], distance)
                s += 1


@numba.njit(cache=True, nogil=True)
def _fill_edge_cells(sub_distance, index, light, size, step, splits, wall, lumen_level, plane):
    """Fill the cells that a surface may cross with the mean over their sub-cells."""
    sub_step = np.empty(3)
    for k in range(3):
        sub_step[k] = step[k] / splits[k]
    square = sub_step[0] ** 2 + sub_step[1] ** 2 + sub_step[2] ** 2
    for i in range(plane.shape[0]):
        for j in range(plane.shape[1]):
            cell = index[i, j]
            if cell < 0:
                continue
            total = 0.0
            s = 0
            for u in range(splits[0]):
                for v in range(splits[1]):
                    for w in range(splits[2]):
                        distance = sub_distance[cell, s]
                        width = _width(sub_distance, cell, u, v, w, splits, sub_step)
                        if wall > 0:
                            total += _ramp(distance - wall, width, size[i, j] + wall, square)
                            total -= (1.0 - lumen_level) * _ramp(
                                distance, width, size[i, j], square
                            )
                        else:
                            total += _ramp(distance, width, size[i, j], square)
                        s += 1
            plane[i, j] = light[i, j] * total / s


@numba.njit(cache=True, nogil=True)
def _width(sub_distance, cell, u, v, w, splits, sub_step):
    """Width of a sub-cell along the surface's normal, from differences of its distances.

    Steps along the axes give the normal's parts times the sub-cell's edges: their root sum of
    squares is the sub-cell's SD along the normal times sqrt(12).
    """
    place = (u, v, w)
    stride = (splits[1] * splits[2], splits[2], 1)
    here = u * stride[0] + v * stride[1] + w
    square = 0.0
    for k in range(3):
        other = here - stride[k] if place[k] > 0 else here + stride[k]
        square += (sub_distance[cell, here] - sub_distance[cell, other]) ** 2
    return max(np.sqrt(square), 0.25 * min(sub_step[0], sub_step[1], sub_step[2]))


@numba.njit(cache=True, nogil=True)
def _outputs(q, taps, factor, n_out):
    """Return the first output that cell q feeds and the one after the last."""
    return max(0, (q - taps + factor) // factor), min(n_out, q // factor + 1)


@numba.njit(cache=True, nogil=True)
def _reduce_plane(fine, weights_y, weights_x, factors, out):
    """out[d, c] = sum over p, q of weights_y[p] weights_x[q] fine[d * fy + p, c * fx + q].

    First along x, then along y; the zeros of `fine` are skipped.
    """
    ny, nx = out.shape
    row = np.empty(nx)
    total = np.zeros((ny, nx))
    for i in range(fine.shape[0]):
        for c in range(nx):
            row[c] = 0.0
        for q in range(fine.shape[1]):
            if fine[i, q] != 0.0:
                first, after = _outputs(q, len(weights_x), factors[2], nx)
                for c in range(first, after):
                    row[c] += weights_x[q - c * factors[2]] * fine[i, q]
        first, after = _outputs(i, len(weights_y), factors[1], ny)
        for d in range(first, after):
            weight = weights_y[i - d * factors[1]]
            for c in range(nx):
                total[d, c] += weight * row[c]
    for d in range(ny):
        for c in range(nx):
            out[d, c] = total[d, c]


@numba.njit(cache=True, nogil=True, parallel=True)
def signal_planes(
    first_z, members, member_offsets, starts, ends, radii, brightness, flatness, wide_axis, origin,
    step, splits, wall, lumen_level, fine_shape, factors, weights_y, weights_x, out,
):  # fmt: skip
    """Cover each fine plane and reduce it to the image's grid along y and x, planes in parallel."""
    for k in numba.prange(out.shape[0]):
        if member_offsets[k + 1] > member_offsets[k]:
            plane = np.zeros((fine_shape[0], fine_shape[1]))
            cover_plane(
                origin[0] + (first_z + k) * step[0],
                members[member_offsets[k] : member_offsets[k + 1]], starts, ends, radii, brightness,
                flatness, wide_axis, origin, step, splits, wall, lumen_level, plane,
            )  # fmt: skip
            _reduce_plane(plane, weights_y, weights_x, factors, out[k])


@numba.njit(cache=True, nogil=True, parallel=True)
def reduce_planes(fine, weights, factor, out):
    """out[c] = sum over q of weights[q] fine[c * factor + q], always in the order of q."""
    for c in numba.prange(out.shape[0]):
        for q in range(len(weights)):
            for i in range(out.shape[1]):
                for j in range(out.shape[2]):
                    out[c, i, j] += weights[q] * fine[c * factor + q, i, j]
