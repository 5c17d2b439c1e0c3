"""Replay of a real trace, the flights of New York City in 2013, against a plain Python replay.

Source: see tests/published/flights.py. 327,346 flights, of which 62 % share their scheduled minute with an
earlier one of that day.
"""

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

import labkit as lk
from labkit.survey.fair import fair_profile
from tests.events import plain_python_replay
from tests.published.flights import flight_graph, flight_trace
from tests.reference import WORD, words

ROOT = Path(__file__).parents[2]
FLIGHTS = 327_346
SLICE = 4_000
RULES = {
    "one-choice": ("one-choice",),
    "least-loaded": ("least-loaded", "random"),
    "least-loaded(ties=first)": ("least-loaded", "first"),
    "mixed(beta=0.5)": ("mixed", 0.5),
}


@pytest.fixture(scope="module")
def trace():
    return flight_trace()


@pytest.fixture(scope="module")
def fleet(trace):
    return lk.fleet_from_trace(trace)


def plain_rows(trace, fleet, *, durations, placed=None):
    """Return the rows for `plain_python_replay`, with servers as positions."""
    position = {name: at for at, name in enumerate(fleet.names)}
    pairs = zip(
        trace["option_1"].map(position).tolist(), trace["option_2"].map(position).tolist(), strict=True
    )
    lasting = trace["duration"].tolist() if durations else [None] * len(trace)
    placed = [0] * len(trace) if placed is None else placed
    return [
        (time, list(pair), 1, duration, where)
        for time, pair, duration, where in zip(trace["time"].tolist(), pairs, lasting, placed, strict=True)
    ]


def test_the_trace_is_the_published_one(trace):
    assert len(trace) == FLIGHTS
    assert trace.duplicated("time").mean() == pytest.approx(0.617, abs=5e-4)
    assert trace["time"].is_monotonic_increasing
    assert trace["duration"].between(20, 695).all()


def test_the_fleet_of_the_trace_is_that_of_the_graph(fleet):
    graph = lk.fleet_from_graph(flight_graph())

    def demands(one):
        names = [tuple(sorted(one.names[server] for server in row)) for row in one.options]
        return dict(zip(names, one.demand.tolist(), strict=True))

    assert set(fleet.names) == set(graph.names)
    assert demands(fleet) == demands(graph)
    assert sum(demands(fleet).values()) == FLIGHTS


def with_coins(trace, fleet):
    """Return the loads after all flights, each at the less loaded airport: one loop over lists of numbers."""
    position = {name: at for at, name in enumerate(fleet.names)}
    coins, loads = words(1, 0, 0), [0] * fleet.size
    for one, other, coin in zip(
        trace["option_1"].map(position), trace["option_2"].map(position), coins, strict=False
    ):
        first, second = loads[one], loads[other]
        takes_first = first < second or (first == second and coin * 2 < WORD)
        loads[one if takes_first else other] += 1
    return loads


def test_all_flights_stay(trace, fleet):
    outcome = lk.replay(fleet, trace.drop(columns="duration"), "least-loaded", rng=1)
    loads = with_coins(trace, fleet)
    assert outcome.loads[0].tolist() == loads
    assert (sum(loads), max(loads)) == (FLIGHTS, outcome.measures["max_load"].item())
    # No split does better than the optimum, which tests/published/test_optimum_open_data.py proves.
    assert max(loads) >= lk.survey(fleet).optimum


def test_all_flights_in_the_air(fleet):
    trace = flight_trace(departure="sched_dep_time")
    outcome = lk.replay(fleet, trace, "least-loaded", rng=1, block=1440.0)
    told = plain_python_replay(
        fleet, plain_rows(trace, fleet, durations=True), RULES["least-loaded"], entropy=1
    )
    row = outcome.measures.iloc[0]
    assert (row["max_load"], row["arrivals"]) == (told["max_load"], FLIGHTS)
    # Each stays for its time in the air.
    ends = trace["time"] + trace["duration"]
    done = ends <= trace["time"].iloc[-1]
    assert row["completed"] == done.sum()
    assert row["sojourn_mean"] == pytest.approx(trace["duration"][done].mean(), rel=1e-12)
    assert row["waiting_mean"] == 0
    here = np.minimum(ends, trace["time"].iloc[-1]) - trace["time"]
    held = np.bincount(told["servers"], here, fleet.size)
    span = trace["time"].iloc[-1] - trace["time"].iloc[0]
    np.testing.assert_allclose(outcome.by_server["queue_mean"], held / span, rtol=1e-9, atol=1e-12)
    days = outcome.by_interval
    assert len(days) == 365
    assert days["arrivals"].sum() == FLIGHTS
    day = (trace["time"] - trace["time"].iloc[0]) // 1440
    assert days["arrivals"].tolist() == day.value_counts(sort=False).tolist()


def test_as_placed_counts_the_airport_that_is_named(trace, fleet):
    # Every flight at the airport where it began.
    outcome = lk.replay(
        fleet, trace.drop(columns="duration").assign(placed=trace["option_1"]), "as-placed", rng=1
    )
    counts = trace["option_1"].value_counts()
    assert dict(zip(fleet.names, outcome.loads[0].tolist(), strict=True)) == {
        name: int(counts.get(name, 0)) for name in fleet.names
    }
    assert len(counts) == 3


def agree_on_a_slice():
    """Compare all rules on the first flights, the loop left as plain Python."""
    trace = flight_trace().head(SLICE)
    fleet = lk.fleet_from_trace(trace)
    shares = fair_profile(fleet).split.by_option()
    for durations in (False, True):
        rows = plain_rows(trace, fleet, durations=durations)
        table = trace if durations else trace.drop(columns="duration")
        for name, rule in RULES.items():
            outcome = lk.replay(fleet, table, name, rng=2)
            assert_alike(outcome, plain_python_replay(fleet, rows, rule, entropy=2), durations)
        placed = static_picks(fleet, rows, shares)
        outcome = lk.replay(fleet, table, "static-split", rng=2)
        rows = plain_rows(trace, fleet, durations=durations, placed=placed)
        assert_alike(outcome, plain_python_replay(fleet, rows, ("as placed",)), durations)
    for name in ("smooth-feedback(gain=0.5)", "tree-flow"):
        loads = lk.replay(fleet, trace.drop(columns="duration"), name, rng=2).loads
        assert loads.sum() == SLICE


def static_picks(fleet, rows, shares):
    """Return where static-split puts each flight: by its coin, on the choice in the fleet's order."""
    number = {frozenset(options): row for row, options in enumerate(fleet.options.tolist())}
    picks = []
    for (_, options, *_), coin in zip(rows, words(2, 0, 0), strict=False):
        row = number[frozenset(options)]
        one, other = fleet.options[row].tolist()
        picks.append(one if (coin >> 11) * 2.0**-53 * shares[row].sum() < shares[row][0] else other)
    return picks


def assert_alike(outcome, told, durations):
    row = outcome.measures.iloc[0]
    if not durations:
        assert outcome.loads[0].tolist() == told["loads"]
    assert row["max_load"] == (told["max_load"] if durations else max(told["loads"]))
    assert row["max_utilisation"] == row["max_load"]


def test_all_rules_on_the_first_flights():
    done = subprocess.run(
        [sys.executable, "-c", "import tests.published.test_flights as tests; tests.agree_on_a_slice()"],
        cwd=ROOT,
        env={**os.environ, "NUMBA_DISABLE_JIT": "1"},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stdout + done.stderr
