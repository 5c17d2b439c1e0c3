"""The capacity that meets a risk, against closed forms and against running it.

Limits are at 99.9 % where a closed form must lie within them: false alarms in one of 1,000 for each.
"""

import math
import re

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.randomness import seed_sequence

QUEUE = {"load_factor": 0.9, "risk": 0.05, "target": 8.0, "horizon": 2000.0, "warmup": 200.0, "rng": 1}


@pytest.mark.parametrize("load_factor", [0.9, 1.3])
def test_one_queue_needs_what_its_exponential_sojourn_says(load_factor):
    # M/M/1: the sojourn is exponential at rate capacity - arrivals (textbook).
    found = lk.serve_headroom(
        lk.complete(50), "one-choice", **QUEUE | {"load_factor": load_factor}, replicates=6, confidence=0.999
    ).table.iloc[0]
    exact = load_factor - math.log(0.05) / 8
    assert found["lower"] <= exact <= found["upper"] * 1.005
    assert abs(found["scale"] / exact - 1) < 0.02
    assert found["capacity"] == pytest.approx(50 * found["scale"])
    assert found["load_factor"] == pytest.approx(load_factor / found["scale"])


def test_the_answer_meets_the_risk_and_a_little_less_does_not():
    fleet = lk.ring(20)
    provision = lk.serve_headroom(fleet, "least-loaded", **QUEUE, replicates=4)
    scale = provision.table["scale"].item()
    how = {name: QUEUE[name] for name in ("target", "horizon", "warmup", "rng")} | {"replicates": 4}
    for factor, meets in ((scale, True), (scale * 0.99, False)):
        servers = pd.DataFrame({"server": np.arange(20), "capacity": factor})
        outcome = lk.serve(lk.Fleet(servers, fleet.choices), "least-loaded", load_factor=0.9 / factor, **how)
        assert bool(outcome.measures["late_share"].mean() <= 0.05) is meets
    assert (provision.curve["share"].diff().dropna() <= 0).all()


def test_one_run_long_enough_has_limits_from_batches():
    found = lk.serve_headroom(lk.complete(50), "one-choice", **QUEUE, confidence=0.999).table.iloc[0]
    assert found["lower"] <= 0.9 - math.log(0.05) / 8 <= found["upper"]


def test_where_little_is_asked_the_stability_limit_decides():
    given = QUEUE | {"target": 1e6}
    found = lk.serve_headroom(lk.ring(6), "one-choice", **given).table.iloc[0]
    assert found["scale"] == found["lower"] == found["upper"] == pytest.approx(0.9 * 1.02)


def test_the_highest_of_sessions_falls_as_capacity_grows():
    fleet, given = lk.ring(12), {"horizon": 60.0, "warmup": 10.0, "replicates": 100, "rng": 3}
    found = lk.serve_headroom(
        fleet, "least-loaded", load_factor=8.0, risk=0.1, discipline="sessions", **given
    ).table.iloc[0]
    assert found["lower"] <= found["scale"] <= found["upper"]
    for factor, meets in ((found["scale"], True), (found["scale"] * (1 - 1e-9), False)):
        servers = pd.DataFrame({"server": np.arange(12), "capacity": factor})
        outcome = lk.serve(
            lk.Fleet(servers, fleet.choices), "least-loaded", load_factor=8.0 / factor,
            discipline="sessions", **given,
        )  # fmt: skip
        assert bool((outcome.measures["max_utilisation"] > 1).mean() <= 0.1) is meets


def test_places_for_one_percent_of_blocked_calls():
    # Erlang B: an offered load of 10 needs 18 places for 1 % (17 block 1.29 %, 18 block 0.71 %).
    servers = pd.DataFrame({"server": range(40), "capacity": 10.0})
    fleet = lk.Fleet(servers, lk.ring(40).choices)
    found = lk.serve_headroom(
        fleet, "one-choice", load_factor=1.0, risk=0.01, discipline="sessions", limit="capacity",
        on_full="lost", horizon=400.0, warmup=10.0, replicates=3, rng=1,
    ).table.iloc[0]  # fmt: skip
    assert 18 <= 10 * found["scale"] < 18 * 1.005


@pytest.mark.parametrize(
    ("changed", "sentence"),
    [
        ({"risk": 0}, "risk is 0; give a number above 0 and below 1"),
        ({"target": None}, "target is missing; give the longest sojourn"),
        ({"discipline": "sessions"}, "target is 8.0, but sessions stay for their time"),
        ({"target": -1.0}, "target is -1.0; give a number above 0"),
        ({"tolerance": 2}, "tolerance is 2; give a number above 0 and below 1"),
        ({"target": None, "discipline": "sessions", "limit": 3}, 'limit is 3; give "capacity"'),
        ({"target": 1e-4, "horizon": 30.0, "warmup": 1.0}, "no capacity up to 64 times"),
        ({"horizon": 100.0}, "warmup is 200 and horizon 100"),
        ({"limit": "capacity"}, "limit is given with a target"),
        (
            {"failures": "random(up=9, down=1)", "on_failure": "lost"},
            'on_failure="lost" is given with a target',
        ),
        ({"horizn": 3}, "horizn is no argument of serve; did you mean 'horizon'"),
    ],
)
def test_refusals(changed, sentence):
    with pytest.raises(lk.InputError, match=re.escape(sentence)):
        lk.serve_headroom(lk.ring(6), "least-loaded", **QUEUE | changed)


def test_what_is_needed_and_missing_is_named():
    given = {name: value for name, value in QUEUE.items() if name != "horizon"}
    with pytest.raises(lk.InputError, match="horizon is missing; serve needs it"):
        lk.serve_headroom(lk.ring(6), "least-loaded", **given)


def test_a_roomy_fleet_with_places_goes_down_to_one_place_a_server():
    found = lk.serve_headroom(
        lk.ring(4), "least-loaded", load_factor=0.1, risk=0.3, discipline="sessions", limit="capacity",
        horizon=200.0, warmup=10.0, replicates=4, rng=1,
    ).table.iloc[0]  # fmt: skip
    assert found["scale"] == 1.0
    assert found["criterion"] == "blocked tasks, at the least capacity that was tried"


def test_too_few_replicates_for_the_risk_say_how_many():
    with pytest.raises(lk.TooFewReplicates, match="needs at least 36"):
        lk.serve_headroom(
            lk.ring(6), "least-loaded", load_factor=2.0, risk=0.1, discipline="sessions", horizon=10.0,
            warmup=1.0, replicates=5, rng=1,
        )  # fmt: skip


def trace_of(hours, rng=7):
    """Return a trace of tasks that stay about an hour, and its fleet."""
    draws = np.random.default_rng(rng)
    count = 40 * hours
    first = draws.integers(0, 8, count)
    trace = pd.DataFrame({"time": np.sort(draws.uniform(0, hours, count)), "option_1": first})
    trace["option_2"] = (first + 1) % 8
    trace["duration"] = draws.exponential(1.0, count)
    return lk.fleet_from_trace(trace, capacity=4.0), trace


def test_a_trace_needs_the_quantile_of_its_blocks():
    fleet, trace = trace_of(200)
    given = {"block": 2.0, "rng": 1, "warmup": 4.0}
    found = lk.replay_headroom(fleet, trace, "least-loaded", risk=0.1, **given).table.iloc[0]
    assert found["lower"] <= found["scale"] <= found["upper"]
    grown = lk.fleet_from_trace(trace, capacity=4.0 * found["scale"])
    blocks = lk.replay(grown, trace, "least-loaded", **given).by_interval.iloc[:97]
    assert (blocks["end"] - blocks["start"]).min() == pytest.approx(2.0)
    beyond = (blocks["max_utilisation"] > 1 + 1e-12).mean()
    assert 0.05 < beyond <= 0.1


def test_a_trace_with_queues_meets_its_target():
    fleet, trace = trace_of(100)
    given = {"block": 2.0, "rng": 1, "discipline": "fcfs", "target": 1.0}
    provision = lk.replay_headroom(fleet, trace, "least-loaded", risk=0.05, **given)
    found = provision.table.iloc[0]
    grown = lk.fleet_from_trace(trace, capacity=4.0 * found["scale"])
    row = lk.replay(grown, trace, "least-loaded", **given).measures.iloc[0]
    assert 0.03 < row["late_share"] <= 0.05 * 1.01
    assert found["lower"] <= found["scale"] <= found["upper"]


@pytest.mark.parametrize(
    ("changed", "sentence"),
    [
        ({"target": 3.0}, 'target is 3.0; give the longest sojourn with discipline "fcfs" or "ps"'),
        ({"block": 20.0}, "the trace has 4 full blocks; a risk of 0.1 with 95 % limits needs at least 36"),
        ({"risk": 2}, "risk is 2"),
        ({"limit": 1}, "limit turns work away"),
        ({"horizon": 3.0}, "horizon is no argument of replay"),
    ],
)
def test_refusals_of_traces(changed, sentence):
    fleet, trace = trace_of(100)
    given = {"risk": 0.1, "block": 1.0, "rng": 1} | changed
    with pytest.raises(lk.InputError, match=re.escape(sentence)):
        lk.replay_headroom(fleet, trace, "least-loaded", **given)


def test_a_trace_without_durations_has_no_headroom_here():
    fleet, trace = trace_of(10)
    with pytest.raises(lk.InputError, match="no column 'duration'"):
        lk.replay_headroom(fleet, trace.drop(columns="duration"), "least-loaded", risk=0.1, block=1.0, rng=1)


def test_a_generator_gives_all_factors_the_same_arrivals():
    given = QUEUE | {"replicates": 3, "horizon": 400.0, "warmup": 40.0}
    drawn, seeded = (
        lk.serve_headroom(lk.ring(10), "least-loaded", **given | {"rng": rng})
        for rng in (np.random.default_rng(1), seed_sequence(np.random.default_rng(1)))
    )
    pd.testing.assert_frame_equal(drawn.curve, seeded.curve, check_exact=True)
