"""The store never holds half a record, never replaces one, and names what is not as it was written."""

import os
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.records.leftovers import machine
from labkit.records.schema import (
    first_difference,
    measured_part,
    measured_table,
    row_of_origin,
)
from labkit.records.store import Store
from tests.records.samples import RUN, record
from tests.records.tiny import snapshot


@pytest.fixture
def store(tmp_path):
    return Store(tmp_path / "runs")


def test_what_is_written_is_read_back(store):
    path, new = store.write("s", RUN, record())
    assert new
    assert store.find("s", RUN) == path
    assert store.read(path).equals(record())
    assert list(store.files("s")) == [path]
    assert store.studies() == ["s"]
    assert os.listdir(path.parent) == [path.name]


def test_the_same_measures_keep_the_first_record(store):
    first, _ = store.write("s", RUN, record())
    before = snapshot(store.folder)
    assert store.write("s", RUN, record(elapsed=2.0, started="later")) == (first, False)
    assert snapshot(store.folder) == before


def test_other_measures_of_the_same_run_raise_the_alarm(store):
    store.write("s", RUN, record())
    before = snapshot(store.folder)
    with pytest.raises(lk.StoreError, match=r"executed again and its measures differ .*'gap' in 1 of 2 rows"):
        store.write("s", RUN, record(gap=(0.25, np.nextafter(0.5, 1))))
    assert snapshot(store.folder) == before


@given(st.data())
def test_any_changed_byte_is_refused_by_name(tmp_path_factory, data):
    store = Store(tmp_path_factory.mktemp("runs"))
    path, _ = store.write("s", RUN, record())
    content = bytearray(path.read_bytes())
    at = data.draw(st.integers(0, len(content) - 1))
    content[at] ^= data.draw(st.integers(1, 255))
    path.write_bytes(content)
    with pytest.raises(lk.StoreError, match=f"{path.name} is torn or altered"):
        store.read(path)


@pytest.mark.parametrize("share", [0.0, 0.5, 0.99])
def test_a_torn_file_is_refused_by_name(store, share):
    path, _ = store.write("s", RUN, record())
    content = path.read_bytes()
    path.write_bytes(content[: int(share * len(content))])
    with pytest.raises(lk.StoreError, match=f"{path.name} is torn or altered"):
        store.read(path)
    with pytest.raises(lk.StoreError, match="torn or altered"):
        store.write("s", RUN, record())


def test_a_foreign_file_is_refused_by_name(store):
    path, _ = store.write("s", RUN, record())
    path.with_name("mine.parquet").write_bytes(path.read_bytes())
    with pytest.raises(lk.StoreError, match=r"mine\.parquet is not a record of this store; move it"):
        list(store.files("s"))
    warnings = []
    assert list(store.files("s", warn=warnings.append)) == [path]
    assert len(warnings) == 1
    assert store.locate(RUN[:3]) == path
    renamed = path.with_name(path.name.replace(RUN, "f" * 16))
    path.rename(renamed)
    with pytest.raises(lk.StoreError, match="is not the record of run ffff"):
        store.read(renamed)


def test_a_write_that_fails_leaves_nothing(store, monkeypatch):
    store.write("s", "f" * 16, record(run="f" * 16))
    before = snapshot(store.folder)

    def full(*arguments):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(lk.StoreError, match=r"cannot be written \(No space left on device\)"):
        store.write("s", RUN, record())
    assert snapshot(store.folder) == before


def test_the_next_write_sweeps_what_dead_writers_left(store):
    store.write("s", RUN, record())
    folder = store.folder / "s"
    dead = subprocess.Popen([sys.executable, "-c", ""])
    dead.wait()
    left = folder / f".{RUN}.{machine()}.{dead.pid}.00.tmp"
    alive = folder / f".{RUN}.{machine()}.{os.getpid()}.00.tmp"
    elsewhere = folder / f".{RUN}.00000000.{dead.pid}.00.tmp"
    own = folder / ".notes.tmp"
    for path in (left, alive, elsewhere, own):
        path.write_text("half")
    store.write("s", "f" * 16, record(run="f" * 16))
    assert [path.exists() for path in (left, alive, elsewhere, own)] == [False, True, True, True]
    assert len(list(store.files("s"))) == 2


def test_a_store_that_cannot_be_written_is_refused_and_untouched(tmp_path):
    (tmp_path / "file").write_text("x")
    store = Store(tmp_path / "file" / "runs")
    for attempt in (lambda: store.check_writable("s"), lambda: store.write("s", RUN, record())):
        with pytest.raises(lk.StoreError, match=r"store .*file/runs/s cannot be written \(Not a directory\)"):
            attempt()
    fine = Store(tmp_path / "new" / "runs")
    fine.check_writable("s")
    assert [path.name for path in tmp_path.iterdir()] == ["file"]


@pytest.mark.parametrize("name", ["", ".hidden", "a/b", "..", "a b", "x" * 65, "é", 3])
def test_a_study_name_is_a_folder_name(store, name):
    with pytest.raises(lk.InputError, match=r"study is .*; a study's name begins with"):
        store.check_writable(name)


def test_a_run_is_found_by_its_first_digits(store):
    one, _ = store.write("s", "aa00000000000000", record(run="aa00000000000000"))
    store.write("s", "ab00000000000000", record(run="ab00000000000000"))
    assert store.locate("aa") == one
    with pytest.raises(lk.InputError, match=r"run is 'a'; aa0+, ab0+ begin so: give more digits"):
        store.locate("a")
    for absent in ("c", ""):
        with pytest.raises(lk.InputError, match="none of the 2 records"):
            store.locate(absent)


def test_a_damaged_copy_in_another_study_is_named_and_passed_over(store):
    whole, _ = store.write("z", RUN, record(study="z"))
    damaged, _ = store.write("a", RUN, record(study="a", elapsed=2.0))
    damaged.write_bytes(b"")
    warnings = []
    assert store.locate(RUN, warn=warnings.append) == whole
    assert len(warnings) == 1
    assert f"{damaged} is torn or altered" in warnings[0]


def test_a_record_of_another_version_is_refused_by_name(store):
    path, _ = store.write("s", RUN, record().drop_columns(["draws"]))
    with pytest.raises(lk.StoreError, match=r"is of another version of labkit \(it has no draws\); move it"):
        store.read(path)


def test_measures_keep_every_bit(store):
    values = [0.1, -0.0, np.nan, np.nextafter(1, 2), 5e-324]
    path, _ = store.write("s", RUN, record(gap=values))
    read = store.read(path)["gap"].to_numpy()
    np.testing.assert_array_equal(read.view(np.int64), np.array(values).view(np.int64))


def test_nan_equals_nan_but_zero_has_a_sign():
    assert first_difference(measured_part(record((np.nan,))), measured_part(record((np.nan,)))) == ""
    assert "gap" in first_difference(measured_part(record((0.0,))), measured_part(record((-0.0,))))


def test_the_schema_orders_types_and_takes_further_columns():
    frame = pd.DataFrame({"own": [1.5], "gap": [1], "word": ["x"], "tasks": [3], "count": [2]})
    frame.index = pd.Index(["a"], name="policy")
    table = measured_table(frame)
    assert table.column_names == ["policy", "tasks", "gap", "own", "word", "count"]
    assert [str(kind) for kind in table.schema.types] == [
        *("string", "int64", "double", "double", "string", "int64"),
    ]
    assert row_of_origin(record())["spawn_key"] == [3]


@pytest.mark.parametrize(
    ("frame", "match"),
    [
        (pd.DataFrame(), "measures is a DataFrame without rows"),
        ([1], "measures is a list without rows"),
        (pd.DataFrame({"run_id": ["x"], "gap": [1.0]}), "column 'run_id' twice or from the record itself"),
        (pd.DataFrame({"gap": [1.0], "own": [{}]}), "column 'own' holds other values than string"),
        (pd.DataFrame({"tasks": [1.5]}), "column 'tasks' holds other values than int64"),
        (pd.DataFrame({"policy": ["a", "a"], "gap": [1.0, 2.0]}), "two rows for {'policy': 'a'}"),
    ],
)
def test_a_table_that_does_not_fit_is_refused(frame, match):
    with pytest.raises(lk.InputError, match=match):
        measured_table(frame)
