import json
import logging
import os
import subprocess
import sys
from pathlib import Path

import line_fakes
import pytest
import tifffile
from line_fakes import write_stack

from ramulus import WorkFailedError
from ramulus._folder import is_finished
from ramulus.cli import app, main
from ramulus.config import load_configuration
from ramulus.phantom.truth import read_truth

ROOT = Path(__file__).parents[1]
QUICK = ["--set", "report.level=none", "--set", "twin.mode=off"]
COMMANDS = sorted(command.name for command in app.registered_commands)


@pytest.fixture(autouse=True)
def fake_line(monkeypatch):
    monkeypatch.setattr("ramulus.measure.analyse", line_fakes.analyse)
    monkeypatch.setattr(os, "fsync", lambda _: None)


@pytest.fixture
def stack(tmp_path, monkeypatch):
    """Write fin.ome.tif into an empty folder and go there."""
    monkeypatch.chdir(tmp_path)
    return write_stack(tmp_path / "fin.ome.tif")


def called(capsys, *arguments):
    """Return the exit status, and what was printed on either side."""
    with pytest.raises(SystemExit) as ended:
        main(list(map(str, arguments)))
    printed = capsys.readouterr()
    return ended.value.code, printed.out, printed.err


def refused(capsys, *arguments, status=2):
    code, out, error = called(capsys, *arguments)
    assert code == status
    assert out == ""
    assert error.startswith("ramulus: ")
    assert error.count("\n") == 1
    assert "Traceback" not in error
    return error


def test_a_measurement_says_where_to_look(capsys, stack):
    code, out, error = called(capsys, "measure", stack, "--out", "out", *QUICK)
    assert (code, error) == (0, "")
    lines = out.splitlines()
    assert lines[0].startswith("fin: 5 segments, 2 junctions, 0 loops")
    assert lines[-1] == "results are in out; open out/summary.json"
    assert any(": 50 % of all voxels" in line for line in lines)
    assert is_finished(Path("out"))


def test_quiet_prints_nothing_and_the_log_tells_all(capsys, stack):
    code, out, error = called(
        capsys, "measure", stack, "--out", "out", *QUICK, "--quiet", "--log", "run.log"
    )
    assert (code, out, error) == (0, "", "")
    log = Path("run.log").read_text()
    assert "INFO enhance" in log
    assert "INFO results are in out" in log
    refused(capsys, "measure", "absent.tif", "--out", "out", "--log", "run.log")
    assert "ERROR UnusableInputError: absent.tif: no such file" in Path("run.log").read_text()


def test_a_log_that_cannot_be_written_is_named(capsys, stack):
    words = refused(capsys, "measure", stack, "--out", "out", "--log", "absent/run.log")
    assert "--log: absent/run.log cannot be written" in words
    assert not Path("out").exists()


def test_settings_come_from_preset_file_sample_and_changes_in_this_order(capsys, stack):
    Path("more.toml").write_text("[clean]\nbridge_radii = 2.5\npart_length_diameters = 2.5\n")
    Path("fin-7.toml").write_text(
        f'[input]\nstack = "{stack.name}"\n[clean]\npart_length_diameters = 3.5\n'
    )
    called(
        capsys, "measure", "fin-7.toml", "--out", "out", *QUICK, "--preset", "two_photon",
        "--config", "more.toml", "--set", "segment.contrast_min=0.3",
    )  # fmt: skip
    record = json.loads(Path("out/run.json").read_text())
    used = record["configuration"]
    assert used["viscosity"]["law"] == "pries_1994"
    assert used["clean"]["bridge_radii"] == 2.5
    assert used["clean"]["part_length_diameters"] == 3.5
    assert used["segment"]["contrast_min"] == 0.3
    assert record["sample"] == "fin-7"


@pytest.mark.usefixtures("stack")
def test_a_sample_toml_has_to_name_its_stack(capsys):
    Path("a.toml").write_text("[clean]\nbridge_radii = 2.5\n")
    assert "found no input.stack" in refused(capsys, "measure", "a.toml", "--out", "out")


def test_the_spacing_can_be_given_where_the_file_has_none(capsys, stack):
    tifffile.imwrite("plain.tif", tifffile.imread(stack))
    assert "give --spacing-um Z Y X" in refused(capsys, "measure", "plain.tif", "--out", "out")
    code, _, _ = called(
        capsys, "measure", "plain.tif", "--out", "out", "--spacing-um", 2, 0.5, 0.5, *QUICK
    )
    assert code == 0
    summary = json.loads(Path("out/summary.json").read_text())
    assert summary["spacing_um"] == [2.0, 0.5, 0.5]
    assert summary["spacing_origin"] == ["user", "user", "user"]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["measure", "fin.ome.tif"], "Missing option '--out'"),
        (["measur"], "No such command 'measur'"),
        (["measure", "fin.ome.tif", "--out", "o", "--colour"], "No such option"),
        (["inspect", "fin.ome.tif", "--spacing-um", "1", "a", "1"], "--spacing-um"),
        (["config", "--preset", "confocl"], "did you mean 'confocal'"),
        (["measure", "fin.ome.tif", "--out", "o", "--set", "gauge.recenter=1"], "gauge.recentre"),
        (["measure", "fin.ome.tif", "--out", "o", "--config", "absent.toml"], "absent.toml"),
        (["measure", "fin.ome.tif", "--out", "fin.ome.tif"], "would replace the input"),
        (["measure", "fin.ome.tif", "--out", "fin.ome.tif/o"], "--out: cannot write"),
        (["phantom", "a.png"], "expected a name that ends in .tif"),
        (["phantom", "a.tif", "--seed", "-1"], "--seed"),
        (["phantom", "absent/a.tif"], "found no folder"),
        (["compare", "absent", "absent"], "found no finished run"),
        (["config", "--set", "zzzz.zzzz=1"], "unknown key"),
        (["inspect", "absent.tif"], "no such file"),
        (["cohort", "absent.csv", "--out", "o"], "absent.csv"),
    ],
)  # fmt: skip
def test_a_request_that_cannot_be_met_ends_in_one_line_and_status_2(
    capsys, stack, arguments, words
):
    assert words in refused(capsys, *arguments)
    assert list(stack.parent.iterdir()) == [stack]


@pytest.mark.parametrize(
    ("error", "status", "words"),
    [
        (WorkFailedError("the network has no inlet"), 1, "the network has no inlet"),
        (KeyboardInterrupt(), 1, "interrupted; earlier results are as they were"),
        (MemoryError(), 1, "out of memory"),
        (ZeroDivisionError("by\nzero"), 1, "fault in the program (ZeroDivisionError: by zero)"),
    ],
)
def test_work_that_fails_ends_in_one_line_and_status_1(
    capsys, stack, monkeypatch, error, status, words
):
    def failing(*_, **__):
        raise error

    monkeypatch.setattr("ramulus.measure.analyse", failing)
    assert words in refused(capsys, "measure", stack, "--out", "out", *QUICK, status=status)
    code, _, told = called(capsys, "measure", stack, "--out", "out", *QUICK, "--debug")
    assert code == status
    assert "Traceback" in told


def test_a_reader_that_leaves_early_is_no_error():
    command = f"{sys.executable} -m ramulus config --explain | head -n 1"
    environment = os.environ | {"PYTHONPATH": str(ROOT / "pipeline")}
    ended = subprocess.run(
        ["bash", "-c", command], env=environment, capture_output=True, check=False, text=True
    )
    assert ended.stdout.startswith("# ")
    assert ended.stderr == ""


def test_inspect_tells_the_header_and_the_plan(capsys, stack):
    code, out, _ = called(capsys, "inspect", stack)
    assert code == 0
    for words in (
        "OME-TIFF, uint8", "6 x 20 x 24 voxels (z y x)", "z 2 um (header), y 1 um (header)",
        "0.012 x 0.02 x 0.024 mm", "worked on 11 x 20 x 24 voxels (coarse axes interpolated)",
        "GiB of memory", "problems  none found",
    ):  # fmt: skip
        assert words in out


def test_inspect_tells_every_problem_and_status_2(capsys, stack):
    tifffile.imwrite("a.tif", tifffile.imread(stack)[:3], photometric="minisblack")
    code, out, _ = called(capsys, "inspect", "a.tif")
    assert code == 2
    problems = [line for line in out.splitlines() if line.startswith("problem ")]
    assert len(problems) == 2
    assert "the z spacing is not known" in out
    assert "fewer than 4" in out


def test_inspect_needs_a_channel_where_there_are_several(capsys, stack):
    two = tifffile.imread(stack)[:, None].repeat(2, axis=1)
    tifffile.imwrite("two.tif", two, imagej=True, metadata={"axes": "ZCYX", "spacing": 2.0,
                     "unit": "um"}, resolution=(1.0, 1.0))  # fmt: skip
    code, out, _ = called(capsys, "inspect", "two.tif")
    assert code == 2
    assert "choose one with --set input.channel" in out
    assert called(capsys, "inspect", "two.tif", "--set", "input.channel=1")[0] == 0


def test_inspect_warns_of_memory_that_is_not_there(capsys, stack):
    _, out, _ = called(capsys, "inspect", stack, "--set", "run.memory_gib=0.1")
    assert "problem   more memory than may be used (0.1 GiB)" in out


@pytest.mark.usefixtures("stack")
def test_inspect_knows_a_graph(capsys):
    Path("a.swc").write_text("1 0 0 0 0 5 -1\n")
    assert "a vessel graph" in called(capsys, "inspect", "a.swc")[1]


@pytest.mark.usefixtures("stack")
def test_a_phantom_comes_with_its_truth_and_repeats(capsys):
    changes = ["--set", "phantom.shape=[48, 64, 64]", "--set", "phantom.tree.min_segments=3"]
    for name in ("a", "b"):
        code, out, _ = called(capsys, "phantom", f"{name}.ome.tif", "--seed", 5, *changes)
        assert code == 0
        assert f"truth: {name}.truth.json" in out
    assert Path("a.ome.tif").read_bytes() == Path("b.ome.tif").read_bytes()
    assert read_truth(Path("a.truth.json")).graph.n_segments >= 3


@pytest.mark.usefixtures("stack")
def test_the_printed_configuration_is_one_that_can_be_given(capsys):
    for arguments in ([], ["--explain"], ["--preset", "micro_ct"]):
        _, out, _ = called(capsys, "config", *arguments)
        Path("all.toml").write_text(out)
        files = [ROOT / "configs/micro_ct.toml"] if "--preset" in arguments else []
        expected = load_configuration(*files)
        assert load_configuration("all.toml") == expected


def test_two_runs_are_compared(capsys, stack):
    for out, pressure in (("a", 5000), ("b", 5000), ("c", 7000)):
        change = f"boundary.inlet_pressure_pa={pressure}"
        called(capsys, "measure", stack, "--out", out, *QUICK, "--set", change)
    code, same, _ = called(capsys, "compare", "a", "b")
    assert (code, same.splitlines()) == (
        0, ["what was different", "  nothing", "what changed", "  nothing: every file is the same"]
    )  # fmt: skip
    _, other, _ = called(capsys, "compare", "a", "c")
    assert "  boundary.inlet_pressure_pa  5000 -> 7000  (+40 %)" in other
    assert "  total_length_um  " in other
    assert "  files: summary.json" in other


@pytest.mark.parametrize("command", ["", *COMMANDS])
def test_help_tells_what_a_command_takes(capsys, command):
    code, out, error = called(capsys, *([command] if command else []), "--help")
    assert (code, error) == (0, "")
    if not command:
        assert all(f"\n  {name} " in out for name in COMMANDS)
        assert "not a medical device" in " ".join(out.split())
    else:
        assert all(option in out for option in ("--quiet", "--log", "--debug", "--help"))


def test_without_a_command_the_help_is_shown(capsys):
    code, out, error = called(capsys)
    assert (code, error) == (2, "")
    assert "Commands:" in out


def test_the_version_is_told(capsys):
    assert called(capsys, "--version")[:2] == (0, "ramulus 0.1.0\n")


def test_help_waits_for_no_heavy_library():
    # Imports are counted, not seconds: those depend on the machine. Measured: 0.15 s.
    code = "import sys, ramulus.cli; print(*sorted(sys.modules))"
    environment = os.environ | {"PYTHONPATH": str(ROOT / "pipeline")}
    loaded = subprocess.run(
        [sys.executable, "-c", code], env=environment, capture_output=True, check=True, text=True
    ).stdout.split()
    assert not {"numpy", "pandas", "numba", "scipy", "pydantic", "networkx"} & set(loaded)


def test_a_measurement_waits_for_no_library_that_it_may_not_need():
    code = "import sys, ramulus.measure; print(*sorted(sys.modules))"
    environment = os.environ | {"PYTHONPATH": str(ROOT / "pipeline")}
    loaded = subprocess.run(
        [sys.executable, "-c", code], env=environment, capture_output=True, check=True, text=True
    ).stdout.split()
    heavy = {
        "matplotlib", "plotly", "sklearn", "statsmodels", "distributed", "networkx",
        "scipy.stats", "scipy.interpolate", "skimage", "jinja2", "pydicom", "zarr",
    }  # fmt: skip
    assert not heavy & set(loaded)


def test_completion_knows_the_presets():
    from ramulus.cli import _presets

    assert _presets("m") == ["micro_ct", "mr_angiography"]


def test_warnings_of_libraries_go_to_the_log_alone(capsys, stack, monkeypatch):
    def warned(*args, **kwargs):
        logging.getLogger("tifffile").warning("odd tag")
        return line_fakes.analyse(*args, **kwargs)

    monkeypatch.setattr("ramulus.measure.analyse", warned)
    code, _, error = called(capsys, "measure", stack, "--out", "out", *QUICK, "--log", "run.log")
    assert (code, error) == (0, "")
    assert "WARNING odd tag" in Path("run.log").read_text()
