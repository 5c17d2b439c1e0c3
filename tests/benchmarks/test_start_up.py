"""Start-up: quick help, and what a study costs besides the compiled work. Medians of several calls."""

import statistics
import subprocess
import sys
import time
from pathlib import Path

import pytest

import labkit as lk

pytestmark = pytest.mark.benchmark
LABKIT = Path(sys.executable).with_name("labkit")
ROOT = Path(__file__).parents[2]


def wall(*words):
    """Return the wall time of one command that ends well."""
    start = time.perf_counter()
    subprocess.run(words, check=True, capture_output=True, cwd=ROOT)
    return time.perf_counter() - start


def test_help_is_quick(report):
    took = statistics.median(wall(LABKIT, "--help") for _ in range(5))
    report(f"labkit --help: {took:.2f} s")
    assert took <= 0.5


def test_a_study_of_one_point_costs_little_besides_its_work(tmp_path, report):
    study = tmp_path / "one.toml"
    study.write_text(
        'notebook = "headroom"\nreplicates = 400\nentropy = 5\n[parameters]\ntasks = 9600\n'
        f'fleet = "{ROOT / "experiments" / "demo"}"\npolicies = ["one-choice", "least-loaded"]\n'
    )
    wall(LABKIT, "run", study, "--store", tmp_path / "warm")
    took = statistics.median(wall(LABKIT, "run", study, "--store", tmp_path / str(turn)) for turn in range(3))
    fleet = lk.read_fleet(ROOT / "experiments" / "demo")
    lk.place(fleet, "least-loaded", tasks=9600, rng=1)
    start = time.perf_counter()
    for policy in ("one-choice", "least-loaded"):
        lk.place(fleet, policy, tasks=9600, replicates=400, rng=1)
    compiled = time.perf_counter() - start
    report(f"study of one point: {took:.2f} s, of which compiled work {compiled:.2f} s")
    assert took - compiled <= 3


def test_a_second_set_up_does_nothing(report):
    wall("make", "setup")
    took = statistics.median(wall("make", "setup") for _ in range(5))
    report(f"make setup when all is there: {took:.2f} s")
    assert took <= 2
