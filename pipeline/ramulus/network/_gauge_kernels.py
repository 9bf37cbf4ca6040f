"""Kernels of the gauging: a blurred disc fitted to cross-sections sampled from the grey values."""

import math

import numba
import numpy as np

N_ANGLES, N_RINGS = 12, 14
N_SAMPLES = N_ANGLES * N_RINGS
TABLE_R, TABLE_D, TABLE_SPAN = 20.0, 0.05, 6.0
HERMITE_5 = (0.0, 1.3556261799742659, -1.3556261799742659, 2.8569700138728056, -2.8569700138728056)
WEIGHT_5 = (0.5333333333333333, 0.2220759220056127, 0.2220759220056127, 0.0112574113277207, 0.0112574113277207)  # fmt: skip
HERMITE_3 = (0.0, 1.7320508075688772, -1.7320508075688772)
WEIGHT_3 = (0.6666666666666666, 0.16666666666666666, 0.16666666666666666)


@numba.njit(cache=True, nogil=True)
def disc(distance, radius, table, out):
    """Disc of `radius` blurred with a Gaussian of SD 1, at `distance` from its centre.

    out: value, derivative by distance, derivative by radius. Bilinear in tables over (radius,
    distance - radius); wide discs are straight edges whose half level lies 1 / (2 radius) further in.
    """
    d = distance - radius
    if d >= TABLE_SPAN or d <= -TABLE_SPAN:
        out[0] = 0.0 if d > 0 else 1.0
        out[1], out[2] = 0.0, 0.0
        return
    if radius >= TABLE_R:
        t = d + 0.5 / radius
        out[0] = 0.5 * math.erfc(t * 0.7071067811865476)
        out[1] = -0.3989422804014327 * math.exp(-0.5 * t * t)
        out[2] = -out[1]
        return
    fr = radius / TABLE_R * (table.shape[1] - 1)
    fd = (d + TABLE_SPAN) / TABLE_D
    i, j = min(int(fr), table.shape[1] - 2), min(int(fd), table.shape[2] - 2)
    a, b = fr - i, fd - j
    w00, w01, w10, w11 = (1 - a) * (1 - b), (1 - a) * b, a * (1 - b), a * b
    for k in range(3):
        out[k] = (
            w00 * table[k, i, j]
            + w01 * table[k, i, j + 1]
            + w10 * table[k, i + 1, j]
            + w11 * table[k, i + 1, j + 1]
        )
    out[2] -= out[1]


@numba.njit(cache=True, nogil=True)
def disc_two(u, v, radius, sigma_u, sigma_v, table, one, out):
    """Disc blurred with an elliptical Gaussian: the isotropic part by the table, the rest by nodes.

    out: value, derivatives by u, v and radius.
    """
    small, large = min(sigma_u, sigma_v), max(sigma_u, sigma_v)
    extra2 = large * large - small * small
    for k in range(4):
        out[k] = 0.0
    if extra2 < 0.04 * small * small:
        s = math.sqrt(0.5 * (sigma_u * sigma_u + sigma_v * sigma_v))
        rho = math.sqrt(u * u + v * v)
        disc(rho / s, radius / s, table, one)
        out[0] = one[0]
        if rho > 1e-9:
            out[1], out[2] = one[1] * u / (rho * s), one[1] * v / (rho * s)
        out[3] = one[2] / s
        return
    extra = math.sqrt(extra2)
    few = extra2 < small * small
    for k in range(3 if few else 5):
        h = extra * (HERMITE_3[k] if few else HERMITE_5[k])
        w = WEIGHT_3[k] if few else WEIGHT_5[k]
        uu, vv = (u, v - h) if sigma_v > sigma_u else (u - h, v)
        rho = math.sqrt(uu * uu + vv * vv)
        disc(rho / small, radius / small, table, one)
        out[0] += w * one[0]
        if rho > 1e-9:
            out[1] += w * one[1] * uu / (rho * small)
            out[2] += w * one[1] * vv / (rho * small)
        out[3] += w * one[2] / small


@numba.njit(cache=True, nogil=True)
def trilinear(volume, z, y, x):
    """Value at fractional indices; NaN more than half a voxel outside."""
    nz, ny, nx = volume.shape
    if z < -0.5 or y < -0.5 or x < -0.5 or z > nz - 0.5 or y > ny - 0.5 or x > nx - 0.5:
        return np.nan
    z = min(max(z, 0.0), nz - 1.0)
    y = min(max(y, 0.0), ny - 1.0)
    x = min(max(x, 0.0), nx - 1.0)
    z0, y0, x0 = int(z), int(y), int(x)
    z1, y1, x1 = min(z0 + 1, nz - 1), min(y0 + 1, ny - 1), min(x0 + 1, nx - 1)
    fz, fy, fx = z - z0, y - y0, x - x0
    c00 = volume[z0, y0, x0] * (1 - fx) + volume[z0, y0, x1] * fx
    c01 = volume[z0, y1, x0] * (1 - fx) + volume[z0, y1, x1] * fx
    c10 = volume[z1, y0, x0] * (1 - fx) + volume[z1, y0, x1] * fx
    c11 = volume[z1, y1, x0] * (1 - fx) + volume[z1, y1, x1] * fx
    return (c00 * (1 - fy) + c01 * fy) * (1 - fz) + (c10 * (1 - fy) + c11 * fy) * fz


@numba.njit(cache=True, nogil=True)
def at_arc(points, arc, first, last, s, half, position, tangent):
    """Position at arc length s of points[first:last], tangent as the chord over s -+ half."""
    ends = np.empty((2, 3))
    for side in range(3):
        t = s if side == 2 else (s - half if side == 0 else s + half)
        t = min(max(t, arc[first]), arc[last - 1])
        low, high = first, last - 1
        while high - low > 1:
            middle = (low + high) // 2
            if arc[middle] <= t:
                low = middle
            else:
                high = middle
        step = arc[high] - arc[low]
        f = (t - arc[low]) / step if step > 0 else 0.0
        for axis in range(3):
            value = points[low, axis] * (1 - f) + points[high, axis] * f
            if side == 2:
                position[axis] = value
            else:
                ends[side, axis] = value
    norm = 0.0
    for axis in range(3):
        tangent[axis] = ends[1, axis] - ends[0, axis]
        norm += tangent[axis] ** 2
    norm = math.sqrt(norm)
    if norm > 0:
        for axis in range(3):
            tangent[axis] /= norm
    else:
        tangent[0], tangent[1], tangent[2] = 1.0, 0.0, 0.0


@numba.njit(cache=True, nogil=True)
def plane_frame(tangent, e1, e2):
    """In-plane axes: e1 horizontal, e2 as steep as the plane allows (blur is then diagonal)."""
    horizontal = math.sqrt(tangent[1] ** 2 + tangent[2] ** 2)
    if horizontal < 1e-6:
        e1[0], e1[1], e1[2] = 0.0, 0.0, 1.0
    else:
        e1[0], e1[1], e1[2] = 0.0, -tangent[2] / horizontal, tangent[1] / horizontal
    e2[0] = tangent[1] * e1[2] - tangent[2] * e1[1]
    e2[1] = tangent[2] * e1[0] - tangent[0] * e1[2]
    e2[2] = tangent[0] * e1[1] - tangent[1] * e1[0]


@numba.njit(cache=True, nogil=True)
def sample_station(volume, inverse_um, origin_um, points, arc, first, last, s, low, high, window,
                   n_planes, tangent_half, reach, values, e1, e2, centre):  # fmt: skip
    """Mean polar cross-section over the arc window; returns e2's steepness, fills values and frame."""
    position, tangent = np.empty(3), np.empty(3)
    f1, f2 = np.empty(3), np.empty(3)
    count = np.zeros(N_SAMPLES)
    for k in range(N_SAMPLES):
        values[k] = 0.0
    steep = 0.0
    used = 0
    for plane in range(n_planes):
        offset = 0.0 if n_planes == 1 else window * (2.0 * plane / (n_planes - 1) - 1.0)
        t = s + offset
        if t < low or t > high:
            continue
        at_arc(points, arc, first, last, t, tangent_half, position, tangent)
        plane_frame(tangent, f1, f2)
        steep += abs(f2[0])
        used += 1
        for ring in range(N_RINGS):
            rho = reach * (ring + 0.5) / N_RINGS
            for angle in range(N_ANGLES):
                theta = 6.283185307179586 * (angle + 0.5 * (ring % 2)) / N_ANGLES
                u, v = rho * math.cos(theta), rho * math.sin(theta)
                z = (position[0] + u * f1[0] + v * f2[0] - origin_um[0]) * inverse_um[0]
                y = (position[1] + u * f1[1] + v * f2[1] - origin_um[1]) * inverse_um[1]
                x = (position[2] + u * f1[2] + v * f2[2] - origin_um[2]) * inverse_um[2]
                value = trilinear(volume, z, y, x)
                if not math.isnan(value):
                    k = ring * N_ANGLES + angle
                    values[k] += value
                    count[k] += 1.0
    for k in range(N_SAMPLES):
        values[k] = values[k] / count[k] if count[k] > 0 else np.nan
    at_arc(points, arc, first, last, s, tangent_half, position, tangent)
    plane_frame(tangent, e1, e2)
    for axis in range(3):
        centre[axis] = position[axis]
    return steep / max(used, 1)


@numba.njit(cache=True, nogil=True)
def solve_in_place(matrix, right, n):
    """Gauss elimination with pivoting of a small symmetric system; False when singular."""
    for i in range(n):
        pivot = i
        for k in range(i + 1, n):
            if abs(matrix[k, i]) > abs(matrix[pivot, i]):
                pivot = k
        if abs(matrix[pivot, i]) < 1e-300:
            return False
        if pivot != i:
            for j in range(n):
                matrix[i, j], matrix[pivot, j] = matrix[pivot, j], matrix[i, j]
            for j in range(right.shape[1]):
                right[i, j], right[pivot, j] = right[pivot, j], right[i, j]
        for k in range(i + 1, n):
            f = matrix[k, i] / matrix[i, i]
            if f != 0.0:
                for j in range(i, n):
                    matrix[k, j] -= f * matrix[i, j]
                for j in range(right.shape[1]):
                    right[k, j] -= f * right[i, j]
    for i in range(n - 1, -1, -1):
        for j in range(right.shape[1]):
            total = right[i, j]
            for k in range(i + 1, n):
                total -= matrix[i, k] * right[k, j]
            right[i, j] = total / matrix[i, i]
    return True


@numba.njit(cache=True, nogil=True)
def fit_disc(values, reach, voxel_area, start_r, sigma_xy, sigma_z, steep, log_contrast, contrast_sd,
             free_blur, fixed_levels, table, out):  # fmt: skip
    """Least squares of b + A disc over the samples, robust (biweight) against neighbours.

    Parameters ln r, c1, c2, ln A, b (and ln sigma_xy, ln sigma_z with `free_blur`). out: radius, its
    SE, A, b, c1, c2, d ln r / d ln sigma, residual SD, sigma_xy, sigma_z, weight share kept.
    Returns False where no fit was reached.
    """
    n_par = 7 if free_blur else 5
    base = np.empty(N_SAMPLES)
    kept = np.empty(N_SAMPLES)
    pu, pv = np.empty(N_SAMPLES), np.empty(N_SAMPLES)
    ring_area = (reach / N_RINGS) * 6.283185307179586 / N_ANGLES
    centre_sum, centre_n = 0.0, 0
    outer = np.empty(N_SAMPLES)
    n_outer = 0
    for ring in range(N_RINGS):
        rho = reach * (ring + 0.5) / N_RINGS
        for angle in range(N_ANGLES):
            k = ring * N_ANGLES + angle
            theta = 6.283185307179586 * (angle + 0.5 * (ring % 2)) / N_ANGLES
            pu[k], pv[k] = rho * math.cos(theta), rho * math.sin(theta)
            base[k] = 0.0 if math.isnan(values[k]) else min(rho * ring_area / voxel_area, 1.0)
            if base[k] > 0.0:
                if rho < 0.5 * start_r or ring == 0:
                    centre_sum += values[k]
                    centre_n += 1
                if rho > start_r + 1.5 * sigma_xy:
                    outer[n_outer] = values[k]
                    n_outer += 1
    if centre_n == 0 or n_outer < 24:
        return False
    background = np.percentile(outer[:n_outer], 30.0)
    contrast = centre_sum / centre_n - background
    if fixed_levels:
        background, contrast = 0.0, 1.0
    if contrast <= 0.0:
        return False
    one, four, moved = np.empty(3), np.empty(4), np.empty(4)
    disc_two(0.0, 0.0, start_r, sigma_xy, sigma_xy, table, one, four)
    peak = max(four[0], 0.2)
    par = np.zeros(7)
    par[0] = math.log(start_r)
    par[3] = math.log(contrast) if fixed_levels else math.log(contrast / peak)
    if contrast_sd > 0.0 and not fixed_levels:
        par[3] = log_contrast
    par[4] = background
    par[5], par[6] = math.log(sigma_xy), math.log(sigma_z)
    low_r, high_r = math.log(0.15 * sigma_xy), math.log(1.2 * reach)
    matrix, right = np.zeros((7, 7)), np.zeros((7, 2))
    column = np.zeros((7, N_SAMPLES))
    residual = np.zeros(N_SAMPLES)
    damping, best = 1e-3, np.inf
    trial = par.copy()
    spread2 = 1.0
    accepted = 0
    for iteration in range(16):
        a = math.exp(trial[3])
        evaluate(
            column, residual, base, values, trial, pu, pv, steep, free_blur, fixed_levels, table
        )
        if iteration == 0 or accepted == 2:
            # Scale from the median residual, never below 4 % of the contrast; weights of a biweight.
            m = 0
            for k in range(N_SAMPLES):
                if base[k] > 0.0:
                    outer[m] = abs(residual[k])
                    m += 1
            scale = max(1.4826 * np.median(outer[:m]), 0.04 * a)
            for k in range(N_SAMPLES):
                q = residual[k] / (5.0 * scale) if base[k] > 0.0 else 2.0
                kept[k] = base[k] * (1.0 - q * q) ** 2 if abs(q) < 1.0 else 0.0
            best = np.inf
        cost, mass = 0.0, 0.0
        for k in range(N_SAMPLES):
            cost += kept[k] * residual[k] ** 2
            mass += kept[k]
        if mass < 8.0:
            return False
        if best == np.inf:
            spread2 = max(cost / max(mass - n_par, 1.0), 1e-12 * a * a + 1e-30)
        cost /= spread2
        if contrast_sd > 0.0:
            cost += ((trial[3] - log_contrast) / contrast_sd) ** 2
        if free_blur:
            cost += ((trial[5] - math.log(sigma_xy)) / 0.7) ** 2 + (
                (trial[6] - math.log(sigma_z)) / 0.7
            ) ** 2
        if cost > best:
            damping *= 8.0
            if damping > 1e5:
                break
        else:
            settled = best - cost < 2e-3 * (1.0 + cost) and accepted > 3
            best = cost
            accepted += 1
            damping = max(damping * 0.3, 1e-7)
            for i in range(7):
                par[i] = trial[i]
            accumulate(column, residual, kept, par, spread2, log_contrast, contrast_sd, free_blur, fixed_levels,
                       sigma_xy, sigma_z, n_par, matrix, right)  # fmt: skip
            if settled:
                break
        normal = matrix.copy()
        step = right.copy()
        for i in range(n_par):
            normal[i, i] = normal[i, i] * (1.0 + damping) + 1e-12
        if not solve_in_place(normal, step, n_par):
            return False
        for i in range(n_par):
            limit = 0.4 if i in (0, 3, 5, 6) else (0.5 * math.exp(par[0]) if i < 3 else 1e30)
            trial[i] = par[i] + min(max(step[i, 0], -limit), limit)
        trial[0] = min(max(trial[0], low_r), high_r)
        if free_blur:
            trial[5] = min(max(trial[5], math.log(0.2 * sigma_xy)), math.log(6.0 * sigma_xy))
            trial[6] = min(max(trial[6], math.log(0.2 * sigma_z)), math.log(6.0 * sigma_z))
    if best == np.inf:
        return False
    evaluate(column, residual, base, values, par, pu, pv, steep, free_blur, fixed_levels, table)
    # Second right-hand side: how the model moves with a common change of the blur.
    a, r = math.exp(par[3]), math.exp(par[0])
    sx, sz = math.exp(par[5]), math.exp(par[6])
    sv = math.sqrt(sx * sx + (sz * sz - sx * sx) * steep * steep)
    cost, mass, full = 0.0, 0.0, 0.0
    for i in range(n_par):
        matrix[i, i] += 1e-12
        right[i, 0] = 1.0 if i == 0 else 0.0
        right[i, 1] = 0.0
    for k in range(N_SAMPLES):
        full += base[k]
        if kept[k] > 0.0:
            u, v = pu[k] - par[1], pv[k] - par[2]
            disc_two(u, v, r, 1.02 * sx, 1.02 * sv, table, one, moved)
            e = residual[k]
            change = (a * moved[0] - (values[k] - par[4] - e)) / 0.02
            cost += kept[k] * e * e
            mass += kept[k]
            for i in range(n_par):
                right[i, 1] -= kept[k] * column[i, k] * change / spread2
    if not solve_in_place(matrix, right, n_par):
        return False
    final2 = max(cost / max(mass - n_par, 1.0), 1e-30)
    out[0] = r
    out[1] = r * math.sqrt(max(right[0, 0], 0.0) * max(final2 / spread2, 1e-12))
    out[2], out[3], out[4], out[5] = a, par[4], par[1], par[2]
    out[6] = right[0, 1]
    out[7] = math.sqrt(final2)
    out[8], out[9] = sx, sz
    out[10] = mass / full
    return True


@numba.njit(cache=True, nogil=True)
def evaluate(column, residual, base, values, par, pu, pv, steep, free_blur, fixed_levels, table):
    """Residuals and the Jacobian's columns at the parameters."""
    one, four, moved = np.empty(3), np.empty(4), np.empty(4)
    a, r = math.exp(par[3]), math.exp(par[0])
    sx, sz = math.exp(par[5]), math.exp(par[6])
    sv = math.sqrt(sx * sx + (sz * sz - sx * sx) * steep * steep)
    tx, tz = 1.02 * sx, 1.02 * sz
    sv_x = math.sqrt(tx * tx + (sz * sz - tx * tx) * steep * steep)
    sv_z = math.sqrt(sx * sx + (tz * tz - sx * sx) * steep * steep)
    for k in range(len(base)):
        if base[k] <= 0.0:
            continue
        u, v = pu[k] - par[1], pv[k] - par[2]
        disc_two(u, v, r, sx, sv, table, one, four)
        residual[k] = values[k] - par[4] - a * four[0]
        column[0, k] = a * r * four[3]
        column[1, k], column[2, k] = -a * four[1], -a * four[2]
        column[3, k] = 0.0 if fixed_levels else a * four[0]
        column[4, k] = 0.0 if fixed_levels else 1.0
        if free_blur:
            disc_two(u, v, r, tx, sv_x, table, one, moved)
            column[5, k] = a * (moved[0] - four[0]) / 0.02
            disc_two(u, v, r, sx, sv_z, table, one, moved)
            column[6, k] = a * (moved[0] - four[0]) / 0.02


@numba.njit(cache=True, nogil=True)
def accumulate(column, residual, kept, par, spread2, log_contrast, contrast_sd, free_blur, fixed_levels,
               sigma_xy, sigma_z, n_par, matrix, right):  # fmt: skip
    """Fill J'WJ and J'We with the priors."""
    for i in range(n_par):
        total = 0.0
        for k in range(len(kept)):
            total += kept[k] * column[i, k] * residual[k]
        right[i, 0] = total / spread2
        for j in range(i + 1):
            total = 0.0
            for k in range(len(kept)):
                total += kept[k] * column[i, k] * column[j, k]
            matrix[i, j] = total / spread2
            matrix[j, i] = matrix[i, j]
    if contrast_sd > 0.0:
        matrix[3, 3] += 1.0 / contrast_sd**2
        right[3, 0] += (log_contrast - par[3]) / contrast_sd**2
    if free_blur:
        matrix[5, 5] += 1.0 / 0.49
        matrix[6, 6] += 1.0 / 0.49
        right[5, 0] += (math.log(sigma_xy) - par[5]) / 0.49
        right[6, 0] += (math.log(sigma_z) - par[6]) / 0.49
    if fixed_levels:
        matrix[3, 3] += 1.0
        matrix[4, 4] += 1.0


@numba.njit(cache=True, nogil=True)
def gauge_stations(volume, inverse_um, origin_um, points, arc, offsets, segment, s, low, high, start_r,
                   step_um, voxel_area, sigma_xy, sigma_z, log_contrast, contrast_sd, free_blur,
                   fixed_levels, table, begin, end, out, frames):  # fmt: skip
    """Gauge stations begin..end; out (n, 12), last column 1 where a fit was reached."""
    values = np.empty(N_SAMPLES)
    e1, e2, centre = np.empty(3), np.empty(3), np.empty(3)
    for i in range(begin, end):
        first, last = offsets[segment[i]], offsets[segment[i] + 1]
        r0 = start_r[i]
        window = max(r0, 1.5 * step_um)
        n_planes = min(2 * int(math.ceil(window / step_um)) + 1, 11)
        out[i, 11] = 0.0
        blur = max(sigma_xy, sigma_z) if free_blur else max(sigma_xy, min(sigma_z, 2.0 * sigma_xy))
        for attempt in range(2):
            reach = 1.5 * r0 + 3.0 * blur
            steep = sample_station(
                volume, inverse_um, origin_um, points, arc, first, last, s[i], low[i], high[i], window,
                n_planes, max(r0, 2.0 * step_um), reach, values, e1, e2, centre,
            )  # fmt: skip
            good = fit_disc(
                values, reach, voxel_area, r0, sigma_xy, sigma_z, steep, log_contrast[i], contrast_sd,
                free_blur, fixed_levels, table, out[i],
            )  # fmt: skip
            if not good:
                break
            out[i, 11] = 1.0
            # A start far from the answer gave the fit a poor reach: once more from there.
            if out[i, 0] < 1.35 * r0 and out[i, 0] > 0.6 * r0:
                break
            r0 = min(max(out[i, 0], 0.5 * r0), 2.0 * r0)
        for axis in range(3):
            frames[i, 0, axis] = centre[axis]
            frames[i, 1, axis] = e1[axis]
            frames[i, 2, axis] = e2[axis]


@numba.njit(cache=True, nogil=True)
def average_along(segment, s, radius, se, slope, good, diameters, n_segments):
    """Weighted local mean of ln r over `diameters` of length, outliers left out; NaN without a fit.

    Overlapping windows share data: the standard error counts the stations of one diameter of
    length as one measurement.
    """
    n = len(s)
    mean, error, common = np.full(n, np.nan), np.full(n, np.nan), np.full(n, np.nan)
    begin = 0
    work = np.empty(n)
    while begin < n:
        end = begin
        while end < n and segment[end] == segment[begin]:
            end += 1
        m = 0
        for k in range(begin, end):
            if good[k]:
                work[m] = math.log(radius[k])
                m += 1
        if m:
            for k in range(begin, end):
                half = max(diameters, 0.25) * (
                    radius[k] if good[k] else math.exp(np.median(work[:m]))
                )
                # A median over two diameters first: one bad station must not pull its neighbours.
                c = 0
                local = np.empty(end - begin)
                for j in range(begin, end):
                    if good[j] and abs(s[j] - s[k]) <= 4.0 * half:
                        local[c] = math.log(radius[j])
                        c += 1
                if c == 0:
                    continue
                middle = np.median(local[:c])
                deviation = 1.4826 * np.median(np.abs(local[:c] - middle)) + 0.02
                total, weight_sum, variance, slope_sum, spread = 0.0, 0.0, 0.0, 0.0, 0.0
                for widen in range(4):
                    reach = half * 2.0**widen
                    total, weight_sum, variance, slope_sum = 0.0, 0.0, 0.0, 0.0
                    for j in range(begin, end):
                        d = abs(s[j] - s[k]) / reach
                        if not good[j] or d >= 1.0:
                            continue
                        value = math.log(radius[j])
                        if abs(value - middle) > 4.0 * deviation:
                            continue
                        relative = max(se[j] / radius[j], 0.005)
                        w = (1.0 - d * d) / (relative * relative + 0.0004)
                        total += w * value
                        slope_sum += w * slope[j]
                        weight_sum += w
                        variance += w * relative * relative
                    if weight_sum > 0.0:
                        break
                if weight_sum > 0.0:
                    mean[k] = math.exp(total / weight_sum)
                    error[k] = mean[k] * math.sqrt(variance / weight_sum)
                    common[k] = mean[k] * slope_sum / weight_sum
        begin = end
    return mean, error, common
