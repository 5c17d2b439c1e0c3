"""Starts from the forecast law, and the check that a gap is stationary."""

import networkx as nx
import numpy as np
import pytest

import labkit as lk
from labkit.policies.naming import parse_policy
from labkit.randomness import seed_sequence
from labkit.stationary.start import forecast_start


def test_a_warm_start_saves_the_burn_in():
    # Ring of 256, mean gap 13.4 (independent simulation): a cold run needs some 10,000 rounds. 400 replicates
    # of 150 rounds; standard error 1.5 %, false alarm at 4 of them 6e-5.
    fleet, rounds = lk.ring(256), 150
    moments = np.arange(50 * 256, rounds * 256, 3_001)
    table = lk.place(
        fleet, "least-loaded", tasks=rounds * 256, replicates=400, rng=2, checkpoints=moments,
        start="forecast", workers=2,
    ).measures  # fmt: skip
    each = table.groupby("replicate")["gap"].mean()
    assert abs(each.mean() - 13.4) < 4 * np.hypot(each.std() / 20, 0.01 * 13.4)
    cold = lk.place(fleet, "least-loaded", tasks=rounds * 256, replicates=40, rng=2).measures["gap"].mean()
    assert cold < 0.7 * each.mean()


def test_starts_are_whole_loads_that_belong_to_their_replicate():
    fleet, seed = lk.ring(12), seed_sequence(4)
    rule = parse_policy("least-loaded")
    three, one = forecast_start(fleet, rule, 3, seed), forecast_start(fleet, rule, 1, seed)
    assert three.dtype == np.int64
    assert three.min() >= 0
    assert three[:1].tolist() == one.tolist()
    assert three[0].tolist() != three[1].tolist()
    placed = [
        lk.place(fleet, rule, tasks=9, replicates=2, rng=4, start="forecast", workers=workers).loads.tolist()
        for workers in (1, 2)
    ]
    assert placed[0] == placed[1]
    assert (np.array(placed[0]).sum(axis=1) == three[:2].sum(axis=1) + 9).all()


@pytest.mark.parametrize(
    ("values", "refusal"),
    [
        ({"start": "forcast"}, "start is 'forcast'; give loads"),
        ({"start": "forecast", "sizes": np.ones(5)}, "tasks of size 1 only"),
        ({"start": "forecast", "policy": "one-choice"}, "no stationary gap"),
    ],
)
def test_wrong_starts_are_refused(values, refusal):
    with pytest.raises(lk.InputError, match=refusal):
        lk.place(**{"fleet": lk.ring(5), "policy": "least-loaded", "tasks": 5, "rng": 1, **values})


def test_a_complete_fleet_needs_no_warm_start():
    with pytest.raises(lk.InputError, match="start it empty"):
        lk.place(lk.complete(5), "least-loaded", tasks=5, rng=1, start="forecast")


def test_a_stationary_gap_is_named_with_its_error():
    # Ring of 10: 1.6423(7), own simulation elsewhere. False alarm at 4 standard errors 6e-5.
    found = lk.stationary_gap(lk.ring(10), "least-loaded", rounds=20_000, rng=1)
    assert abs(found.mean_gap - 1.6423) < 4 * np.hypot(found.error, 0.0007)
    assert found.rhat < 1.05
    assert found.error < 0.02
    assert found.chains["start"].tolist() == ["flat"] * 4 + ["wide"] * 4


@pytest.mark.parametrize("rule", ["least-loaded", "smooth-feedback", "pairwise-averaging", "mixed(beta=0.7)"])
def test_too_short_a_run_is_not_called_stationary(rule):
    with pytest.raises(lk.NotStationary, match=r"not shown stationary after 100 rounds: .* from flat starts"):
        lk.stationary_gap(lk.ring(400), rule, rounds=100, rng=1)


@pytest.mark.parametrize(
    ("values", "refusal"),
    [
        ({"rounds": 10}, "rounds is 10"),
        ({"chains": 1}, "chains is 1"),
        ({"policy": "one-choice"}, "no stationary gap"),
        ({"fleet": lk.fleet_from_graph(nx.lollipop_graph(4, 1))}, "not balanceable"),
    ],
)
def test_no_check_without_a_stationary_state(values, refusal):
    with pytest.raises(lk.InputError, match=refusal):
        lk.stationary_gap(
            **{"fleet": lk.ring(5), "policy": "least-loaded", "rounds": 100, "rng": 1, **values}
        )


def test_a_fleet_without_a_table_of_choices():
    found = lk.stationary_gap(lk.complete(64), "least-loaded", rounds=3_000, rng=1)
    # CHECKS: 1.6787(13).
    assert abs(found.mean_gap - 1.6787) < 4 * np.hypot(found.error, 0.0013)


def test_late_reports_are_not_called_stationary_too_soon():
    # From flat and from the law of fresh loads both, the gap would come from below: it ends at 39.
    for seed in range(3):
        with pytest.raises(lk.NotStationary):
            lk.stationary_gap(
                lk.ring(64), "least-loaded", rounds=400, rng=seed, information=lk.Snapshot(every=1_280)
            )


def test_a_gap_that_never_moves_is_named():
    two = lk.fleet_from_graph(nx.path_graph(2))
    found = lk.stationary_gap(two, "pairwise-averaging", rounds=200, rng=1)
    assert (found.mean_gap, found.error, found.rhat) == (0.0, 0.0, 1.0)
    with pytest.raises(lk.InputError, match="information is 'fresh'"):
        lk.stationary_gap(two, "least-loaded", rounds=200, rng=1, information="fresh")


def test_rules_that_never_settle_are_refused_everywhere():
    for rule in ("mixed(beta=0)", "one-choice"):
        with pytest.raises(lk.InputError, match="drift apart for ever"):
            lk.stationary_gap(lk.complete(8), rule, rounds=100, rng=1)
