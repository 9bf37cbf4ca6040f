"""Every real stack and tree with its preset: python tests/benchmarks/bench_real.py [OUT]

One `ramulus measure` a sample, as a process of its own; prints size, graph, orders, hindrance, time and
peak memory. The stacks lie beside the repository (see tests); without them nothing is measured.
"""

import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

VOLUMES = Path(__file__).parents[2].parent / "shared" / "volumes"
MM = ["--spacing-um", "1000", "1000", "1000"]
SAMPLES = {
    "2p_mouse_pial.ome.tif": ["--preset", "two_photon"],
    "2p_rat_arteriole.ome.tif": ["--preset", "two_photon"],
    "2p_mouse_capillary_t1.ome.tif": ["--preset", "two_photon"],
    "ct_lung_left.nii.gz": [
        "--preset",
        "mr_angiography",
        "--set",
        f"input.region={VOLUMES / 'ct_lung_left_lungmask.nii.gz'}",
    ],
    "cta_head_avm.nii.gz": ["--preset", "mr_angiography"],
    "mra_head.nii.gz": ["--preset", "mr_angiography"],
    # The unit of these two is unknown: 1 mm a voxel is assumed, only ratios mean anything.
    "xra_head_aneurysm.nii.gz": ["--preset", "mr_angiography", *MM],
    "pcmra_head_magnitude.nii.gz": ["--preset", "mr_angiography", *MM],
    "trees/BG0002.swc": ["--set", "input.graph_unit=mm"],
    "trees/BG07.swc": ["--set", "input.graph_unit=mm"],
    "trees/BG17.swc": ["--set", "input.graph_unit=mm"],
}


def main(out):
    if not VOLUMES.is_dir():
        print("no real stacks beside the repository: nothing measured")
        return
    print(
        f"{'sample':<30} {'voxels':>10} {'segm.':>6} {'junct.':>6} {'loops':>5} {'length mm':>10} {'radius um':>9} {'orders':>6} {'hindrance':>10} {'s':>6} {'MiB':>6}"
    )
    for name, options in SAMPLES.items():
        folder = Path(out) / Path(name).name.split(".")[0]
        start = time.perf_counter()
        command = [
            sys.executable,
            "-m",
            "ramulus",
            "measure",
            str(VOLUMES / name),
            "--out",
            str(folder),
            "--quiet",
            *options,
        ]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        seconds = time.perf_counter() - start
        if done.returncode:
            print(f"{name:<30} exit {done.returncode}: {done.stderr.strip()[-200:]}", flush=True)
            continue
        s = json.loads((folder / "summary.json").read_text())
        run = json.loads((folder / "run.json").read_text())
        voxels = 1
        for n in s.get("shape", [0]):
            voxels *= n
        hindrance = s["network_hindrance_per_um3"]["value"]
        text = f"{hindrance:.3g}" if hindrance else "none"
        memory = next(
            (v for k, v in run.items() if "memory" in k and isinstance(v, (int, float))), 0
        )
        print(
            f"{name:<30} {voxels:>10} {s['segments']:>6} {s['junctions']:>6} {s['loops']:>5} {s['total_length_um'] / 1000:>10.1f} {s['radius_median_um']:>9.3g} {s['orders']:>6} {text:>10} {seconds:>6.1f} {memory:>6.0f}",
            flush=True,
        )


if __name__ == "__main__":
    os.environ.setdefault("PYTHONHASHSEED", "0")
    main(sys.argv[1] if len(sys.argv) > 1 else tempfile.mkdtemp())
