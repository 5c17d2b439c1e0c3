"""`serve` against the slow oracle, task by task on the same random numbers: compiled and as plain Python.

Compiling every rule would take minutes, so any small fleet under any circumstances is served with the loop
left as plain Python, in a process of its own, and a few cases with the loop compiled.
"""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import labkit as lk
from labkit.engine.arrivals import arrivals_of
from labkit.survey.demand import evenly_balanced
from labkit.survey.fair import fair_profile
from tests.engine.any_fleet import fleets
from tests.engine.comparing import mixed_fleet
from tests.event_measures import measures, measures_by_interval, time_at_levels
from tests.events import arrival_times, requirements_of, serve
from tests.plain_python import in_plain_python

RULES = {
    "one-choice": ("one-choice",),
    "least-loaded": ("least-loaded", "random"),
    "least-loaded(ties=first)": ("least-loaded", "first"),
    "mixed(beta=0.3)": ("mixed", 0.3),
    "static-split": ("static-split",),
}
LAWS = {
    "exponential": (1.0, lambda source, count: source.standard_exponential(count)),
    "deterministic(mean=0.5)": (0.5, lambda source, count: np.full(count, 0.5)),
}
INFORMATION = {
    ("fresh",): lambda: lk.Fresh(),
    ("snapshot", 0.7): lambda: lk.Snapshot(every=0.7),
    ("dispatchers", 3, 1.3): lambda: lk.Dispatchers(count=3, every=1.3),
}
HORIZON, WARMUP, PARTS, PERIOD = 20.0, 4.0, 4, 7.0
COUNTS = ("arrivals", "completed", "blocked", "lost", "requeued", "waited", "max_load")
SUMS = ("sojourn_sum", "waiting_sum", "area", "max_utilisation")
MEANS = ("sojourn_mean", "waiting_mean", "queue_mean", "utilisation", "max_utilisation", "blocked_share")


def engine_says(fleet, rule, *, law, load, entropy, information, failures, profile, **given):
    """Return the outcome of two replicates; this is all that knows how `serve` is called."""
    times, servers, backs = failures
    schedule = pd.DataFrame(
        {
            "time": np.array(times, float),
            "server": fleet.names[list(servers)],
            "state": np.where(np.array(backs, bool), "up", "down"),
        }
    )
    if profile is not None:
        given |= {"profile": profile, "period": PERIOD}
    return lk.serve(
        fleet, rule, load_factor=load, horizon=HORIZON, warmup=WARMUP, service=law, replicates=2, rng=entropy,
        information=INFORMATION[information](), failures=lk.Failures(schedule) if times else None,
        intervals=PARTS, **given,
    )  # fmt: skip


def oracle_says(fleet, rule, *, replicate, law, load, entropy, limit, profile, **given):
    """Return the oracle's record of one replicate."""
    mean, draw = LAWS[law]
    rate = load * fleet.total_capacity / mean
    relative = None if profile is None else [value * len(profile) / sum(profile) for value in profile]
    times = arrival_times(entropy, replicate, rate, HORIZON, profile=relative, period=PERIOD)
    arrivals, told = arrivals_of(fleet), RULES[rule]
    if rule == "static-split":
        told = (*told, [] if evenly_balanced(fleet) else fair_profile(fleet).split.by_option().tolist())
    return serve(
        fleet, told, times=times, requirements=requirements_of(entropy, replicate, draw, len(times)),
        entropy=entropy, replicate=replicate, end=HORIZON,
        table=None if arrivals.threshold is None else (arrivals.threshold, arrivals.alias),
        limits=None if limit is None else [limit] * fleet.size, **given,
    )  # fmt: skip


def assert_same(fleet, rule, **given):
    """Compare all tables of an outcome with the oracle's list of tasks."""
    outcome = engine_says(fleet, rule, **given)
    for replicate in range(2):
        record = oracle_says(fleet, rule, replicate=replicate, **given)
        parts = measures_by_interval(record, WARMUP, HORIZON, PARTS)
        rows = outcome.by_interval.query("replicate == @replicate").to_dict("records")
        assert len(rows) == PARTS
        for row, part in zip(rows, parts, strict=True):
            for name in COUNTS:
                assert row[name] == part[name], name
            for name in SUMS:
                assert row[name] == pytest.approx(part[name], rel=1e-9, abs=1e-9), name
        row = outcome.measures.query("replicate == @replicate").to_dict("records")[0]
        whole = measures(record, WARMUP, HORIZON)
        for name in MEANS:
            assert row[name] == pytest.approx(whole[name], rel=1e-9, abs=1e-9, nan_ok=True), name
        for name in (f"{kind}_p{share}" for kind in ("sojourn", "waiting") for share in (50, 90, 99)):
            # The engine counts in bins.
            assert row[name] == pytest.approx(whole[name], rel=2e-3, abs=1e-9, nan_ok=True), name
        assert abs(row["little_error"]) < 1e-9
        assert_same_tails(outcome, record, replicate)


def assert_same_tails(outcome, record, replicate):
    """Compare how much of all servers' time had at least so many tasks."""
    servers = len(record.capacity)
    levels = [time_at_levels(record, server, WARMUP, HORIZON) for server in range(servers)]
    for row in outcome.tails.query("replicate == @replicate").to_dict("records"):
        time = sum(time for held in levels for load, time in held.items() if load >= row["at_least"])
        assert row["share"] == pytest.approx(time / servers / (HORIZON - WARMUP), rel=1e-9, abs=1e-9)


@st.composite
def schedules(draw, servers):
    """Draw times at which servers go down and come back, in turn for each."""
    events = []
    for server in range(servers):
        ticks = draw(st.lists(st.integers(1, 190), max_size=4, unique=True))
        # Never at the instant of a report or of the end of an interval.
        events += [(tick / 10 + 0.013, server, index % 2 == 1) for index, tick in enumerate(sorted(ticks))]
    events.sort()
    return tuple(zip(*events, strict=True)) if events else ((), (), ())


@st.composite
def cases(draw):
    """Draw a fleet, a rule and all circumstances."""
    fleet = draw(fleets())
    failing = draw(st.booleans())
    return fleet, {
        "rule": draw(st.sampled_from(list(RULES))),
        "law": draw(st.sampled_from(list(LAWS))),
        "load": draw(st.sampled_from([0.1, 0.3])),
        "entropy": draw(st.integers(0, 2**40)),
        "profile": draw(st.sampled_from([None, None, [2.0, 0.0, 3.0]])),
        "discipline": draw(st.sampled_from(["fcfs", "ps", "sessions"])),
        "information": draw(st.sampled_from(list(INFORMATION))),
        "limit": draw(st.sampled_from([None, 1, 2, 4])),
        "on_full": draw(st.sampled_from(["another", "lost"])),
        "failures": draw(schedules(fleet.size)) if failing else ((), (), ()),
        "on_failure": draw(st.sampled_from(["wait", "lost", "requeue"])),
    }


def agree_on_any_case():
    """Compare 40 cases drawn at random; return how many were served rather than refused."""
    served = []

    @settings(max_examples=40, derandomize=True, deadline=None, database=None)
    @given(cases())
    def agree(case):
        fleet, given = case
        try:
            assert_same(fleet, **given)
            served.append(given)
        except lk.InputError as refusal:
            # A fleet drawn at random may be unable to bear the load.
            queues = given["limit"] is None and given["discipline"] != "sessions"
            if not (queues and str(refusal).startswith("load_factor is ")):
                raise

    agree()
    return len(served)


def test_plain_python_loop_serves_any_fleet_as_the_oracle_does():
    served = in_plain_python("tests.engine.test_serve_against_events", "agree_on_any_case()")
    assert int(served) >= 25


FAILURES = (
    (3.0, 4.0, 6.5, 7.0, 7.5, 9.0, 12.0, 15.0),
    (0, 1, 1, 2, 0, 2, 3, 3),
    (False, False, True, False, True, True, False, True),
)
QUIET = {"limit": None, "on_full": "another", "failures": ((), (), ()), "on_failure": "wait"}
TROUBLED = {"limit": 2, "on_full": "another", "failures": FAILURES}


@pytest.mark.parametrize("discipline", ["fcfs", "ps", "sessions"])
@pytest.mark.parametrize(
    ("information", "circumstances"),
    [
        (("fresh",), QUIET),
        (("snapshot", 0.7), {**TROUBLED, "on_failure": "wait"}),
        (("dispatchers", 3, 1.3), {**TROUBLED, "on_failure": "requeue"}),
        (("fresh",), {**TROUBLED, "on_failure": "lost", "on_full": "lost"}),
        (("fresh",), {**TROUBLED, "on_failure": "requeue"}),
    ],
    ids=["plain", "snapshot and wait", "dispatchers and requeue", "lost", "requeue"],
)
def test_compiled_loop_serves_as_the_oracle_does(discipline, information, circumstances):
    for entropy in range(3):
        assert_same(
            mixed_fleet(), "least-loaded", law="exponential", load=0.4, entropy=entropy, profile=None,
            discipline=discipline, information=information, **circumstances,
        )  # fmt: skip
