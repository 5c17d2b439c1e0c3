"""A study loses nothing when it is killed, run twice at once, hangs, or fills the disk."""

import contextlib
import json
import os
import random
import signal
import subprocess
import sys
import time

import pytest

from labkit.records.project import ROOT
from labkit.records.schema import first_difference, measured_part
from labkit.records.store import Store
from labkit.studies.model import read_study

COMMAND = [sys.executable, "-P", "-m", "labkit.cli"]


def start(*words, scratch=None):
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    if scratch is not None:
        environment["TMPDIR"] = str(scratch)
    return subprocess.Popen(
        [*COMMAND, *words],
        env=environment,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def measured(folder):
    store = Store(folder)
    return {run: measured_part(store.read(path)) for run, path in store.runs("s").items()}


def recorded(folder):
    """Return how many files of records a store has by now."""
    return len(list((folder / "s").glob("*.parquet")))


def check_equal(folder, expected):
    """The store holds just the expected runs, each once and to the bit, and nothing else."""
    found = measured(folder)
    assert found.keys() == expected.keys()
    assert [first_difference(found[run], expected[run]) for run in found] == [""] * len(found)
    files = sorted(path.relative_to(folder).as_posix() for path in folder.rglob("*"))
    assert len(files) == len(expected) + 1, files
    assert [file for file in files if file != "s" and not file.endswith(".parquet")] == []


@pytest.fixture
def expected(project):
    """Record a study without kernels; return what its runs measure."""

    def record(path):
        project.record(path)
        return measured(project.store)

    return record


def test_25_kills_at_random_moments_lose_nothing_and_double_nothing(project, expected, tmp_path):
    scratch = tmp_path / "t"
    scratch.mkdir()
    path = project.study(grid=f"tasks = {list(range(1, 41))}")
    expected = expected(path)
    words = ["run", path, "--store", str(tmp_path / "killed")]
    moments = random.Random(20260801)
    for at in range(25):
        before = recorded(tmp_path / "killed")
        process = start(*words, scratch=scratch)
        # half of them in the second after the next record, where there is one: machines differ in pace
        patience = time.monotonic() + (60 if at % 2 else 0)
        while time.monotonic() < patience and recorded(tmp_path / "killed") == before < 40:
            time.sleep(0.01)
        time.sleep(moments.uniform(0.0, 0.5 if at % 2 else 1.8))
        process.kill()
        process.communicate()
    done = recorded(tmp_path / "killed")
    assert 0 < done < 40, "the moments of killing must fall into the study"
    process = start(*words, "--json", scratch=scratch)
    out, err = process.communicate(timeout=300)
    assert process.returncode == 0, err
    report = json.loads(out)
    assert len(report["skipped"]) >= done  # a kernel that had no time to notice may have recorded its run
    assert len(report["recorded"]) + len(report["skipped"]) == 40
    check_equal(tmp_path / "killed", expected)
    assert list(scratch.iterdir()) == []


def test_the_same_study_twice_at_once(project, expected, tmp_path):
    path = project.study(grid="tasks = [1, 2, 3]")
    expected = expected(path)
    words = ["run", path, "--store", str(tmp_path / "both"), "--json"]
    for process in [start(*words), start(*words)]:
        out, err = process.communicate(timeout=300)
        assert process.returncode == 0, err
        report = json.loads(out)
        assert len(report["recorded"]) + len(report["skipped"]) == 3
        assert report["failed"] == []
    check_equal(tmp_path / "both", expected)


def test_runs_that_hang_are_ended_and_only_they_are_repeated(project):
    path = project.study(grid='mode = ["good", "slow", "stopped"]')
    status, out, err = project("run", path, "--timeout", "6", "--json")
    assert status == 1, err
    report = json.loads(out)
    assert len(report["recorded"]) == 1
    assert [trouble["values"]["mode"] for trouble in report["failed"]] == ["slow", "stopped"]
    for trouble in report["failed"]:
        assert trouble["error"].startswith("it took longer than 6 seconds and was ended")
        assert f"run {trouble['run_id']} (mode = " in err
        with open(trouble["evidence"]) as stream:
            assert json.load(stream)["cells"]
    project.notebook.write_text(project.notebook.read_text().replace('mode == \\"slow\\"', 'mode == \\"x\\"'))
    before = {point.run_id for point in read_study(path).points}
    assert report["recorded"][0] not in before  # the code has changed, and so have all runs


def test_a_timeout_that_is_none_is_refused(project):
    for given in ("0", "-1", "nan"):
        status, _, err = project("run", project.study(), "--timeout", given)
        assert (status, err.count("\n")) == (2, 1)
        assert err.startswith("labkit: timeout is ")


@contextlib.contextmanager
def small_disk(folder, size):
    folder.mkdir()
    subprocess.run(["mount", "-t", "tmpfs", "-o", f"size={size}", "none", str(folder)], check=True)
    try:
        yield folder
    finally:
        subprocess.run(["umount", str(folder)], check=True)


def test_a_disk_that_fills_ends_the_study_in_one_sentence(project, tmp_path):
    path = project.study(grid=f"tasks = {list(range(1, 9))}", replicates=2000)
    with small_disk(tmp_path / "disk", "300k") as disk:
        status, out, err = project("run", path, "--jobs", "1", store=disk / "runs")
        assert (status, out) == (2, "")
        last = err.splitlines()[-1]
        assert "No space left on device" in last
        recorded = measured(disk / "runs")
        assert 0 < len(recorded) < 8
        assert last.endswith(
            f"{len(recorded)} of 8 runs are recorded; the same command goes on with the rest."
        )
        assert not [
            path for path in (disk / "runs").rglob("*") if path.is_file() and path.suffix != ".parquet"
        ]
        subprocess.run(["mount", "-o", "remount,size=2m", str(disk)], check=True)
        status, out, err = project("run", path, "--json", store=disk / "runs")
        assert (status, len(json.loads(out)["recorded"])) == (0, 8 - len(recorded)), err


def test_a_study_that_is_told_to_end_leaves_no_kernel(project, tmp_path):
    path = project.study(extra='mode = "slow"')
    process = start("run", path, "--store", str(tmp_path / "runs"))
    time.sleep(4)
    children = subprocess.run(
        ["pgrep", "-P", str(process.pid)], capture_output=True, text=True, check=False
    ).stdout.split()
    assert children
    process.send_signal(signal.SIGTERM)
    process.communicate(timeout=60)
    assert process.returncode == 143
    assert not [child for child in children if os.path.exists(f"/proc/{child}")]
    assert not [path for path in (tmp_path / "runs").rglob("*") if path.is_file()]
