"""Files written whole or not at all."""

import os
import stat

import pytest

from ramulus._files import sha256_of, write_whole


def test_a_file_is_replaced_as_a_whole(tmp_path):
    path = tmp_path / "a.csv"
    path.write_bytes(b"old")
    checksum = write_whole(path, b"new")
    assert path.read_bytes() == b"new"
    assert sha256_of(path) == checksum
    assert [p.name for p in tmp_path.iterdir()] == ["a.csv"]


def test_a_written_file_has_the_usual_permissions(tmp_path):
    path = tmp_path / "a.csv"
    write_whole(path, b"x")
    (tmp_path / "plain").touch()
    assert stat.S_IMODE(path.stat().st_mode) == stat.S_IMODE((tmp_path / "plain").stat().st_mode)


def test_a_failed_write_leaves_the_old_file_and_nothing_beside_it(tmp_path, monkeypatch):
    path = tmp_path / "a.csv"
    path.write_bytes(b"old")

    def full(_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(OSError, match="No space"):
        write_whole(path, b"new")
    assert path.read_bytes() == b"old"
    assert [p.name for p in tmp_path.iterdir()] == ["a.csv"]
