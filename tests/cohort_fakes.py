"""Sample folders as a measurement leaves them, and measuring functions that misbehave."""

import csv
import hashlib
import json
import os
import signal
import time
from pathlib import Path

import numpy as np

from ramulus import UnusableInputError, WorkFailedError
from ramulus.cohort.manifest import ManifestRow


def estimate(value, half_width=0.1):
    return {"value": value, "low": value - half_width, "high": value + half_width, "level": 0.95}


def summary(sample, *, exponent=3.0, length_um=1000.0, flags=()):
    return {
        "sample": sample,
        "spacing_um": [2.0, 1.0, 1.0],
        "spacing_origin": ["header", "header", "user"],
        "shape": [10, 20, 30],
        "vessel_volume_fraction": 0.05,
        "total_length_um": estimate(length_um, 10.0),
        "segments": 7,
        "orders": 3,
        "junction_exponent": estimate(exponent),
        "network_hindrance_per_um3": estimate(length_um / 100, 1.0),
        "trunk_taper_b": {"value": None, "reason": "the trunk is too short"},
        "outlet_rule": "free ends",
        "image": {"contrast_to_noise": 9.5, "blur_origin": "estimated", "odd key": 1.0},
        "dominant_segments": [4, 2, 1],
        "flags": list(flags),
    }


def write_folder(folder, content):
    """Write a sample's folder with a valid run.json."""
    folder.mkdir(parents=True, exist_ok=True)
    sample = content["sample"]
    number = np.array([content["total_length_um"]["value"] / 100])
    texts = {
        "summary.json": json.dumps(content),
        "orders.csv": "order,n_segments,diameter_um_mean\r\n1,4,10.5\r\n2,2,20.25\r\n3,1,\r\n",
        "junctions.csv": f"node_id,exponent,reason\r\n3,{number[0]},\r\n5,,=too few\r\n",
        "segments.csv": segments_csv(),
    }
    for name, text in texts.items():
        (folder / name).write_text(text, newline="")
    files = {
        name: hashlib.sha256((folder / name).read_bytes()).hexdigest() for name in sorted(texts)
    }
    (folder / "run.json").write_text(json.dumps({"sample": sample, "files": files}))
    return folder


def segments_csv():
    """A trunk (wide), two branches (middle), four twigs (thin); node_a is upstream."""
    rows = [("segment_id", "node_a", "node_b", "length_um", "radius_um", "strahler", "order",
             "element_id", "in_loop", "resolved")]  # fmt: skip
    ends = [(0, 1), (1, 2), (1, 3), (2, 4), (2, 5), (3, 6), (3, 7)]
    for k, (a, b) in enumerate(ends):
        level = 3 if k == 0 else 2 if k < 3 else 1
        rows.append((k, a, b, 100.0, 5.0 * level, level, level, k, "false", "true"))
    return "".join(",".join(map(str, row)) + "\r\n" for row in rows)


def write_manifest(path, rows):
    """Write rows (dicts with sample, group ...) and an empty stack for each."""
    columns = ["sample", "stack", *[name for name in rows[0] if name not in ("sample", "stack")]]
    for row in rows:
        row.setdefault("stack", f"{row['sample']}.tif")
        (path.parent / row["stack"]).touch()
    with path.open("w", newline="") as file:
        writer = csv.DictWriter(file, columns)
        writer.writeheader()
        writer.writerows(rows)
    return path


def rows_named(*names):
    return [ManifestRow(name, Path(f"{name}.tif"), name) for name in names]


def measure(row, *, out, log=None):
    """Measure as the row's name says: some fail in their own way, others write a folder."""
    if log is not None:
        with Path(log).open("a") as file:
            file.write(f"{row.sample} {os.getpid()}\n")
    for start, act in _WAYS.items():
        if row.sample.startswith(start):
            act()
    content = summary(row.sample, exponent=2.5 + 0.01 * len(row.sample))
    return write_folder(Path(out) / row.sample, content)


def _refuse():
    msg = "broken.tif: the z spacing is 0.0, expected um > 0; give --spacing-um Z Y X"
    raise UnusableInputError(msg)


def _fail():
    msg = "the network has no inlet"
    raise WorkFailedError(msg)


def _raise():
    msg = "list index\nout of range"
    raise IndexError(msg)


def _exhaust():
    raise MemoryError


def _die():
    os.kill(os.getpid(), signal.SIGKILL)


_WAYS = {
    "unusable": _refuse,
    "failing": _fail,
    "raising": _raise,
    "hungry": _exhaust,
    "dying": _die,
    "slow": lambda: time.sleep(0.3),
}
