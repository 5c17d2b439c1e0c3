"""Records in packs are the same records: same names, same bits, found and refused in the same way."""

import json
import os
import shutil

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import labkit as lk
from labkit.cli import main
from labkit.records import compaction, pack_writing, packs
from labkit.records.compaction import compact
from labkit.records.packs import INDEX, NAMES, PACKED, ROWS, packs_of
from labkit.records.record_files import decode, read_file
from labkit.records.schema import ORIGIN, exact_difference
from labkit.records.store import Store
from labkit.records.store_check import check_store
from tests.records.samples import RUN, fill, record, run_id
from tests.records.tiny import snapshot


@pytest.fixture
def store(tmp_path):
    return Store(tmp_path / "runs")


def contents(store, study="s"):
    return {path.name: store.read(path) for path in store.files(study)}


def same(ours, theirs):
    return ours.keys() == theirs.keys() and not any(
        exact_difference(ours[each], theirs[each]) for each in ours
    )


@pytest.fixture
def small(monkeypatch):
    """Packs of eight runs, in groups of three."""
    monkeypatch.setattr(compaction, "MOST", 8)
    for module in (packs, pack_writing):
        monkeypatch.setattr(module, "GROUP", 3)


def test_compaction_keeps_every_record_to_the_bit(store, small):
    fill(store, 20)
    store.write("s", RUN, record((float("nan"), -0.0)).append_column("own", pa.array(["x", None])))
    store.write("s", "f" * 16, record(run="f" * 16).append_column("own", pa.array(["y", "z"])))
    before, old_paths = contents(store), list(store.files("s"))
    done = compact(store, "s")
    assert (done.runs, done.packs, done.left) == (22, 4, [])
    assert os.listdir(store.folder / "s") == [PACKED]
    assert same(contents(store), before)
    assert [store.find("s", path.name[:16]) for path in old_paths] == list(store.runs("s").values())
    # who holds the path of a file that has been moved reads the record all the same
    assert same({path.name: store.read(path) for path in old_paths}, before)
    backwards = store.tables(list(store.files("s"))[::-1])
    assert [table["run_id"][0].as_py() for table in backwards] == [path.name[:16] for path in old_paths[::-1]]
    assert store.find("s", run_id(20)) is None
    assert store.locate(RUN[:6]).name == store.find("s", RUN).name
    assert check_store(store).faults == []
    assert compact(store, "s").packs == 0


def test_small_packs_are_merged_and_a_repeated_run_is_kept_once(store, small):
    for first in (0, 3):
        fill(store, 3, first=first)
        compact(store, "s")
    before = contents(store)
    assert len(packs_of(store.folder / "s")) == 1
    assert store.write("s", run_id(1), before[store.find("s", run_id(1)).name])[1] is False
    with pytest.raises(lk.StoreError, match="executed again and its measures differ"):
        store.write("s", run_id(1), record(run=run_id(1)))
    assert same(contents(store), before)
    assert len(before) == 6


@pytest.mark.parametrize("where", ["before renaming", "before removing", "while removing", "while merging"])
def test_an_interrupted_compaction_loses_nothing_and_is_finished_by_the_next(store, monkeypatch, where):
    fill(store, 3)
    compact(store, "s")
    fill(store, 5, first=3)
    before = contents(store)

    class Interrupt(BaseException):
        pass

    def stop(*arguments, **options):
        raise Interrupt

    with monkeypatch.context() as patch:
        if where == "before renaming":
            patch.setattr(pack_writing, "_compare", stop)
        elif where == "before removing":
            patch.setattr(compaction, "sync", stop)
            patch.setattr("pathlib.Path.unlink", stop)
        elif where == "while removing":
            patch.setattr(compaction, "sync", stop)
            unlink = type(store.folder).unlink
            patch.setattr(
                "pathlib.Path.unlink", lambda path, **o: run_id(5) in path.name or unlink(path, **o)
            )
        else:
            patch.setattr(compaction, "remove_pack", stop)
        with pytest.raises(Interrupt):
            compact(store, "s")
    assert same(contents(store), before)
    assert compact(store, "s").left == []
    assert same(contents(store), before)
    assert os.listdir(store.folder / "s") == [PACKED]
    assert len(packs_of(store.folder / "s")) == 1
    assert check_store(store).faults == []


@pytest.mark.parametrize("file", [INDEX, ROWS])
def test_any_changed_byte_of_a_pack_is_refused_by_name(store, file):
    fill(store, 3)
    compact(store, "s")
    (pack,) = packs_of(store.folder / "s")
    path = store.find("s", run_id(1))
    content = (pack / file).read_bytes()
    for at in range(0, len(content), len(content) // 25):
        (pack / file).write_bytes(content[:at] + bytes([content[at] ^ 1]) + content[at + 1 :])
        for refused in (store.read, store.verify):
            with pytest.raises(lk.StoreError, match=f"pack {pack} is torn or altered: {file} does not have"):
                refused(path)
        assert [fault.kind for fault in check_store(store).faults] == ["damaged"]
    (pack / file).unlink()
    with pytest.raises(lk.StoreError, match=f"its file {file} is missing; put a copy of it back"):
        store.read(path)
    assert [fault.kind for fault in check_store(store).faults] == ["damaged"]
    (pack / file).write_bytes(content)
    assert store.read(path)["run_id"][0].as_py() == run_id(1)
    store.verify(path)


def test_names_are_never_trusted_and_mended(store):
    fill(store, 3)
    compact(store, "s")
    (pack,) = packs_of(store.folder / "s")
    whole, text = contents(store), (pack / NAMES).read_bytes()
    for wrong in (None, b"", text[:-5], b"x" * len(text), text.replace(b"parquet", b"PARQUET")):
        (pack / NAMES).unlink()
        if wrong is not None:
            (pack / NAMES).write_bytes(wrong)
        assert same(contents(store), whole)
        assert store.find("s", run_id(2)).name in whole
        (fault,) = check_store(store).faults
        assert "labkit compact writes it anew" in fault.sentence
        assert compact(store, "s").left == []
        assert (pack / NAMES).read_bytes() == text
    (pack / NAMES).write_bytes(text.replace(b"0002-", b"0007-"))
    with pytest.raises(lk.StoreError, match="has no record 0000000000000007-"):
        store.read(store.find("s", run_id(7)))


def test_damage_in_one_pack_hides_no_other_run(store, small, capsys):
    fill(store, 16)
    compact(store, "s")
    first, _ = packs_of(store.folder / "s")
    (first / INDEX).write_bytes(b"")
    assert main(["list", "--store", str(store.folder), "--json"]) == 2
    out, err = capsys.readouterr()
    assert len(json.loads(out)) == 8
    assert err.count("\n") == 1
    assert f"pack {first} is torn or altered" in err
    fill(store, 1, first=20)
    done = compact(store, "s")
    assert len(done.left) == 1
    assert first.is_dir()
    shutil.rmtree(first)
    assert len(contents(store)) == 9


def test_a_full_disk_stops_compaction_and_loses_nothing(store, monkeypatch):
    fill(store, 4)
    before = snapshot(store.folder)
    monkeypatch.setattr(pack_writing, "write_synced", lambda *arguments: os.write(10**6, b""))
    with pytest.raises(lk.StoreError, match="cannot be written"):
        compact(store, "s")
    assert snapshot(store.folder) == before


def test_one_compaction_at_a_time(store):
    fill(store, 2)
    with compaction._alone(store.folder / "s", "s"), pytest.raises(lk.StoreError, match="by another process"):
        compact(store, "s")
    assert compact(store, "s").runs == 2


def write_as(store, table, run):
    """Write a table as another version of labkit would have."""
    import hashlib

    sink = pa.BufferOutputStream()
    pq.write_table(table, sink, compression="zstd")
    content = sink.getvalue().to_pybytes()
    path = store.folder / "s" / f"{run}-{hashlib.sha256(content).hexdigest()[:32]}.parquet"
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(content)
    return path


def test_older_schemas_are_understood_and_never_rewritten(store):
    first = write_as(store, record(run=run_id(0)).drop_columns(["rules"]), run_id(0))
    second = write_as(store, record(run=run_id(1)), run_id(1))
    third, _ = store.write("s", run_id(2), record(run=run_id(2)))
    before = snapshot(store.folder)
    for number, path in enumerate((first, second, third)):
        assert store.read(path).equals(record(run=run_id(number)))
        assert read_file(path)[1] == number
    checked = check_store(store)
    assert (checked.runs, checked.older, checked.faults) == (3, 2, [])
    assert main(["list", "--store", str(store.folder)]) == 0
    assert snapshot(store.folder) == before
    assert decode(third.read_bytes()).schema.metadata[b"labkit.schema"] == b"2"
    compact(store, "s")
    assert [store.read(path).column_names[: len(ORIGIN)] for path in store.files("s")] == [ORIGIN.names] * 3
    (pack,) = packs_of(store.folder / "s")
    assert packs.open_pack(pack).columns(["schema"])["schema"] == [0, 1, 2]


@pytest.mark.parametrize(("number", "said"), [(b"3", "schema 3"), (b"x", "an ill-formed schema")])
def test_a_newer_schema_is_refused_by_name(store, number, said):
    path = write_as(store, record().replace_schema_metadata({b"labkit.schema": number}), RUN)
    with pytest.raises(lk.StoreError, match=f"{path.name} is of {said} and this labkit reads up to 2"):
        store.read(path)
    assert len(check_store(store).faults) == 1
    assert len(compact(store, "s").left) == 1
    assert path.exists()
