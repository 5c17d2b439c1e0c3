"""The forecast against simulations to the stationary state, and what it refuses."""

import networkx as nx
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.stationary import fluid
from tests.stationary.fleets import neighbours

# Stationary mean gaps of least-loaded from an independent simulation, standard errors of 0.3 % or less.
KNOWN = [
    ("ring 10", lk.ring(10), 1.6423),
    ("ring 100", lk.ring(100), 7.88),
    ("torus 16 x 16", lk.torus(16, 16), 3.2415),
    ("hypercube 8", lk.hypercube(8), 2.3010),
    ("random 4-regular", lk.random_regular(1024, 4, rng=1), 3.2055),
    ("complete", lk.complete(64), 1.6787),
]


@pytest.mark.parametrize(("fleet", "gap"), [row[1:] for row in KNOWN], ids=[row[0] for row in KNOWN])
def test_known_gaps(fleet, gap):
    ahead = lk.forecast(fleet)
    assert ahead.mean_gap == pytest.approx(gap, rel=0.06)
    assert abs(ahead.mean_gap - gap) < ahead.error
    assert ahead.error < 0.1 * gap


def long_run(fleet, rule, rounds, start=None):
    """Return measures of the second half of a long run of 4 replicates, and loads at its end."""
    tasks = rounds * fleet.size
    moments = np.arange(tasks // 2, tasks + 1, 1_009)
    outcome = lk.place(
        fleet, rule, tasks=tasks, replicates=4, rng=9, checkpoints=moments, start=start, workers=2
    )
    return outcome


@pytest.mark.parametrize("rule", ["least-loaded", "mixed(beta=0.8)"])
def test_an_irregular_fleet_with_unequal_demands_and_capacities(rule):
    fleet = neighbours()
    ahead = lk.forecast(fleet, rule)
    outcome = long_run(fleet, rule, 20_000)
    assert ahead.mean_gap == pytest.approx(outcome.measures["gap"].mean(), rel=0.1)
    # Mean heights: over 4 replicates of 200 phases in the second half, without those of chance.
    utilisation = outcome.by_server.groupby("server")["excess"].mean().to_numpy()
    assert np.corrcoef(utilisation, ahead.profile["utilisation"])[0, 1] > 0.4


def test_a_ladder_whose_ends_must_be_carried_to():
    # Corners have two choices, all others three: heights of many tasks carry the difference outwards.
    fleet = lk.ladder(32)
    ahead = lk.forecast(fleet)
    outcome = long_run(fleet, "least-loaded", 60_000)
    assert ahead.mean_gap == pytest.approx(outcome.measures["gap"].mean(), rel=0.1)
    height = ahead.profile["utilisation"].to_numpy()
    corners = np.bincount(fleet.options.ravel()) == 2
    assert height[corners].max() < -15
    assert ahead.spread == pytest.approx(np.sqrt(outcome.measures["load_variance"].mean()), rel=0.1)


def test_quantiles_are_those_of_the_simulated_gap():
    fleet = lk.ring(30)
    ahead = lk.forecast(fleet)
    gaps = long_run(fleet, "least-loaded", 60_000).measures["gap"]
    for probability in (0.1, 0.5, 0.9, 0.99):
        assert ahead.quantile(probability) == pytest.approx(gaps.quantile(probability), rel=0.1)
    assert ahead.table().set_index("fact").loc["gap_q99", "value"] == ahead.quantile(0.99)


def test_one_forecast_a_fleet():
    servers, choices = lk.ring(20).servers, lk.ring(20).choices
    first, again = lk.forecast(lk.ring(20)), lk.forecast(lk.Fleet(servers, choices))
    assert first.mean_gap == again.mean_gap
    assert lk.forecast(lk.ring(20), rng=3).mean_gap != first.mean_gap
    assert lk.forecast(lk.ring(20), rng=3, workers=2).mean_gap == lk.forecast(lk.ring(20), rng=3).mean_gap


def test_capacity_in_another_unit_scales_the_gap():
    ring = lk.ring(20)
    wide = lk.Fleet(ring.servers.assign(capacity=50.0), ring.choices)
    assert lk.forecast(wide, rng=1).mean_gap == pytest.approx(
        lk.forecast(ring, rng=1).mean_gap / 50, rel=1e-9
    )


def test_the_fluid_limit():
    # Derived values for two options on all servers (CHECKS: load variance, shares above the mean).
    shares = fluid.wave(2, 1.0)
    assert fluid.variance_of_load(shares) == pytest.approx(0.909715, abs=2e-5)
    middle = shares.shape[1] // 2
    above = shares[0, middle + 1 : middle + 4]
    assert above == pytest.approx([0.3073757, 0.02466803, 7.2749e-5], rel=1e-4)
    assert fluid.variance_of_load(fluid.wave(2, 0.5)) == pytest.approx(3.376889, rel=1e-4)
    _, weights = fluid.law_of_gap(shares, 1000)
    assert weights.sum() == pytest.approx(1)
    assert (weights >= 0).all()


def fleet_of(graph, **capacity):
    for server, amount in capacity.items():
        graph.nodes[int(server[1:])]["capacity"] = amount
    return lk.fleet_from_graph(graph)


@pytest.mark.parametrize(
    ("fleet", "policy", "refusal"),
    [
        (lk.ring(5), "one-choice", "drift apart for ever"),
        (lk.ring(5), "static-split", "drift apart for ever"),
        (lk.ring(5), "mixed(beta=0)", "drift apart for ever"),
        (lk.ring(5), "mixed(beta=0.05)", "betas of at least 0.1"),
        (lk.ring(5), "smooth-feedback", "the forecast knows least-loaded and mixed"),
        (fleet_of(nx.disjoint_union(nx.cycle_graph(4), nx.cycle_graph(4))), "least-loaded", "2 parts"),
        (fleet_of(nx.lollipop_graph(4, 1)), "least-loaded", "not balanceable"),
        # A triangle with a pendant vertex is balanceable with nothing to spare.
        (fleet_of(nx.lollipop_graph(3, 1)), "least-loaded", "only just balanceable"),
        (fleet_of(nx.path_graph(3), _0=0.3, _1=1.4, _2=0.3), "mixed(beta=0.1)", "larger beta"),
    ],
)
def test_no_stationary_state_is_refused(fleet, policy, refusal):
    with pytest.raises(lk.InputError, match=refusal):
        lk.forecast(fleet, policy)


@pytest.mark.parametrize("probability", [0, 1, -1, float("nan"), "half"])
def test_wrong_probabilities_are_refused(probability):
    with pytest.raises(lk.InputError, match="probability is"):
        lk.forecast(lk.complete(1_000)).quantile(probability)


def test_a_lone_server_is_refused():
    alone = lk.Fleet(
        pd.DataFrame({"server": ["a", "b"]}), pd.DataFrame({"option_1": ["a"], "option_2": ["b"]})
    )
    assert lk.forecast(alone).mean_gap == pytest.approx(0.25, abs=0.02)
    with pytest.raises(lk.InputError, match="fleet is int"):
        lk.forecast(7)


def test_alternating_small_and_large_servers():
    # 4 replicates of 4 million rounds elsewhere: 2.99 ± 0.05. No pair is level, so the forecast is unsure.
    size = 32
    servers = lk.ring(size).servers.assign(capacity=np.tile([1.0, 30.0], size // 2))
    ahead = lk.forecast(lk.Fleet(servers, lk.ring(size).choices), rng=1)
    assert abs(ahead.mean_gap - 2.99) < 2 * ahead.error


def test_a_fleet_nearly_in_parts_is_refused_in_one_sentence():
    demand = np.tile([2 - 1e-9, 1e-9], 32)
    fleet = lk.Fleet(lk.ring(64).servers, lk.ring(64).choices.assign(demand=demand))
    with pytest.raises(lk.InputError, match="nearly in parts"):
        lk.forecast(fleet, rng=1)


@pytest.mark.parametrize("rule", ["least-loaded", "mixed(beta=0.3)"])
def test_small_complete_fleets_are_simulated(rule):
    ahead = lk.forecast(lk.complete(4), rule)
    outcome = long_run(lk.complete(4), rule, 20_000)
    assert abs(ahead.mean_gap - outcome.measures["gap"].mean()) < ahead.error
    assert ahead.method == "simulation"
    assert lk.forecast(lk.complete(501), rule).method == "fluid limit"
