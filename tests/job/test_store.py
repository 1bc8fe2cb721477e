import hashlib
import json
import os
from pathlib import Path

import numpy as np
import pytest

from portfire.errors import PortfireError
from portfire.job import task_key


def test_what_is_written_is_read(store):
    arrays = {"a": np.arange(6.0).reshape(2, 3), "label": np.array(["x", "yz"]), "yes": np.array([True])}
    store.write("k", {"n": np.int64(3), "bad": np.nan, "list": (1, 2.5)}, arrays)
    meta, found = store.read("k")
    assert meta == {"n": 3, "bad": None, "list": [1, 2.5]}
    assert set(found) == set(arrays)
    for name, array in arrays.items():
        np.testing.assert_array_equal(found[name], array)
        assert found[name].dtype == array.dtype
    assert store.has("k")
    assert store.list_keys() == ("k",)


def test_arrays_that_would_need_pickling_are_refused_and_leave_nothing(store):
    with pytest.raises(TypeError, match=r"array 'o' holds objects"):
        store.write("k", {}, {"o": np.array([{"a": 1}, None])})
    assert list(store.path.iterdir()) == []


def test_a_writer_that_fails_half_way_leaves_nothing(store):
    def write():
        with store.writing("k") as folder:
            (folder / "fit.json").write_text("{}")
            raise RuntimeError("half way")

    with pytest.raises(RuntimeError, match="half way"):
        write()
    assert list(store.path.iterdir()) == []
    assert not store.has("k")


def _flip(path):
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(bytes(content))


@pytest.mark.parametrize("name", ["fit.json", "arrays.npz", "complete.json"])
@pytest.mark.parametrize(
    "damage", [Path.unlink, _flip, lambda path: path.write_bytes(path.read_bytes()[:10])]
)
def test_damage_to_any_file_is_seen(store, name, damage):
    store.write("k", {"a": 1}, {"x": np.arange(9)})
    damage(store.folder("k") / name)
    assert str(store.folder("k")) in store.fault("k")
    assert not store.has("k")
    with pytest.raises(PortfireError, match=str(store.folder("k"))):
        store.read("k")
    store.write("k", {"a": 2}, {"x": np.arange(9)})
    assert store.read_meta("k") == {"a": 2}


def test_an_entry_under_another_key_is_not_taken_for_this_one(store):
    store.write("k", {"a": 1})
    os.rename(store.folder("k"), store.folder("other"))
    assert not store.has("other")


def test_an_intact_entry_stays_as_it_was(store):
    store.write("k", {"a": 1})
    store.write("k", {"a": 2})
    assert store.read_meta("k") == {"a": 1}


def test_what_killed_writers_left_is_removed(store):
    store.write("k", {"a": 1})
    left = store.path / ".unfinished-other-1a2b"
    left.mkdir()
    (left / "fit.json").write_text("{")
    assert store.list_keys() == ("k",)
    assert store.clean() == (left.name,)
    assert sorted(p.name for p in store.path.iterdir()) == ["k"]


def test_stored_json_is_strict(store):
    store.write("k", {"a": [np.inf, -np.inf, np.float32("nan"), 0.1]})

    def refuse(word):
        raise AssertionError(f"not JSON: {word}")

    text = (store.folder("k") / "fit.json").read_text()
    assert json.loads(text, parse_constant=refuse) == {"a": [None, None, None, 0.1]}


def test_keys_are_short_stable_and_blind_to_order_and_containers():
    key = task_key(digest="sha256:ab", rows=np.arange(4), seed=0, model={"a": 1.5, "b": [1, 2]})
    assert key == task_key(
        model={"b": (1, 2), "a": 1.5}, seed=np.int64(0), rows=np.arange(4), digest="sha256:ab"
    )
    assert len(key) == 16
    assert set(key) <= set("0123456789abcdef")
    # The value itself: it must be the same in all processes and on all machines.
    text = '{"a":1,"b":[true,null,"x",0.1]}'
    assert task_key(b=[True, None, "x", 0.1], a=1) == hashlib.sha256(text.encode()).hexdigest()[:16]


@pytest.mark.parametrize(
    ("one", "other"),
    [
        (1, 1.0),
        (1, True),
        ("1", 1),
        (None, "null"),
        (np.arange(3), np.arange(3.0)),
        (np.zeros((2, 3)), np.zeros((3, 2))),
        (np.array([1, 2]), [1, 2]),
        ([1, [2]], [[1], 2]),
        ({"a": {"b": 1}}, {"a": 1, "b": 1}),
        (np.array(["a", None], dtype=object), np.array(["a", "None"], dtype=object)),
    ],
)
def test_different_values_have_different_keys(one, other):
    assert task_key(x=one) != task_key(x=other)


def test_views_and_byte_order_do_not_change_a_key():
    rows = np.arange(10)
    assert task_key(x=rows[::2]) == task_key(x=rows[::2].copy())
    assert task_key(x=rows.astype(">i8")) == task_key(x=rows.astype("<i8"))


def test_parts_without_a_canonical_form_are_refused():
    with pytest.raises(TypeError, match="a function"):
        task_key(x=lambda: 0)
    with pytest.raises(ValueError, match="JSON compliant"):
        task_key(x=float("nan"))
