"""Speed of the placement loop, as ratios measured side by side in one run."""

import ctypes
import random
import subprocess
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.compiled import kept
from labkit.randomness import ARRIVALS, kernel_state, seed_sequence
from tests.benchmarks.side_by_side import ratio, seconds

pytestmark = pytest.mark.benchmark


def shuffled_ring(servers):
    """Return a ring whose labels and rows are in random order."""
    rng = np.random.default_rng(1)
    names = rng.permutation(servers)
    choices = pd.DataFrame({"option_1": names, "option_2": np.roll(names, -1)}).sample(frac=1, random_state=2)
    return lk.Fleet(pd.DataFrame({"server": np.arange(servers)}), choices)


@pytest.fixture(scope="module")
def plain_loop(tmp_path_factory):
    """Return the C loop, compiled with this machine's cc."""
    library = tmp_path_factory.mktemp("plain") / "plain_loop.so"
    source = Path(__file__).with_name("plain_loop.c")
    subprocess.run(
        ["cc", "-O3", "-march=native", "-shared", "-fPIC", str(source), "-o", str(library)], check=True
    )
    loaded = ctypes.CDLL(str(library)).place
    loaded.argtypes = [ctypes.c_void_p] * 3 + [ctypes.c_uint64, ctypes.c_int64]

    def place(fleet, tasks):
        state = kernel_state(seed_sequence(1), 0, ARRIVALS)
        loads = np.zeros(len(fleet), np.int64)
        loaded(state.ctypes.data, fleet.options.ctypes.data, loads.ctypes.data, len(fleet.options), tasks)
        return loads

    return place


@pytest.mark.parametrize("servers", [1_024, 2**20])
def test_least_loaded_keeps_up_with_c(servers, plain_loop, report):
    fleet, tasks = shuffled_ring(servers), 20_000_000
    ours = lk.place(fleet, "least-loaded", tasks=tasks, rng=1).loads[0]
    assert (ours == plain_loop(fleet, tasks)).all()
    found = ratio(
        lambda: lk.place(fleet, "least-loaded", tasks=tasks, rng=1), lambda: plain_loop(fleet, tasks)
    )
    each = seconds(lambda: plain_loop(fleet, tasks)) / tasks * 1e9
    report(f"least-loaded, ring of {servers}: {found:.2f} x the time of plain C ({each:.2f} ns a task)")
    assert found <= 1.25


def test_least_loaded_against_plain_python(report):
    fleet, tasks = shuffled_ring(1_024), 2_000_000
    graph = fleet.to_networkx()
    ends = list(graph.edges)

    def loop():
        loads = dict.fromkeys(graph, 0)
        for _ in range(tasks // 100):
            one, other = random.choice(ends)
            if loads[other] < loads[one] or (loads[other] == loads[one] and random.random() < 0.5):
                one = other
            loads[one] += 1

    found = ratio(loop, lambda: lk.place(fleet, "least-loaded", tasks=tasks, rng=1)) * 100
    report(f"least-loaded, ring of 1024: {found:.0f} x faster than a plain Python loop over networkx edges")
    assert found >= 100


@lk.policy
def own_rule(options, loads, capacity, coin):
    """Stay with the first option unless the second is lower by two."""
    return 1 if loads[options[1]] + 2 <= loads[options[0]] else 0


@pytest.mark.parametrize("policy", ["one-choice", "least-loaded(ties=first)", "mixed(beta=0.5)", own_rule])
@pytest.mark.parametrize("servers", [1_024, 2**20])
def test_rules_cost_at_most_three_times_least_loaded(policy, servers, report):
    fleet, tasks = shuffled_ring(servers), 10_000_000
    found = ratio(
        lambda: lk.place(fleet, policy, tasks=tasks, rng=1),
        lambda: lk.place(fleet, "least-loaded", tasks=tasks, rng=1),
    )
    report(f"{getattr(policy, 'name', policy)}, ring of {servers}: {found:.2f} x the time of least-loaded")
    assert found <= 3


@lk.policy
def own_ties_first(options, loads, capacity, coin):
    """Do as least-loaded(ties=first) does with two options of equal capacity."""
    return 1 if loads[options[1]] < loads[options[0]] else 0


@lk.policy
def own_least_loaded(options, loads, capacity, coin):
    """Do as least-loaded does with two options of equal capacity."""
    one, other = loads[options[0]], loads[options[1]]
    if one == other:
        return 1 if coin >= 0.5 else 0
    return 1 if other < one else 0


@lk.policy
def own_one_choice(options, loads, capacity, coin):
    """Do as one-choice does with two options of equal capacity."""
    return 1 if coin >= 0.5 else 0


@pytest.mark.parametrize(
    ("own", "law"),
    [
        (own_ties_first, "least-loaded(ties=first)"),
        (own_least_loaded, "least-loaded"),
        (own_one_choice, "one-choice"),
    ],
    ids=lambda value: getattr(value, "name", value),
)
@pytest.mark.parametrize("servers", [1_024, 2**20])
def test_a_rule_of_ones_own_costs_at_most_1_3_times_the_built_in_of_its_law(own, law, servers, report):
    fleet, tasks = shuffled_ring(servers), 10_000_000
    ours, theirs = (lk.place(fleet, rule, tasks=100_000, rng=1).loads for rule in (own, law))
    assert (ours == theirs).all()
    found = ratio(
        lambda: lk.place(fleet, own, tasks=tasks, rng=1),
        lambda: lk.place(fleet, law, tasks=tasks, rng=1),
    )
    report(f"{own.name}, ring of {servers}: {found:.2f} x the time of {law}")
    assert found <= 1.3


@pytest.mark.parametrize(
    ("columns", "words"), [("capacity", "unequal capacities"), ("demand", "unequal demands")]
)
def test_unequal_fleets_cost_little_more(columns, words, report):
    fleet, tasks = shuffled_ring(1_024), 10_000_000
    uneven = np.arange(1_024) % 5 + 1.0
    servers, choices = fleet.servers, fleet.choices
    (servers if columns == "capacity" else choices)[columns] = uneven
    other = lk.Fleet(servers, choices)
    rules = ("one-choice", "mixed(beta=0.5)", "static-split")
    for policy, fewer in (("least-loaded", fleet), *((rule, other) for rule in rules)):
        found = ratio(
            lambda policy=policy: lk.place(other, policy, tasks=tasks, rng=1),
            lambda fewer=fewer: lk.place(fewer, "least-loaded", tasks=tasks, rng=1),
        )
        than = "equal ones" if fewer is fleet else "the same"
        report(f"{policy}, ring of 1024 with {words}: {found:.2f} x least-loaded on {than}")
        assert found <= 3


def test_smooth_feedback_costs_at_most_four_times_least_loaded(report):
    fleet, tasks = lk.ring(1_024), 20_000_000
    found = ratio(
        lambda: lk.place(fleet, "smooth-feedback", tasks=tasks, rng=1),
        lambda: lk.place(fleet, "least-loaded", tasks=tasks, rng=1),
    )
    report(f"smooth-feedback, ring of 1024: {found:.2f} x the time of least-loaded, renewals included")
    assert found <= 4


def test_two_threads_share_replicates(report):
    fleet = shuffled_ring(1_024)
    found = ratio(
        lambda: lk.place(fleet, "least-loaded", tasks=10_000_000, replicates=24, rng=1),
        lambda: lk.place(fleet, "least-loaded", tasks=10_000_000, replicates=24, rng=1, workers=2),
    )
    report(f"two threads: {found:.2f} x as fast as one")
    assert found >= 1.8


def test_tree_flow_costs_at_most_twelve_times_least_loaded(report):
    # The first call, which is not counted, works out the sets.
    fleet, tasks = lk.ring(1_024), 10_000_000
    found = ratio(
        lambda: lk.place(fleet, "tree-flow", tasks=tasks, rng=1),
        lambda: lk.place(fleet, "least-loaded", tasks=tasks, rng=1),
    )
    report(f"tree-flow, ring of 1024: {found:.2f} x the time of least-loaded")
    assert found <= 12


@pytest.mark.parametrize(
    ("fleet", "words"),
    [
        (lk.ring(100_000), "ring"),
        (lk.torus(316, 316), "torus"),
        (lk.random_regular(100_000, 3, rng=1), "random, 3 choices a server"),
    ],
    ids=["ring", "torus", "random"],
)
def test_smooth_feedback_renews_a_picture_of_100_000_servers_within_a_second(fleet, words, report):
    rule = lk.SmoothFeedback()
    prepared = seconds(lambda: rule.prepare(fleet))
    state = rule.own_state(rule.prepare(fleet))
    loads = np.random.default_rng(1).poisson(20, fleet.size)
    renew = kept(rule.renew)
    renew(state, loads)
    each = seconds(lambda: renew(state, loads + np.random.default_rng(2).poisson(1, fleet.size)))
    report(
        f"smooth-feedback, {words} of {fleet.size:,}: renewed in {each:.2f} s, prepared in {prepared:.1f} s"
    )
    assert each <= 1


@pytest.mark.parametrize(
    ("fleet", "words"),
    [(lk.torus(316, 316), "torus"), (lk.random_regular(100_000, 3, rng=1), "random, 3 choices a server")],
    ids=["torus", "random"],
)
def test_a_forecast_for_100_000_servers_takes_half_a_minute(fleet, words, report):
    lk.forecast(lk.ring(10))
    start = time.perf_counter()
    ahead = lk.forecast(fleet)
    took = time.perf_counter() - start
    report(f"forecast, {words} of {fleet.size:,}: {took:.1f} s, mean gap {ahead.mean_gap:.2f}")
    assert took <= 30
