"""Link advice against brute force over server sets, linear programs, dense algebra, and hand-made cases."""

import itertools
import math
from fractions import Fraction

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import linprog

import labkit as lk
from labkit.fleet.model import ABSENT
from labkit.survey.fair import fair_profile
from labkit.survey.link_candidates import Pool
from labkit.survey.link_reach import Relief
from labkit.survey.resistance import Resistances
from tests.published.counties import county_graph
from tests.survey.oracles import BruteForce, capacity_of, demand_of, fleet_of

COLUMNS = [
    *("step", "option_1", "option_2", "demand", "optimum_before", "optimum", "bottleneck_servers"),
    *("bottleneck", "resistance_before", "resistance", "taken_from"),
]


def rows_of(fleet):
    return [[int(server) for server in row if server != ABSENT] for row in fleet.options]


def widened(rows, one, other):
    """Let every choice with the first server also use the other."""
    return [row if one not in row or other in row else [*row, other] for row in rows]


def capacity_in(chosen, capacity):
    return sum(Fraction(amount) for server, amount in enumerate(capacity) if chosen >> server & 1)


def best_link(rows, demand, capacity, one, other):
    """Return the lowest optimum that a link makes possible, and the capacity of the largest set at it."""
    found = []
    for inner, outer in ((one, other), (other, one)):
        level, chosen = BruteForce(widened(rows, inner, outer), demand, capacity).fullest()
        found.append((level, capacity_in(chosen, capacity)))
    return min(found)


def program(fleet, one, other):
    """Return the lowest highest utilisation when every choice with either end of a link may use both."""
    rows, demand, capacity = rows_of(fleet), demand_of(fleet), capacity_of(fleet)
    rows = [sorted({*row, one, other}) if one in row or other in row else row for row in rows]
    choice = np.repeat(np.arange(len(rows)), [len(row) for row in rows])
    server = np.concatenate(rows)
    column = np.arange(len(server))
    sums = np.zeros((len(rows), len(server) + 1))
    sums[choice, column] = 1
    loads = np.zeros((len(fleet), len(server) + 1))
    loads[server, column] = 1
    loads[:, -1] = -capacity
    target = np.append(np.zeros(len(server)), 1.0)
    return linprog(target, A_ub=loads, b_ub=np.zeros(len(fleet)), A_eq=sums, b_eq=demand).fun


def kirchhoff(fleet):
    """Return the total effective resistance of a connected fleet from a dense pseudo-inverse."""
    laplacian = np.zeros((len(fleet), len(fleet)))
    for row, amount in zip(rows_of(fleet), demand_of(fleet), strict=True):
        for one, other in itertools.combinations(row, 2):
            ends = np.zeros(len(fleet))
            ends[one], ends[other] = 1, -1
            laplacian += amount / (len(row) - 1) * np.outer(ends, ends)
    return len(fleet) * np.trace(np.linalg.pinv(laplacian, rcond=1e-12, hermitian=True))


def re_routed(fleet, advice, share):
    """Return the fleet with the links of a table that take only a share of the demand advised."""
    less = [tuple((row, share * amount) for row, amount in taken) for taken in advice["taken_from"]]
    return lk.add_links(fleet, advice.assign(demand=share * advice["demand"], taken_from=less))


def assert_rows_agree(fleet, advice):
    """Rebuild the fleet row by row: optimum, bottleneck and total demand are what the table says."""
    assert list(advice.columns) == COLUMNS
    assert advice["step"].tolist() == list(range(1, len(advice) + 1))
    before = fair_profile(fleet).optimum
    for count in range(1, len(advice) + 1):
        row = advice.iloc[count - 1]
        wider = lk.add_links(fleet, advice.iloc[:count])
        profile = fair_profile(wider)
        assert row["optimum_before"] == pytest.approx(before, rel=1e-12)
        assert row["optimum"] == pytest.approx(profile.optimum, rel=1e-12)
        assert row["bottleneck"] == tuple(fleet.names.take(profile.bottleneck))
        assert row["bottleneck_servers"] == len(row["bottleneck"])
        assert demand_of(wider).sum() == pytest.approx(demand_of(fleet).sum(), rel=1e-12)
        assert len(wider.options) == len(fleet.options) + count
        assert (demand_of(wider) >= 0).all()
        before = profile.optimum


@st.composite
def unlike_fleets(draw):
    """Draw options, demands and capacities of a small fleet, once or twice side by side."""
    twice = draw(st.booleans())
    size = draw(st.integers(3, 3 if twice else 6))
    row = st.lists(st.integers(0, size - 1), min_size=2, max_size=3, unique=True)
    rows = draw(st.lists(row, min_size=2, max_size=6 if twice else 10))
    demand = st.sampled_from([0.0, 1.0, 1.0, 2.5]) | st.floats(0.1, 3)
    amounts = draw(st.lists(demand, min_size=len(rows), max_size=len(rows)).filter(any))
    capacity = draw(st.lists(st.sampled_from([0.5, 1.0, 1.0, 3.0]), min_size=size, max_size=size))
    if twice:
        rows += [[server + size for server in row] for row in rows]
        rows.append([2 * size, draw(st.integers(0, 2 * size - 1))])
        amounts += [*amounts, draw(st.sampled_from([0.5, 1.0]))]
        capacity += [*capacity, draw(st.sampled_from([1.0, 4.0]))]
    return rows, amounts, capacity


@settings(max_examples=150)
@given(unlike_fleets())
def test_the_best_link_of_all_by_brute_force(given_fleet):
    rows, demand, capacity = given_fleet
    fleet = fleet_of(rows, demand, capacity)
    present, bottleneck = BruteForce(rows, demand, capacity).fullest()
    if present <= sum(map(Fraction, demand)) / sum(map(Fraction, capacity)) * (1 + Fraction(1, 10**9)):
        return  # balanced: other rules
    taken = [set(row) for row in rows]
    pairs = [pair for pair in itertools.combinations(range(len(capacity)), 2) if set(pair) not in taken]
    if not pairs:
        return
    value = {pair: best_link(rows, demand, capacity, *pair) for pair in pairs}
    best = min(value.values())
    advice = lk.advise_links(fleet, pairs, 1)
    assert_rows_agree(fleet, advice)
    size = capacity_in(bottleneck, capacity)
    if len(advice) == 0:
        assert best >= (present, size)
        return
    assert best < (present, size)
    row = advice.iloc[0]
    assert bottleneck >> row["option_1"] & 1
    assert not bottleneck >> row["option_2"] & 1
    optimum, left = value[min(row["option_1"], row["option_2"]), max(row["option_1"], row["option_2"])]
    assert float(optimum) == pytest.approx(float(best[0]), rel=1e-11)
    assert float(left) <= float(best[1]) * (1 + 1e-9)
    assert row["optimum"] == pytest.approx(float(optimum), rel=1e-9)
    wider = lk.add_links(fleet, advice)
    again, _ = BruteForce(rows_of(wider), demand_of(wider), capacity).fullest()
    assert float(again) == pytest.approx(float(optimum), rel=1e-9)
    if optimum < present * (1 - Fraction(1, 10**9)):
        level, _ = BruteForce(rows, demand, capacity).profile()
        least = sum(
            max(there - optimum, 0) * Fraction(room) for there, room in zip(level, capacity, strict=True)
        )
        assert row["demand"] == pytest.approx(float(least), rel=1e-8)
        less = fair_profile(re_routed(fleet, advice, 1 - 1e-6)).optimum
        assert less > row["optimum"] * (1 + 1e-12)
    else:
        assert row["bottleneck_servers"] < bottleneck.bit_count()


@settings(max_examples=40)
@given(unlike_fleets())
def test_plans_fall_step_by_step_and_agree_with_the_fleet_they_make(given_fleet):
    rows, demand, capacity = given_fleet
    fleet = fleet_of(rows, demand, capacity)
    advice = lk.advise_links(fleet, count=4)
    assert_rows_agree(fleet, advice)
    assert (advice["optimum"] <= advice["optimum_before"] * (1 + 1e-12)).all()
    pd.testing.assert_frame_equal(advice, lk.advise_links(fleet, count=4))


@pytest.mark.parametrize("seed", range(4))
def test_no_split_that_uses_a_candidate_does_better_by_linear_programs(seed):
    rng = np.random.default_rng(seed)
    graph = nx.gnm_random_graph(14, 24, seed=seed)
    for one, other in graph.edges:
        graph.edges[one, other]["demand"] = float(rng.uniform(0.5, 2))
    for server in graph:
        graph.nodes[server]["capacity"] = float(rng.uniform(0.5, 2))
    fleet = lk.fleet_from_graph(graph)
    first, second = Pool(fleet, None, 2).all()
    best = min(program(fleet, one, other) for one, other in zip(first.tolist(), second.tolist(), strict=True))
    advice = lk.advise_links(fleet, count=1)
    assert advice["optimum"][0] == pytest.approx(best, rel=1e-8)


def test_a_clique_with_a_light_tail():
    # Six that share all: 15/6. A link from anywhere in the clique to the first server of the tail gives
    # 16/7, as that one's choice with the clique is confined, too; one to the second gives 15/7.
    fleet = lk.fleet_from_graph(nx.lollipop_graph(6, 4))
    advice = lk.advise_links(fleet, count=1)
    row = advice.iloc[0]
    assert (row["option_1"], row["option_2"]) == (5, 7)
    assert row["optimum_before"] == 2.5
    assert row["optimum"] == pytest.approx(15 / 7, rel=1e-12)
    assert row["demand"] == pytest.approx((2.5 - 15 / 7) * 6, rel=1e-12)
    assert row["bottleneck"] == (0, 1, 2, 3, 4, 5, 7)
    assert all(
        5 in fleet.choices.loc[place, ["option_1", "option_2"]].tolist() for place, _ in row["taken_from"]
    )
    only = lk.advise_links(fleet, [(0, 6)], 1).iloc[0]
    assert only["optimum"] == pytest.approx(16 / 7, rel=1e-12)


def test_what_is_relieved_together_may_fall_below_the_next_level():
    # {a, c} at 4, u at 3, b at 0: with a link from a to b, u's choice goes to a, too. All four share 11.
    graph = nx.Graph()
    graph.add_nodes_from("acub")
    graph.add_weighted_edges_from([("a", "c", 8), ("a", "u", 3)], weight="demand")
    row = lk.advise_links(lk.fleet_from_graph(graph), [("b", "a")], 1).iloc[0]
    assert (row["option_1"], row["option_2"]) == ("a", "b")
    assert row["optimum"] == pytest.approx(2.75, rel=1e-12)
    assert row["demand"] == pytest.approx(2 * (4 - 2.75) + (3 - 2.75), rel=1e-12)
    assert sum(amount for _, amount in row["taken_from"]) == pytest.approx(2.75, rel=1e-12)


def pairs_and(demands, spare):
    """Return pairs of unit servers that share one choice, and servers of the given capacities without any."""
    rows = [[2 * number, 2 * number + 1] for number in range(len(demands))]
    return fleet_of(rows, demands, [1.0] * (2 * len(demands)) + spare)


def test_of_two_equal_bottlenecks_one_is_fixed_and_then_the_other():
    # Two cliques of five, 10/5 each; with one more server each can reach 10/6.
    graph = nx.disjoint_union(nx.complete_graph(5), nx.complete_graph(5))
    graph.add_nodes_from([10, 11])
    fleet = lk.fleet_from_graph(graph)
    advice = lk.advise_links(fleet, [(11, 1), (0, 11), (6, 10)], 2)
    assert_rows_agree(fleet, advice)
    assert advice["optimum_before"].tolist() == [2.0, 2.0]
    assert advice["optimum"].tolist() == pytest.approx([2.0, 10 / 6], rel=1e-12)
    assert advice[["option_1", "option_2"]].values.tolist() == [[1, 11], [6, 10]]
    assert advice["bottleneck"][0] == (5, 6, 7, 8, 9)


def test_of_unlike_equal_bottlenecks_the_larger_is_fixed_first():
    # A clique of five at 10/5 and a pair at 4/2. More room waits for the pair, but the clique is the larger.
    graph = nx.complete_graph(5)
    graph.add_edge(5, 6, demand=4.0)
    graph.add_nodes_from([7, 8])
    graph.nodes[7]["capacity"] = 9.0
    advice = lk.advise_links(lk.fleet_from_graph(graph), [(5, 7), (0, 8)], 2)
    assert advice["option_1"].tolist() == [0, 5]
    assert advice["bottleneck"][0] == (5, 6)
    assert advice["optimum"].tolist() == pytest.approx([2.0, 10 / 6], rel=1e-12)


def test_of_links_with_one_optimum_the_smaller_bottleneck_decides():
    # A pair at 5/2. With server 2 three are at 5/3; with server 3 four are, since 3 and 4 share 5/3 already.
    fleet = fleet_of([[0, 1], [3, 4]], [5.0, 5 / 3], [1.0] * 5)
    advice = lk.advise_links(fleet, [(0, 3), (1, 2)], 1)
    assert advice["optimum"][0] == pytest.approx(5 / 3, rel=1e-12)
    assert (advice["option_1"][0], advice["option_2"][0]) == (1, 2)


def test_the_part_relieved_most_decides_between_equals():
    # Pairs at 5/2 and 4/2: three links bring the optimum to 2, one of them has more room behind it.
    advice = lk.advise_links(pairs_and([5.0, 4.0], [2.0, 9.0, 2.0]), [(0, 4), (1, 5), (1, 6)], 1)
    assert (advice["option_1"][0], advice["option_2"][0]) == (1, 5)
    assert advice["optimum"][0] == 2.0
    assert advice["demand"][0] == pytest.approx((2.5 - 2.0) * 2, rel=1e-12)
    assert advice["bottleneck"][0] == (0, 1, 2, 3)


def test_earlier_links_take_what_the_whole_plan_needs():
    # The first link could bring its pair down to 5/11, and needs 1 for its own row. The second brings the
    # other pair to 4/3, so that is where the plan ends, and how low the first has to come.
    fleet = pairs_and([5.0, 4.0], [9.0, 1.0])
    advice = lk.advise_links(fleet, [(0, 4), (2, 5)], 2)
    assert_rows_agree(fleet, advice)
    assert advice["optimum"].tolist() == pytest.approx([2.0, 4 / 3], rel=1e-12)
    assert advice["demand"].tolist() == pytest.approx([(2.5 - 4 / 3) * 2, (2.0 - 4 / 3) * 2], rel=1e-12)
    assert advice["bottleneck_servers"].tolist() == [2, 5]


def test_bounds_that_spare_work_hold():
    clique = Relief(fair_profile(lk.fleet_from_graph(nx.lollipop_graph(9, 3))))
    ends = np.arange(9, dtype=np.int32)
    assert clique._bounds(ends) == pytest.approx(np.full(9, 28 / 8), rel=1e-10)
    relief = Relief(fair_profile(lk.fleet_from_graph(county_graph())))
    ends = relief.bottleneck[::40]
    drained = relief._drained(relief.bottleneck, 2.8)
    exact = np.array([drained(int(end), np.inf) for end in ends])
    bounds = relief._bounds(ends)
    assert (bounds <= exact).all()
    assert np.isclose(bounds, exact, rtol=1e-10).mean() > 0.7


def test_one_server_relieves_a_clique_only_as_far_as_the_others_allow():
    # The other five of six confine 10/5 whatever the room behind a link from the sixth.
    graph = nx.complete_graph(6)
    graph.add_node(6, capacity=9.0)
    advice = lk.advise_links(lk.fleet_from_graph(graph), [(0, 6)], 1)
    assert advice["optimum"][0] == pytest.approx(2.0, rel=1e-12)
    assert advice["bottleneck"][0] == (0, 1, 2, 3, 4, 5)


def test_a_plan_goes_on_when_the_fleet_becomes_balanced():
    fleet = lk.fleet_from_graph(nx.barbell_graph(5, 3))
    advice = lk.advise_links(fleet, count=4)
    assert_rows_agree(fleet, advice)
    mean = 24 / 13
    assert advice["optimum"].tolist() == pytest.approx([2.0, mean, mean, mean], rel=1e-9)
    assert (advice["resistance"][2:] < advice["resistance_before"][2:]).all()
    built = [kirchhoff(lk.add_links(fleet, advice.iloc[:count])) for count in range(5)]
    assert advice["resistance_before"].tolist() == pytest.approx(built[:4], rel=1e-9)
    assert advice["resistance"].tolist() == pytest.approx(built[1:], rel=1e-9)


def test_places_in_taken_from_go_on_over_new_links():
    # Three share 8 then; c can hand d only what its own choice, the new one, holds.
    fleet = lk.Fleet(
        pd.DataFrame({"server": list("abcd")}),
        pd.DataFrame({"option_1": ["a"], "option_2": ["b"], "demand": [8.0]}),
    )
    advice = lk.advise_links(fleet, [("a", "c"), ("c", "d")], 2)
    assert_rows_agree(fleet, advice)
    assert advice["optimum"].tolist() == pytest.approx([8 / 3, 8 / 3], rel=1e-12)
    assert [place for place, _ in advice["taken_from"][0]] == [0]
    assert [place for place, _ in advice["taken_from"][1]] == [1]
    assert advice["bottleneck"].tolist() == [("a", "b", "c"), ("a", "b")]


def test_candidates_away_from_the_bottleneck_make_no_row():
    fleet = pairs_and([5.0], [1.0, 1.0])
    advice = lk.advise_links(fleet, [(2, 3)])
    assert len(advice) == 0
    assert list(advice.columns) == COLUMNS
    assert advice["optimum"].dtype == np.float64
    assert lk.add_links(fleet, advice) is fleet


def test_links_out_of_wide_choices():
    # All of S's work has three options; the end's choices that hold the other end already stay as they are.
    rows = [[0, 1, 2], [0, 1, 2], [0, 1, 3], [3, 4]]
    fleet = fleet_of(rows, [3.0, 3.0, 1.0, 1.0], [1.0] * 5)
    advice = lk.advise_links(fleet, [(0, 3), (2, 4)], 1)
    value = {pair: best_link(rows, [3, 3, 1, 1], [1] * 5, *pair)[0] for pair in [(0, 3), (2, 4)]}
    assert advice["optimum"][0] == pytest.approx(float(min(value.values())), rel=1e-12)
    assert lk.add_links(fleet, advice).choices["option_3"].isna().tolist() == [False] * 3 + [True, True]


@pytest.mark.parametrize(
    ("fleet", "value"),
    [
        # Kirchhoff index of cycle and complete graph (Klein & Randić 1993): n(n² − 1)/12 and n − 1.
        (lk.ring(5), 5 * 24 / 12),
        (lk.ring(40), 40 * 1599 / 12),
        (lk.fleet_from_graph(nx.complete_graph(9)), 8.0),
    ],
)
def test_total_resistance_of_known_graphs(fleet, value):
    assert Resistances(fleet).total == pytest.approx(value, rel=1e-11)


def test_total_resistance_of_wide_choices_and_of_unconnected_fleets():
    # One choice of four is a clique of pairs of a third each.
    assert Resistances(fleet_of([[0, 1, 2, 3]], [1.0], [1.0] * 4)).total == pytest.approx(3 * 3, rel=1e-12)
    apart = Resistances(fleet_of([[0, 1], [2, 3]], [1.0, 4.0], [1.0, 1.0, 4.0, 4.0]))
    assert apart.total == math.inf
    assert apart.finite == pytest.approx(1 + 1 / 4, rel=1e-12)


def taking_link(fleet, one, other, share=1.0):
    """Return the fleet with a link that takes a share of the mean demand from the choices at its ends."""
    at_ends = [place for place, row in enumerate(rows_of(fleet)) if one in row or other in row]
    demand = demand_of(fleet)
    there = demand[at_ends].sum()
    amount = min(share * demand.mean(), there / 2)
    table = pd.DataFrame({"option_1": [fleet.names[one]], "option_2": [fleet.names[other]], "demand": amount})
    table["taken_from"] = [[(place, demand[place] * amount / there) for place in at_ends]]
    return lk.add_links(fleet, table)


@pytest.mark.parametrize(
    ("fleet", "distance"),
    [
        (lk.ring(9), 2),
        (lk.ring(10), 5),
        (lk.torus(3, 4), 2),
        (
            fleet_of(
                [[0, 1, 2], [1, 2, 3], [2, 3, 4], [3, 4, 0], [4, 0, 1], [0, 5], [5, 3]], [1.0] * 7, [1.0] * 6
            ),
            2,
        ),
    ],
    ids=["ring", "far", "torus", "wide"],
)
def test_the_best_chord_of_a_balanced_fleet_by_dense_algebra(fleet, distance):
    assert fair_profile(fleet).optimum == pytest.approx(demand_of(fleet).sum() / len(fleet), rel=1e-9)
    advice = lk.advise_links(fleet, count=2, distance=distance)
    assert len(advice) == 2
    assert_rows_agree(fleet, advice)
    first, second = Pool(fleet, None, distance).all()
    pairs = list(zip(first.tolist(), second.tolist(), strict=True))
    for count in range(2):
        present = lk.add_links(fleet, advice.iloc[:count])
        after = {pair: kirchhoff(taking_link(present, *pair)) for pair in pairs}
        row = advice.iloc[count]
        chosen = row["option_1"], row["option_2"]
        assert after[chosen] <= min(after.values()) * (1 + 1e-9)
        assert row["resistance_before"] == pytest.approx(kirchhoff(present), rel=1e-9)
        assert row["resistance"] == pytest.approx(after[chosen], rel=1e-9)
        assert row["optimum"] == pytest.approx(row["optimum_before"], rel=1e-9)
        pairs.remove(chosen)


def test_the_longest_chord_of_a_ring_is_best():
    row = lk.advise_links(lk.ring(12), count=1, distance=6).iloc[0]
    assert (row["option_1"], row["option_2"]) == (0, 6)
    assert row["demand"] == 1.0
    assert dict(row["taken_from"]) == {0: 0.25, 11: 0.25, 5: 0.25, 6: 0.25}


def test_a_link_that_would_unbalance_takes_half_as_much_until_it_does_not():
    # Two small servers on a ring of large ones: full demand, or a half of it, would not fit on the two.
    size = 8
    rows = [[server, (server + 1) % size] for server in range(size)] + [[8, 0], [8, 2], [9, 4], [9, 6]]
    fleet = fleet_of(rows, [1.0] * 8 + [0.5] * 4, [1.0] * 8 + [0.2, 0.2])
    mean = 10 / 8.4
    assert fair_profile(fleet).optimum == pytest.approx(mean, rel=1e-9)
    advice = lk.advise_links(fleet, [(8, 9)], 1)
    demand = 10 / 12 / 2
    assert advice["demand"][0] == pytest.approx(demand, rel=1e-12)
    assert advice["optimum"][0] == pytest.approx(mean, rel=1e-9)
    assert fair_profile(taking_link(fleet, 8, 9)).optimum > mean * (1 + 1e-6)
    assert kirchhoff(lk.add_links(fleet, advice)) == pytest.approx(advice["resistance"][0], rel=1e-9)


def test_links_between_unconnected_parts_come_first():
    graph = nx.disjoint_union_all([nx.cycle_graph(4), nx.cycle_graph(5), nx.cycle_graph(3)])
    fleet = lk.fleet_from_graph(graph)
    advice = lk.advise_links(fleet, [(4, 6), (9, 0), (3, 8), (1, 5), (10, 4)], 3)
    assert_rows_agree(fleet, advice)
    # 4 · 5 pairs at first, then the three servers left; only then the chord.
    parts = [fleet.names[:4], fleet.names[4:9], fleet.names[9:]]
    first, second = advice.loc[0, ["option_1", "option_2"]]
    assert first in parts[0]
    assert second in parts[1]
    assert set(advice.loc[1, ["option_1", "option_2"]]) & set(parts[2])
    assert advice["resistance_before"].tolist()[:2] == [math.inf, math.inf]
    assert advice["resistance"][0] == math.inf
    for count in (2, 3):
        built = kirchhoff(lk.add_links(fleet, advice.iloc[:count]))
        assert advice["resistance"][count - 1] == pytest.approx(built, rel=1e-9)
    present = Resistances(fleet)
    one, other = np.array([0, 3], np.int32), np.array([9, 8], np.int32)
    _, joined, finite = present.after(one, other, np.ones(2))
    assert joined.tolist() == [12.0, 20.0]
    for number in range(2):
        wider = Resistances(taking_link(fleet, one[number], other[number]))
        assert finite[number] == pytest.approx(wider.finite, rel=1e-11)


def test_default_candidates():
    def pairs(fleet, distance):
        first, second = Pool(fleet, None, distance).all()
        return list(zip(first.tolist(), second.tolist(), strict=True))

    ring = lk.ring(8)
    assert pairs(ring, 2) == sorted(tuple(sorted((i, (i + 2) % 8))) for i in range(8))
    steps = dict(nx.all_pairs_shortest_path_length(ring.to_networkx()))
    every = list(itertools.combinations(range(8), 2))
    assert pairs(ring, 3) == [(one, other) for one, other in every if 2 <= steps[one][other] <= 3]
    # Who shares a wide choice is no candidate.
    assert pairs(fleet_of([[0, 1, 2], [2, 3]], [1.0, 1.0], [1.0] * 4), 2) == [(0, 3), (1, 3)]
    inside = np.array([True, True, False, False])
    first, second = Pool(fleet_of([[0, 1], [1, 2], [2, 3]], [9.0, 1.0, 1.0], [1.0] * 4), None, 2).across(
        inside
    )
    assert (first.tolist(), second.tolist()) == ([0, 1], [2, 3])


def test_candidates_in_every_form():
    fleet = lk.fleet_from_graph(nx.relabel_nodes(nx.lollipop_graph(5, 3), "n{}".format))
    table = pd.DataFrame({"option_1": ["n6"], "option_2": ["n1"], "metres": [120]})
    forms = [table, [("n1", "n6")], (("n6", "n1"),), [["n1", "n6"]], np.array([["n1", "n6"]], object)]
    advice = [lk.advise_links(fleet, form) for form in forms]
    assert advice[0][["option_1", "option_2"]].values.tolist() == [["n1", "n6"]]
    for other in advice[1:]:
        pd.testing.assert_frame_equal(other, advice[0])
    # A pair that shares only a wider choice is no choice of two yet.
    wide = fleet_of([[0, 1, 2], [0, 1, 2], [2, 3]], [4.0, 1.0, 1.0], [1.0] * 4)
    assert lk.advise_links(wide, [(0, 1), (0, 3)], 1)["option_2"].tolist() == [3]


def named_path():
    choices = pd.DataFrame({"option_1": ["north", "east", "south"], "option_2": ["east", "south", "west"]})
    choices["demand"] = [6.0, 1.0, 1.0]
    return lk.Fleet(pd.DataFrame({"server": ["north", "east", "south", "west"]}), choices)


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ({"fleet": 3}, r"fleet is int; give a labkit Fleet"),
        ({"fleet": lk.complete(5)}, r"fleet is complete: every set of its servers is a choice already"),
        ({"count": 0}, r"count is 0; give a whole number of at least 1"),
        ({"count": 2.5}, r"count is 2\.5; give a whole number"),
        ({"distance": 1}, r"distance is 1; give a whole number of at least 2"),
        ({"distance": True}, r"distance is True; give a whole number"),
        ({"candidates": []}, r"candidates is empty; give pairs of server names"),
        ({"candidates": "north"}, r"candidates is 'north'; give pairs"),
        ({"candidates": 7}, r"candidates is 7; give pairs"),
        ({"candidates": ["ab"]}, r"candidates row 1 is 'ab'; give pairs"),
        ({"candidates": [("north", "west"), ("north",)]}, r"candidates row 2 is \('north',\); give pairs"),
        ({"candidates": pd.DataFrame({"option_1": ["north"]})}, r"candidates has no column 'option_2'"),
        (
            {"candidates": [("north", "wset")]},
            r"candidates row 1: option_2 is 'wset'.*did you mean 'west'\?$",
        ),
        (
            {"candidates": [("north", "west"), (4, "west")]},
            r"candidates row 2: option_1 is 4, which names no",
        ),
        ({"candidates": [("north", None)]}, r"candidates row 1: option_2 is blank; name a server"),
        ({"candidates": [("north", "north")]}, r"row 1: server 'north' is at both ends"),
        (
            {"candidates": [("north", "west"), ("south", "east")]},
            r"candidates row 2: 'south' and 'east' is a choice already, choices row 2",
        ),
        (
            {"candidates": [("north", "west"), ("north", "south"), ("west", "north")]},
            r"candidates row 3: 'west' and 'north' stood before, in row 1",
        ),
    ],
)
def test_wrong_questions_are_refused(arguments, sentence):
    arguments = {"fleet": named_path(), **arguments}
    with pytest.raises(lk.InputError, match=sentence):
        lk.advise_links(**arguments)


def test_too_many_candidates_are_refused(monkeypatch):
    sentence = "candidates are not given, and more than {} pairs of servers are at most 2 choices apart"
    monkeypatch.setattr("labkit.survey.link_candidates.MOST_BALANCED_PAIRS", 7)
    with pytest.raises(lk.InputError, match=sentence.format(7)):
        lk.advise_links(lk.ring(8))
    assert len(lk.advise_links(lk.ring(8), [(0, 2)])) == 1
    monkeypatch.setattr("labkit.survey.link_candidates.MOST_PAIRS", 9)
    with pytest.raises(lk.InputError, match=sentence.format(9)):
        lk.advise_links(lk.fleet_from_graph(nx.lollipop_graph(11, 3)))


def test_too_many_servers_of_a_balanced_fleet_are_refused():
    with pytest.raises(lk.InputError, match=r"fleet is balanced .* and has 4,001 servers; .* at most 4,000"):
        lk.advise_links(lk.ring(4_001))


def test_numbers_too_far_apart_for_double_precision_are_refused():
    balanced = fleet_of([[0, 1], [1, 2], [2, 3]], [1e-20, 1.0, 1e-20], [1e-20, 0.5, 0.5, 1e-20])
    with pytest.raises(lk.InputError, match="so far apart that double precision cannot tell its effective"):
        lk.advise_links(balanced)
    rows, demand = [[0, 3], [2, 3], [1, 0], [2, 1]], [1e5, 1e-9, 1e7, 1e-5]
    with pytest.raises(lk.InputError, match="so far apart that double precision cannot prove its optimum"):
        lk.advise_links(fleet_of(rows, demand, [1e-8, 1e-3, 1e5, 1e-8]))
    # Far apart, but not too far: nearly all work leaves the two small servers.
    rows, demand = [[0, 2], [1, 2], [2, 1], [1, 2]], [0.1, 0.01, 0.001, 100.0]
    apart = fleet_of(rows, demand, [1e6, 1e-3, 1e-3])
    assert_rows_agree(apart, lk.advise_links(apart, count=1))


def advice_table(**changes):
    advice = lk.advise_links(named_path(), count=1)
    assert advice["taken_from"].tolist() == [((0, 2.0),)]
    return advice.assign(**changes)


def test_add_links_takes_what_the_table_says():
    wider = lk.add_links(named_path(), advice_table(taken_from=[[[0, 1.5], [1, 0.5]]]))
    assert wider.choices.values.tolist() == [
        ["north", "east", 4.5],
        ["east", "south", 0.5],
        ["south", "west", 1.0],
        ["east", "west", 2.0],
    ]
    everything = lk.add_links(named_path(), advice_table(demand=[6.0], taken_from=[((0, 6.0),)]))
    assert everything.choices["demand"].tolist() == [0.0, 1.0, 1.0, 6.0]
    # Read back from parquet, pairs are lists of floats.
    assert lk.add_links(named_path(), advice_table(taken_from=[[[0.0, 2.0]]])).choices["demand"][0] == 4.0


@pytest.mark.parametrize(
    ("links", "sentence"),
    [
        (lambda: None, r"links is a NoneType; give a table as lk\.advise_links returns it"),
        (lambda: advice_table().drop(columns="taken_from"), r"links has no column 'taken_from'"),
        (lambda: advice_table(option_1=["weest"]), r"links row 1: option_1 is 'weest'.*did you mean 'west'"),
        (lambda: advice_table(option_1=["west"]), r"links row 1: server 'west' is at both ends"),
        (lambda: advice_table(demand=[0.0]), r"links row 1: demand is 0\.0; give a finite number above 0"),
        (lambda: advice_table(demand=[3.0]), r"links row 1: taken_from sums to 2, but demand is 3"),
        (
            lambda: advice_table(taken_from=["((0, 2.0),)"]),
            r"links row 1: taken_from is '\(\(0, 2\.0\),\)'; give pairs",
        ),
        (lambda: advice_table(taken_from=[()]), r"links row 1: taken_from is \(\); give pairs"),
        (
            lambda: advice_table(taken_from=[((0, 1.0, 1.0),)]),
            r"taken_from holds \(0, 1\.0, 1\.0\); give pairs",
        ),
        (lambda: advice_table(taken_from=[(("a", 2.0),)]), r"taken_from holds \('a', 2\.0\); give pairs"),
        (
            lambda: advice_table(taken_from=[((3, 2.0),)]),
            r"names the choice 3; name each choice once, .* from 0 to 2",
        ),
        (lambda: advice_table(taken_from=[((0.5, 2.0),)]), r"names the choice 0\.5"),
        (lambda: advice_table(taken_from=[((-1, 2.0),)]), r"names the choice -1"),
        (
            lambda: advice_table(taken_from=[((0, 1.0), (0, 1.0))]),
            r"names the choice 0; name each choice once",
        ),
        (lambda: advice_table(taken_from=[((1, 2.0),)]), r"takes 2 from choice 1, whose demand is 1"),
        (lambda: advice_table(taken_from=[((0, -2.0),)]), r"takes -2 from choice 0"),
        (lambda: advice_table(taken_from=[((0, math.nan),)]), r"takes nan from choice 0"),
        (
            lambda: advice_table(option_1=["north"], demand=[1.0], taken_from=[((1, 1.0),)]),
            r"names choice 1, which has neither 'north' .* 'west' among its options",
        ),
    ],
)
def test_wrong_tables_of_links_are_refused(links, sentence):
    with pytest.raises(lk.InputError, match=sentence):
        lk.add_links(named_path(), links())


def test_links_are_added_only_to_fleets_with_listed_choices():
    with pytest.raises(lk.InputError, match="fleet is complete"):
        lk.add_links(lk.complete(4), advice_table())
    with pytest.raises(lk.InputError, match="fleet is str"):
        lk.add_links("fleet", advice_table())


def test_one_link_for_the_counties():
    # County contiguity; see tests/published/counties.py.
    fleet = lk.fleet_from_graph(county_graph())
    advice = lk.advise_links(fleet, count=1)
    assert_rows_agree(fleet, advice)
    row = advice.iloc[0]
    assert row["optimum_before"] == pytest.approx(2.900744, abs=5e-7)
    assert row["optimum"] < row["optimum_before"] * (1 - 1e-5)
    # The second block falls, too.
    assert row["optimum"] < fair_profile(fleet).level[1]
    least = np.maximum(fair_profile(fleet).of_server - row["optimum"], 0).sum()
    assert row["demand"] == pytest.approx(least, rel=1e-8)
    assert math.isnan(row["resistance"])
    less = fair_profile(re_routed(fleet, advice, 1 - 1e-6)).optimum
    assert less > row["optimum"] * (1 + 1e-12)


def test_the_same_advice_is_not_added_twice():
    fleet = lk.ring(6)
    advice = lk.advise_links(fleet, count=2)
    with pytest.raises(lk.InputError, match=r"links row 1: .* is a choice already, choices row 7; add"):
        lk.add_links(lk.add_links(fleet, advice), advice)
