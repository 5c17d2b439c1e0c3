"""Speed of the loop for work that leaves, as ratios measured side by side in one run."""

import ctypes
import heapq
import math
import random
import subprocess
from collections import deque
from pathlib import Path

import numpy as np
import pytest

import labkit as lk
from labkit.engine import queues as q
from labkit.randomness import ARRIVALS, REQUIREMENTS, TIMES, generator, kernel_state, seed_sequence
from tests.benchmarks.side_by_side import ratio, seconds

pytestmark = pytest.mark.benchmark

SERVERS, LOAD, HORIZON = 1_024, 0.9, 8_000.0
BLOCK = 4_096


def ours(discipline="fcfs", horizon=HORIZON):
    """Return the outcome, whose tasks arrive and leave at random choices of two servers."""
    return lk.serve(
        lk.complete(SERVERS), "least-loaded", load_factor=LOAD, horizon=horizon, warmup=0.0, rng=1,
        discipline=discipline, intervals=1,
    )  # fmt: skip


def events(outcome):
    """Return the number of arrivals and departures."""
    row = outcome.measures.iloc[0]
    return row["arrivals"] + row["completed"]


def heap_loop(horizon):
    """Serve the same work by a plain Python loop over a heap of departures; return the number of events."""
    draws, now, count = random.Random(1), 0.0, 0
    waiting = [deque() for _ in range(SERVERS)]
    leaving = []
    sojourns = 0.0
    arrival = draws.expovariate(LOAD * SERVERS)
    while arrival < horizon:
        count += 1
        if leaving and leaving[0][0] <= arrival:
            now, server = heapq.heappop(leaving)
            sojourns += now - waiting[server].popleft()
            if waiting[server]:
                heapq.heappush(leaving, (now + draws.expovariate(1.0), server))
            continue
        now = arrival
        one, other = draws.randrange(SERVERS), draws.randrange(SERVERS - 1)
        other += other >= one
        first, second = len(waiting[one]), len(waiting[other])
        if second < first or (second == first and draws.random() < 0.5):
            one = other
        waiting[one].append(now)
        if len(waiting[one]) == 1:
            heapq.heappush(leaving, (now + draws.expovariate(1.0), one))
        arrival = now + draws.expovariate(LOAD * SERVERS)
    return count


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    """Return the C loop: horizon to (completed tasks, their mean sojourn)."""
    library = tmp_path_factory.mktemp("plain") / "plain_service.so"
    source = Path(__file__).with_name("plain_service.c")
    subprocess.run(
        ["cc", "-O3", "-march=native", "-shared", "-fPIC", str(source), "-o", str(library)], check=True
    )
    loaded = ctypes.CDLL(str(library))
    loaded.make.restype, loaded.make.argtypes = ctypes.c_void_p, [ctypes.c_int64]
    loaded.serve.restype = ctypes.c_double
    pointer = ctypes.c_void_p
    loaded.serve.argtypes = [
        *(pointer, pointer, pointer, ctypes.c_uint64, ctypes.c_double, ctypes.c_double),
        *(pointer, pointer, ctypes.c_int64),
    ]

    def serve(horizon):
        seed = seed_sequence(1)
        gaps, needs = generator(seed, 0, TIMES), generator(seed, 0, REQUIREMENTS)
        words = kernel_state(seed, 0, ARRIVALS)
        servers, sums = loaded.make(SERVERS), np.zeros(2 + 1024 + 2 + 2 * q.BINS)
        now = 0.0
        while now < horizon:
            gap, need = gaps.standard_exponential(BLOCK), needs.standard_exponential(BLOCK)
            now = loaded.serve(
                servers, sums.ctypes.data, words.ctypes.data, SERVERS, now, LOAD * SERVERS,
                gap.ctypes.data, need.ctypes.data, BLOCK,
            )  # fmt: skip
        completed = int(sums[1026:1027].view(np.int64)[0])
        return completed, sums[0] / completed

    return serve


def test_serving_keeps_up_with_c(plain, report):
    completed, mean = plain(HORIZON)
    row = ours().measures.iloc[0]
    # The last batch of the plain loop goes beyond the horizon.
    assert math.isclose(row["completed"], completed, rel_tol=1e-3)
    assert math.isclose(row["sojourn_mean"], mean, rel_tol=1e-3)
    found = ratio(ours, lambda: plain(HORIZON))
    each = seconds(lambda: plain(HORIZON)) / (2 * completed) * 1e9
    setting = f"fcfs, least-loaded, {SERVERS} servers, load {LOAD}"
    report(f"{setting}: {found:.2f} x the time of plain C ({each:.1f} ns an event)")
    assert found <= 1.5


def test_serving_against_a_heap_of_events(report):
    short = 200.0
    count = heap_loop(short)
    outcome = ours()
    plain_speed = count / seconds(lambda: heap_loop(short))
    speed = events(outcome) / seconds(ours)
    report(f"fcfs: {speed / 1e6:.1f} million events/s, {speed / plain_speed:.0f} x a Python loop over a heap")
    assert speed >= 10 * plain_speed


@pytest.mark.parametrize("discipline", ["ps", "sessions"])
def test_other_disciplines_are_within_three_times(discipline, report):
    found = ratio(lambda: ours(discipline), ours)
    report(f"{discipline}: {found:.2f} x the time of fcfs")
    assert found <= 3
