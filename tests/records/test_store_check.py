"""`labkit check` names each file that is not as it should be, says what to do, and changes nothing."""

import json
import os
import subprocess
import sys

import pytest

from labkit.cli import main
from labkit.commands import records as command
from labkit.records.compaction import compact
from labkit.records.leftovers import machine, name_of_new
from labkit.records.store import Store
from labkit.records.store_check import check_store
from tests.records.samples import fill, record, run_id
from tests.records.tiny import snapshot


@pytest.fixture
def store(tmp_path):
    return Store(tmp_path / "runs")


def test_each_fault_is_named_and_nothing_changed(store, capsys):
    fill(store, 6)
    compact(store, "s")
    fill(store, 4, first=6)
    folder = store.folder / "s"
    assert main(["check", "--store", str(store.folder)]) == 0
    assert "10 runs in 7 files" in capsys.readouterr().out
    dead = subprocess.Popen([sys.executable, "-c", ""])
    dead.wait()
    other = Store(store.folder.parent / "other")
    twice = other.write("s", run_id(7), record((7.25, 7.5), run=run_id(7), elapsed=9.0))[0]
    differs = other.write("s", run_id(8), record(run=run_id(8)))[0]
    packed = other.write("s", run_id(1), record((1.25, 1.5), run=run_id(1), elapsed=9.0))[0]
    for path in (twice, differs, packed):
        path.rename(folder / path.name)
    whole = store.find("s", run_id(9))
    whole.write_bytes(whole.read_bytes()[:-1])
    for name in ("notes.txt", "mine.parquet", f".x.{machine()}.{dead.pid}.00.tmp", ".DS_Store"):
        (folder / name).write_text("x")
    (folder / name_of_new("x")).write_text("being written")
    (folder / "failed").mkdir()
    for run in (run_id(2), run_id(99)):
        (folder / "failed" / f"{run}.txt").write_text("the well is dry\n")
    (store.folder / "stray").write_text("x")
    before = snapshot(store.folder)
    assert main(["check", "--store", str(store.folder), "--json"]) == 1
    faults = json.loads(capsys.readouterr().out)["faults"]
    kinds = sorted(fault["kind"] for fault in faults)
    foreign = ["foreign"] * 3
    assert kinds == ["damaged", "differing", "doubled", "doubled", *foreign, "leftover", "stale"]
    assert all(fault["path"] in fault["sentence"] and fault["sentence"].endswith(".") for fault in faults)
    assert main(["check", "s", "--store", str(store.folder)]) == 1
    assert "8 faults" in capsys.readouterr().out
    assert main(["check", "t", "--store", str(store.folder)]) == 2
    assert "study is 't'" in capsys.readouterr().err
    assert snapshot(store.folder) == before
    assert main(["compact", "--store", str(store.folder)]) == 1
    left = [fault.kind for fault in check_store(store).faults]
    assert sorted(left) == ["damaged", "differing", *foreign, "stale"]


def test_list_names_failed_runs_and_many_files(store, capsys, monkeypatch):
    fill(store, 3)
    (store.folder / "s" / "failed").mkdir()
    for run in (run_id(2), run_id(99)):
        (store.folder / "s" / "failed" / f"{run}.txt").write_text("the well is dry\n\nand more\n")
    monkeypatch.setattr(command, "MANY_FILES", 2)
    assert main(["list", "--store", str(store.folder)]) == 0
    out, err = capsys.readouterr()
    lines = out.splitlines()
    assert [line.split()[0] for line in lines] == ["run", *map(run_id, range(3)), "failed", run_id(99)]
    assert lines[-1].split("  ")[1:] == [
        "the well is dry",
        str(store.folder / "s" / "failed" / f"{run_id(99)}.txt"),
    ]
    assert err.count("\n") == 1
    assert "labkit compact s puts them" in err
    assert main(["list", "--store", str(store.folder), "--json"]) == 0
    assert [row["run_id"] for row in json.loads(capsys.readouterr().out)] == [run_id(at) for at in range(3)]
    assert main(["compact", "--store", str(store.folder), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)[0]["runs"] == 3


def test_a_clock_that_is_wrong_removes_nothing_of_a_living_writer(store):
    fill(store, 1)
    folder = store.folder / "s"
    mine = folder / name_of_new("x")
    elsewhere = folder / f".x.00000000.{os.getpid()}-1.00.tmp"
    reused = folder / f".x.{machine()}.{os.getpid()}-1.00.tmp"
    for path in (mine, elsewhere, reused):
        path.write_text("half")
    assert store.settle("s") == [reused]
    for when, kept in ((3 * 10**9, True), (10**9, False)):
        for path in (mine, elsewhere):
            os.utime(path, (when, when))
        store.settle("s")
        assert mine.exists()
        assert elsewhere.exists() == kept
