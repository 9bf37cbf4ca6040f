"""Kernels of `draw`: coverage of one fine plane by round cones, and the weighted reductions.

`cones` is (starts, axes, lengths, sines, radii, flatness, wide_axes), as `draw` prepares them;
`low`, `high` and `reach` bound each one: its axis' box, and how far from it a cell may be touched.
"""

import numba
import numpy as np

_FAR = 1e30


@numba.njit(cache=True, nogil=True)
def cone_distance(along, square, length, sine, radius_start, radius_end):
    """Return the signed distance to a round cone and the place along its axis (0 to 1).

    The cone is the union of the balls between two ends whose radii run linearly. The point lies
    `along` the axis from the start and its squared distance from the start is `square`. In the
    plane of the axis (y across it) the cone's flank is the straight line tangent to both end
    circles; w runs along that line. `sine`, of its angle to the axis, is (radius_start -
    radius_end) / length; beyond -1..1 one ball holds the other.
    """
    if sine >= 1.0:
        return np.sqrt(square) - radius_start, 0.0
    if sine <= -1.0:
        return np.sqrt(max(square - 2.0 * along * length + length**2, 0.0)) - radius_end, 1.0
    across = np.sqrt(max(square - along * along, 0.0))
    cosine = np.sqrt(1.0 - sine * sine) if sine != 0.0 else 1.0
    w = along * cosine - across * sine
    if w <= 0.0:
        return np.sqrt(square) - radius_start, 0.0
    if w >= length * cosine:
        return np.sqrt((along - length) ** 2 + across * across) - radius_end, 1.0
    return along * sine + across * cosine - radius_start, w / (length * cosine)


@numba.njit(cache=True, nogil=True)
def _distance(z, y, x, p, cones):
    """Signed distance to cone p and the place along it.

    An elliptical cone is measured where the ellipse is squeezed to a circle. The distance is
    brought back by the length of its gradient, which is exact to first order at the surface.
    """
    starts, axes, lengths, sines, radii, flatness, wide_axes = cones
    dz, dy, dx = z - starts[p, 0], y - starts[p, 1], x - starts[p, 2]
    q = flatness[p]
    if q == 1.0:
        along = axes[p, 0] * dz + axes[p, 1] * dy + axes[p, 2] * dx
        square = dz * dz + dy * dy + dx * dx
        return cone_distance(along, square, lengths[p], sines[p], radii[p, 0], radii[p, 1])
    wide, narrow = np.sqrt(q), 1.0 / np.sqrt(q)
    uz, uy, ux = wide_axes[p, 0], wide_axes[p, 1], wide_axes[p, 2]
    more = (wide - narrow) * (dz * uz + dy * uy + dx * ux)
    dz, dy, dx = narrow * dz + more * uz, narrow * dy + more * uy, narrow * dx + more * ux
    along = axes[p, 0] * dz + axes[p, 1] * dy + axes[p, 2] * dx
    square = dz * dz + dy * dy + dx * dx
    distance, place = cone_distance(along, square, lengths[p], sines[p], radii[p, 0], radii[p, 1])
    reach = place * lengths[p]
    oz, oy, ox = dz - reach * axes[p, 0], dy - reach * axes[p, 1], dx - reach * axes[p, 2]
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
def _row(z, y, p, low, high, reach, origin_x, step_x, nx):
    """Return the cells of one row that may lie within `reach` of primitive p's axis."""
    gap_z = max(low[p, 0] - z, z - high[p, 0], 0.0)
    gap_y = max(low[p, 1] - y, y - high[p, 1], 0.0)
    rest = reach * reach - gap_z * gap_z - gap_y * gap_y
    if rest <= 0.0:
        return 0, 0
    half = np.sqrt(rest)
    return _window(low[p, 2] - half, high[p, 2] + half, origin_x, step_x, nx)


@numba.njit(cache=True, nogil=True)
def _spans(z, chosen, low, high, reach, origin, step, shape):
    """Return per row of a plane the first cell that any chosen cone may touch and the one after."""
    first = np.full(shape[0], shape[1])
    after = np.zeros(shape[0], dtype=np.int64)
    for p in chosen:
        i0, i1 = _window(low[p, 1] - reach[p], high[p, 1] + reach[p], origin[1], step[1], shape[0])
        for i in range(i0, i1):
            y = origin[1] + i * step[1]
            j0, j1 = _row(z, y, p, low, high, reach[p], origin[2], step[2], shape[1])
            if j1 > j0:
                first[i] = min(first[i], j0)
                after[i] = max(after[i], j1)
    return first, after


@numba.njit(cache=True, nogil=True)
def cover_plane(
    z, chosen, cones, low, high, reach, brightness, origin, step, splits, wide, wall, lumen_level,
    spans, plane,
):  # fmt: skip
    """Fill one fine plane (y, x) with coverage times brightness, within its rows' spans.

    Far from every surface a cell is full or empty. A cell that a surface may cross is split into
    sub-cells, `splits[0]` along each axis for a thin vessel and `splits[1]` from the radius `wide`
    on; each is covered by the ramp of its signed distance to the union.
    """
    ny, nx = plane.shape
    half_cell = 0.5 * np.sqrt(step[0] ** 2 + step[1] ** 2 + step[2] ** 2)
    nearest = np.empty((ny, nx))  # only the spans are ever touched: nothing is filled in vain
    light = np.empty((ny, nx))
    size = np.empty((ny, nx))
    for i in range(ny):
        for j in range(spans[0][i], spans[1][i]):
            nearest[i, j] = _FAR
            light[i, j] = 0.0
            size[i, j] = 1.0
    first_row = np.empty(len(chosen), dtype=np.int64)
    after_row = np.empty(len(chosen), dtype=np.int64)
    radii = cones[4]
    for item in range(len(chosen)):
        p = chosen[item]
        first_row[item], after_row[item] = _window(
            low[p, 1] - reach[p], high[p, 1] + reach[p], origin[1], step[1], ny
        )
        for i in range(first_row[item], after_row[item]):
            y = origin[1] + i * step[1]
            j0, j1 = _row(z, y, p, low, high, reach[p], origin[2], step[2], nx)
            for j in range(j0, j1):
                if nearest[i, j] < -2.0 * half_cell:  # known to be full
                    continue
                distance, place = _distance(z, y, origin[2] + j * step[2], p, cones)
                if distance < nearest[i, j]:
                    nearest[i, j] = distance
                    light[i, j] = (1.0 - place) * brightness[p, 0] + place * brightness[p, 1]
                    size[i, j] = (1.0 - place) * radii[p, 0] + place * radii[p, 1]

    index, n_edge = _fill_whole_cells(nearest, light, half_cell, wall, lumen_level, spans, plane)
    if n_edge == 0:
        return
    sub_distance = np.full((n_edge, splits[0, 0] * splits[0, 1] * splits[0, 2]), _FAR)
    # from a cell's centre to the furthest centre of its sub-cells
    inner = half_cell * (1.0 - 1.0 / max(splits[0, 0], splits[0, 1], splits[0, 2]))
    for item in range(len(chosen)):
        p = chosen[item]
        for i in range(first_row[item], after_row[item]):
            y = origin[1] + i * step[1]
            j0, j1 = _row(z, y, p, low, high, reach[p], origin[2], step[2], nx)
            for j in range(j0, j1):
                if index[i, j] < 0:
                    continue
                x = origin[2] + j * step[2]
                distance, place = _distance(z, y, x, p, cones)
                # else it is nowhere nearest in this cell, or covers nothing of it
                if distance <= min(nearest[i, j] + 2.0 * inner, wall + half_cell):
                    which = 1 if size[i, j] >= wide else 0
                    _split(z, y, x, p, cones, step, splits[which], sub_distance[index[i, j]])
    _fill_edge_cells(
        sub_distance, index, light, size, step, splits, wide, wall, lumen_level, spans, plane
    )


@numba.njit(cache=True, nogil=True)
def _fill_whole_cells(nearest, light, half_cell, wall, lumen_level, spans, plane):
    """Fill the cells that no surface crosses; number the others."""
    index = np.empty(plane.shape, dtype=np.int64)
    n_edge = 0
    for i in range(plane.shape[0]):
        for j in range(spans[0][i], spans[1][i]):
            index[i, j] = -1
            if nearest[i, j] >= wall + half_cell:
                plane[i, j] = 0.0
            elif nearest[i, j] <= -half_cell:
                plane[i, j] = light[i, j] * (lumen_level if wall > 0 else 1.0)
            else:
                index[i, j] = n_edge
                n_edge += 1
    return index, n_edge


@numba.njit(cache=True, nogil=True)
def _split(z, y, x, p, cones, step, splits, sub_distance):
    """Lower the sub-cells' distances to primitive p's where it is nearer."""
    s = 0
    for u in range(splits[0]):
        sub_z = z + ((u + 0.5) / splits[0] - 0.5) * step[0]
        for v in range(splits[1]):
            sub_y = y + ((v + 0.5) / splits[1] - 0.5) * step[1]
            for w in range(splits[2]):
                sub_x = x + ((w + 0.5) / splits[2] - 0.5) * step[2]
                distance, _ = _distance(sub_z, sub_y, sub_x, p, cones)
                sub_distance[s] = min(sub_distance[s], distance)
                s += 1


@numba.njit(cache=True, nogil=True)
def _fill_edge_cells(
    sub_distance, index, light, size, step, splits, wide, wall, lumen_level, spans, plane
):
    """Fill the cells that a surface may cross with the mean over their sub-cells."""
    sub_step = np.empty(3)
    for i in range(plane.shape[0]):
        for j in range(spans[0][i], spans[1][i]):
            cell = index[i, j]
            if cell < 0:
                continue
            n = splits[1] if size[i, j] >= wide else splits[0]
            square = 0.0
            for k in range(3):
                sub_step[k] = step[k] / n[k]
                square += sub_step[k] ** 2
            total = 0.0
            s = 0
            for u in range(n[0]):
                for v in range(n[1]):
                    for w in range(n[2]):
                        distance = sub_distance[cell, s]
                        width = _width(sub_distance[cell], u, v, w, n, sub_step)
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
def _width(sub_distance, u, v, w, splits, sub_step):
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
        square += (sub_distance[here] - sub_distance[other]) ** 2
    return max(np.sqrt(square), 0.25 * min(sub_step[0], sub_step[1], sub_step[2]))


@numba.njit(cache=True, nogil=True)
def _outputs(q, taps, factor, n_out):
    """Return the first output that cell q feeds and the one after the last."""
    return max(0, (q - taps + factor) // factor), min(n_out, q // factor + 1)


@numba.njit(cache=True, nogil=True)
def _reduce_plane(fine, spans, weights_y, weights_x, factors, out):
    """out[d, c] = sum over p, q of weights_y[p] weights_x[q] fine[d * fy + p, c * fx + q].

    First along x, then along y; what lies outside the rows' spans is zero.
    """
    ny, nx = out.shape
    row = np.empty(nx)
    total = np.zeros((ny, nx))
    for i in range(fine.shape[0]):
        if spans[1][i] <= spans[0][i]:
            continue
        c0, _ = _outputs(spans[0][i], len(weights_x), factors[2], nx)
        _, c1 = _outputs(spans[1][i] - 1, len(weights_x), factors[2], nx)
        for c in range(c0, c1):
            row[c] = 0.0
        for q in range(spans[0][i], spans[1][i]):
            if fine[i, q] != 0.0:
                first, after = _outputs(q, len(weights_x), factors[2], nx)
                for c in range(first, after):
                    row[c] += weights_x[q - c * factors[2]] * fine[i, q]
        first, after = _outputs(i, len(weights_y), factors[1], ny)
        for d in range(first, after):
            weight = weights_y[i - d * factors[1]]
            for c in range(c0, c1):
                total[d, c] += weight * row[c]
    for d in range(ny):
        for c in range(nx):
            out[d, c] = total[d, c]


@numba.njit(cache=True, nogil=True, parallel=True)
def signal_planes(
    first_z, members, member_offsets, cones, low, high, reach, brightness, origin, step, splits,
    wide, wall, lumen_level, fine_shape, factors, weights_y, weights_x, out,
):  # fmt: skip
    """Cover each fine plane and reduce it to the image's grid along y and x, planes in parallel."""
    for k in numba.prange(out.shape[0]):
        if member_offsets[k + 1] > member_offsets[k]:
            plane = np.empty((fine_shape[0], fine_shape[1]))
            chosen = members[member_offsets[k] : member_offsets[k + 1]]
            z = origin[0] + (first_z + k) * step[0]
            spans = _spans(z, chosen, low, high, reach, origin, step, plane.shape)
            cover_plane(
                z, chosen, cones, low, high, reach, brightness, origin, step, splits, wide, wall,
                lumen_level, spans, plane,
            )  # fmt: skip
            _reduce_plane(plane, spans, weights_y, weights_x, factors, out[k])


@numba.njit(cache=True, nogil=True, parallel=True)
def reduce_planes(fine, weights, factor, out):
    """out[c] = sum over q of weights[q] fine[c * factor + q], always in the order of q."""
    for c in numba.prange(out.shape[0]):
        for q in range(len(weights)):
            for i in range(out.shape[1]):
                for j in range(out.shape[2]):
                    out[c, i, j] += weights[q] * fine[c * factor + q, i, j]
