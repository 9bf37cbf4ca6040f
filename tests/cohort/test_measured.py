"""Cohorts measured for real, on small phantoms: resuming, broken stacks, kills, the command."""

import csv
import json
import random
import shutil
import subprocess
import sys
import time

import numpy as np
import pandas as pd
import pytest
import tifffile

from ramulus import UnusableInputError, WorkFailedError
from ramulus._folder import is_finished
from ramulus.cohort.manifest import read_manifest
from ramulus.cohort.measured import closing_lines, finished_sample, measure_cohort
from ramulus.config import load_configuration
from ramulus.phantom.grow import TreeSettings
from ramulus.phantom.phantom import PhantomSettings, make_phantom
from ramulus.phantom.save import save_phantom

QUICK = ("twin.mode=off", "report.level=none")
RAMULUS = [sys.executable, "-c", "from ramulus.cli import main; main()"]


@pytest.fixture(scope="session")
def small_stacks(tmp_path_factory):
    """Draw two small stacks once."""
    folder = tmp_path_factory.mktemp("stacks")
    settings = PhantomSettings(
        shape=(32, 64, 64),
        tree=TreeSettings(root_radius_um=5.0, min_radius_um=2.0, length_to_radius=5.0),
    )
    for seed in (1, 2):
        stack, truth = make_phantom(settings, seed)
        save_phantom(folder / f"p{seed}.ome.tif", stack, truth, settings=settings, seed=seed)
    return folder


@pytest.fixture
def study(small_stacks, tmp_path):
    """Return a folder with three samples' manifest; the last stack is no image."""
    for path in small_stacks.iterdir():
        shutil.copy(path, tmp_path)
    (tmp_path / "p3.tif").write_text("no image")
    rows = [("m1", "p1.ome.tif", "a"), ("m2", "p2.ome.tif", "b"), ("m3", "p3.tif", "b")]
    write(tmp_path / "study.csv", ("sample", "stack", "group"), rows)
    return tmp_path


def write(path, columns, rows):
    with path.open("w", newline="") as file:
        csv.writer(file).writerows([columns, *rows])


def contents(out):
    """Return every file but those that hold times, and those that hide."""
    return {
        str(p.relative_to(out)): p.read_bytes()
        for p in sorted(out.rglob("*"))
        if p.is_file() and p.name != "run.json" and not p.name.startswith(".")
    }


def test_a_cohort_is_measured_taken_up_and_measured_again_where_something_changed(study):
    told = []
    out = study / "out"

    def run(*changes):
        told.clear()
        results = measure_cohort(
            study / "study.csv", out, changes=(*QUICK, *changes), on_progress=told.append
        )
        return results, sorted(p.outcome.sample for p in told if p.outcome.resumed)

    results, resumed = run()
    assert resumed == []
    assert results.table["status"].tolist() == ["done", "done", "failed"]
    assert results.failures["kind"].tolist() == ["input"]
    assert all(is_finished(out / "samples" / name) for name in ("m1", "m2"))
    before = contents(out)

    # Nothing changed: all is taken up, and every byte is the same.
    assert run()[1] == ["m1", "m2"]
    assert contents(out) == before

    # What does not touch a result does not measure again.
    assert run("cohort.power=0.9", "run.workers=1")[1] == ["m1", "m2"]

    # A damaged file does, and heals.
    (out / "samples" / "m1" / "orders.csv").write_text("")
    assert run()[1] == ["m2"]
    assert contents(out) == before

    # A changed stack does.
    shutil.copy(study / "p1.ome.tif", study / "p2.ome.tif")
    assert run()[1] == ["m1"]
    assert contents(out)["samples/m2/segments.csv"] == before["samples/m1/segments.csv"]


def test_a_changed_setting_of_a_stage_makes_a_sample_unfinished(study):
    write(study / "one.csv", ("sample", "stack"), [("m1", "p1.ome.tif")])
    measure_cohort(study / "one.csv", study / "out", changes=QUICK)
    row = read_manifest(study / "one.csv").rows[0]
    for changes, same in [
        ((), True),
        (("cohort.power=0.7",), True),
        (("gauge.recentre=false",), False),
    ]:
        configurations = {None: load_configuration(changes=[*QUICK, *changes])}
        found = finished_sample(row, out=study / "out", configurations=configurations)
        assert (found is not None) == same


def test_a_sample_has_its_own_configuration_over_the_cohorts(study):
    (study / "own.toml").write_text("[gauge]\nrecentre = false\n")
    rows = [("m1", "p1.ome.tif", ""), ("m2", "p1.ome.tif", "own.toml")]
    write(study / "two.csv", ("sample", "stack", "config"), rows)
    measure_cohort(study / "two.csv", study / "out", changes=QUICK)
    chosen = [
        json.loads((study / "out" / "samples" / name / "run.json").read_text())["configuration"]
        for name in ("m1", "m2")
    ]
    assert [c["gauge"]["recentre"] for c in chosen] == [True, False]
    assert chosen[1]["twin"]["mode"] == "off"


def test_all_broken_configurations_are_told_before_anything_is_measured(study):
    (study / "one.toml").write_text("[gauge]\nrecenter = false\n")
    (study / "two.toml").write_text("[")
    rows = [("m1", "p1.ome.tif", "one.toml"), ("m2", "p1.ome.tif", "two.toml")]
    write(study / "two.csv", ("sample", "stack", "config"), rows)
    with pytest.raises(UnusableInputError) as refusal:
        measure_cohort(study / "two.csv", study / "out", changes=QUICK)
    assert "recenter" in str(refusal.value)
    assert "two.toml" in str(refusal.value)
    assert not (study / "out").exists()


def test_edits_are_refused_rather_than_passed_over(study):
    (study / "edits.jsonl").touch()
    rows = [("m1", "p1.ome.tif", "edits.jsonl")]
    write(study / "one.csv", ("sample", "stack", "edits"), rows)
    with pytest.raises(UnusableInputError, match="column edits: found edits for m1"):
        measure_cohort(study / "one.csv", study / "out", changes=QUICK)


def test_a_cohort_of_failures_says_so_in_its_last_line(study):
    write(study / "bad.csv", ("sample", "stack"), [("m3", "p3.tif")])
    results = measure_cohort(study / "bad.csv", study / "out", changes=QUICK)
    with pytest.raises(WorkFailedError, match=r"all 1 samples failed, m3 with: .*failures\.csv"):
        closing_lines(results, study / "out")


@pytest.mark.slow
def test_parallel_samples_give_the_bytes_of_samples_in_a_row(study):
    for workers in (1, 2):
        measure_cohort(study / "study.csv", study / f"out{workers}", changes=QUICK, workers=workers)
    assert contents(study / "out1") == contents(study / "out2")


def command(*words, **options):
    return subprocess.run(
        [*RAMULUS, *words], capture_output=True, text=True, check=False, **options
    )


def with_changes():
    return [word for change in QUICK for word in ("--set", change)]


def test_the_command_measures_says_what_failed_and_where_to_look(study):
    out = study / "out"
    done = command("cohort", str(study / "study.csv"), "--out", str(out), *with_changes())
    assert done.returncode == 0
    assert "2 of 3 samples measured" in done.stdout
    assert "failed: m3: " in done.stdout
    assert f"open {out / 'cohort.html'}" in done.stdout
    assert done.stderr == ""


def test_the_command_refuses_a_bad_manifest_with_status_two_and_one_line(study):
    write(study / "bad.csv", ("sample", "stack"), [("m1", "none.tif"), ("../m2", "p1.ome.tif")])
    done = command("cohort", str(study / "bad.csv"), "--out", str(study / "out"))
    assert done.returncode == 2
    assert done.stderr.count("\n") == 1
    assert "2 problems" in done.stderr
    assert not (study / "out").exists()


def test_a_second_run_on_the_same_folder_is_refused(study):
    from ramulus._folder import locked_folder

    with locked_folder(study / "out"), pytest.raises(UnusableInputError, match="is writing to"):
        measure_cohort(study / "study.csv", study / "out", changes=QUICK)


@pytest.mark.slow
def test_a_cohort_killed_at_any_moment_ends_like_an_undisturbed_one(study):
    measure_cohort(study / "study.csv", study / "calm", changes=QUICK)

    def words(out):
        return [*RAMULUS, "cohort", str(study / "study.csv"), "--out", str(out), *with_changes()]

    start = time.monotonic()
    subprocess.run(words(study / "timed"), check=True, capture_output=True)
    whole = time.monotonic() - start
    chance, kills = random.Random(1), 0
    for attempt in range(24):
        if attempt % 3 == 2:  # begin again, lest the later kills find nothing to do
            shutil.rmtree(study / "out", ignore_errors=True)
        process = subprocess.Popen(
            words(study / "out"), stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL
        )
        time.sleep(chance.uniform(0.1, 1.0) * whole)
        kills += process.poll() is None
        process.kill()
        process.wait()
    assert kills >= 12
    subprocess.run(words(study / "out"), check=True, capture_output=True)
    assert contents(study / "out") == contents(study / "calm")
    assert is_finished(study / "out")


def broken_stacks(folder, good):
    """Write stacks that are broken in ten ways."""
    whole = good.read_bytes()
    grey = np.random.default_rng(1).integers(0, 99, (16, 32, 32)).astype(np.uint8)
    plain = tifffile.imread(good)

    def ome(name, voxels, **sizes):
        metadata = {"axes": "ZYX"} | {f"PhysicalSize{axis}": sizes.get(axis, 1.0) for axis in "ZYX"}
        tifffile.imwrite(
            folder / name, voxels, ome=True, photometric="minisblack", metadata=metadata
        )

    (folder / "w0.tif").write_bytes(b"")
    (folder / "w1.tif").write_text("a letter")
    (folder / "w2.ome.tif").write_bytes(whole[: len(whole) // 2])
    tifffile.imwrite(folder / "w3.tif", grey, photometric="minisblack")  # no spacing
    ome("w4.ome.tif", plain, Z=-1.0)
    ome("w5.ome.tif", np.zeros((16, 32, 32), np.uint8))  # nothing in it
    ome("w6.ome.tif", np.full((16, 32, 32), np.nan, np.float32))
    (folder / "w7.xyz").write_bytes(whole)  # an unknown kind of file
    (folder / "w8.swc").write_text("1 0 0 0 0 1 2\n2 0 1 0 0 1 1\n")  # a ring
    (folder / "w9").mkdir()  # a folder without slices
    return [f"w{k}{end}" for k, end in enumerate(
        (".tif", ".tif", ".ome.tif", ".tif", ".ome.tif", ".ome.tif", ".ome.tif", ".xyz", ".swc", "")
    )]  # fmt: skip


def test_stacks_broken_in_ten_ways_are_ten_reasons_and_spoil_nothing(study):
    names = broken_stacks(study, study / "p1.ome.tif")
    rows = [
        ("m1", "p1.ome.tif"),
        *((f"w{k}", name) for k, name in enumerate(names)),
        ("m2", "p2.ome.tif"),
    ]
    write(study / "soak.csv", ("sample", "stack"), rows)
    results = measure_cohort(study / "soak.csv", study / "out", changes=QUICK)
    failures = results.failures.set_index("sample")
    assert sorted(failures.index) == [f"w{k}" for k in range(10)]
    assert set(failures["kind"]) <= {"input", "work"}
    assert failures["reason"].nunique() == 10
    assert not failures["reason"].str.contains(r"^\w+Error:").any()  # none that nobody foresaw
    assert results.table.set_index("sample").loc[["m1", "m2"], "status"].eq("done").all()


@pytest.mark.slow
def test_a_soak_of_two_hundred_samples_equals_single_runs_and_keeps_its_memory(study):
    import resource

    from ramulus.measure import measure

    names = broken_stacks(study, study / "p1.ome.tif")
    rows = [
        (f"s{k:03}", names[k // 10 % 10] if k % 10 == 0 else f"p{1 + k % 2}.ome.tif")
        for k in range(200)
    ]
    write(study / "soak.csv", ("sample", "stack"), rows)
    peaks = []

    def watch(_):
        peaks.append(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)

    results = measure_cohort(study / "soak.csv", study / "out", changes=QUICK, on_progress=watch)
    assert len(results.failures) == 20
    assert results.failures.groupby("reason").size().sum() == 20
    assert (results.table["status"] == "done").sum() == 180
    assert peaks[-1] < 1.1 * peaks[40]
    singles = {}
    for k in (1, 2):
        folder = measure(
            study / f"p{k}.ome.tif", out=study / f"single{k}", name="s",
            configuration=load_configuration(changes=QUICK),
        )  # fmt: skip
        singles[f"p{k}.ome.tif"] = (folder / "segments.csv").read_bytes()
    for sample, stack in rows:
        if stack in singles:
            made = study / "out" / "samples" / sample / "segments.csv"
            assert made.read_bytes() == singles[stack]
    assert len(pd.read_csv(study / "out" / "cohort.csv")) == 200
