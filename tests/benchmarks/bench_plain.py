"""Whole `measure` against the plain script a lab would write: python tests/benchmarks/bench_plain.py [EDGE]

A phantom of EDGE**3 voxels (256 by default) and three scales for both, in one run, each as a process
of its own; compiled kernels are in the cache (one run before). The plain script: scikit-image's
frangi at the same scales, Otsu, skeletonize, scipy's distance transform, a networkx graph.
"""

import os
import platform
import subprocess
import sys
import tempfile
import time
from pathlib import Path

PLAIN = """
import sys, time
import networkx as nx, numpy as np, tifffile
from scipy import ndimage as ndi
from skimage.filters import frangi, threshold_otsu
from skimage.morphology import skeletonize
image = tifffile.imread(sys.argv[1]).astype(np.float32)
start = time.perf_counter()
ridge = frangi(image, sigmas=[float(s) for s in sys.argv[2:]], black_ridges=False)
print("enhancement", round(time.perf_counter() - start, 1))
mask = image > threshold_otsu(image)
distance = ndi.distance_transform_edt(mask)
line = np.argwhere(skeletonize(mask))
number = {tuple(p): k for k, p in enumerate(line.tolist())}
graph = nx.Graph()
for p, k in number.items():
    graph.add_node(k, radius=float(distance[p]))
    for dz in (-1, 0, 1):
        for dy in (-1, 0, 1):
            for dx in (-1, 0, 1):
                other = number.get((p[0] + dz, p[1] + dy, p[2] + dx))
                if other is not None and other > k:
                    graph.add_edge(k, other)
print("nodes", graph.number_of_nodes(), "whole", round(time.perf_counter() - start, 1))
"""


def timed(command):
    start = time.perf_counter()
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    return time.perf_counter() - start, done.stdout


def main(edge):
    with tempfile.TemporaryDirectory() as folder:
        stack = Path(folder) / "stack.tif"
        make = [
            "phantom",
            str(stack),
            "--set",
            f"phantom.shape=[{edge}, {edge}, {edge}]",
            "--quiet",
        ]
        subprocess.run([sys.executable, "-m", "ramulus", *make], check=True)
        sigmas = ["1.0", "2.0", "4.0"]
        measure = [
            sys.executable,
            "-m",
            "ramulus",
            "measure",
            str(stack),
            "--set",
            f"enhance.sigmas_um=[{', '.join(sigmas)}]",
            "--set",
            'twin.mode="off"',
            "--quiet",
            "--out",
        ]
        timed([*measure, str(Path(folder) / "warm")])
        ours = sorted(timed([*measure, str(Path(folder) / f"run{k}")])[0] for k in range(3))[1]
        plain, said = timed([sys.executable, "-c", PLAIN, str(stack), *sigmas])
    print(f"{platform.processor() or platform.machine()}, {os.cpu_count()} cores, {edge}**3 voxels")
    print(
        f"measure (median of 3): {ours:.1f} s; plain script: {plain:.1f} s ({' '.join(said.split())}); ratio {plain / ours:.1f}"
    )


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 256)
