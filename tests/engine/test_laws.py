"""Laws of placement that hold whatever the numbers."""

import subprocess
import sys

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.engine import placement
from labkit.engine.weights import comparison_weights

POLICIES = ["one-choice", "least-loaded", "least-loaded(ties=first)", "mixed(beta=0.4)"]


@pytest.mark.parametrize("policy", POLICIES)
def test_no_task_is_lost_and_checkpoints_see_the_same_path(policy):
    fleet = lk.ring_with_chords(30, 7, rng=3)
    whole = lk.place(fleet, policy, tasks=500, replicates=4, rng=11)
    parts = lk.place(fleet, policy, tasks=500, replicates=4, rng=11, checkpoints=range(1, 501))
    assert (whole.loads == parts.loads).all()
    assert (whole.loads.sum(axis=1) == 500).all()
    np.testing.assert_allclose(parts.measures["mean_load"] * 30, parts.measures["tasks"], rtol=1e-12)
    shorter = lk.place(fleet, policy, tasks=123, replicates=4, rng=11).measures
    pd.testing.assert_frame_equal(shorter, parts.measures.query("tasks == 123").reset_index(drop=True))


@pytest.mark.parametrize("policy", POLICIES)
def test_threads_and_more_replicates_change_no_bit(policy):
    fleet = lk.torus(5, 6)
    alone = lk.place(fleet, policy, tasks=999, replicates=9, rng=5)
    shared = lk.place(fleet, policy, tasks=999, replicates=9, rng=5, workers=2)
    fewer = lk.place(fleet, policy, tasks=999, replicates=4, rng=5)
    assert (alone.loads == shared.loads).all()
    pd.testing.assert_frame_equal(alone.measures, shared.measures)
    assert (alone.loads[:4] == fewer.loads).all()


def test_another_process_gives_the_same_bits():
    script = (
        "import labkit as lk; o = lk.place(lk.hypercube(4), 'mixed(beta=0.25)', tasks=321, replicates=2,"
        " rng=9, sizes=lambda generator, count: generator.exponential(size=count));"
        " print(o.loads.tobytes().hex())"
    )
    # This process first: it has compiled most of it already, and the other one reads what it keeps.
    here = lk.place(
        lk.hypercube(4), "mixed(beta=0.25)", tasks=321, replicates=2, rng=9,
        sizes=lambda generator, count: generator.exponential(size=count),
    )  # fmt: skip
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == here.loads.tobytes().hex()


def test_drawing_ahead_changes_no_bit(monkeypatch):
    fleet = lk.torus(20, 20)
    near = lk.place(fleet, "least-loaded", tasks=5_000, replicates=2, rng=1, information=lk.Snapshot(37))
    monkeypatch.setattr(placement, "NEAR_BYTES", 0)
    far = lk.place(fleet, "least-loaded", tasks=5_000, replicates=2, rng=1, information=lk.Snapshot(37))
    assert (near.loads == far.loads).all()


def test_policies_meet_the_same_arrivals():
    fleet = lk.ring(6)
    totals = [
        lk.place(
            fleet, policy, tasks=200, replicates=3, rng=2, checkpoints=range(1, 201),
            sizes=lambda generator, count: generator.lognormal(size=count),
        ).measures["mean_load"]
        for policy in POLICIES
    ]  # fmt: skip
    for other in totals[1:]:
        assert other.tolist() == pytest.approx(totals[0].tolist(), rel=1e-12)
    # Rules that always take one end show the drawn choice itself.
    first, last = (
        lk.place(fleet, rule, tasks=1, replicates=50, rng=2).loads.argmax(axis=1)
        for rule in (always_first, always_last)
    )
    assert {*zip(first, last, strict=True)} == {*map(tuple, fleet.options)}


@lk.policy
def always_first(options, loads, capacity, coin):
    return 0


@lk.policy
def always_last(options, loads, capacity, coin):
    return len(options) - 1


def test_a_snapshot_of_every_task_is_fresh_information():
    fleet = lk.ladder(8)
    fresh = lk.place(fleet, "least-loaded", tasks=400, replicates=3, rng=4)
    reported = lk.place(
        fleet, "least-loaded", tasks=400, replicates=3, rng=4, information=lk.Snapshot(every=1)
    )
    assert (fresh.loads == reported.loads).all()


def test_without_a_second_report_every_policy_sees_only_the_start():
    start = np.arange(12)
    outcome = lk.place(
        lk.ring(12), "least-loaded", tasks=300, rng=6, start=start, information=lk.Snapshot(every=300)
    )
    # The lower end of each choice stays the same for ever: server 11 (fullest at the start) gets nothing.
    assert outcome.loads[0, 11] == 11
    assert outcome.loads[0].sum() == 300 + start.sum()


def test_mixed_ends_are_one_choice_and_least_loaded():
    fleet = lk.ring(9)
    for beta, policy in ((0.0, "one-choice"), (1.0, "least-loaded")):
        mixed = lk.place(fleet, lk.Mixed(beta), tasks=500, replicates=2, rng=3)
        assert (mixed.loads == lk.place(fleet, policy, tasks=500, replicates=2, rng=3).loads).all()


def test_unit_sizes_are_unit_tasks():
    fleet = lk.ring(9)
    whole = lk.place(fleet, "least-loaded", tasks=500, replicates=2, rng=3)
    sized = lk.place(fleet, "least-loaded", tasks=500, replicates=2, rng=3, sizes=np.ones(500))
    assert (whole.loads == sized.loads).all()


def test_equal_capacities_of_any_size_pick_alike():
    servers = pd.DataFrame({"server": range(7), "capacity": 2.5})
    choices = pd.DataFrame({"option_1": range(7), "option_2": [1, 2, 3, 4, 5, 6, 0]})
    scaled = lk.place(lk.Fleet(servers, choices), "least-loaded", tasks=300, rng=8)
    plain = lk.place(lk.ring(7), "least-loaded", tasks=300, rng=8)
    assert (scaled.loads == plain.loads).all()
    assert scaled.measures["gap"].tolist() == pytest.approx((plain.measures["gap"] / 2.5).tolist())
    assert scaled.measures["excess"].tolist() == pytest.approx(scaled.measures["gap"].tolist())


@pytest.mark.parametrize("unit", [0.1, 1 / 3, 7.0, 1e9, 1e-6])
@pytest.mark.parametrize("policy", ["least-loaded", "least-loaded(ties=first)"])
def test_the_unit_of_capacity_changes_nothing(unit, policy):
    # Equal utilisations stay equal where float products would break ties: 1 x 0.3 and 3 x 0.1 differ.
    servers = pd.DataFrame({"server": list("abc"), "capacity": [1.0, 3.0, 6.0]})
    choices = pd.DataFrame(
        {"option_1": ["a", "b", "c"], "option_2": ["b", "c", "a"], "demand": [1.0, 3.0, 6.0]}
    )
    plain = lk.place(lk.Fleet(servers, choices), policy, tasks=500, replicates=5, rng=2)
    scaled = lk.Fleet(servers.assign(capacity=servers["capacity"] * unit), choices)
    other = lk.place(scaled, policy, tasks=500, replicates=5, rng=2)
    assert (plain.loads == other.loads).all()
    for column in ("gap", "excess", "max_utilisation"):
        np.testing.assert_allclose(
            other.measures[column] * unit, plain.measures[column], rtol=1e-9, atol=1e-9
        )


def test_capacities_without_a_common_unit_are_compared_as_they_are():
    capacity = np.random.default_rng(1).random(50)
    assert comparison_weights(capacity) is capacity
    assert comparison_weights(None) is None
    assert comparison_weights(np.full(4, 0.7)) is None
    assert comparison_weights(np.array([0.1, 0.3, 0.25])).tolist() == [2.0, 6.0, 5.0]


def test_the_coin_is_fair_whatever_the_number_of_choices():
    # 2^20 choices of unequal demand leave few bits of the word: all of them must be in the coin.
    # A coin's second bits decide; chance of a false alarm 6e-5.
    count = 2**20
    choices = pd.DataFrame({"option_1": 0, "option_2": 1, "demand": np.arange(count) % 7 + 1.0})
    fleet = lk.Fleet(pd.DataFrame({"server": [0, 1]}), choices)
    tasks = 2_000_000
    for rule, probability in ((eleventh_bit, 0.25), (lk.OneChoice(), 0.5)):
        [[_, second]] = lk.place(fleet, rule, tasks=tasks, rng=5).loads
        assert abs(second / tasks - probability) < 4 * np.sqrt(probability * (1 - probability) / tasks)


@lk.policy
def eleventh_bit(options, loads, capacity, coin):
    return int(coin * 4096) % 4 == 0


def test_relabelling_and_splitting_change_no_law():
    # Two-sample z-tests on the mean gap of 4,000 replicates, at 4 standard errors: false alarm 6e-5 each.
    servers = pd.DataFrame({"server": range(5), "capacity": [1.0, 2.0, 1.0, 1.0, 3.0]})
    choices = pd.DataFrame(
        {
            "option_1": [0, 1, 2, 3, 4, 0],
            "option_2": [1, 2, 3, 4, 0, 2],
            "demand": [1.0, 2.0, 1.0, 1.0, 2.0, 0.5],
        }
    )
    order = [3, 0, 4, 2, 1]
    relabelled = (
        servers.iloc[order],
        choices.iloc[[5, 2, 0, 4, 1, 3]].rename(columns={"option_1": "option_2", "option_2": "option_1"}),
    )
    split = pd.concat(
        [choices.assign(demand=choices["demand"] * 0.25), choices.assign(demand=choices["demand"] * 0.75)]
    )
    gaps = [
        lk.place(lk.Fleet(*tables), "least-loaded", tasks=40, replicates=4_000, rng=seed).measures["gap"]
        for seed, tables in enumerate([(servers, choices), relabelled, (servers, split)])
    ]
    for other in gaps[1:]:
        error = np.sqrt((gaps[0].var() + other.var()) / 4_000)
        assert abs(gaps[0].mean() - other.mean()) < 4 * error


def test_one_dispatcher_sees_everything_as_it_is():
    fleet = lk.ring(12)
    alone = lk.place(fleet, "least-loaded", tasks=500, replicates=3, rng=4, information=lk.Dispatchers(1, 50))
    assert (alone.loads == lk.place(fleet, "least-loaded", tasks=500, replicates=3, rng=4).loads).all()
    assert alone.information == "dispatchers(count=1, every=50)"


def test_the_more_dispatchers_the_less_their_own_placements_help():
    # Paired on common arrivals, 60 replicates; the differences are many standard errors.
    views = [lk.Fresh(), lk.Dispatchers(2, 200), lk.Dispatchers(16, 200), lk.Snapshot(200)]
    gaps = [
        lk.place(lk.ring(50), "least-loaded", tasks=20_000, replicates=60, rng=4, information=view)
        .measures["gap"]
        .mean()
        for view in views
    ]
    assert gaps == sorted(gaps)
    assert gaps[-1] > 1.2 * gaps[0]
