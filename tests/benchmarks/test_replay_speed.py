"""Speed and memory of replaying long traces on one core, reading included."""

import json
import os
import subprocess
import sys

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq
import pytest

import labkit as lk
from tests.benchmarks.side_by_side import seconds

pytestmark = pytest.mark.benchmark

SERVERS, LOAD = 1_024, 0.7
MILLION = 1_000_000
LEAST = {"parquet": 2.0, "csv": 0.5}  # million events a second

SCRIPT = """
import json, sys
import labkit as lk

def peak():
    for line in open("/proc/self/status"):
        if line.startswith("VmHWM"):
            return int(line.split()[1]) * 1024

outcome = lk.replay(lk.complete(int(sys.argv[2])), sys.argv[1], "least-loaded", rng=1)
outcome.measures
print(json.dumps(peak()))
"""


def pieces(tasks, durations):
    """Yield an invented trace a million rows at a time: random pairs of servers at random times."""
    draw, now = np.random.default_rng(1), 0.0
    for start in range(0, tasks, MILLION):
        rows = min(MILLION, tasks - start)
        times = now + np.cumsum(draw.exponential(1 / (LOAD * SERVERS), rows))
        now = times[-1]
        one = draw.integers(0, SERVERS, rows)
        other = (one + 1 + draw.integers(0, SERVERS - 1, rows)) % SERVERS
        table = {"time": np.round(times, 6), "option_1": one, "option_2": other}
        if durations:
            table["duration"] = np.round(draw.exponential(1.0, rows), 6)
        yield pa.table(table)


@pytest.fixture(scope="module")
def trace(tmp_path_factory):
    """Return the path of a trace of so many tasks, in a format, written once."""
    folder, made = tmp_path_factory.mktemp("traces"), {}

    def path_of(tasks, form, durations=True):
        key = (tasks, form, durations)
        if key not in made:
            made[key] = folder / f"{tasks}-{durations}.{form}"
            kind = pq.ParquetWriter if form == "parquet" else pacsv.CSVWriter
            rows = pieces(tasks, durations)
            first = next(rows)
            with kind(str(made[key]), first.schema) as file:
                file.write_table(first)
                for piece in rows:
                    file.write_table(piece)
        return made[key]

    return path_of


@pytest.fixture
def one_core():
    before = os.sched_getaffinity(0)
    os.sched_setaffinity(0, {max(before)})
    yield
    os.sched_setaffinity(0, before)


@pytest.mark.parametrize("durations", [True, False], ids=["leaving", "staying"])
@pytest.mark.parametrize("form", ["parquet", "csv"])
@pytest.mark.usefixtures("one_core")
def test_events_a_second(form, durations, trace, report):
    fleet, found = lk.complete(SERVERS), []
    # Half of the events are departures, where there are any.
    path = trace(5 * MILLION if durations else 10 * MILLION, form, durations)
    lk.replay(fleet, next(pieces(1_000, durations)).to_pandas(), "least-loaded", rng=1)  # compiles
    took = seconds(lambda: found.append(lk.replay(fleet, path, "least-loaded", rng=1).measures.iloc[0]))
    [row] = found
    count = row["arrivals"] + row["completed"] if durations else row["tasks"]
    assert count > 9.9 * MILLION
    speed = count / took / MILLION
    report(
        f"replay of {count / MILLION:.1f} million events from {form}"
        f"{'' if durations else ', without durations'}: {speed:.1f} million events/s"
    )
    assert speed >= LEAST[form]


@pytest.mark.parametrize("form", ["parquet", "csv"])
def test_memory_does_not_grow_with_the_trace(form, trace, report):
    peaks = []
    for tasks in (MILLION, 10 * MILLION):
        done = subprocess.run(
            [sys.executable, "-c", SCRIPT, str(trace(tasks, form)), str(SERVERS)],
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        assert done.returncode == 0, done.stderr
        peaks.append(json.loads(done.stdout) / MILLION)
    report(f"replay from {form}: {peaks[0]:.0f} MB for 10⁶ rows, {peaks[1]:.0f} MB for 10⁷")
    assert peaks[1] - peaks[0] < 50


def test_a_frame_is_replayed_as_fast_as_parquet(trace, report):
    fleet, found = lk.complete(SERVERS), []
    frame = pd.read_parquet(trace(5 * MILLION, "parquet"))
    took = seconds(lambda: found.append(lk.replay(fleet, frame, "least-loaded", rng=1).measures.iloc[0]))
    speed = (found[0]["arrivals"] + found[0]["completed"]) / took / MILLION
    report(f"replay of a DataFrame: {speed:.1f} million events/s")
    assert speed >= LEAST["parquet"]
