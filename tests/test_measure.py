import errno
import itertools
import json
import os
from contextlib import suppress
from pathlib import Path

import line_fakes
import numba
import numpy as np
import pandas as pd
import pytest
import tifffile
from line_fakes import CALLS, SHAPE, write_stack
from scipy.ndimage import gaussian_filter

from ramulus import UnusableInputError, WorkFailedError
from ramulus._files import sha256_of
from ramulus._folder import OWNED, is_finished
from ramulus.config import load_configuration
from ramulus.line import analyse, analyse_mask
from ramulus.measure import measure
from ramulus.trust.twin import Twin

DONE = ["EnhanceSettings", "SegmentSettings", "GaugeSettings", "network", "twin"]
QUICK = ["report.level=none", "twin.mode=off"]


@pytest.fixture(autouse=True)
def fake_line(monkeypatch):
    monkeypatch.setattr(os, "fsync", lambda _: None)  # real ones take half of the tests' time
    monkeypatch.setattr("ramulus.measure.analyse", line_fakes.analyse)
    monkeypatch.setattr("ramulus.measure.analyse_mask", line_fakes.analyse_mask)
    monkeypatch.setattr("ramulus.measure.run_twin", no_twin)
    monkeypatch.setattr("ramulus.measure.write_report", report)
    CALLS.clear()


def no_twin(graph, *, shape, facts, line, settings):
    del graph, facts, line
    CALLS.append("twin")
    return Twin([], 0.2, 0.1, 0.7, 1.0, 1.0, 2.5, settings.draws, shape)


def report(results, *, summary, flags, twin, title, settings, provenance):
    del results, summary, twin
    page = f"<h1>{title}</h1>{[flag.code for flag in flags]}<pre>{settings}</pre>{provenance}"
    return {"report.html": page.encode(), "figures/radii.png": b"png"}


@pytest.fixture
def stack(tmp_path):
    return write_stack(tmp_path / "fin.ome.tif")


def run(source, out, *changes, **kwargs):
    return measure(source, out=out, configuration=load_configuration(changes=changes), **kwargs)


def contents(folder, *, without=("run.json",)):
    """Return all files but what a run may leave to be taken up."""
    files = {str(p.relative_to(folder)): p for p in Path(folder).rglob("*") if p.is_file()}
    hidden = [name for name in files if name.startswith(".work/")]
    return {n: path.read_bytes() for n, path in files.items() if n not in (*without, *hidden)}


def test_every_file_of_the_contract_is_there_and_named_with_its_checksum(stack, tmp_path):
    folder = run(stack, tmp_path / "out")
    assert set(contents(folder, without=())) == {*OWNED, "figures/radii.png"}
    assert is_finished(folder)
    record = json.loads((folder / "run.json").read_text())
    assert set(record["files"]) == {*OWNED, "figures/radii.png"} - {"run.json"}
    assert record["input"] == "fin.ome.tif"
    assert record["sample"] == "fin"
    assert list(record["seconds"])[:3] == ["read", "enhance", "segment"]
    assert record["peak_memory_mib"] > 10
    assert record["configuration"]["gauge"]["recentre"] is True


def test_a_repeated_run_gives_the_same_bytes_wherever_it_runs(stack, tmp_path, monkeypatch):
    first = run(stack, tmp_path / "a")
    monkeypatch.chdir(tmp_path)
    second = run(stack.name, "b", "run.workers=1", "run.memory_gib=3")
    assert contents(first) == contents(second)


def test_tables_are_rfc_4180_and_undefined_cells_are_empty(stack, tmp_path):
    folder = run(stack, tmp_path / "out", *QUICK)
    for path in folder.glob("*.csv"):
        content = path.read_bytes()
        assert content.endswith(b"\r\n")
        assert content.count(b"\n") == content.count(b"\r\n")
        assert not {b"nan", b"NaN", b"inf"} & set(content.replace(b"\r\n", b",").split(b","))
    segments = pd.read_csv(folder / "segments.csv")
    assert len(segments) == 5
    points = pd.read_parquet(folder / "points.parquet")
    assert points["segment_id"].max() == 4


def test_the_mask_carries_its_spacing_in_um(stack, tmp_path):
    folder = run(stack, tmp_path / "out", *QUICK)
    with tifffile.TiffFile(folder / "mask.ome.tif") as file:
        pixels = tifffile.xml2dict(file.ome_metadata)["OME"]["Image"]["Pixels"]
        voxels = file.asarray()
    assert [pixels[f"PhysicalSize{a}"] for a in "ZYX"] == [2.0, 1.0, 1.0]
    assert {pixels[f"PhysicalSize{a}Unit"] for a in "ZYX"} == {"µm"}
    np.testing.assert_array_equal(voxels > 0, tifffile.imread(stack) > 100)


def test_flags_and_the_twin_stand_in_the_summary(stack, tmp_path):
    folder = run(stack, tmp_path / "out")
    summary = json.loads((folder / "summary.json").read_text())
    assert {"saturation", "twin_bias", "twin_lost"} <= {f["code"] for f in summary["flags"]}
    assert summary["twin"]["draws"] == 2
    assert summary["smallest_resolved_radius_um"] == 2.5


def test_the_name_of_a_sample_can_be_given(stack, tmp_path):
    folder = run(stack, tmp_path / "out", *QUICK, name="animal 7, <left>")
    assert json.loads((folder / "summary.json").read_text())["sample"] == "animal 7, <left>"


def test_no_path_of_this_machine_is_in_any_file_but_the_record(stack, tmp_path):
    region = write_stack(tmp_path / "region.ome.tif")
    folder = run(stack, tmp_path / "out", f"input.region={region}")
    held = [name for name, text in contents(folder).items() if str(tmp_path).encode() in text]
    assert held == []
    page = (folder / "report.html").read_text()
    assert 'region = "region.ome.tif"' in page
    assert f"'SHA-256 of the input': '{sha256_of(stack)}'" in page


# ---------------------------------------------------------------- taking up


def stop_at(monkeypatch, stage, error):
    def stopped(values, *, settings):
        if type(settings).__name__ == stage:
            raise error
        return real(values, settings=settings)

    real = line_fakes._stage
    monkeypatch.setattr(line_fakes, "_stage", stopped)


@pytest.mark.parametrize("stage", ["EnhanceSettings", "SegmentSettings", "GaugeSettings"])
def test_a_stopped_run_is_taken_up_where_it_was(stack, tmp_path, monkeypatch, stage):
    whole = contents(run(stack, tmp_path / "whole"))
    with monkeypatch.context() as patch:
        stop_at(patch, stage, KeyboardInterrupt())
        with pytest.raises(KeyboardInterrupt):
            run(stack, tmp_path / "out")
    before = list(CALLS[CALLS.index("twin") + 1 :])
    CALLS.clear()
    folder = run(stack, tmp_path / "out")
    assert contents(folder) == whole
    assert not (folder / ".work").exists()
    assert before + CALLS == [
        "EnhanceSettings",
        "SegmentSettings",
        "GaugeSettings",
        "network",
        "twin",
    ]


@pytest.mark.parametrize(
    ("change", "done"),
    [
        ("enhance.noise_factor=5", DONE),
        ("segment.contrast_min=0.3", DONE[1:]),
        ("gauge.smooth_diameters=2", DONE[2:]),
        ("boundary.inlet_pressure_pa=7000", DONE[3:]),
        ("twin.draws=3", DONE[4:]),
        ("report.title=new", []),
        ("run.workers=1", []),
    ],
)  # fmt: skip
def test_a_changed_setting_is_followed_by_what_depends_on_it(stack, tmp_path, change, done):
    run(stack, tmp_path / "out", "run.keep_work=true")
    CALLS.clear()
    folder = run(stack, tmp_path / "out", "run.keep_work=true", change)
    assert done == CALLS
    assert any((folder / ".work").iterdir())
    assert contents(folder) == contents(run(stack, tmp_path / "fresh", change))


def test_another_input_of_the_same_name_takes_nothing_stored(stack, tmp_path):
    run(stack, tmp_path / "out", "run.keep_work=true", *QUICK)
    CALLS.clear()
    write_stack(stack, seed=2)
    run(stack, tmp_path / "out", *QUICK)
    assert "EnhanceSettings" in CALLS


def test_a_damaged_store_is_noticed_and_made_again(stack, tmp_path):
    whole = contents(run(stack, tmp_path / "whole"))
    run(stack, tmp_path / "out", "run.keep_work=true")
    for path in (tmp_path / "out" / ".work").iterdir():
        content = bytearray(path.read_bytes())
        content[len(content) // 3] ^= 0xFF
        path.write_bytes(content)
    CALLS.clear()
    assert contents(run(stack, tmp_path / "out")) == whole
    assert len(CALLS) == 5


@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="a whole stack takes minutes without the JIT")
def test_every_stage_of_the_real_line_can_be_stored(tmp_path, monkeypatch):
    path = write_stack(tmp_path / "a.ome.tif", voxels=crossed_bars(), spacing_um=(1.0, 1.0, 1.0))
    monkeypatch.setattr("ramulus.measure.analyse", analyse)
    first = run(path, tmp_path / "a", "run.keep_work=true", *QUICK)
    stored = {p.name.partition("-")[0] for p in (first / ".work").iterdir()}
    assert stored == {
        "enhance",
        "segment",
        "thin",
        "trace",
        "clean",
        "smooth",
        "gauge",
        "network",
        "twin",
    }
    second = run(path, tmp_path / "a", *QUICK)
    record = json.loads((second / "run.json").read_text())
    assert set(record["stages_resumed"]) == stored
    assert contents(second) == contents(run(path, tmp_path / "b", "run.workers=1", *QUICK))


def crossed_bars():
    """Return a bar with a side branch, blurred, over a little noise."""
    voxels = np.zeros((24, 32, 40))
    voxels[9:15, 13:19, :] = 100.0
    voxels[9:14, 16:, 18:23] = 100.0
    noise = np.random.default_rng(5).normal(0, 2, voxels.shape)
    return (20 + gaussian_filter(voxels, 1.0) + noise).astype(np.uint8)


# ---------------------------------------------------------------- refusals and faults


def refused(tmp_path, source, *changes, out=None, error=UnusableInputError, **kwargs):
    """Measure over finished results; expect one line, and the results as they were."""
    good = write_stack(tmp_path / "good.ome.tif", seed=9)
    folder = run(good, tmp_path / "out", *QUICK)
    before = contents(folder, without=())
    with pytest.raises(error) as caught:
        run(source, out or folder, *QUICK, *changes, **kwargs)
    assert "\n" not in str(caught.value)
    assert contents(folder, without=()) == before
    assert is_finished(folder)
    return str(caught.value)


def test_input_that_is_not_there_is_named(tmp_path):
    assert "absent.tif: no such file" in refused(tmp_path, tmp_path / "absent.tif")


def test_a_stack_without_spacing_is_refused_with_the_way_out(tmp_path):
    tifffile.imwrite(tmp_path / "a.tif", np.zeros(SHAPE, np.uint8))
    assert "give --spacing-um Z Y X" in refused(tmp_path, tmp_path / "a.tif")


def test_a_truncated_stack_is_refused(stack, tmp_path):
    stack.write_bytes(stack.read_bytes()[:2000])
    assert "fin.ome.tif" in refused(tmp_path, stack)


def test_a_photograph_is_refused(tmp_path):
    photo = np.zeros((20, 20, 3), np.uint8)
    tifffile.imwrite(tmp_path / "a.tif", photo, photometric="rgb")
    assert "colour" in refused(tmp_path, tmp_path / "a.tif")


@pytest.mark.parametrize(
    ("kind", "grey", "words"),
    [
        ("stack", 0, "every voxel is 0"),
        ("stack", 7, "every voxel is 7"),
        ("mask", 0, "empty"),
        ("mask", 255, "vessel everywhere"),
    ],
)
def test_voxels_that_are_all_the_same_are_refused(tmp_path, monkeypatch, kind, grey, words):
    good = run(write_stack(tmp_path / "good.ome.tif"), tmp_path / "out", *QUICK)
    before = contents(good, without=())
    monkeypatch.setattr("ramulus.measure.analyse", analyse)
    monkeypatch.setattr("ramulus.measure.analyse_mask", analyse_mask)
    path = write_stack(tmp_path / "a.ome.tif", voxels=np.full(SHAPE, grey, np.uint8))
    for out in (good, tmp_path / "new"):
        with pytest.raises(UnusableInputError, match=words):
            run(path, out, f"input.kind={kind}", *QUICK)
    assert contents(good, without=()) == before
    assert not (tmp_path / "new").exists()


def test_a_tree_with_two_roots_is_refused_unless_inlets_are_named(tmp_path):
    swc = tmp_path / "two.swc"
    rows = ["1 0 0 0 0 5 -1", "2 0 50 0 0 5 1", "3 0 100 0 0 5 -1", "4 0 100 50 0 5 3"]
    swc.write_text("\n".join(rows) + "\n")
    assert "found 2 roots" in refused(tmp_path, swc)
    named = ["root.inlet=node", "root.inlet_nodes=[0]"]
    assert is_finished(run(swc, tmp_path / "named", *QUICK, *named))


def test_a_probability_counts_from_one_half(stack, tmp_path):
    folder = run(stack, tmp_path / "out", "input.kind=probability", *QUICK)
    voxels = tifffile.imread(stack)
    summary = json.loads((folder / "summary.json").read_text())
    assert summary["figure"] == pytest.approx((voxels >= 127.5).mean() + 5000.0)


@pytest.mark.parametrize(
    ("region", "words"),
    [(np.zeros(SHAPE, np.uint8), "marks no voxel"), (np.ones((3, 4, 5), np.uint8), "(3, 4, 5)")],
)
def test_a_region_that_does_not_fit_is_refused(stack, tmp_path, region, words):
    path = write_stack(tmp_path / "region.ome.tif", voxels=region)
    assert words in refused(tmp_path, stack, f"input.region={path}")


def test_a_stack_that_would_take_too_much_memory_is_refused_before_work(stack, tmp_path):
    words = refused(tmp_path, stack, "run.memory_gib=0.1")
    assert "0.1 GiB may be used" in words
    assert "run.memory_gib" in words


def test_results_never_replace_their_own_input(stack, tmp_path):
    folder = run(stack, tmp_path / "out", *QUICK)
    for source in (folder, folder / "mask.ome.tif", folder / "tree.swc"):
        with pytest.raises(UnusableInputError, match="would replace the input"):
            run(source, folder, *QUICK)


def test_a_folder_that_cannot_be_made_is_named(stack, tmp_path):
    out = tmp_path / "good.ome.tif" / "out"
    assert f"--out: cannot write to {out}: not a dir" in refused(tmp_path, stack, out=out)


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no device that is always full")
def test_a_full_disk_names_the_folder_and_the_way_out(stack, tmp_path, monkeypatch):
    def full(self, content):
        del content
        with Path("/dev/full").open("wb", buffering=0) as device:  # a real ENOSPC
            device.write(b"x")
        return self

    folder = run(stack, tmp_path / "out", *QUICK)
    before = contents(folder, without=())
    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(UnusableInputError, match=r"no space left on device; .* free some space"):
        run(stack, folder, "report.title=new", *QUICK)
    assert contents(folder, without=()) == before


@pytest.mark.parametrize(
    "call", ["write_bytes", "write_text", "replace", "mkdir", "fsync", "savez"]
)
def test_a_write_error_anywhere_leaves_earlier_results_as_they_were(
    stack, tmp_path, monkeypatch, call
):
    folder = run(stack, tmp_path / "out", *QUICK)
    before = contents(folder, without=())
    for at in itertools.count():
        count = iter(range(10_000))
        with monkeypatch.context() as patch:
            holder = {"fsync": os, "savez": np}.get(call, Path)
            real = getattr(holder, call)

            def failing(*args, real=real, count=count, at=at, **kwargs):
                if next(count) == at:
                    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
                return real(*args, **kwargs)

            patch.setattr(holder, call, failing)
            with suppress(UnusableInputError):
                run(stack, folder, "boundary.inlet_pressure_pa=7000", *QUICK)
                break
        assert is_finished(folder)
        assert contents(folder, without=()) == before
    assert at > 0
    assert is_finished(folder)
    assert (folder / "summary.json").read_bytes() != before["summary.json"]


def test_an_input_that_changes_under_the_run_is_noticed(stack, tmp_path, monkeypatch):
    real = line_fakes._figure

    def meddling(values, settings):
        stack.write_bytes(stack.read_bytes() + b"\0")
        return real(values, settings)

    monkeypatch.setattr(line_fakes, "_figure", meddling)
    assert "changed while it was measured" in refused(tmp_path, stack, error=WorkFailedError)


@pytest.mark.parametrize(
    ("error", "words"),
    [(MemoryError(), "out of memory"), (OSError(5, "Input/output error"), "cannot be read")],
)
def test_what_fails_in_a_stage_is_one_line(stack, tmp_path, monkeypatch, error, words):
    folder = run(stack, tmp_path / "out", *QUICK)
    before = contents(folder, without=())
    stop_at(monkeypatch, "GaugeSettings", error)
    with pytest.raises(WorkFailedError, match=words):
        run(stack, folder, *QUICK)
    assert contents(folder, without=()) == before


def test_progress_names_each_stage_and_never_goes_back(stack, tmp_path):
    told = []
    run(stack, tmp_path / "out", progress=lambda stage, share: told.append((stage, share)))
    names = ["read", "enhance", "segment", "gauge", "network", "twin", "report", "done"]
    assert [stage for stage, _ in told] == names
    shares = [share for _, share in told]
    assert shares == sorted(shares)
    assert shares[-1] == 1.0


def test_a_graph_needs_no_image_and_reads_back_from_its_own_folder(tmp_path):
    swc = tmp_path / "fork.swc"
    rows = ["1 0 0 0 0 5 -1", "2 0 50 0 0 5 1", "3 0 90 30 0 4 2", "4 0 90 -30 0 3.9 2"]
    swc.write_text("\n".join(rows) + "\n")
    first = run(swc, tmp_path / "a", *QUICK)
    second = run(first, tmp_path / "b", *QUICK)
    names = ["nodes.csv", "segments.csv", "points.parquet", "orders.csv", "resistance.csv"]
    for name in names:
        assert (first / name).read_bytes() == (second / name).read_bytes()
    assert not (first / "mask.ome.tif").exists()
