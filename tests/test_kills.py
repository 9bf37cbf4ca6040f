"""Killed at any moment, a second start finishes the work, byte for byte as if nothing had been."""

import json
import os
import subprocess
import sys
from pathlib import Path

import numba
import pytest

TESTS = Path(__file__).parent


def killed(folder, kills, *options, timeout):
    environment = os.environ | {"PYTHONPATH": f"{TESTS.parent / 'pipeline'}{os.pathsep}{TESTS}"}
    command = [sys.executable, str(TESTS / "kill_runs.py"), str(folder), str(kills), "1", *options]
    ended = subprocess.run(
        command, env=environment, capture_output=True, text=True, check=False, timeout=timeout
    )
    assert ended.returncode == 0, ended.stderr
    return json.loads(ended.stdout)


def test_runs_that_are_killed_are_taken_up(tmp_path):
    told = killed(tmp_path, 20, timeout=120)
    assert told["killed"] == 20
    assert told["wrong after taking up"] == told["left over"] == 0
    assert told.get("neither old nor new", 0) == 0


@pytest.mark.slow
def test_two_hundred_kills_lose_nothing(tmp_path):
    told = killed(tmp_path, 200, timeout=600)
    assert told["wrong after taking up"] == told["left over"] == 0
    assert told.get("neither old nor new", 0) == 0
    assert told["unfinished"] > 0  # some were hit while files moved


@pytest.mark.slow
@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="whole stacks take minutes without the JIT")
def test_the_real_line_is_taken_up_from_every_stage(tmp_path):
    from line_fakes import write_stack
    from test_measure import crossed_bars

    write_stack(tmp_path / "fin.ome.tif", voxels=crossed_bars(), spacing_um=(1.0, 1.0, 1.0))
    told = killed(tmp_path, 40, "real", timeout=900)
    assert told["wrong after taking up"] == told["left over"] == 0
    assert told.get("neither old nor new", 0) == 0
