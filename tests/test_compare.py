import json

import pytest

from ramulus import UnusableInputError
from ramulus._files import sha256_of
from ramulus.compare import Change, compare

RECORD = {
    "input_sha256": "ab", "ramulus": "0.1.0", "libraries": {"numpy": "2.0"},
    "configuration": {"clean": {"bridge_radii": 4.0}, "run": {"workers": None}},
    "started": "2026-01-01", "peak_memory_mib": 1.0,
}  # fmt: skip
SUMMARY = {
    "segments": 10,
    "junction_exponent": {"value": 3.0, "low": 2.9, "high": 3.1, "level": 0.95},
    "branching_ratio": {"value": None, "reason": "two orders"},
    "twin": {"draws": 2},
    "flags": [{"code": "noise", "message": "noisy"}, {"code": "mesh", "message": "a mesh"}],
}


def folder(path, *, record=None, summary=None):
    path.mkdir()
    (path / "summary.json").write_text(json.dumps(SUMMARY | (summary or {})))
    files = {"summary.json": sha256_of(path / "summary.json")}
    (path / "run.json").write_text(json.dumps(RECORD | (record or {}) | {"files": files}))
    return path


def test_runs_that_agree_have_nothing_to_tell(tmp_path):
    other = {"started": "2027-01-01", "peak_memory_mib": 9.0}
    found = compare(folder(tmp_path / "a"), folder(tmp_path / "b", record=other))
    assert found.causes == found.figures == found.flags == found.files == ()
    assert "  nothing: every file is the same" in list(found.lines())


def test_what_was_different_and_what_changed_is_told(tmp_path):
    record = {"configuration": {"clean": {"bridge_radii": 2.0, "new": 1}, "run": {"workers": 4}},
              "libraries": {"numpy": "2.1"}, "input_sha256": "cd"}  # fmt: skip
    summary = {
        "segments": 12,
        "junction_exponent": {"value": 2.5, "low": 2.4, "high": 2.6, "level": 0.95},
        "twin": {"draws": 2},
        "flags": [{"code": "mesh", "message": "a mesh"}, {"code": "kissing", "message": "touch"}],
    }
    first = folder(tmp_path / "a")
    found = compare(first, folder(tmp_path / "b", record=record, summary=summary))
    assert [cause.words for cause in found.causes] == [
        "input_sha256  ab -> cd",
        "clean.bridge_radii  4 -> 2  (-50 %)",
        "library numpy  2.0 -> 2.1",
        "clean.new  (absent) -> 1",
    ]
    assert [change.name for change in found.figures] == ["segments", "junction_exponent"]
    assert found.beyond == ("junction_exponent",)
    lines = list(found.lines())
    assert "  junction_exponent  3 -> 2.5  (-16.7 %)  beyond both intervals" in lines
    assert "  flag noise gone" in lines
    assert "  flag kissing new" in lines
    assert lines[-1] == "  files: summary.json"


@pytest.mark.parametrize(
    ("first", "second", "relative"),
    [(2, 3, 0.5), (0, 3, None), (None, 3, None), (True, False, None), ("a", "b", None)],
)
def test_a_relative_change_is_told_where_it_says_something(first, second, relative):
    assert Change("x", first, second).relative == relative


def test_a_folder_that_was_touched_is_refused(tmp_path):
    first, second = folder(tmp_path / "a"), folder(tmp_path / "b")
    (second / "summary.json").write_text("{}")
    with pytest.raises(UnusableInputError, match="b: found no finished run"):
        compare(first, second)


@pytest.mark.parametrize("text", ["[]", "{", ""])
def test_a_summary_that_is_none_is_refused(tmp_path, text):
    first, second = folder(tmp_path / "a"), folder(tmp_path / "b")
    (second / "summary.json").write_text(text)
    files = {"summary.json": sha256_of(second / "summary.json")}
    (second / "run.json").write_text(json.dumps(RECORD | {"files": files}))
    with pytest.raises(UnusableInputError, match=r"summary.json: "):
        compare(first, second)
