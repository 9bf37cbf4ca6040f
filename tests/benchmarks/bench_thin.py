"""Thinning and distances against scikit-image, scipy and the edt package, in one run.

Run as a script for the table (`python tests/benchmarks/bench_thin.py [edge]`); as a test it checks
a small volume so that it cannot rot. Each figure is the least wall time of a few repeats after a
first call that compiles.
"""

import os
import platform
import sys
import time

import numba
import numpy as np
import pytest

from ramulus.image.distance import distance_um, vessel_voxels
from ramulus.image.mask import Mask
from ramulus.image.thin import thin
from ramulus.image.topology import betti_numbers
from ramulus.network.trace import trace

FRACTIONS = (0.005, 0.02, 0.1)
SPACING = (1.0, 1.0, 1.0)


def bent_tubes(edge, fraction, *, seed=0, widest=6.0):
    """Random bent tubes of radius 1.2 to `widest` voxels until the fraction is filled."""
    rng = np.random.default_rng(seed)
    inside = np.zeros((edge, edge, edge), dtype=bool)
    filled = 0
    while filled < fraction * inside.size:
        place, axis = rng.uniform(0, edge, 3), rng.normal(size=3)
        radius = rng.uniform(1.2, widest)
        for _ in range(int(rng.uniform(40, 200))):
            axis = axis / np.linalg.norm(axis) + 0.12 * rng.normal(size=3)
            place = place + axis / np.linalg.norm(axis)
            if (place < 0).any() or (place >= edge).any():
                break
            low = np.maximum(np.floor(place - radius).astype(int), 0)
            high = np.minimum(np.ceil(place + radius).astype(int) + 1, edge)
            box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
            grid = np.ogrid[box]
            square = sum((g - p) ** 2 for g, p in zip(grid, place, strict=True))
            before = np.count_nonzero(inside[box])
            inside[box] |= square <= radius**2
            filled += np.count_nonzero(inside[box]) - before
    return inside


def least_seconds(function, repeats):
    """Least wall time of `repeats` calls after one more."""
    function()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return min(times)


def compare(edge, fraction, *, repeats=3):
    """Times of one volume by name, in seconds."""
    import edt
    from scipy.ndimage import distance_transform_edt
    from skimage.morphology import skeletonize

    inside = bent_tubes(edge, fraction)
    mask = Mask(inside, SPACING)
    skeleton = thin(mask)
    seconds = {
        "thin (distances included)": least_seconds(lambda: thin(mask), repeats),
        "scikit-image skeletonize": least_seconds(lambda: skeletonize(inside), 1),
        "vessel_voxels": least_seconds(lambda: vessel_voxels(inside, spacing_um=SPACING), repeats),
        "distance_um": least_seconds(lambda: distance_um(inside, spacing_um=SPACING), repeats),
        "edt package, 2 threads": least_seconds(
            lambda: edt.edt(inside, anisotropy=SPACING, black_border=False, parallel=2), 1
        ),
        "trace": least_seconds(lambda: trace(skeleton), repeats),
    }
    if edge <= 256:
        start = time.perf_counter()
        distance_transform_edt(inside, sampling=SPACING)
        seconds["scipy distance_transform_edt"] = time.perf_counter() - start
    volume = np.zeros(inside.shape, dtype=bool)
    volume[tuple(skeleton.voxels.T)] = True
    return seconds, betti_numbers(inside) == betti_numbers(volume), float(inside.mean())


@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="measures the compiled kernels")
def test_thinning_keeps_the_topology_and_takes_less_time_than_directional_thinning():
    seconds, same_topology, _ = compare(96, 0.02, repeats=2)
    assert same_topology
    assert seconds["thin (distances included)"] < seconds["scikit-image skeletonize"]


def main():
    edge = int(sys.argv[1]) if len(sys.argv) > 1 else 256
    print(f"{platform.processor() or platform.machine()}, {os.cpu_count()} cores, {edge}^3 voxels")
    for fraction in FRACTIONS:
        seconds, same_topology, filled = compare(edge, fraction)
        ours = seconds["thin (distances included)"]
        print(f"\nvessel fraction {filled:.2%}; Betti numbers kept: {same_topology}")
        for name, value in seconds.items():
            print(f"  {name:30s} {value:8.3f} s")
        print(f"  skeletonize / thin             {seconds['scikit-image skeletonize'] / ours:8.1f}")
        best = seconds["edt package, 2 threads"] / seconds["vessel_voxels"]
        print(f"  edt package / vessel_voxels    {best:8.1f}")


if __name__ == "__main__":
    main()
