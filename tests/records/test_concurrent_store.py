"""Processes that write the same runs at once, that are killed, and a disk that is really full."""

import errno
import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

import labkit as lk
from labkit.records import record_files
from labkit.records.compaction import compact
from labkit.records.schema import measured_part
from labkit.records.store import Store
from labkit.records.store_check import check_store
from tests.records.samples import RUN, fill, record, run_id
from tests.records.tiny import snapshot

ROOT = Path(__file__).parents[2]


def script(text, *words, prefix=()):
    """Run a script in a process of its own, which has read all it needs before it forks."""
    head = (
        "import os, random, signal, sys, time\nfrom pathlib import Path\nimport pandas, pyarrow.parquet\n"
        "from labkit.records.store import Store\nfrom labkit.records.compaction import compact\n"
        "import labkit.records.schema\nfrom tests.records.samples import *\n"
    )
    done = subprocess.run(
        [*prefix, sys.executable, "-c", head + text, *map(str, words)],
        capture_output=True,
        text=True,
        cwd=ROOT,
        timeout=120,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


RACE = """
store, rounds = Store(Path(sys.argv[1])), 40
tables = [[record(run=run_id(at), elapsed=float(who)) for at in range(rounds)] for who in range(4)]
start = time.monotonic() + 0.1
children = []
for who in range(4):
    child = os.fork()
    if child == 0:
        status = 1
        try:
            for at in range(rounds):
                while time.monotonic() < start + 0.03 * at:
                    pass
                path, new = store.write("s", run_id(at), tables[who][at])
                assert store.read(path)["run_id"][0].as_py() == run_id(at)
            status = 0
        finally:
            os._exit(status)
    children.append(child)
print([os.waitpid(child, 0)[1] for child in children])
"""


def test_writers_of_the_same_runs_leave_one_record_each(tmp_path):
    assert script(RACE, tmp_path).strip() == "[0, 0, 0, 0]"
    checked = check_store(Store(tmp_path))
    assert (checked.runs, checked.files, checked.faults) == (40, 40, [])


KILLS = """
store, draw = Store(Path(sys.argv[1])), random.Random(3)
tables = {at: record(run=run_id(at)) for at in range(400)}
for turn in range(25):
    children = []
    for who in range(2):
        child = os.fork()
        if child == 0:
            try:
                for at in range(400):
                    if store.find("s", run_id(at)) is None:
                        store.write("s", run_id(at), tables[at])
                    if who and at % 40 == 39:
                        compact(store, "s")
            except Exception as error:
                if "another process" not in str(error):
                    print(error, flush=True)
            finally:
                os._exit(0)
        children.append(child)
    time.sleep(draw.uniform(0.005, 0.12))
    for child in children:
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
"""


def test_killed_writers_and_compactions_leave_nothing_that_settling_does_not_mend(tmp_path):
    store = Store(tmp_path)
    assert script(KILLS, tmp_path) == ""
    kinds = {fault.kind for fault in check_store(store).faults}
    assert kinds <= {"leftover", "doubled"}
    for path in store.files("s"):
        assert measured_part(store.read(path)).equals(measured_part(record()))
    store.settle("s")
    assert compact(store, "s").left == []
    assert check_store(store).faults == []


def test_two_records_of_a_run_are_settled_and_others_raise_the_alarm(tmp_path):
    store, other = Store(tmp_path / "runs"), Store(tmp_path / "other")
    first = fill(store, 1)[0]
    second = fill(other, 1, elapsed=3.0)[0].rename(first.parent / other.find("s", run_id(0)).name)
    kept, gone = sorted([first, second])
    assert store.settle("s") == [gone]
    assert list(store.files("s")) == [kept]
    assert store.read(gone)["run_id"][0].as_py() == run_id(0)
    wrong = other.write("s", run_id(0), record((9.0,), run=run_id(0)))[0]
    wrong.rename(first.parent / wrong.name)
    before = snapshot(store.folder)
    with pytest.raises(lk.StoreError, match="its measures differ from"):
        store.settle("s")
    assert snapshot(store.folder) == before


def test_a_file_that_another_machine_swept_is_written_once_again(tmp_path, monkeypatch):
    store, replace = Store(tmp_path), os.replace
    swept = []

    def sweep_first(source, target):
        if not swept:
            swept.append(source)
            os.unlink(source)
        replace(source, target)

    monkeypatch.setattr(os, "replace", sweep_first)
    path, new = store.write("s", RUN, record())
    assert new
    assert len(swept) == 1
    assert store.read(path).equals(record())
    monkeypatch.setattr(os, "replace", lambda source, target: os.unlink(source) or replace(source, target))
    with pytest.raises(lk.StoreError, match="cannot be written"):
        store.write("s", run_id(1), record(run=run_id(1)))
    assert os.listdir(tmp_path / "s") == [path.name]


DISK = """
import json, subprocess
from labkit.errors import StoreUnwritable
place = Path(sys.argv[1])
subprocess.run(["mount", "-t", "tmpfs", "-o", "size=300k", "none", str(place)], check=True)
try:
    store, said = Store(place / "runs"), []
    paths = fill(store, 2)
    def refused(act):
        try:
            act()
        except StoreUnwritable as error:
            said.append(str(error))
        else:
            said.append("written")
    room = os.statvfs(place).f_bavail * os.statvfs(place).f_bsize
    (place / "ballast").write_bytes(b"x" * (room - 16384))
    big = record(gap=[random.Random(1).random() + at for at in range(20000)], run=run_id(5))
    refused(lambda: store.write("s", run_id(5), big))  # fits in part
    refused(lambda: store.check_writable("s"))
    (place / "more").write_bytes(b"x" * 16384)
    refused(lambda: store.write("s", run_id(6), record(run=run_id(6))))
    refused(lambda: compact(store, "s"))
    (place / "ballast").unlink()
    refused(lambda: store.write("s", run_id(5), record(run=run_id(5))))
    subprocess.run(["mount", "-o", "remount,ro", str(place)], check=True)
    refused(lambda: store.check_writable("s"))
    refused(lambda: store.write("s", run_id(7), record(run=run_id(7))))
    names = sorted(str(path.relative_to(place)) for path in place.rglob("*") if path.is_file())
    read = [store.read(path).num_rows for path in store.files("s")]
    print(json.dumps([said, names, read, [path.name for path in paths]]))
finally:
    subprocess.run(["umount", str(place)], check=True)
"""


def test_a_full_disk_and_a_read_only_one(tmp_path):
    """A real file system of 300 KB, in name spaces of its own where this user may not mount."""
    prefix = () if os.geteuid() == 0 else ("unshare", "-rm")
    said, names, read, paths = json.loads(script(DISK, tmp_path, prefix=prefix))
    full = (
        f"store {tmp_path}/runs/s cannot be written ({os.strerror(errno.ENOSPC)}); free space there or name "
        "another folder."
    )
    locked = (
        f"store {tmp_path}/runs/s cannot be written ({os.strerror(errno.EROFS)}); name a folder that can be."
    )
    assert said == [full] * 4 + ["written"] + [locked] * 2
    assert read == [2, 2, 2]
    assert len(names) == 4
    assert {f"runs/s/{name}" for name in paths} < set(names)


def test_a_trial_that_fits_only_in_part_is_refused(tmp_path, monkeypatch):
    monkeypatch.setattr(record_files.os, "fsync", lambda handle: os.write(10**6, b""))
    with pytest.raises(lk.StoreError, match="cannot be written"):
        Store(tmp_path).check_writable("s")
    assert os.listdir(tmp_path) == []
