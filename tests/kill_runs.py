"""Measure one stack over and over and kill the process at random times: for test_kills.py.

python tests/kill_runs.py FOLDER KILLS SEED [real]: each run is a fork of this process, which has
imported everything and started no thread. Prints, as JSON, how many runs were killed, in which state
the folder was left, and whether it was ever neither the earlier results nor the new ones.
"""

import json
import os
import random
import signal
import sys
import time
from collections import Counter
from pathlib import Path
from unittest import mock

import line_fakes

from ramulus import measure as _  # noqa: F401 - imported before the forks
from ramulus._folder import is_finished
from ramulus.config import load_configuration
from ramulus.measure import measure


def run(stack, out, changes, real):
    """Measure in a process of its own; return its id."""
    child = os.fork()
    if child:
        return child
    try:
        settings = load_configuration(changes=["report.level=none", "twin.mode=off", *changes])
        if real:
            measure(stack, out=out, configuration=settings)
        else:
            with mock.patch("ramulus.measure.analyse", line_fakes.analyse):
                measure(stack, out=out, configuration=settings)
    finally:
        os._exit(0)
    return 0


def finished_run(stack, out, changes, real):
    """Measure undisturbed; return the seconds it took."""
    start = time.monotonic()
    os.waitpid(run(stack, out, changes, real), 0)
    return time.monotonic() - start


def results(folder):
    """Return every file but `run.json` (times) and what is left to be taken up."""
    files = {p.relative_to(folder): p for p in Path(folder).rglob("*") if p.is_file()}
    return {
        str(name): path.read_bytes()
        for name, path in sorted(files.items())
        if str(name) != "run.json" and not name.parts[0].startswith(".")
    }


def main(folder, kills, seed, real):
    """Kill runs that replace earlier results until so many were killed."""
    stack = line_fakes.write_stack(folder / "fin.ome.tif") if not real else folder / "fin.ome.tif"
    line_fakes.results_of_fork()
    changed = ["boundary.inlet_pressure_pa=7000"]
    finished_run(stack, folder / "old", [], real)
    seconds = finished_run(stack, folder / "new", changed, real)
    old, new = results(folder / "old"), results(folder / "new")
    rng, told, out = random.Random(seed), Counter(), folder / "out"
    while told["killed"] < kills:
        if told["killed"] % 10 == 0:
            finished_run(stack, out, [], real)
        child = run(stack, out, changed, real)
        time.sleep(rng.uniform(0, 1.1 * seconds))
        os.kill(child, signal.SIGKILL)
        _, status = os.waitpid(child, 0)
        told["killed" if os.WIFSIGNALED(status) else "came through"] += 1
        if is_finished(out):
            told["whole"] += 1
            told["neither old nor new"] += results(out) not in (old, new)
        else:
            told["unfinished"] += 1
        if told["killed"] % 5 == 0:
            finished_run(stack, out, changed, real)
            told["wrong after taking up"] += not is_finished(out) or results(out) != new
            told["left over"] += any(p.name.startswith(".") for p in out.iterdir())
    print(json.dumps(told))


if __name__ == "__main__":
    main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]), "real" in sys.argv)
