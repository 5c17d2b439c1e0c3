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
policies = ["one-choice", "least-loaded"]
{fixed}
[grid]
{name} = {values}
"""
TASKS = 2_000_000


def write(folder, replicates, name, values):
    fixed = "" if name == "tasks" else f"tasks = {TASKS}"
    path = folder / "s.toml"
    path.write_text(STUDY.format(root=ROOT, fixed=fixed, replicates=replicates, name=name, values=values))
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


def core_seconds_in_loops(replicates):
    """Return the core seconds that a point's replicates take in the loops, all cores being busy."""
    fleet = lk.read_fleet(ROOT / "experiments" / "demo")
    shares = []
    for policy in ("one-choice", "least-loaded"):
        lk.place(fleet, policy, tasks=10, rng=1)
        begin = time.perf_counter()
        lk.place(fleet, policy, tasks=TASKS, replicates=replicates, rng=1, workers=cores())
        shares.append(time.perf_counter() - begin)
    return sum(shares) * cores()


def test_two_workers_against_one(tmp_path, report):
    assert cores() >= 2
    run(write(tmp_path, 2, "report_every", [0, 7]), "--store", str(tmp_path / "warm"))
    path = write(tmp_path, 1200, "report_every", [0, 7])
    walls = {}
    for workers in (1, 2):
        with LocalCluster(tmp_path, workers=workers) as running:
            warm = write(tmp_path, 20, "report_every", [0, 7])
            run(warm, "--store", str(tmp_path / f"warm-{workers}"), "--scheduler", running.address)
            path = write(tmp_path, 1200, "report_every", [0, 7])
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
    """Points that differ by a task, so that all have the same loops: fresh reports of all loads."""
    sample = 100 * cores()
    replicates = int(sample * 33 / min(core_seconds_in_loops(sample) for _ in range(2)))
    tasks = list(range(TASKS, TASKS + 2 * cores()))
    run(write(tmp_path, 2, "tasks", [tasks[0]]), "--store", str(tmp_path / "warm"))
    path = write(tmp_path, replicates, "tasks", tasks)
    before = core_seconds_in_loops(sample)
    wall = run(path, "--store", str(tmp_path / "runs"))
    in_loops = statistics.mean([before, core_seconds_in_loops(sample)]) / sample * replicates * len(tasks)
    store = Store(tmp_path / "runs")
    elapsed = [store.read(each)["elapsed"][0].as_py() for each in store.runs("s").values()]
    outside = 1 - in_loops / (wall * cores())
    report(
        f"a study of {len(tasks)} points of {min(elapsed):.0f} to {max(elapsed):.0f} s: {wall:.1f} s on "
        f"{cores()} cores, {100 * outside:.1f} % of them outside the compiled loops"
    )
    assert len(elapsed) == len(tasks)
    assert min(elapsed) >= 30
    assert outside <= 0.10
