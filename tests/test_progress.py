import io
import logging
import sys
import warnings
from contextlib import suppress

import pytest

from ramulus import UnusableInputError
from ramulus.progress import Reporter


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_a_terminal_shows_the_stage_and_the_time_left(monkeypatch, capsys):
    monkeypatch.setattr(sys, "stderr", terminal := Terminal())
    monkeypatch.setenv("TERM", "xterm")
    with Reporter() as reporter:
        reporter.start -= 30.0
        reporter("segment", 0.25)
        reporter.bar.refresh()
        reporter.done(["two junctions"])
    shown = terminal.getvalue()
    assert "segment" in shown
    assert "25 %" in shown
    assert "90 s left" in shown
    assert capsys.readouterr().out == "two junctions\n"


def test_a_pipe_is_given_the_closing_lines_alone(capsys):
    with Reporter() as reporter:
        reporter("segment", 0.25)
        reporter.done(["two junctions"])
    assert capsys.readouterr() == ("two junctions\n", "")


def test_a_terminal_stays_empty_when_quiet(monkeypatch, capsys):
    monkeypatch.setattr(sys, "stderr", terminal := Terminal())
    with Reporter(quiet=True) as reporter:
        reporter("segment", 0.25)
        reporter.done(["two junctions"])
    assert terminal.getvalue() == ""
    assert capsys.readouterr().out == ""


def test_the_log_is_added_to_and_holds_stages_warnings_and_errors(tmp_path):
    log = tmp_path / "run.log"
    log.write_text("before\n")
    with suppress(ZeroDivisionError), Reporter(quiet=True, log=log) as reporter:
        reporter("segment", 0.25)
        with warnings.catch_warnings():
            warnings.simplefilter("always")
            logging.captureWarnings(capture=True)
            warnings.warn("odd voxels", stacklevel=1)
        reporter.done(["sample µ\udc80"])
        _ = 1 / 0
    lines = log.read_text(encoding="utf-8").splitlines()
    assert lines[0] == "before"
    assert any(line.endswith(" INFO segment") for line in lines)
    assert any("odd voxels" in line for line in lines)
    assert any(line.endswith("INFO sample µ\\udc80") for line in lines)
    assert "ERROR ZeroDivisionError: division by zero" in lines[-1]
    assert logging.getLogger("ramulus").level == logging.NOTSET


def test_a_log_that_cannot_be_written_is_refused(tmp_path):
    with pytest.raises(UnusableInputError, match=r"--log: .* cannot be written"):
        Reporter(log=tmp_path / "absent" / "run.log")
