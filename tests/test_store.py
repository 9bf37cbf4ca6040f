import json
from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest
from line_fakes import fork

from ramulus._settings import Settings, setting
from ramulus._store import UnknownRecordError, WorkStore, chained_key
from ramulus.image.mask import Mask
from ramulus.measure import _RECORDS
from ramulus.network.graph import CentrelineGraph
from ramulus.trust.twin import Twin


@dataclass(frozen=True)
class Stranger:
    value: int


class StageSettings(Settings):
    width_um: float = setting(1.0, "width", unit="um")


def saved_and_loaded(folder, value):
    store = WorkStore(folder / "work", _RECORDS)
    store.save("stage", "key", value)
    return WorkStore(folder / "work", _RECORDS).load("stage", "key")


def assert_same(found, expected):
    assert type(found) is type(expected)
    if isinstance(expected, np.ndarray):
        assert found.dtype == expected.dtype
        np.testing.assert_array_equal(found, expected)
    elif isinstance(expected, pd.DataFrame):
        pd.testing.assert_frame_equal(found, expected)
    elif isinstance(expected, (list, tuple)):
        assert len(found) == len(expected)
        for one, other in zip(found, expected, strict=True):
            assert_same(one, other)
    elif isinstance(expected, dict):
        assert list(found) == list(expected)
        assert_same(list(found.values()), list(expected.values()))
    elif hasattr(expected, "__dataclass_fields__"):
        for name in expected.__dataclass_fields__:
            assert_same(getattr(found, name), getattr(expected, name))
    else:
        assert found == expected or (found != found and expected != expected)  # noqa: PLR0124


@pytest.mark.parametrize(
    "value",
    [
        None,
        True,
        -3,
        0.1,
        float("nan"),
        float("inf"),
        "µm; a\nb",
        np.float32(0.3),
        np.int64(2**60),
        np.bool_(True),
        [1, (2.0, None), {"a": [np.arange(3)], 7: "b"}],
        np.zeros((0, 3)),
        np.array([[1.5, np.nan]], dtype=np.float32),
        np.array(["", "gap"], dtype=object),
        np.asfortranarray(np.arange(6).reshape(2, 3)),
        np.zeros(2, dtype=[("a", np.int8), ("b", np.float64)]),
        pd.DataFrame({"a": [1.5, np.nan], "b": ["x", "y"], "c": pd.array([1, None], "Int64")}),
        pd.DataFrame({"a": []}),
        Mask(np.eye(3, dtype=bool)[None], (2.0, 1.0, 1.0)),
        Twin([{"n": 3.0}], None, 0.1, None, None, None, None, 2, (1, 2, 3), "why"),
    ],
    ids=lambda value: type(value).__name__,
)
def test_a_value_comes_back_as_it_was(tmp_path, value):
    assert_same(saved_and_loaded(tmp_path, value), value)


def test_a_graph_comes_back_as_it_was(tmp_path):
    graph = fork()
    found = saved_and_loaded(tmp_path, (graph, [{"op": "join", "position_um": [1.0, 2.0, 3.0]}]))
    assert isinstance(found[0], CentrelineGraph)
    assert_same(found[0], graph)


def test_what_is_not_known_is_refused_and_nothing_is_left(tmp_path):
    store = WorkStore(tmp_path / "work", _RECORDS)
    for value in (Stranger(1), {"a": [Stranger(1)]}, np.array([Stranger(1)]), object, b"bytes"):
        with pytest.raises(UnknownRecordError, match="expected arrays"):
            store.save("stage", "key", value)
    assert not (tmp_path / "work").exists()


def test_a_flipped_bit_anywhere_is_noticed_or_harmless(tmp_path):
    value = {"length_um": np.linspace(0, 1, 50), "name": "a", "mask": np.arange(9) > 4}
    store = WorkStore(tmp_path / "work", _RECORDS)
    store.save("stage", "key", value)
    (path,) = (tmp_path / "work").iterdir()
    whole = path.read_bytes()
    noticed = 0
    for place in range(0, len(whole), 3):
        damaged = bytearray(whole)
        damaged[place] ^= 1 << (place % 8)
        path.write_bytes(damaged)
        try:
            assert_same(store.load("stage", "key"), value)
        except KeyError:
            noticed += 1
            assert not path.exists()
    assert noticed > len(whole) / 3 / 2


@pytest.mark.parametrize("length", [0, 1, 100, 700])
def test_a_file_that_was_cut_short_counts_as_absent(tmp_path, length):
    store = WorkStore(tmp_path / "work", _RECORDS)
    store.save("stage", "key", np.arange(100))
    (path,) = (tmp_path / "work").iterdir()
    path.write_bytes(path.read_bytes()[:length])
    with pytest.raises(KeyError):
        store.load("stage", "key")
    assert not path.exists()


def test_a_value_of_another_key_is_not_taken(tmp_path):
    store = WorkStore(tmp_path, _RECORDS)
    store.save("stage", "key", 1)
    with pytest.raises(KeyError):
        store.load("stage", "other")
    store._path("stage", "key").rename(store._path("stage", "other"))
    with pytest.raises(KeyError):
        store.load("stage", "other")


def test_pickled_objects_are_never_read(tmp_path):
    store = WorkStore(tmp_path, _RECORDS)
    head = json.dumps({"key": "key", "value": {"array": "a0"}}).encode()
    objects = np.array([{"a": 1}], dtype=object)
    np.savez(store._path("stage", "key"), head=np.frombuffer(head, np.uint8), a0=objects)
    with pytest.raises(KeyError):
        store.load("stage", "key")


def test_a_large_value_that_was_quick_to_make_is_not_stored(tmp_path):
    store = WorkStore(tmp_path / "work", _RECORDS)
    store.save("stage", "key", np.zeros(2_000_000), seconds=0.01)
    assert not (tmp_path / "work").exists()
    store.save("stage", "key", np.zeros(2_000_000), seconds=1.0)
    assert len(store.load("stage", "key")) == 2_000_000


def test_a_failed_write_leaves_nothing(tmp_path, monkeypatch):
    def full(file, **arrays):
        del arrays
        file.write(b"half")
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(np, "savez", full)
    store = WorkStore(tmp_path / "work", _RECORDS)
    with pytest.raises(OSError, match="No space"):
        store.save("stage", "key", np.arange(3))
    assert list((tmp_path / "work").iterdir()) == []


def test_only_what_was_used_is_kept(tmp_path):
    first = WorkStore(tmp_path, _RECORDS)
    for name in ("a", "b", "c"):
        first.save(name, "key", 1)
    second = WorkStore(tmp_path, _RECORDS)
    second.load("a", "key")
    second.save("d", "key", 1)
    second.keep_only_used()
    assert sorted(path.name[0] for path in tmp_path.iterdir()) == ["a", "d"]
    second.remove()
    assert not tmp_path.exists()


def test_keys_follow_settings_and_plain_values_but_not_arrays():
    key = chained_key("k", "thin", StageSettings(), (1, 2.0), None)
    assert key == chained_key("k", "thin", StageSettings(), (1, 2.0), None)
    others = [
        chained_key("l", "thin", StageSettings(), (1, 2.0), None),
        chained_key("k", "trace", StageSettings(), (1, 2.0), None),
        chained_key("k", "thin", StageSettings(width_um=2.0), (1, 2.0), None),
        chained_key("k", "thin", StageSettings(), (1, 2.1), None),
        chained_key("k", "thin", StageSettings(), (1, 2.0), False),
    ]
    assert len({key, *others}) == 6
    assert chained_key("k", np.zeros(3)) == chained_key("k", np.ones(3))
