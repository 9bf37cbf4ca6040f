"""Kernels of the segmentation by local half levels."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def sample_clamped(array, z, y, x):
    """Trilinear value at fractional indices, faces repeated."""
    nz, ny, nx = array.shape
    z = min(max(z, 0.0), nz - 1.0)
    y = min(max(y, 0.0), ny - 1.0)
    x = min(max(x, 0.0), nx - 1.0)
    z0, y0, x0 = int(z), int(y), int(x)
    z1, y1, x1 = min(z0 + 1, nz - 1), min(y0 + 1, ny - 1), min(x0 + 1, nx - 1)
    fz, fy, fx = z - z0, y - y0, x - x0
    c00 = array[z0, y0, x0] * (1 - fx) + array[z0, y0, x1] * fx
    c01 = array[z0, y1, x0] * (1 - fx) + array[z0, y1, x1] * fx
    c10 = array[z1, y0, x0] * (1 - fx) + array[z1, y0, x1] * fx
    c11 = array[z1, y1, x0] * (1 - fx) + array[z1, y1, x1] * fx
    return (c00 * (1 - fy) + c01 * fy) * (1 - fz) + (c10 * (1 - fy) + c11 * fy) * fz


@numba.njit(cache=True, nogil=True)
def light(image, z, y, x):
    """Grey value smoothed with 1 2 1 along each axis, faces repeated."""
    nz, ny, nx = image.shape
    total = np.float32(0.0)
    for dz in range(-1, 2):
        zz = min(max(z + dz, 0), nz - 1)
        wz = np.float32(2 - abs(dz))
        for dy in range(-1, 2):
            yy = min(max(y + dy, 0), ny - 1)
            w = wz * np.float32(2 - abs(dy))
            total += w * (
                np.float32(image[zz, yy, max(x - 1, 0)])
                + np.float32(2.0) * np.float32(image[zz, yy, x])
                + np.float32(image[zz, yy, min(x + 1, nx - 1)])
            )
    return total * np.float32(1.0 / 64.0)


@numba.njit(cache=True, nogil=True)
def gather_seeds(
    image, response, amplitude_low, amplitude_high, height_low, background, shift, ratio_low, ratio_high,
    z_start, z_stop, fold, number, weight, level_sum, strong,
):  # fmt: skip
    """Sum seeds' thresholds into cells `fold` times coarser.

    A seed is a voxel whose tube contrast passes `amplitude_low` (per z) and fits the height of its
    own grey value over the background. Its threshold is half way between the two.
    """
    euler = np.float32(2.718281828)
    ny, nx = image.shape[1], image.shape[2]
    scale = 0.5**shift
    count = 0
    for z in range(z_start, z_stop):
        bz = (z + 0.5) * scale - 0.5
        for y in range(ny):
            by = (y + 0.5) * scale - 0.5
            for x in range(nx):
                r = response[z, y, x]
                if r <= 0.0:
                    continue
                amplitude = euler * r
                if amplitude < amplitude_low[z]:
                    continue
                base = sample_clamped(background, bz, by, (x + 0.5) * scale - 0.5)
                height = light(image, z, y, x) - base
                if (
                    height <= height_low
                    or amplitude < ratio_low * height
                    or amplitude > ratio_high * height
                ):
                    continue
                w = amplitude * amplitude
                weight[z // fold, y // fold, x // fold] += w
                level_sum[z // fold, y // fold, x // fold] += w * (
                    base + height - np.float32(0.5) * min(height, amplitude)
                )
                count += 1
                if amplitude >= amplitude_high[z]:
                    strong[z // fold, y // fold, x // fold] = True
    return count


@numba.njit(cache=True, nogil=True)
def margin_into(image, weight, level_sum, coarser, z_start, z_stop, out):
    """out = max(light - threshold, coarser level's margin interpolated); -1e30 outside all domains.

    weight, level_sum and coarser have half the image's size.
    """
    ny, nx = image.shape[1], image.shape[2]
    for z in range(z_start, z_stop):
        cz = (z + 0.5) * 0.5 - 0.5
        for y in range(ny):
            cy = (y + 0.5) * 0.5 - 0.5
            for x in range(nx):
                cx = (x + 0.5) * 0.5 - 0.5
                value = np.float32(-1e30)
                if coarser[z // 2, y // 2, x // 2] > -1e29:
                    value = sample_clamped(coarser, cz, cy, cx)
                if weight[z // 2, y // 2, x // 2] > 0.0:
                    w = sample_clamped(weight, cz, cy, cx)
                    if w > 0.0:
                        threshold = sample_clamped(level_sum, cz, cy, cx) / w
                        value = max(value, light(image, z, y, x) - threshold)
                out[z, y, x] = value


@numba.njit(cache=True, nogil=True)
def inside_into(image, weight0, sum0, weight1, sum1, coarser, z_start, z_stop, out):
    """out = grey value above a local threshold, or a coarser level's margin above zero."""
    ny, nx = image.shape[1], image.shape[2]
    for z in range(z_start, z_stop):
        hz = z // 2
        cz = (z + 0.5) * 0.5 - 0.5
        for y in range(ny):
            hy = y // 2
            cy = (y + 0.5) * 0.5 - 0.5
            for x in range(nx):
                hx = x // 2
                first, second = weight0[hz, hy, hx] > 0.0, weight1[hz, hy, hx] > 0.0
                third = coarser[hz, hy, hx] > -1e29
                if not (first or second or third):
                    continue
                cx = (x + 0.5) * 0.5 - 0.5
                inside = third and sample_clamped(coarser, cz, cy, cx) > 0.0
                if not inside and (first or second):
                    value = light(image, z, y, x)
                    if first:
                        w = sample_clamped(weight0, cz, cy, cx)
                        inside = w > 0.0 and value * w > sample_clamped(sum0, cz, cy, cx)
                    if not inside and second:
                        w = sample_clamped(weight1, cz, cy, cx)
                        inside = w > 0.0 and value * w > sample_clamped(sum1, cz, cy, cx)
                out[z, y, x] = inside


@numba.njit(cache=True, nogil=True)
def size_of_parts(labels, strong, sizes, marked):
    """Voxels of each label, and whether a strong half-size cell lies in it."""
    for z in range(labels.shape[0]):
        for y in range(labels.shape[1]):
            for x in range(labels.shape[2]):
                label = labels[z, y, x]
                if label:
                    sizes[label] += 1
                    if strong[z // 2, y // 2, x // 2]:
                        marked[label] = True


@numba.njit(cache=True, nogil=True)
def keep_parts(labels, keep, z_start, z_stop, out):
    """out = keep[label], with label 0 never kept."""
    for z in range(z_start, z_stop):
        for y in range(labels.shape[1]):
            for x in range(labels.shape[2]):
                label = labels[z, y, x]
                out[z, y, x] = label != 0 and keep[label]


@numba.njit(cache=True, nogil=True)
def half_maximum(values, z_start, z_stop, out):
    """Maximum over 2 x 2 x 2 cells into out[z_start:z_stop]."""
    nz, ny, nx = values.shape
    for z in range(z_start, z_stop):
        z1 = min(2 * z + 1, nz - 1)
        for y in range(out.shape[1]):
            y1 = min(2 * y + 1, ny - 1)
            for x in range(out.shape[2]):
                x1 = min(2 * x + 1, nx - 1)
                a = max(values[2 * z, 2 * y, 2 * x], values[2 * z, 2 * y, x1])
                b = max(values[2 * z, y1, 2 * x], values[2 * z, y1, x1])
                c = max(values[z1, 2 * y, 2 * x], values[z1, 2 * y, x1])
                d = max(values[z1, y1, 2 * x], values[z1, y1, x1])
                out[z, y, x] = max(max(a, b), max(c, d))
