"""The long run: starts from both sides, as long as the network needs, and the same rows however it is cut."""

import networkx as nx
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.long_run_table import long_run_table
from labkit.fleet.digest import fleet_digest
from labkit.fleet.named import FAMILIES
from labkit.policies.naming import parse_policy
from labkit.stationary.long_run import doubled, refusals, settles, settling_rounds

LEAST = parse_policy("least-loaded")


@pytest.mark.parametrize("cut", [1, 2, 3, 6])
def test_parts_of_a_range_are_the_rows_of_the_whole(cut):
    ring = lk.ring(9)
    whole = lk.long_run(ring, "least-loaded", replicates=7, rng=4)
    parts = [
        lk.long_run(ring, "least-loaded", replicates=count, first_replicate=first, rng=4)
        for first, count in ((0, cut), (cut, 7 - cut))
    ]
    assert whole["replicate"].tolist() == list(range(7))
    pd.testing.assert_frame_equal(pd.concat(parts, ignore_index=True), whole)


def test_workers_change_nothing():
    one = lk.long_run(lk.ring(9), "least-loaded", replicates=6, rng=4)
    pd.testing.assert_frame_equal(
        one, lk.long_run(lk.ring(9), "least-loaded", replicates=6, rng=4, workers=2)
    )


def test_policies_meet_the_same_arrivals():
    """A rule and the same rule under another name leave the same loads."""
    first = lk.long_run(lk.ring(9), "mixed(beta=1)", replicates=6, rng=4)
    second = lk.long_run(lk.ring(9), "least-loaded", replicates=6, rng=4)
    assert first["mean_load"].tolist() == second["mean_load"].tolist()
    assert not np.array_equal(
        first["gap"], lk.long_run(lk.ring(9), "least-loaded", replicates=6, rng=5)["gap"]
    )


@pytest.mark.parametrize("policy", ["least-loaded", "smooth-feedback", "pairwise-averaging"])
def test_both_kinds_of_start_end_at_one_mean(policy):
    """Four standard errors: a false alarm in 16,000 for each rule."""
    table = lk.long_run(lk.ring(24), policy, replicates=400, rng=11, workers=2)
    below = table.loc[table["replicate"] % 2 == 0, "gap"]
    above = table.loc[table["replicate"] % 2 == 1, "gap"]
    error = np.sqrt(below.var() / len(below) + above.var() / len(above))
    assert abs(below.mean() - above.mean()) < 4 * error
    assert error < 0.05 * table["gap"].mean()


def test_a_run_that_is_too_short_is_seen_from_both_sides():
    """After 4 tasks a server the flat start lies far below and the doubled one has not come down."""
    table = lk.long_run(lk.ring(64), "least-loaded", replicates=200, rng=3, rounds=20)
    settled = lk.long_run(lk.ring(64), "least-loaded", replicates=200, rng=3)["gap"].mean()
    below = table.loc[table["replicate"] % 2 == 0, "gap"].mean()
    above = table.loc[table["replicate"] % 2 == 1, "gap"].mean()
    assert below < above
    assert below < 0.8 * settled


def test_the_mean_agrees_with_long_chains():
    """Against `stationary_gap`, which judges chains by split R-hat; five joint standard errors."""
    table = lk.long_run(lk.ring(10), "least-loaded", replicates=2000, rng=8, workers=2)
    gap, error = table["gap"].mean(), table["gap"].std() / np.sqrt(len(table))
    # Chains are sampled at all phases of the period, the long run at whole mean loads: 1.6423(7) in CHECKS.
    assert abs(gap - 1.6423) < 5 * error + 0.05


@pytest.mark.parametrize("policy", ["one-choice", "static-split", "mixed(beta=0)"])
def test_rules_that_do_not_compare_loads_are_measured_at_the_horizon(policy):
    table = lk.long_run(lk.ring(8), policy, replicates=3, rng=1, horizon=30)
    assert table["moment"].unique().tolist() == ["after 30 tasks a server"]
    assert table["tasks"].unique().tolist() == [240]


def test_an_unbalanced_fleet_is_measured_at_the_horizon():
    lollipop = lk.fleet_from_graph(nx.lollipop_graph(6, 4))
    assert not settles(lollipop, parse_policy("least-loaded"))
    table = lk.long_run(lollipop, "least-loaded", replicates=2, rng=1, horizon=50)
    assert table["moment"].tolist() == ["after 50 tasks a server"] * 2


def test_rounds_follow_the_slowest_wave():
    """A ring of twice the size takes four times as long; a ladder's open ends take four times more."""
    ring = [settling_rounds(lk.ring(n), LEAST) for n in (100, 200, 400)]
    assert ring[1] / ring[0] == pytest.approx(4, rel=0.06)
    assert ring[2] / ring[1] == pytest.approx(4, rel=0.06)
    closed = lk.fleet_from_graph(nx.circular_ladder_graph(100))
    # The slowest wave of an open ladder is twice as long as that of a closed one.
    assert settling_rounds(lk.ladder(100), LEAST) / settling_rounds(closed, LEAST) == pytest.approx(
        16, rel=0.06
    )
    assert settling_rounds(lk.complete(64), LEAST, least=200) == 200
    assert settling_rounds(lk.ring(3), LEAST) >= 1


def test_weaker_rules_take_longer():
    """Differences are 1/beta as large and count beta as much: the rate falls with beta squared."""
    half, least = (settling_rounds(lk.ring(200), rule) for rule in (parse_policy("mixed(beta=0.5)"), LEAST))
    assert half / least == pytest.approx(4, rel=0.06)


@pytest.mark.parametrize("beta", [0.2, 0.5])
def test_a_mixed_rule_is_reached_from_both_sides(beta):
    """Four standard errors, and the gap that a run five times as long ends with."""
    rule = f"mixed(beta={beta})"
    table = lk.long_run(lk.ring(16), rule, replicates=400, rng=2, workers=2)
    row = long_run_table(table.assign(family="ring", servers=16), "gap").iloc[0]
    assert abs(row["apart"]) < 4
    rounds = 5 * int(table["tasks"].iloc[0] // 16)
    longer = lk.long_run(lk.ring(16), rule, replicates=400, rng=3, rounds=rounds, workers=2)["gap"]
    assert abs(row["mean"] - longer.mean()) < 4 * np.hypot(row["error"], longer.std() / 20)


def test_the_length_given_counts_at_a_horizon_too():
    table = lk.long_run(lk.ring(8), "one-choice", replicates=2, rng=1, rounds=50)
    assert table["tasks"].tolist() == [400, 400]
    assert table["moment"].unique().tolist() == ["after 50 tasks a server"]


def test_doubling_keeps_the_shape_and_no_load_is_below_zero():
    loads = np.array([[3, 5, 10], [0, 0, 0]])
    twice = doubled(loads)
    assert twice.dtype == np.int64
    assert twice.tolist() == [[0, 4, 14], [0, 0, 0]]
    assert np.array_equal(np.diff(doubled(loads + 0.25)), 2 * np.diff(loads))


def test_refusals_name_the_rule():
    found = refusals(lk.complete(8), [parse_policy("least-loaded"), parse_policy("smooth-feedback")])
    assert list(found) == ["smooth-feedback"]
    assert "needs a table of choices" in found["smooth-feedback"]


@pytest.mark.parametrize(
    ("given", "sentence"),
    [
        ({"replicates": 0}, "replicates is 0"),
        ({"first_replicate": -1}, "first_replicate is -1"),
        ({"first_replicate": 2**34}, "give smaller numbers"),
        ({"replicates": 10**10}, "give smaller numbers"),
        ({"rounds": 0}, "rounds is 0"),
        ({"horizon": 1.5}, "horizon is 1.5"),
        ({"workers": 0}, "workers is 0"),
        ({"policy": "least-loded"}, "did you mean"),
        ({"fleet": "ring"}, "fleet is"),
    ],
)
def test_bad_input_is_refused_in_one_sentence(given, sentence):
    asked = {"fleet": lk.ring(8), "policy": "least-loaded", "replicates": 2, "rng": 1} | given
    with pytest.raises(lk.InputError, match=sentence):
        lk.long_run(**asked)


class TestFamilies:
    """Fleets by the name of their family and their size."""

    @pytest.mark.parametrize("family", FAMILIES)
    def test_every_family_has_a_fleet_of_36(self, family):
        fleet, again = (lk.fleet_of_family(family, 36, rng=1) for _ in range(2))
        assert len(fleet) == 36
        assert fleet_digest(fleet) == fleet_digest(again)

    def test_the_seed_draws_the_random_ones(self):
        for family in ("random-regular", "ring-with-chords"):
            one, other = (lk.fleet_of_family(family, 36, rng=seed) for seed in (1, 2))
            assert not one.choices.equals(other.choices)

    @pytest.mark.parametrize(
        ("family", "servers", "sentence"),
        [
            ("ringg", 8, "did you mean 'ring'"),
            ("ladder", 7, "a ladder has an even number: give 8"),
            ("torus", 50, "a square number of at least 9: give 49"),
            ("torus", 4, "give 9"),
            ("ring", 2, "servers is 2; give a whole number of at least 3"),
            ("ring", "8", "servers is '8'"),
            ("random-regular", 4, "servers is 4; give a whole number of at least 5"),
        ],
    )
    def test_a_size_that_does_not_fit_is_refused(self, family, servers, sentence):
        with pytest.raises(lk.InputError, match=sentence):
            lk.fleet_of_family(family, servers, rng=1)
