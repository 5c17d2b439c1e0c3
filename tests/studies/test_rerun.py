"""A record stays reproducible after the code has moved on, and whatever stands in the way is said."""

import json
import signal
import time

import pytest

from labkit.records.schema import row_of_origin
from labkit.records.store import Store
from tests.records.tiny import snapshot
from tests.studies.copies import NOTHING_LEFT, SHIFT, Copy

IN_A_TREE = "in a work tree of its own"


@pytest.fixture
def copy(tmp_path):
    return Copy(tmp_path)


def test_a_record_of_an_earlier_commit_is_identical_there_and_differs_here(copy):
    run = copy.record()
    first = copy.git("rev-parse", "HEAD")
    copy.move_on()
    before = snapshot(copy.root / "results")
    status, out, err = copy("rerun", run)
    assert (status, err.count("\n")) == (0, 1), err
    assert f"executed at commit {first[:10]} {IN_A_TREE}\n" in out
    assert f"run {run} is identical to the bit: 6 rows" in out
    assert "note: " not in out
    assert f"making a work tree of commit {first[:10]}" in err
    assert copy.left() == NOTHING_LEFT
    assert snapshot(copy.root / "results") == before
    status, out, _ = copy("rerun", run, "--json")
    assert json.loads(out) == {
        "run_id": run,
        "rows": 6,
        "columns": ["policy", "replicate", "tasks", "gap"],
        "difference": "",
        "notes": [],
        "place": first,
        "identical": True,
    }
    status, out, _ = copy("rerun", run, "--here", "--json")
    found = json.loads(out)
    assert (status, found["place"], found["identical"]) == (1, "here", False)
    assert found["difference"].startswith("column 'gap' in 6 of 6 rows")
    assert [note.split(" was ")[0] for note in found["notes"]] == ["labkit"]


def test_a_record_that_names_a_commit_of_other_code_is_told(copy):
    # As if the record had been made elsewhere and taken for that commit's.
    copy.write(SHIFT, "SHIFT = 0.5\n")
    head, run = copy.git("rev-parse", "HEAD"), copy.record()
    copy.move_on()
    store = Store(copy.root / "results" / "runs")
    path = store.locate(run)
    table = store.read(path)
    clean = table.set_column(table.column_names.index("dirty"), "dirty", [[False] * table.num_rows])
    path.unlink()
    store.write("s", run, clean)
    status, out, _ = copy("rerun", run)
    assert status == 1
    assert f"note: at commit {head[:10]} this is run " in out
    assert "note: labkit was " in out
    assert f"run {run} differs: column 'gap' in 6 of 6 rows" in out


def test_as_long_as_the_code_is_the_same_no_tree_is_made(copy):
    run = copy.record()
    copy.write("README.md", "Computes nothing.\n")
    copy.commit()
    status, out, _ = copy("rerun", run)
    assert status == 0
    assert "executed here\n" in out


def test_a_record_with_changes_that_are_in_no_commit_is_executed_here_with_a_note(copy):
    head = copy.git("rev-parse", "HEAD")
    copy.write(SHIFT, "SHIFT = 0.5\n")
    run = copy.record()
    assert "executed here\nrun" in copy("rerun", run)[1]
    copy.move_on()
    status, out, _ = copy("rerun", run)
    assert status == 1
    assert f"note: the record was made from commit {head[:10]} with changes, and such sources cannot" in out
    assert "note: labkit was " in out
    assert f"executed here\nrun {run} differs: column 'gap' in 6 of 6 rows" in out


def test_a_commit_that_is_gone_is_one_sentence(copy):
    run = copy.record()
    first = copy.git("rev-parse", "HEAD")
    copy.write(SHIFT, "SHIFT = 0.125\n")
    copy.git("commit", "-q", "-a", "--amend", "-m", "Instead")
    copy.git("reflog", "expire", "--expire=now", "--all")
    copy.git("gc", "-q", "--prune=now")
    status, out, err = copy("rerun", run)
    assert (status, out, err.count("\n")) == (2, "", 1)
    assert f"labkit: commit {first[:10]} is not in the repository {copy.root}; fetch the branch" in err
    assert "git fetch --all" in err
    assert copy.left() == NOTHING_LEFT


def test_a_shallow_clone_is_told_to_get_the_rest(copy, tmp_path):
    run = copy.record()
    copy.move_on()
    clone = tmp_path / "clone"
    copy.git("clone", "-q", "--depth", "1", copy.root.as_uri(), str(clone))
    words = ("rerun", run, "--store", str(copy.root / "results" / "runs"))
    status, out, err = copy(*words, root=clone)
    assert (status, out, err.count("\n")) == (2, "", 1)
    assert "is not in this clone, which is shallow; get the rest with: git fetch --unshallow, or" in err


def test_files_of_the_commit_count_and_others_must_be_as_they_were(copy, tmp_path):
    outside, ignored = tmp_path / "outside.csv", "results/answers/table.csv"
    outside.write_text("a\n2\n")
    (copy.root / "results" / "answers").mkdir(parents=True)
    copy.write(ignored, "a\n3\n")
    runs = [copy.record(table_path=str(copy.root / path)) for path in ("table.csv", outside, ignored)]
    copy.write("table.csv", "a\n4\n")
    copy.move_on()
    for run in runs[::2]:
        status, out, _ = copy("rerun", run)
        assert (status, IN_A_TREE in out) == (0, True), out
    outside.write_text("a\n5\n")
    status, out, err = copy("rerun", runs[1])
    assert (status, out) == (2, "")
    assert f"table_path of run {runs[1]} is {str(outside)!r}, whose files are not those of the record" in err
    status, out, err = copy("rerun", runs[0], "--here")
    assert (status, out) == (2, "")
    assert f"is {str(copy.root / 'table.csv')!r}, whose files are not" in err
    assert copy.left() == NOTHING_LEFT


def test_another_lock_has_an_environment_of_its_own(copy):
    copy.write("requirements.lock", "second\n")
    copy.commit()
    run = copy.record()
    copy.move_on()
    status, out, err = copy("rerun", run)
    assert (status, err.count("\n")) == (0, 2), err
    assert "labkit: the lock of commit " in err
    assert "making its own environment (about 1 GB, a minute or two)\n" in err
    assert "is identical to the bit" in out
    copy.write(".ci/setup", 'echo "set-up: the well is dry" >&2; exit 1\n')
    copy.commit()
    run = copy.record()
    copy.write(SHIFT, "SHIFT = 0.25\n")
    copy.commit()
    status, out, err = copy("rerun", run)
    assert (status, out) == (2, "")
    assert "could not be made (set-up: the well is dry); see to that and try again, or" in err
    assert copy.left() == NOTHING_LEFT


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_an_interrupted_command_leaves_no_tree(copy, tmp_path, number):
    run = copy.record()
    copy.move_on()
    mark = tmp_path / "started"
    process = copy.started("rerun", run, STARTED=str(mark))
    end = time.monotonic() + 60
    while not mark.exists():
        assert process.poll() is None, process.communicate()
        assert time.monotonic() < end
        time.sleep(0.05)
    assert copy.left()[0] == 2
    process.send_signal(number)
    process.communicate(timeout=30)
    assert process.returncode == {signal.SIGINT: 130, signal.SIGTERM: 143}[number]
    assert copy.left() == NOTHING_LEFT


def test_variables_of_a_hook_and_hooks_are_kept_out(copy, tmp_path):
    run = copy.record()
    copy.move_on()
    hook = copy.root / ".git" / "hooks" / "post-checkout"
    hook.parent.mkdir(exist_ok=True)
    hook.write_text(f"#!/bin/sh\ntouch {tmp_path / 'called'}\n")
    hook.chmod(0o755)
    status, out, _ = copy("rerun", run, GIT_DIR=str(tmp_path / "elsewhere"), GIT_WORK_TREE=str(tmp_path))
    assert (status, IN_A_TREE in out) == (0, True)
    assert not (tmp_path / "called").exists()


def test_the_record_of_the_copy_is_clean(copy):
    run = copy.record()
    store = Store(copy.root / "results" / "runs")
    origin = row_of_origin(store.read(store.locate(run)))
    assert (origin["git_hash"], origin["dirty"]) == (copy.git("rev-parse", "HEAD"), False)
