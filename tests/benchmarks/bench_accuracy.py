"""Accuracy on phantoms that nothing was tuned on: python tests/benchmarks/bench_accuracy.py [N]

Prints a row for each held-out phantom (its condition and seed), then the pooled figures. The
hindrance is from the inlet to all other free ends, by the truth's own independent computation.
"""

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))

from phantom_grid import HELD_OUT, phantom_of
from scoring import score

from ramulus.line import LineSettings, analyse
from ramulus.phantom.truth import inlet_of, network_hindrance_per_um3


def hindrance(graph, inlet_um):
    ends = np.flatnonzero(graph.node_degree() == 1)
    inlet = int(ends[np.argmin(np.linalg.norm(graph.node_position_um[ends] - inlet_um, axis=1))])
    return network_hindrance_per_um3(graph, inlet, np.setdiff1d(ends, [inlet]))


def main(limit):
    print(
        f"{'condition':<26} seed  junc R/P     line R/P     length  loops   hind   exponent  seconds  radius errors: class median p90"
    )
    rows, radii = [], {}
    for name, seed in HELD_OUT[:limit]:
        stack, truth = phantom_of(name, seed)
        start = time.perf_counter()
        try:
            found = analyse(stack, LineSettings())
        except Exception as failed:  # noqa: BLE001 - the table goes on
            print(f"{name:<26} {seed:>4}  failed: {failed}")
            continue
        seconds = time.perf_counter() - start
        s = score(found.graph, truth)
        inlet_um = truth.node_position_um[inlet_of(truth)]
        ratio = hindrance(found.graph, inlet_um) / hindrance(truth, inlet_um)
        exponent = found.summary["junction_exponent"]["value"] or float("nan")
        classes = " ".join(
            f"[{e.low_voxels:g} {e.median:+.3f} {e.p90_absolute:.3f}]"
            for e in s.radius_errors
            if e.n
        )
        for e in s.radius_errors:
            if e.n:
                radii.setdefault(e.low_voxels, []).append((e.median, e.p90_absolute))
        print(
            f"{name:<26} {seed:>4}  {s.junction_recall:.2f} {s.junction_precision:.2f}    {s.centreline_recall:.3f} {s.centreline_precision:.3f}  {s.length_ratio:.3f}  {s.loops:>2}/{s.true_loops:<2}  {ratio:.3f}  {exponent:.2f}  {seconds:.1f}  {classes}",
            flush=True,
        )
        rows.append(
            (
                s.junction_recall,
                s.junction_precision,
                s.centreline_recall,
                s.centreline_precision,
                s.length_ratio,
                s.loops == s.true_loops,
                ratio,
            )
        )
    table = np.array(rows, dtype=float)
    print(
        f"\n{len(table)} phantoms; mean junction recall {np.nanmean(table[:, 0]):.3f}, precision {np.nanmean(table[:, 1]):.3f}; centreline recall {table[:, 2].mean():.3f}, precision {table[:, 3].mean():.3f}"
    )
    print(
        f"length within 1 %: {np.mean(np.abs(table[:, 4] - 1) <= 0.01):.2f}, within 2 %: {np.mean(np.abs(table[:, 4] - 1) <= 0.02):.2f}; median {np.median(table[:, 4]):.3f}; loops exact: {table[:, 5].mean():.2f}"
    )
    print(
        f"hindrance within 5 %: {np.mean(np.abs(table[:, 6] - 1) <= 0.05):.2f}, 10 %: {np.mean(np.abs(table[:, 6] - 1) <= 0.10):.2f}, 15 %: {np.mean(np.abs(table[:, 6] - 1) <= 0.15):.2f}; median {np.median(table[:, 6]):.3f}"
    )
    for low, errors in sorted(radii.items()):
        values = np.array(errors)
        print(
            f"radius from {low:g} voxels: median bias {np.median(values[:, 0]):+.3f}, median of the 90 % errors {np.median(values[:, 1]):.3f} ({len(values)} phantoms)"
        )


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else len(HELD_OUT))
