"""Outages against brute force over all server sets, solves from zero, a linear program and derived values."""

import itertools
import math
from fractions import Fraction

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import labkit as lk
import labkit.survey.outages as module
from labkit.survey.fair import fair_profile
from tests.published.counties import county_graph
from tests.survey.left_over import left_over
from tests.survey.oracles import BruteForce, fleet_of, linear_program


@pytest.fixture(autouse=True)
def from_zero(monkeypatch):
    """Count the rows that needed a solve from zero; on ordinary fleets there must be none."""
    rows = []
    solve = module._from_zero

    def counted(split, one, other):
        rows.append((one, other))
        return solve(split, one, other)

    monkeypatch.setattr(module, "_from_zero", counted)
    yield rows
    assert rows == []


def assert_row_from_zero(fleet, row, lost):
    """Compare one row with the fair profile of the fleet that is left."""
    left = left_over(fleet, lost)
    profile = fair_profile(left)
    assert row.optimum == pytest.approx(profile.optimum, rel=1e-12)
    assert row.bottleneck == tuple(left.names[profile.bottleneck])
    assert row.bottleneck_servers == len(row.bottleneck)
    assert row.extra_headroom == pytest.approx(
        profile.optimum - fair_profile(fleet).optimum, abs=1e-12 * profile.optimum
    )


AMOUNTS = {
    "equal": (st.just(1.0), st.just(1.0)),
    "with ties": (st.sampled_from([0.0, 1.0, 2.5]), st.sampled_from([0.5, 1.0, 3.0])),
    "any": (st.floats(1e-3, 1e3), st.floats(1e-2, 1e2)),
}


@settings(max_examples=100)
@given(st.data())
@pytest.mark.parametrize("kind", AMOUNTS)
@pytest.mark.parametrize("pairs", [False, True], ids=["single", "pairs"])
def test_brute_force_over_all_server_sets(pairs, kind, data):
    # Some servers are in no choice, and the choices often fall into several parts.
    size = data.draw(st.integers(2, 8))
    options = st.lists(st.integers(0, size - 1), min_size=2, max_size=min(4, size), unique=True)
    rows = data.draw(st.lists(options, min_size=1, max_size=12))
    each, room = AMOUNTS[kind]
    demand = data.draw(st.lists(each, min_size=len(rows), max_size=len(rows)).filter(any))
    capacity = data.draw(st.lists(room, min_size=size, max_size=size))
    table = lk.outages(fleet_of(rows, demand, capacity), pairs=pairs)
    whole = BruteForce(rows, demand, capacity).fullest()[0]
    expected = list(itertools.combinations(range(size), 1 + pairs))
    assert table[["server", "second"][: 1 + pairs]].values.tolist() == [list(lost) for lost in expected]
    for row, lost in zip(table.itertuples(), expected, strict=True):
        stays = [server for server in range(size) if server not in lost]
        choices = [[stays.index(server) for server in options if server in stays] for options in rows]
        kept = [amount for options, amount in zip(choices, demand, strict=True) if options]
        placed = sum(map(Fraction, kept))
        best, names, mean = Fraction(0), (), Fraction(0)
        if placed:
            space = [capacity[server] for server in stays]
            best, union = BruteForce([options for options in choices if options], kept, space).fullest()
            names = tuple(server for place, server in enumerate(stays) if union >> place & 1)
            mean = placed / sum(map(Fraction, space))
        assert row.optimum == pytest.approx(float(best), rel=1e-12)
        assert row.bottleneck == names
        assert row.bottleneck_servers == len(names)
        assert row.mean == pytest.approx(float(mean), rel=1e-12)
        assert row.unplaced == pytest.approx(float(sum(map(Fraction, demand)) - placed), rel=1e-12)
        assert row.extra_headroom == pytest.approx(float(best - whole), rel=1e-12, abs=1e-12 * float(whole))


def mixed_fleet(seed, size, choices, most, near):
    """Return a fleet with choices of 2 to `most` options, within `near` places of each other."""
    rng = np.random.default_rng(seed)
    rows = []
    for _ in range(choices):
        start, count = rng.integers(size), rng.integers(2, most + 1)
        rows.append(((start + rng.choice(near, count, replace=False)) % size).tolist())
    return fleet_of(rows, rng.integers(0, 4, choices), rng.choice([1.0, 2.0, 4.0], size))


FLEETS = {
    "two options nearby": lambda: mixed_fleet(1, 80, 130, 2, 6),
    "up to four options nearby": lambda: mixed_fleet(2, 80, 160, 4, 9),
    "up to three options anywhere": lambda: mixed_fleet(3, 60, 90, 3, 60),
    "sparse": lambda: mixed_fleet(4, 100, 60, 2, 8),
    "ring with chords": lambda: lk.ring_with_chords(60, 25, rng=1),
    "torus": lambda: lk.torus(6, 7),
}


@pytest.mark.parametrize("name", FLEETS)
def test_every_single_outage_from_zero(name):
    fleet = FLEETS[name]()
    for place, row in enumerate(lk.outages(fleet).itertuples()):
        assert_row_from_zero(fleet, row, [place])


@pytest.mark.parametrize("name", ["two options nearby", "up to four options nearby", "ring with chords"])
def test_pairs_from_zero(name):
    fleet = FLEETS[name]()
    table = lk.outages(fleet, pairs=True)
    assert len(table) == math.comb(len(fleet), 2)
    for row in table.sample(150, random_state=1).itertuples():
        assert_row_from_zero(fleet, row, [row.server, row.second])


@pytest.mark.parametrize("name", FLEETS)
def test_a_linear_program_agrees(name):
    # HiGHS on the fleet that is left: shares nothing with the survey.
    fleet = FLEETS[name]()
    for row in lk.outages(fleet).iloc[::9].itertuples():
        assert row.optimum == pytest.approx(linear_program(left_over(fleet, [row.server])), rel=1e-8)


def test_counties():
    fleet = lk.fleet_from_graph(county_graph())
    table = lk.outages(fleet)
    assert len(table) == len(fleet) == 3223
    assert (table["unplaced"] == 0).all()
    assert (table["extra_headroom"] >= 0).all()
    # Counties of the bottleneck, those whose loss hurts most, and some of all.
    fair = fair_profile(fleet)
    rows = {*fair.bottleneck[::10], *table["optimum"].nlargest(10).index, *range(0, 3223, 200)}
    for place in sorted(rows):
        assert_row_from_zero(fleet, table.loc[place], [place])
    untouched = table["extra_headroom"] == 0
    assert untouched.sum() > 1000
    assert set(fair.bottleneck).isdisjoint(np.flatnonzero(untouched))


@pytest.mark.parametrize("n", [3, 4, 9, 200])
def test_a_ring_spreads_over_all_that_is_left(n):
    # n choices on a path of n - 1 servers, each with an option in it: all can be filled alike.
    table = lk.outages(lk.ring(n))
    assert table["optimum"].to_numpy() == pytest.approx(n / (n - 1), rel=1e-14)
    assert table["mean"].to_numpy() == pytest.approx(n / (n - 1), rel=1e-14)
    assert table["extra_headroom"].to_numpy() == pytest.approx(1 / (n - 1), rel=1e-12)
    assert (table["bottleneck_servers"] == n - 1).all()
    for place in (0, n - 1):
        assert table["bottleneck"][place] == tuple(server for server in range(n) if server != place)


def test_pairs_on_a_ring_leave_two_paths():
    # Losing servers at distance d leaves paths of d - 1 and n - d - 1 servers; a path of m servers holds
    # m + 1 choices. Neighbours also lose the choice between them.
    n = 12
    for row in lk.outages(lk.ring(n), pairs=True).itertuples():
        distance = min(row.second - row.server, n - row.second + row.server)
        shorter = distance - 1
        assert row.unplaced == (distance == 1)
        if shorter == 0:
            assert row.optimum == pytest.approx((n - 1) / (n - 2), rel=1e-14)
            assert row.bottleneck_servers == n - 2
        else:
            assert row.optimum == pytest.approx(1 + 1 / shorter, rel=1e-14)
            assert row.bottleneck_servers == (n - 2 if shorter == n // 2 - 1 else shorter)


def test_a_star():
    # Five leaves around a centre. Without the centre each leaf carries its own choice; without a leaf the
    # centre must take that leaf's and the others carry theirs; without two leaves it must take two.
    table = lk.outages(lk.fleet_from_graph(nx.star_graph(5))).set_index("server")
    assert table["optimum"].tolist() == [1.0] * 6
    assert table["bottleneck"][0] == (1, 2, 3, 4, 5)
    assert table["bottleneck"][3] == (0, 1, 2, 4, 5)
    assert table["unplaced"].tolist() == [0.0] * 6
    pairs = lk.outages(lk.fleet_from_graph(nx.star_graph(5)), pairs=True)
    with_centre = pairs["server"] == 0
    assert pairs["unplaced"].tolist() == [float(centre) for centre in with_centre]
    assert pairs["optimum"].tolist() == [1.0 if centre else 2.0 for centre in with_centre]
    assert set(pairs["bottleneck"][~with_centre]) == {(0,)}


def test_lost_demand_may_lower_the_optimum():
    # Ten units between a and b, one between b and c: losing a and b leaves c with the small choice.
    servers = pd.DataFrame({"server": ["a", "b", "c"]})
    choices = pd.DataFrame({"option_1": ["a", "b"], "option_2": ["b", "c"], "demand": [10.0, 1.0]})
    table = lk.outages(lk.Fleet(servers, choices), pairs=True).set_index(["server", "second"])
    assert table.loc[("a", "b")].tolist() == [1.0, -4.0, 1.0, 10.0, 1, ("c",)]
    assert table.loc[("a", "c")].tolist() == [11.0, 6.0, 11.0, 0.0, 1, ("b",)]
    assert table.loc[("b", "c")].tolist() == [10.0, 5.0, 10.0, 1.0, 1, ("a",)]


def test_nothing_left_to_place():
    servers = pd.DataFrame({"server": ["a", "b", "idle"]})
    choices = pd.DataFrame({"option_1": ["a", "a"], "option_2": ["b", "idle"], "demand": [3.0, 0.0]})
    table = lk.outages(lk.Fleet(servers, choices), pairs=True).set_index(["server", "second"])
    assert table.loc[("a", "b")].tolist() == [0.0, -1.5, 0.0, 3.0, 0, ()]
    both = lk.outages(lk.fleet_from_graph(nx.path_graph(2)), pairs=True)
    assert both.iloc[0].tolist() == [0, 1, 0.0, -0.5, 0.0, 1.0, 0, ()]


def test_sizes_alone_agree_with_names():
    fleet = FLEETS["two options nearby"]()
    for pairs in (False, True):
        named = lk.outages(fleet, pairs=pairs)
        pd.testing.assert_frame_equal(
            named.drop(columns="bottleneck"), lk.outages(fleet, pairs=pairs, bottlenecks=False)
        )


def test_rows_do_not_depend_on_how_many_a_call_takes(monkeypatch):
    fleet = FLEETS["ring with chords"]()
    table = lk.outages(fleet, pairs=True)
    monkeypatch.setattr(module, "_NAMES", 100)
    pd.testing.assert_frame_equal(table, lk.outages(fleet, pairs=True), check_exact=True)


def test_an_unproved_row_is_solved_from_zero(monkeypatch, from_zero):
    fleet = FLEETS["up to four options nearby"]()
    table = lk.outages(fleet)
    rows = module.kept(module.lose_rows)

    def without_proof(function):
        def fill(*arguments):
            stop = rows(*arguments)
            arguments[18][:] = module.FAILED
            return stop

        return fill if function is module.lose_rows else kept(function)

    kept = module.kept
    monkeypatch.setattr(module, "kept", without_proof)
    again = lk.outages(fleet)
    assert len(from_zero) == len(fleet)
    from_zero.clear()
    pd.testing.assert_frame_equal(table, again, rtol=1e-12, atol=1e-12)


def drawn_with_replacement(n, options):
    """Return the options left of each draw, as sets."""
    return [set(draw) for draw in itertools.product(range(n), repeat=options)]


@pytest.mark.parametrize("pairs", [False, True], ids=["single", "pairs"])
@pytest.mark.parametrize(
    ("n", "options", "distinct"),
    [(2, 2, True), (5, 2, True), (6, 3, True), (4, 1, True), (2, 2, False), (5, 2, False), (4, 3, False)],
)
def test_complete_fleets_against_all_their_choices(n, options, distinct, pairs):
    rows = list(itertools.combinations(range(n), options)) if distinct else drawn_with_replacement(n, options)
    table = lk.outages(lk.complete(n, options, distinct), pairs=pairs)
    assert len(table) == math.comb(n, 1 + pairs)
    for row in table.itertuples():
        stays = [
            server for server in range(n) if server != row.server and not (pairs and server == row.second)
        ]
        choices = [[stays.index(server) for server in row if server in stays] for row in rows]
        choices = [row for row in choices if row]
        best, names = Fraction(0), ()
        if choices:
            best, union = BruteForce(choices, [1] * len(choices), [1] * len(stays)).fullest()
            names = tuple(server for place, server in enumerate(stays) if union >> place & 1)
        assert row.optimum == row.mean == float(best)
        assert row.extra_headroom == float(best - Fraction(len(rows), n))
        assert row.unplaced == len(rows) - len(choices)
        assert row.bottleneck == names
        assert row.bottleneck_servers == len(names)


@pytest.mark.parametrize("pairs", [False, True], ids=["single", "pairs"])
def test_complete_is_like_its_list(pairs):
    listed = lk.fleet_from_graph(nx.complete_graph(9))
    pd.testing.assert_frame_equal(
        lk.outages(lk.complete(9), pairs=pairs), lk.outages(listed, pairs=pairs), rtol=1e-13, atol=1e-13
    )


def test_large_complete_fleets():
    table = lk.outages(lk.complete(1_000_000), bottlenecks=False)
    assert len(table) == 1_000_000
    assert (table["optimum"] == float(Fraction(math.comb(10**6, 2), 10**6 - 1))).all()
    # More choices than a float can count.
    assert np.isinf(lk.outages(lk.complete(2_000, 1_000), bottlenecks=False)["optimum"]).all()


def test_names_of_any_kind():
    servers = pd.DataFrame({"server": pd.Series(["x", 7, "y"], dtype=object)})
    choices = pd.DataFrame(
        {"option_1": pd.Series(["x", 7], dtype=object), "option_2": [7, "y"]}, dtype=object
    )
    table = lk.outages(lk.Fleet(servers, choices))
    assert table["server"].tolist() == ["x", 7, "y"]
    assert table["bottleneck"].tolist() == [(7, "y"), ("x", "y"), ("x", 7)]
    assert [type(name) for name in table["bottleneck"][0]] == [int, str]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({"fleet": nx.path_graph(3)}, "fleet is Graph; give a labkit Fleet"),
        ({"pairs": 2}, "pairs is 2; give True or False"),
        ({"bottlenecks": "no"}, "bottlenecks is 'no'; give True or False"),
        (
            {"fleet": lk.torus(57, 57), "pairs": True},
            r"3,249 servers make 5,276,376 pairs, above the 5,0",
        ),
        ({"fleet": lk.complete(5_000), "pairs": True}, "12,497,500 pairs"),
        ({"fleet": lk.complete(5_000)}, r"24,995,000 names or more, above .* pass bottlenecks=False"),
    ],
)
def test_refusals(arguments, words):
    with pytest.raises(lk.InputError, match=words):
        lk.outages(**{"fleet": lk.ring(5), **arguments})


def test_names_are_counted_while_going(monkeypatch):
    monkeypatch.setattr(module, "MOST_NAMES", 20 * 19 - 1)
    with pytest.raises(lk.InputError, match=r"380 names or more, above the 379 .* bottlenecks=False"):
        lk.outages(lk.ring(20))
    assert len(lk.outages(lk.ring(20), bottlenecks=False)) == 20
    # Rows that keep the bottleneck of the whole fleet share one tuple, counted once.
    parts = nx.disjoint_union(nx.complete_graph(4), nx.path_graph(100))
    table = lk.outages(lk.fleet_from_graph(parts))
    assert len({id(names) for names in table["bottleneck"][4:]}) == 1


def test_amounts_too_far_apart_to_prove():
    # Twenty-one orders of magnitude inside one block.
    rows = [[0, 1], [2, 0], [2, 0], [1, 0], [2, 1]]
    fleet = fleet_of(rows, [1e2, 1e-10, 1e-12, 1e5, 1e-15], [1e-12, 1e9, 1e-6])
    with pytest.raises(
        lk.InputError, match=r"so far apart that its optimum, about 0\.0001001, cannot be proved"
    ):
        lk.outages(fleet)


def test_a_large_bottleneck_is_proved_however_rounding_falls():
    # Fifteen thousand servers in the bottleneck: the last places of all may gather on one of them.
    fleet = lk.ring_with_chords(50_000, 5_000, rng=1)
    inside = fair_profile(fleet).bottleneck[[0, 5_000]]
    table = lk.outages(fleet, servers=[*inside, 2], bottlenecks=False)
    for row in table.itertuples():
        profile = fair_profile(left_over(fleet, [row.server]))
        assert row.optimum == pytest.approx(profile.optimum, rel=1e-12)
        assert row.bottleneck_servers == len(profile.bottleneck)


def test_only_some_servers_or_pairs_of_them():
    fleet = lk.ring_with_chords(12, 4, rng=2)
    every, pairs = lk.outages(fleet), lk.outages(fleet, pairs=True)
    some = lk.outages(fleet, servers=[7, 2, 9])
    expected = every[every["server"].isin([2, 7, 9])].reset_index(drop=True)
    pd.testing.assert_frame_equal(some, expected)
    both = pairs["server"].isin([2, 7, 9]) & pairs["second"].isin([2, 7, 9])
    found = lk.outages(fleet, servers=pd.Series([7, 2, 9]), pairs=True)
    pd.testing.assert_frame_equal(found, pairs[both].reset_index(drop=True))
    assert len(lk.outages(lk.complete(50), servers=[3])) == 1


@pytest.mark.parametrize(
    ("servers", "refusal"),
    [
        ([], "servers is empty; name at least one"),
        ([1, 99], "servers holds 99, which names no server"),
        (["1"], r"servers holds '1', which names no server; there is a server 1: text and whole numbers"),
        ([4, 4], "servers names 4 twice; name each server once"),
        (99, "servers holds 99, which names no server"),
    ],
)
def test_servers_that_are_not_there_are_refused(servers, refusal):
    with pytest.raises(lk.InputError, match=refusal):
        lk.outages(lk.ring(6), servers=servers)


def test_pairs_need_two_servers_and_a_table_is_no_list_of_names():
    with pytest.raises(lk.InputError, match="pairs is True and servers holds 1; name at least two"):
        lk.outages(lk.ring(6), servers=[3], pairs=True)
    with pytest.raises(lk.InputError, match="servers is a table; give names"):
        lk.outages(lk.ring(6), servers=lk.ring(6).servers)
