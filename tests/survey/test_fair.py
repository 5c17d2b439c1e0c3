"""The fair profile against its definition, brute force over all server sets, and convex solvers."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import labkit as lk
from labkit.survey.fair import fair_profile
from labkit.survey.optimum import optimum_of_unit_work
from tests.survey.oracles import (
    BruteForce,
    assert_fair,
    capacity_of,
    convex_profile,
    demand_of,
    fleet_of,
    least_squares_profile,
    linear_program,
    ratio_of,
)


@st.composite
def instances(draw, most=6, widest=4, amounts=None):
    """Draw rows of options, demands (some 0, never all) and capacities; some servers may be in no choice."""
    size = draw(st.integers(2, most))
    some = st.sampled_from([0.25, 0.5, 1.0, 2.5, 3.0]) if amounts is None else amounts
    row = st.lists(st.integers(0, size - 1), min_size=2, max_size=min(widest, size), unique=True)
    rows = draw(st.lists(row, min_size=1, max_size=2 * size))
    demand = draw(
        st.lists(some | st.just(0.0), min_size=len(rows), max_size=len(rows)).filter(lambda d: max(d) > 0)
    )
    capacity = draw(st.lists(some, min_size=size, max_size=size))
    return rows, demand, capacity


@settings(max_examples=150)
@given(instances())
def test_levels_are_those_of_brute_force(instance):
    profile = fair_profile(fleet_of(*instance))
    level, block = BruteForce(*instance).profile()
    assert profile.of_server == pytest.approx([float(value) for value in level], rel=1e-12, abs=0)
    assert profile.block.tolist() == block


@pytest.mark.parametrize("widest", [2, 5])
@settings(max_examples=40)
@given(st.data())
def test_every_server_set_of_fleets_of_up_to_twelve(widest, data):
    rows, demand, capacity = data.draw(instances(most=12, widest=widest))
    fleet = fleet_of(rows, demand, capacity)
    profile = fair_profile(fleet)
    ratio, union = BruteForce(rows, demand, capacity).fullest()
    assert profile.optimum == pytest.approx(float(ratio), rel=1e-12)
    assert profile.bottleneck.tolist() == [server for server in range(len(capacity)) if union >> server & 1]
    assert ratio_of(fleet, profile.bottleneck) == ratio
    assert abs(profile.agreement()) <= 1e-9
    assert optimum_of_unit_work(fleet) * sum(demand) == pytest.approx(float(ratio), rel=1e-12)
    assert profile.optimum == pytest.approx(linear_program(fleet), rel=1e-9)


@settings(max_examples=150)
@given(instances(most=7, amounts=st.floats(-12, 12).map(lambda power: 10.0**power)))
def test_amounts_many_orders_apart(instance):
    # Levels come from sums over sets, so they stay right where the split of a small server is not.
    profile = fair_profile(fleet_of(*instance))
    level, _ = BruteForce(*instance).profile()
    assert profile.of_server == pytest.approx([float(value) for value in level], rel=1e-11, abs=0)
    assert abs(profile.agreement()) <= 1e-9


def test_a_tiny_server_between_large_ones_is_refused_not_guessed():
    # Thousands of units pass through a server that holds a billionth of one, and leave their rounding there.
    demand = [2376879.5434143026, 11845.96689504347, 3096905.0588779524]
    capacity = [1.3781004313613435e-09, 0.030362301699411884, 1.0428429788994626e-10, 0.039480639730309665]
    with pytest.raises(lk.InputError, match="so far apart that its optimum"):
        lk.survey(fleet_of([[0, 1], [1, 2], [2, 3]], demand, capacity))


@pytest.mark.parametrize("seed", [124, 144, 1089])
def test_amounts_some_orders_apart_on_more_servers(seed):
    # Room that is nothing but rounding must not keep work going round for ever.
    rng = np.random.default_rng(seed)
    rows = [rng.choice(300, 3, replace=False).tolist() for _ in range(1_500)]
    fleet = fleet_of(rows, 10 ** rng.uniform(-3, 3, 1_500), 10 ** rng.uniform(-3, 3, 300))
    assert_fair(fleet, fair_profile(fleet))


@settings(max_examples=80)
@given(instances(most=9))
def test_the_definition(instance):
    fleet = fleet_of(*instance)
    assert_fair(fleet, fair_profile(fleet))


@settings(max_examples=40)
@given(instances(widest=2))
def test_least_squares_gives_the_same(instance):
    fleet = fleet_of(*instance)
    assert fair_profile(fleet).of_server == pytest.approx(least_squares_profile(fleet), rel=1e-9, abs=1e-12)


@settings(max_examples=60)
@given(instances(most=5))
def test_sequential_quadratic_programming_gives_the_same(instance):
    fleet = fleet_of(*instance)
    top = fair_profile(fleet).optimum
    assert fair_profile(fleet).of_server == pytest.approx(convex_profile(fleet), abs=1e-5 * top)


def sizeable(seed, size=400, widest=4, capacities=True):
    rng = np.random.default_rng(seed)
    rows = [
        ((rng.integers(size) + rng.choice(12, rng.integers(2, widest + 1), replace=False)) % size).tolist()
        for _ in range(int(1.4 * size))
    ]
    demand = rng.exponential(1.0, len(rows)) * (rng.random(len(rows)) < 0.9)
    return rows, demand, rng.uniform(1, 4, size) if capacities else np.ones(size)


@pytest.mark.parametrize("seed", range(4))
def test_larger_fleets_satisfy_the_definition(seed):
    fleet = fleet_of(*sizeable(seed, widest=2 + seed))
    profile = fair_profile(fleet)
    assert_fair(fleet, profile)
    assert profile.level.size > 20
    assert profile.optimum == pytest.approx(linear_program(fleet), rel=1e-9)


def test_a_random_fleet_of_tens_of_thousands_of_levels():
    rng = np.random.default_rng(5)
    servers, choices = 150_000, 300_000
    one = rng.integers(0, servers, choices)
    other = (one + rng.integers(1, servers, choices)) % servers
    table = pd.DataFrame({"option_1": one, "option_2": other, "demand": rng.exponential(1, choices)})
    fleet = lk.Fleet(
        pd.DataFrame({"server": np.arange(servers), "capacity": rng.uniform(1, 5, servers)}), table
    )
    profile = fair_profile(fleet)
    assert profile.level.size > 60_000
    assert_fair(fleet, profile)


def test_relabelling_reordering_and_halving_change_nothing():
    rows, demand, capacity = sizeable(9)
    before = fair_profile(fleet_of(rows, demand, capacity)).of_server
    rng = np.random.default_rng(1)
    label = rng.permutation(len(capacity))
    moved = np.empty(len(capacity))
    moved[label] = capacity
    order = rng.permutation(2 * len(rows))
    twice = [[int(label[server]) for server in rng.permutation(row)] for row in rows for _ in range(2)]
    fleet = fleet_of([twice[at] for at in order], np.repeat(demand / 2, 2)[order], moved)
    assert fair_profile(fleet).of_server[label] == pytest.approx(before, rel=1e-11)


@pytest.mark.parametrize(("work", "room"), [(1e-9, 1e9), (3e12, 7e-5), (1e100, 1e-100)])
def test_the_profile_knows_no_unit(work, room):
    rows, demand, capacity = sizeable(3, size=60)
    before = fair_profile(fleet_of(rows, demand, capacity)).of_server
    scaled = fair_profile(fleet_of(rows, demand * work, capacity * room))
    assert scaled.of_server * room / work == pytest.approx(before, rel=1e-11)


def test_a_lost_level_is_not_found_by_the_top_alone():
    # A chain of blocks, each a little below the one before: every level is told apart.
    count = 60
    rows = [[2 * k, 2 * k + 1] for k in range(count)] + [[2 * k, 2 * k + 2] for k in range(count - 1)]
    demand = [200.0 - k for k in range(count)] + [1e-6] * (count - 1)
    profile = fair_profile(fleet_of(rows, demand, np.ones(2 * count)))
    assert profile.level.size == count
    assert profile.bottleneck.tolist() == [0, 1]


@pytest.mark.parametrize("tall", [True, False], ids=["rising", "alternating"])
def test_long_chains_end_soon(tall):
    # Work must travel far along a ring of 30,000; a method that moves it step by step would not end.
    size = 30_000
    server = np.arange(size)
    demand = 1 + server / size if tall else np.where(server < size // 2, 1.0, 0.9)
    choices = pd.DataFrame({"option_1": server, "option_2": (server + 1) % size, "demand": demand})
    fleet = lk.Fleet(pd.DataFrame({"server": server}), choices)
    assert_fair(fleet, fair_profile(fleet))


def test_mass_is_conserved_on_many_options():
    rng = np.random.default_rng(2)
    rows = [rng.choice(300, 40, replace=False).tolist() for _ in range(200)]
    fleet = fleet_of(rows, rng.pareto(1.1, 200) + 1e-3, rng.uniform(1, 3, 300))
    profile = fair_profile(fleet)
    assert_fair(fleet, profile)
    assert (profile.of_server * capacity_of(fleet)).sum() == pytest.approx(demand_of(fleet).sum(), rel=1e-12)
