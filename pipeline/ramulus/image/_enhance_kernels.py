"""Kernels of the tube enhancement: one pass of smoothing, curvatures and shape a scale."""

import math

import numba
import numpy as np

CONTRAST, SATO, FRANGI, JERMAN = 0, 1, 2, 3
WEIGHED = 10  # added: the shape as a weight on the contrast, so that the response keeps its unit
NORM, THIRD = 20, 21


@numba.njit(cache=True, nogil=True)
def halve_into(volume, z_start, z_stop, out):
    """Mean of 2 x 2 x 2 voxels (fewer at an odd end) into out[z_start:z_stop]."""
    nz, ny, nx = volume.shape
    for z in range(z_start, z_stop):
        z1 = min(2 * z + 1, nz - 1)
        for y in range(out.shape[1]):
            y1 = min(2 * y + 1, ny - 1)
            for x in range(nx // 2):
                x0 = 2 * x
                out[z, y, x] = np.float32(0.125) * (
                    np.float32(volume[2 * z, 2 * y, x0])
                    + np.float32(volume[2 * z, 2 * y, x0 + 1])
                    + np.float32(volume[2 * z, y1, x0])
                    + np.float32(volume[2 * z, y1, x0 + 1])
                    + np.float32(volume[z1, 2 * y, x0])
                    + np.float32(volume[z1, 2 * y, x0 + 1])
                    + np.float32(volume[z1, y1, x0])
                    + np.float32(volume[z1, y1, x0 + 1])
                )
            if nx % 2:
                x0 = nx - 1
                out[z, y, x0 // 2] = np.float32(0.25) * (
                    np.float32(volume[2 * z, 2 * y, x0])
                    + np.float32(volume[2 * z, y1, x0])
                    + np.float32(volume[z1, 2 * y, x0])
                    + np.float32(volume[z1, y1, x0])
                )


@numba.njit(cache=True, nogil=True)
def mirrored(i, n):
    """Index of a voxel beyond a face, mirrored at the face; a vessel cut lengthwise stays a tube."""
    while i < 0 or i >= n:
        i = -i - 1 if i < 0 else 2 * n - 1 - i
    return i


@numba.njit(cache=True, nogil=True)
def smooth_plane(volume, z, y_start, rows, taps_y, taps_x, wide, out):
    """Smooth `rows` rows of plane z along y and x (mirrored at the faces) into out."""
    ny, nx = volume.shape[1], volume.shape[2]
    half_y, half_x = len(taps_y) // 2, len(taps_x) // 2
    for row in range(rows):
        for x in range(nx + 2 * half_x):
            wide[x] = np.float32(0.0)
        middle = wide[half_x : half_x + nx]
        for k in range(len(taps_y)):
            y = mirrored(y_start + row + k - half_y, ny)
            weight = taps_y[k]
            line = volume[z, y]
            for x in range(nx):
                middle[x] += weight * np.float32(line[x])
        for x in range(half_x):
            wide[x] = middle[mirrored(x - half_x, nx)]
            wide[half_x + nx + x] = middle[mirrored(nx + x, nx)]
        target = out[row]
        for x in range(nx):
            target[x] = np.float32(0.0)
        for k in range(len(taps_x)):
            weight = taps_x[k]
            source = wide[k : k + nx]
            for x in range(nx):
                target[x] += weight * source[x]


@numba.njit(cache=True, nogil=True)
def eigenvalues_by_magnitude(zz, yy, xx, zy, zx, yx):
    """Eigenvalues of a symmetric 3 x 3 matrix, |l1| <= |l2| <= |l3| (trigonometric form)."""
    mean = (zz + yy + xx) / 3.0
    a, b, c = zz - mean, yy - mean, xx - mean
    p2 = (a * a + b * b + c * c + 2.0 * (zy * zy + zx * zx + yx * yx)) / 6.0
    if p2 <= 0.0:
        return mean, mean, mean
    p = math.sqrt(p2)
    determinant = a * (b * c - yx * yx) - zy * (zy * c - yx * zx) + zx * (zy * yx - b * zx)
    half = min(max(determinant / (2.0 * p2 * p), -1.0), 1.0)
    angle = math.acos(half) / 3.0
    high = mean + 2.0 * p * math.cos(angle)
    low = mean + 2.0 * p * math.cos(angle + 2.0943951023931953)
    mid = 3.0 * mean - high - low
    # high >= mid >= low: the largest magnitude is at one of the two ends.
    if abs(high) > abs(low):
        l3 = high
        l1, l2 = (mid, low) if abs(mid) <= abs(low) else (low, mid)
    else:
        l3 = low
        l1, l2 = (mid, high) if abs(mid) <= abs(high) else (high, mid)
    return l1, l2, l3


@numba.njit(cache=True, nogil=True)
def sato(l1, l2):
    width = 0.5 if l1 <= 0.0 else 2.0
    return -l2 * math.exp(-(l1 * l1) / (2.0 * (width * l2) ** 2))


@numba.njit(cache=True, nogil=True)
def frangi_shape(l1, l2, l3):
    plate, blob2 = l2 / l3, l1 * l1 / (l2 * l3)
    return (1.0 - math.exp(-2.0 * plate * plate)) * math.exp(-2.0 * blob2)


@numba.njit(cache=True, nogil=True)
def jerman(l2, l3, strongest_of_all):
    strong, strongest = -l2, max(-l3, strongest_of_all)
    if strong >= 0.5 * strongest:
        return 1.0
    return strong * strong * (strongest - strong) * (3.0 / (strong + strongest)) ** 3


@numba.njit(cache=True, nogil=True)
def shape_response(method, l1, l2, l3, parameter):
    """Response of a bright tube from eigenvalues that carry sigma**2 (grey values)."""
    if method == NORM:
        return math.sqrt(l1 * l1 + l2 * l2 + l3 * l3)
    if l3 >= 0.0:
        return 0.0
    if method == THIRD:
        return -l3
    if l2 >= 0.0:
        return 0.0
    if method == SATO or method == WEIGHED + SATO:
        return sato(l1, l2)
    if method == FRANGI:
        norm2 = l1 * l1 + l2 * l2 + l3 * l3
        return frangi_shape(l1, l2, l3) * (1.0 - math.exp(-norm2 / (2.0 * parameter * parameter)))
    if method == JERMAN:
        return jerman(l2, l3, parameter)
    contrast = math.sqrt(l2 * l3)
    if method == WEIGHED + FRANGI:
        return contrast * frangi_shape(l1, l2, l3)
    if method == WEIGHED + JERMAN:
        return contrast * jerman(l2, l3, 0.0)
    return contrast


@numba.njit(cache=True, nogil=True)
def respond_strip(
    volume, box, taps_z, taps_y, taps_x, inverse_um, sigma2, floor, method, parameter,
    scale, response, best,
):  # fmt: skip
    """Write max(response) and its scale in the box (z0, z1, y0, y1), all x; planes are streamed.

    `floor` skips voxels whose response cannot reach it: with l1 + l2 <= 0 the trace is at most l3,
    and no response of method CONTRAST or SATO exceeds |l3|.
    """
    nz, ny, nx = volume.shape
    z0, z1, y0, y1 = box[0], box[1], box[2], box[3]
    rows = y1 - y0 + 2
    half_z = len(taps_z) // 2
    depth = len(taps_z)
    ring = np.empty((depth, rows, nx), np.float32)
    held = np.full(depth, -1, np.int64)
    wide = np.empty(nx + len(taps_x), np.float32)
    planes = np.zeros((3, rows, nx + 2), np.float32)
    iz, iy, ix = inverse_um[0], inverse_um[1], inverse_um[2]
    fz, fy, fx = (
        np.float32(iz * iz * sigma2),
        np.float32(iy * iy * sigma2),
        np.float32(ix * ix * sigma2),
    )
    fzy, fzx, fyx = 0.25 * iz * iy * sigma2, 0.25 * iz * ix * sigma2, 0.25 * iy * ix * sigma2
    trace = np.empty(nx, np.float32)
    floor32 = np.float32(-floor)
    for z in range(z0 - 1, z1 + 1):
        slot = (z - z0 + 1) % 3
        zc = mirrored(z, nz)
        target = planes[slot]
        target[:, :] = np.float32(0.0)
        for k in range(depth):
            zk = mirrored(zc + k - half_z, nz)
            place = zk % depth
            if held[place] != zk:
                smooth_plane(volume, zk, y0 - 1, rows, taps_y, taps_x, wide, ring[place])
                held[place] = zk
            weight = taps_z[k]
            for row in range(rows):
                source = ring[place, row]
                line = target[row]
                for x in range(nx):
                    line[x + 1] += weight * source[x]
        for row in range(rows):
            target[row, 0] = target[row, 1]
            target[row, nx + 1] = target[row, nx]
        if z < z0 + 1:
            continue
        zr = z - 1
        below, here, above = planes[(slot + 1) % 3], planes[(slot + 2) % 3], target
        for row in range(1, rows - 1):
            c, n, s = here[row], here[row - 1], here[row + 1]
            b, a = below[row], above[row]
            for x in range(nx):
                i = x + 1
                twice = np.float32(2.0) * c[i]
                trace[x] = (
                    fx * (c[i - 1] - twice + c[i + 1])
                    + fy * (n[i] - twice + s[i])
                    + fz * (b[i] - twice + a[i])
                )
            bn, bs = below[row - 1], below[row + 1]
            an, as_ = above[row - 1], above[row + 1]
            y = y0 + row - 1
            for x in range(nx):
                if trace[x] > floor32 and method != NORM:
                    continue
                i = x + 1
                twice = 2.0 * c[i]
                xx = fx * (c[i - 1] - twice + c[i + 1])
                yy = fy * (n[i] - twice + s[i])
                zz = fz * (b[i] - twice + a[i])
                yx = fyx * (s[i + 1] - s[i - 1] - n[i + 1] + n[i - 1])
                zx = fzx * (a[i + 1] - a[i - 1] - b[i + 1] + b[i - 1])
                zy = fzy * (as_[i] - an[i] - bs[i] + bn[i])
                l1, l2, l3 = eigenvalues_by_magnitude(zz, yy, xx, zy, zx, yx)
                value = np.float32(shape_response(method, l1, l2, l3, parameter))
                if value > response[zr, y, x]:
                    response[zr, y, x] = value
                    best[zr, y, x] = scale


@numba.njit(cache=True, nogil=True)
def curvature_sample(smoothed, inverse_um, sigma2, out):
    """sigma**2 times the second difference along x at every inner voxel, flattened into out."""
    k = 0
    factor = inverse_um[2] * inverse_um[2] * sigma2
    for z in range(smoothed.shape[0]):
        for y in range(smoothed.shape[1]):
            for x in range(1, smoothed.shape[2] - 1):
                out[k] = factor * (
                    smoothed[z, y, x - 1] - 2.0 * smoothed[z, y, x] + smoothed[z, y, x + 1]
                )
                k += 1
