import errno
import fcntl
import os
import socket
import subprocess
import sys
from pathlib import Path

import pytest

from ramulus import UnusableInputError
from ramulus._folder import is_finished, locked_folder, publish, staged

FIRST = {"summary.json": "1", "tree.swc": "tree", "figures/a.png": "a", "nodes.csv": "n"}
SECOND = {"summary.json": "2", "nodes.csv": "m", "figures/b.png": "b", "report.html": "r"}


def write(out, files):
    with staged(out) as staging:
        for name, text in files.items():
            (staging / name).parent.mkdir(exist_ok=True)
            (staging / name).write_text(text)
        publish(out, staging, {"sample": "s"})


def texts(out):
    found = {str(p.relative_to(out)): p.read_text() for p in out.rglob("*") if p.is_file()}
    return {name: text for name, text in found.items() if name != ".lock"}


@pytest.fixture
def out(tmp_path):
    folder = tmp_path / "out"
    with locked_folder(folder):
        write(folder, FIRST)
    (folder / "notes.txt").write_text("mine")
    return folder


def test_a_run_replaces_its_files_and_no_others(out):
    with locked_folder(out):
        write(out, SECOND)
    assert is_finished(out)
    found = texts(out)
    assert found.pop("notes.txt") == "mine"
    assert set(found) == {*SECOND, "run.json"}
    assert {name: found[name] for name in SECOND} == SECOND


@pytest.mark.parametrize("at", range(10))
def test_a_move_that_fails_brings_the_earlier_files_back(out, monkeypatch, at):
    before = texts(out)
    fail_at(monkeypatch, at, OSError(errno.EIO, "Input/output error"))
    with pytest.raises(OSError, match="Input"), locked_folder(out):
        write(out, SECOND)
    monkeypatch.undo()
    assert is_finished(out)
    assert texts(out) == before


@pytest.mark.parametrize("at", range(10))
def test_after_a_kill_the_next_start_brings_the_earlier_files_back(out, monkeypatch, at):
    before = texts(out)
    fail_at(monkeypatch, at, KeyboardInterrupt())
    monkeypatch.setattr("ramulus._folder._bring_back", lambda _: None)  # as if killed
    monkeypatch.setattr("shutil.rmtree", lambda *_, **__: None)
    with pytest.raises(KeyboardInterrupt):
        write(out, SECOND)
    monkeypatch.undo()
    done = is_finished(out) and (out / "report.html").exists()
    with locked_folder(out):
        assert is_finished(out)
    assert done or texts(out) == before
    assert not (out / ".before").exists()
    assert not (out / ".staging").exists()


def fail_at(monkeypatch, at, error):
    """Let `at` moves pass, fail the next one, and let all later ones (the way back) pass."""
    count, real = iter(range(1000)), Path.replace

    def replace(self, target):
        if next(count) == at:
            raise error
        return real(self, target)

    monkeypatch.setattr(Path, "replace", replace)


def test_a_first_run_that_fails_leaves_no_file(tmp_path, monkeypatch):
    fail_at(monkeypatch, 2, OSError(errno.EIO, "Input/output error"))
    with pytest.raises(OSError, match="Input"), locked_folder(tmp_path / "a"):
        write(tmp_path / "a", FIRST)
    assert texts(tmp_path) == {}


def test_a_second_run_on_the_same_folder_is_refused(out):
    with locked_folder(out):
        with pytest.raises(UnusableInputError, match=rf"process {os.getpid()} on .* is writing"):
            locked_folder(out).__enter__()
        assert (out / ".lock").exists()
    with locked_folder(out):
        pass
    assert not (out / ".lock").exists()


def test_the_lock_of_a_killed_process_holds_nobody_up(tmp_path):
    code = (
        "import sys, os, signal; from pathlib import Path; from ramulus._folder import *;"
        "held = locked_folder(Path(sys.argv[1])); held.__enter__();"
        "os.kill(os.getpid(), signal.SIGKILL)"
    )
    environment = os.environ | {"PYTHONPATH": str(Path(__file__).parents[1] / "pipeline")}
    command = [sys.executable, "-c", code, str(tmp_path / "out")]
    assert subprocess.run(command, env=environment, check=False).returncode == -9
    assert (tmp_path / "out" / ".lock").exists()
    with locked_folder(tmp_path / "out"):
        pass


@pytest.mark.parametrize(
    ("holder", "free"),
    [
        ("", True),
        (f"999999999 {socket.gethostname()}", True),
        (f"{os.getppid()} {socket.gethostname()}", False),
        ("1 another-host", False),
        ("nonsense", True),
    ],
)
def test_without_locks_in_the_file_system_the_named_holder_counts(
    tmp_path, monkeypatch, holder, free
):
    def no_locks(*_):
        raise OSError(errno.ENOLCK, "No locks available")

    monkeypatch.setattr(fcntl, "flock", no_locks)
    (tmp_path / ".lock").write_text(holder)
    if free:
        with locked_folder(tmp_path):
            pass
    else:
        with pytest.raises(UnusableInputError, match="is writing to"):
            locked_folder(tmp_path).__enter__()


def test_a_folder_that_cannot_be_written_is_named(tmp_path):
    (tmp_path / "file").write_text("")
    for out in (tmp_path / "file", tmp_path / "file" / "deeper"):
        with pytest.raises(UnusableInputError, match=r"--out: .*file"):
            locked_folder(out).__enter__()


def test_a_folder_made_for_nothing_goes_again(tmp_path):
    with pytest.raises(ZeroDivisionError), locked_folder(tmp_path / "out"):
        _ = 1 / 0
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize("damage", ["change", "remove", "no record", "empty", "escape", "list"])
def test_a_damaged_folder_is_not_finished(out, damage):
    assert is_finished(out)
    record = out / "run.json"
    match damage:
        case "change":
            (out / "nodes.csv").write_text("other")
        case "remove":
            (out / "nodes.csv").unlink()
        case "no record":
            record.unlink()
        case "empty":
            record.write_text('{"files": {}}')
        case "escape":
            (out.parent / "x").write_text("")
            empty = "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"
            record.write_text(f'{{"files": {{"../x": "{empty}"}}}}')
        case "list":
            record.write_text("[]")
    assert not is_finished(out)
