"""What stands in a store and is no work of labkit's is named, never waited for, and hides nothing."""

import hashlib
import json
import os
import shutil

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import labkit as lk
from labkit.cli import main
from labkit.records import store_check
from labkit.records.compaction import _alone, compact, is_compacting
from labkit.records.packs import INDEX, NAMES, ROWS, Pack, open_pack, packs_of
from labkit.records.schema import ORIGIN, numbered
from labkit.records.store import Store
from labkit.records.store_check import check_store
from tests.records.samples import fill, record, run_id


@pytest.fixture
def store(tmp_path):
    return Store(tmp_path / "runs")


@pytest.fixture
def packed(store):
    """A study of four runs in a pack."""
    fill(store, 4)
    compact(store, "s")
    return packs_of(store.folder / "s")[0]


@pytest.fixture
def command(store, capsys):
    def run(*words):
        status = main([*words, "--store", str(store.folder)])
        return (status, *capsys.readouterr())

    return run


def content_of(table):
    sink = pa.BufferOutputStream()
    pq.write_table(table, sink)
    content = sink.getvalue().to_pybytes()
    return content, hashlib.sha256(content).hexdigest()[:32]


def forge(store, table, run):
    """Write what nobody but a forger writes under a digest that is right."""
    content, digest = content_of(numbered(table))
    path = store.folder / "s" / f"{run}-{digest}.parquet"
    path.write_bytes(content)
    return path


def test_a_check_beside_a_compaction_raises_no_false_alarm(store, packed, monkeypatch):
    merged = []

    class Vanishing(Pack):
        """A pack that a compaction merges into another between being opened and being checked."""

        def check(self):
            if not merged:
                merged.append(fill(store, 2, first=4) and compact(store, "s").merged)
            super().check()

    monkeypatch.setattr(store_check, "Pack", Vanishing)
    done = check_store(store)
    assert merged == [1]
    assert (done.faults, done.runs, done.packs) == ([], 6, 1)


def test_runs_doubled_by_a_running_compaction_are_no_fault(store, packed, monkeypatch):
    other = Store(store.folder.parent / "other")
    twice = other.write("s", run_id(1), record((1.25, 1.5), run=run_id(1), elapsed=9.0))[0]
    twice.rename(store.folder / "s" / twice.name)
    assert [fault.kind for fault in check_store(store).faults] == ["doubled"]
    assert not is_compacting(store.folder / "s")
    with _alone(store.folder / "s", "s"):
        assert is_compacting(store.folder / "s")
        assert check_store(store).faults == []


def test_pipes_are_named_and_not_waited_for(store, packed, command):
    loose = fill(store, 1, first=9)[0]
    folder = store.folder / "s"
    name = loose.name.replace("0009-", "0008-")
    (folder / "failed").mkdir()
    (packed / NAMES).unlink()
    for path in (folder / name, packed / NAMES, folder / "failed" / f"{run_id(99)}.txt"):
        os.mkfifo(path)
    dangling = folder / loose.name.replace("0009-", "000a-")
    dangling.symlink_to(folder / "nowhere")
    assert f"file {dangling} is not a record" in command("check")[1]
    dangling.unlink()
    status, out, err = command("list")
    assert status == 2
    assert out.count("\n") == 1 + 5 + 2
    assert f"file {folder / name} is not a record of this store" in err
    assert "cannot be read" in out
    status, out, _ = command("check")
    assert status == 1
    assert f"foreign: file {folder / name}" in out
    assert "reads well, but its names.txt" in out
    with pytest.raises(lk.StoreError, match="is not a record"):
        store.read(folder / name)
    status, _, err = command("compact")
    assert (status, err.count("left as it is: ")) == (1, 1)
    assert [(pack / NAMES).is_file() for pack in packs_of(folder)] == [True]


@pytest.mark.parametrize("file", [INDEX, ROWS, NAMES, "the pack", "all packs"])
def test_a_folder_for_a_file_or_the_reverse_is_refused_by_name(store, packed, command, file):
    fill(store, 2, first=7)
    if file in (INDEX, ROWS, NAMES):
        wrong = packed / file
        wrong.unlink()
        wrong.mkdir()
    else:
        wrong = packed if file == "the pack" else packed.parent
        shutil.rmtree(wrong)
        wrong.write_text("x")
    status, out, err = command("list", "--json")
    seen = len(json.loads(out))
    readable = file in (ROWS, NAMES)  # the index tells where runs come from
    assert seen == (6 if readable else 2)
    assert readable or str(wrong if file != INDEX else packed) in err
    status, out, _ = command("check")
    assert status == 1
    assert str(wrong if wrong.parent != packed else packed) in out
    status, _, err = command("compact")
    assert status == 1
    assert "left as it is: " in err
    assert "cannot be written" not in err
    assert len(json.loads(command("list", "--json")[1])) == seen


def test_a_renamed_pack_is_missed_and_gets_its_name_back(store, packed, command):
    digest = packed.name
    renamed = packed.rename(packed.with_name(f"{digest} (1)"))
    said = (
        f"folder {renamed} is a pack under another name, and its runs are not seen; give it its name {digest}"
    )
    status, _, err = command("list")
    assert status == 2
    assert said in err
    assert f"foreign: {said} back." in command("check")[1]
    assert said in command("compact")[2]
    with pytest.raises(lk.StoreError, match="under another name"):
        store.runs("s")
    shutil.copytree(renamed, packed)
    assert len(store.runs("s")) == 4
    assert f"{renamed} is not a record of this store; move it elsewhere" in command("list")[2]


def test_altered_names_are_mended_before_anything_is_dropped(store, packed, command):
    right = (packed / NAMES).read_text()
    (packed / NAMES).write_text(right.replace("0002-", "0007-"))
    with pytest.raises(lk.StoreError, match="labkit compact s writes that anew"):
        store.read(store.find("s", run_id(7)))
    loose = fill(store, 1, first=2)[0]  # seen as missing, and computed again
    new = fill(Store(store.folder.parent / "other"), 1, first=7)[0]
    new.rename(store.folder / "s" / new.name)
    assert compact(store, "s").left == []
    assert not loose.exists()
    assert sorted(store.runs("s")) == [run_id(at) for at in (0, 1, 2, 3, 7)]
    assert [store.read(path)["run_id"][0].as_py() for path in store.files("s")] == sorted(store.runs("s"))
    assert check_store(store).faults == []


def test_a_folder_that_can_be_no_study_stops_nothing(store, command):
    fill(store, 2, study="z")
    (store.folder / "a b").mkdir()
    status, out, err = command("compact")
    assert status == 1
    assert "study z: 2 runs moved into 1 pack\n" in out
    assert f"left as it is: folder {store.folder / 'a b'}" in err
    status, out, _ = command("check")
    assert f"foreign: folder {store.folder / 'a b'} has a name that no study can have" in out
    assert "1 pack among them: 1 fault\n" in out


FORGED = {
    "parameters": ["[1", "[]", "null", "{},{}", None],
    "started": [None],
    "elapsed": [None],
    "entropy": ["x", "-1", "9" * 5000],
    "spawn_key": ["{}"],
}


def test_forged_records_hide_no_other(store, command):
    whole = fill(store, 2)[0]
    paths = []
    for name, values in FORGED.items():
        for value in values:
            run = run_id(100 + len(paths))
            paths.append(forge(store, record(run=run, **{name: value}), run))
    table = record(run=run_id(50))
    at = table.column_names.index("elapsed")
    paths.append(forge(store, table.set_column(at, "elapsed", pa.array(["1", "1"])), run_id(50)))
    measures = forge(store, record(run=run_id(51)).append_column("own", pa.array([[1], [2]])), run_id(51))
    for words in (["list"], ["list", "--json"]):
        status, out, err = command(*words)
        assert status == 2
        assert all(run_id(at) in out for at in (0, 1))
    assert all(f"record {path} is not a record of labkit" in err for path in paths)
    paths.append(measures)
    for path in paths:
        status, _, err = command("show", path.name[:16])
        assert (status, err.count("\n")) == (2, 1)
    kinds = [fault.kind for fault in check_store(store).faults]
    assert kinds == ["damaged"] * len(paths)
    assert len(compact(store, "s").left) == len(paths)
    assert store.read(whole)["run_id"][0].as_py() == run_id(0)


@pytest.mark.parametrize("how", ["columns", "types", "no runs", "values", "rows", "no parquet"])
def test_forged_packs_are_damaged_and_hide_no_other(store, packed, command, how):
    fill(store, 2, first=7)
    index = open_pack(packed).index
    if how == "columns":
        index = index.drop_columns(["schema"])
    elif how == "types":
        index = index.set_column(index.column_names.index("rows"), "rows", pa.array([2.0] * 4))
    elif how == "no runs":
        index = index.slice(0, 0)
    elif how == "rows":
        index = index.set_column(index.column_names.index("rows"), "rows", pa.array([2, 2, 2, 20]))
    elif how == "values":
        at = ORIGIN.names.index("parameters")
        index = index.set_column(at, "parameters", pa.array(["{}", "{}", "[", "{}"]))
    content, digest = content_of(index)
    if how == "no parquet":
        content, digest = b"PAR1", hashlib.sha256(b"PAR1").hexdigest()[:32]
    forged = packed.rename(packed.with_name(digest))
    (forged / INDEX).write_bytes(content)
    status, out, err = command("list", "--json")
    assert len(json.loads(out)) == (6 if how == "rows" else 2)
    assert how == "rows" or (status == 2 and f"pack {forged}" in err)
    assert [fault.kind for fault in check_store(store).faults] == ["damaged"]
    if how == "rows":
        with pytest.raises(lk.StoreError, match="has not the rows that"):
            store.read(store.find("s", run_id(3)))
    if how == "values":
        with pytest.raises(lk.StoreError, match="its parameters are no object of JSON"):
            lk.read_study_records("s", store=store.folder, where={"tasks": 1})
    assert any(f"pack {forged}" in sentence for sentence in compact(store, "s").left)
    assert forged.is_dir()


def test_nothing_outside_the_store_is_listed(store, command):
    fill(Store(store.folder.parent), 1, study="beside")
    store.folder.mkdir()
    status, out, err = command("list", "../beside")
    assert (status, out) == (2, "")
    assert "study is '../beside'" in err
    assert command("list", "nothing")[:2] == (0, f"no records in {store.folder}\n")
    store.folder.rmdir()
    status, out, err = command("check")
    assert (status, out) == (2, "")
    assert "there is no such folder" in err
