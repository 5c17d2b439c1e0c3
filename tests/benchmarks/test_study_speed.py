"""Studies: two workers against one, and the time that is not spent in compiled loops."""

import os
import statistics
import subprocess
import sys
import time

import pytest

import labkit as lk
from labkit.records.project import ROOT
from labkit.records.store import Store
from labkit.studies.running import cores
from tests.journeys.cluster import LocalCluster

pytestmark = pytest.mark.benchmark

STUDY = """
notebook = "headroom"
replicates = {replicates}
entropy = 11
[parameters]
fleet = "{root}/experiments/demo"
tasks = {tasks}
policies = ["one-choice", "least-loaded"]
[grid]
report_every = {reports}
"""
TASKS = 2_000_000


def write(folder, replicates, reports):
    path = folder / "s.toml"
    path.write_text(STUDY.format(root=ROOT, tasks=TASKS, replicates=replicates, reports=reports))
    return str(path)


def run(*words):
    begin = time.perf_counter()
    subprocess.run(
        [sys.executable, "-P", "-m", "labkit.cli", "run", *words],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        check=True,
    )
    return time.perf_counter() - begin


def compiled_seconds(replicates):
    """Return the time that a point's tasks take in the loops, on one core."""
    fleet = lk.read_fleet(ROOT / "experiments" / "demo")
    for policy in ("one-choice", "least-loaded"):
        lk.place(fleet, policy, tasks=10, rng=1)
    begin = time.perf_counter()
    for policy in ("one-choice", "least-loaded"):
        lk.place(fleet, policy, tasks=TASKS, replicates=replicates, rng=1)
    return time.perf_counter() - begin


def test_two_workers_against_one(tmp_path, report):
    assert cores() >= 2
    run(write(tmp_path, 2, [0, 7]), "--store", str(tmp_path / "warm"))
    path = write(tmp_path, 1200, [0, 7])
    walls = {}
    for workers in (1, 2):
        with LocalCluster(tmp_path, workers=workers) as running:
            warm = write(tmp_path, 20, [0, 7])
            run(warm, "--store", str(tmp_path / f"warm-{workers}"), "--scheduler", running.address)
            path = write(tmp_path, 1200, [0, 7])
            walls[workers] = run(
                path, "--store", str(tmp_path / f"{workers}"), "--scheduler", running.address
            )
    ratio = walls[1] / walls[2]
    report(f"two workers: {walls[2]:.1f} s against {walls[1]:.1f} s with one: {ratio:.2f} times as fast")
    here = {
        jobs: run(path, "--store", str(tmp_path / f"here-{jobs}"), "--jobs", str(jobs)) for jobs in (1, 2)
    }
    report(f"here, two kernels: {here[2]:.1f} s; one kernel with two threads: {here[1]:.1f} s")
    assert ratio >= 1.7


def test_time_outside_the_loops(tmp_path, report):
    replicates = 200
    a_point = min(compiled_seconds(replicates) for _ in range(2))
    replicates = int(replicates * 32 / a_point)
    reports = [0, 3, 5, 7]
    path = write(tmp_path, replicates, reports)
    run(write(tmp_path, 2, reports), "--store", str(tmp_path / "warm"))
    write(tmp_path, replicates, reports)
    wall = run(path, "--store", str(tmp_path / "runs"))
    store = Store(tmp_path / "runs")
    points = [store.read(each) for each in store.runs("s").values()]
    elapsed = [table["elapsed"][0].as_py() for table in points]
    in_loops = statistics.mean([compiled_seconds(200) for _ in range(3)]) / 200 * replicates * len(reports)
    outside = 1 - in_loops / (wall * cores())
    report(
        f"a study of {len(reports)} points of {min(elapsed):.0f} to {max(elapsed):.0f} s: {wall:.1f} s on "
        f"{cores()} cores, {100 * outside:.1f} % of them outside the compiled loops"
    )
    assert min(elapsed) >= 30
    assert outside <= 0.10
