"""Rules beyond the two simplest where work leaves: a user's own, and those that look at the whole fleet."""

import ast
import itertools

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.engine.service import Progress
from labkit.policies.naming import BUILT_IN
from tests.plain_python import in_plain_python


@lk.policy
def my_least_loaded(options, loads, capacity, coin):
    """Pick the emptier of two; on some fleets do what no rule may."""
    if capacity[0] == 7.0 and loads[options[0]] > 2:
        return 2
    if capacity[0] == 8.0 and loads[options[0]] > 2:
        return int(loads[len(loads)])
    one = loads[options[0]] * capacity[options[1]]
    other = loads[options[1]] * capacity[options[0]]
    if one == other:
        return 1 if coin >= 0.5 else 0
    return 1 if other < one else 0


def fleet_of(first=2.0):
    servers = pd.DataFrame({"server": range(8), "capacity": [first, 1, 1, 3, 2, 1, 1, 3]})
    choices = pd.DataFrame({"option_1": range(8), "option_2": np.roll(range(8), -1)})
    return lk.Fleet(servers, choices)


def serve(policy, fleet=None, **changed):
    arguments = {"load_factor": 0.6, "horizon": 80.0, "warmup": 10.0, "replicates": 2, "rng": 3}
    return lk.serve(fleet or fleet_of(), policy, **arguments | changed)


@pytest.mark.parametrize("discipline", ["fcfs", "ps", "sessions"])
@pytest.mark.parametrize(
    "circumstances",
    [
        {},
        {"information": lk.Snapshot(0.7)},
        {"information": lk.Dispatchers(3, 1.1), "limit": 3},
        {"failures": lk.RandomFailures(up=20, down=4), "load_factor": 0.4},
    ],
    ids=["fresh", "snapshot", "dispatchers and limit", "failures"],
)
def test_a_users_least_loaded_equals_the_built_in_one(discipline, circumstances):
    given = {"discipline": discipline, "levels": 2, **circumstances}
    ours, built_in = serve(my_least_loaded, **given), serve("least-loaded", **given)
    same = ours.by_server.drop(columns="policy"), built_in.by_server.drop(columns="policy")
    pd.testing.assert_frame_equal(*same, check_exact=True)
    assert ours.measures["policy"].unique().tolist() == ["my-least-loaded"]
    # sums over all servers are added up in another order
    same = (each.measures.drop(columns="policy") for each in (ours, built_in))
    pd.testing.assert_frame_equal(*same, rtol=1e-12, atol=1e-12)


def test_a_rule_that_does_wrong_is_refused():
    with pytest.raises(
        lk.InputError,
        match=r"^policy my-least-loaded picked a position outside the options of task \d+; it must return",
    ):
        serve(my_least_loaded, fleet_of(7.0), discipline="sessions", load_factor=2.0)
    with pytest.raises(lk.InputError, match=r"^policy my-least-loaded looked beyond the end of an array: "):
        serve(my_least_loaded, fleet_of(8.0), discipline="sessions", load_factor=2.0)
    with pytest.raises(lk.InputError, match="outside the options of task"):
        serve(my_least_loaded, fleet_of(7.0), limit=9, load_factor=2.0)


def test_a_rule_that_cannot_be_compiled_is_refused_before_anything_runs(monkeypatch):
    @lk.policy
    def wordy(options, loads, capacity, coin):
        return "the first"

    def refuse(*_):
        raise AssertionError("a replicate was started")

    monkeypatch.setattr(Progress, "__init__", refuse)
    with pytest.raises(
        lk.InputError, match=r"policy wordy returns .*; it must return a whole number on every"
    ):
        serve(wordy)
    # the same stand-in stops a rule that is well
    with pytest.raises(AssertionError, match="a replicate was started"):
        serve("least-loaded")


HERE = "tests.engine.test_service_rules"


def means_of_every_rule():
    """Return the mean sojourn under every built-in rule that places, on one path of 2,500 tasks."""
    rules = [name for name in BUILT_IN if name not in ("mixed", "pairwise-averaging")]
    means = {}
    for rule in [*rules, "mixed(beta=0.5)"]:
        outcome = serve(rule, lk.ring(16), load_factor=0.8, horizon=250.0, warmup=50.0, replicates=1)
        means[rule] = outcome.measures["sojourn_mean"].item()
        assert abs(outcome.measures["little_error"].item()) < 1e-9
    return means


def test_every_rule_does_what_it_is_for():
    means = ast.literal_eval(in_plain_python(HERE, "means_of_every_rule()"))
    blind, least = means["one-choice"], means["least-loaded"]
    assert len(means) == 6
    # least-loaded 2.5 and one-choice 5 in the long run
    assert least < 0.7 * blind
    for rule in ("smooth-feedback", "tree-flow"):
        assert 1.1 < means[rule] < 1.3 * least
    assert least < means["mixed(beta=0.5)"] < blind
    # the fair split of a ring is even, and its coin that of the arrival
    assert means["static-split"] == blind


def tree_flow_both_ways():
    """Serve with differences that follow all that happens, and with sums of all loads before each task."""
    completed = []
    for discipline, mode in itertools.product(("fcfs", "ps", "sessions"), (None, "wait", "lost", "requeue")):
        given = {"discipline": discipline, "load_factor": 0.5, "limit": 6, "replicates": 1}
        if mode is not None:
            given |= {"failures": "random(up=30, down=5)", "on_failure": mode}
        kept, anew = (serve(f"tree-flow(every={every})", lk.ring(16), **given) for every in (0, 1))
        tables = (each.by_server.drop(columns="policy") for each in (kept, anew))
        pd.testing.assert_frame_equal(*tables, check_exact=True)
        completed.append(int(kept.measures["completed"].item()))
    return completed


def test_differences_kept_up_to_date_are_those_worked_out_anew():
    completed = ast.literal_eval(in_plain_python(HERE, "tree_flow_both_ways()"))
    assert len(completed) == 12
    assert min(completed) > 400
