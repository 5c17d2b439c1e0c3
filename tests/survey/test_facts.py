"""The survey as a user gets it: facts, profile, split, and what is refused."""

import itertools
import math
import pickle
import sys

import networkx as nx
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.survey.facts import MEANINGS


def two_parts():
    """Return a lake of two parts: a heavy pair beside a path, and a lone depot without work."""
    servers = pd.DataFrame(
        {"server": ["quay", "mill", "ford", "weir", "barn", "shed"], "capacity": [10, 10, 20, 10, 30, 5]}
    )
    choices = pd.DataFrame(
        {
            "option_1": ["quay", "ford", "weir", "ford", "quay"],
            "option_2": ["mill", "weir", "barn", "barn", "ford"],
            "option_3": [None, None, None, "weir", None],
            "demand": [30.0, 6.0, 2.0, 4.0, 0.0],
        }
    )
    return lk.Fleet(servers, choices)


def facts_of(fleet):
    table = lk.survey(fleet).table()
    assert table["fact"].tolist() == list(MEANINGS)
    assert table["meaning"].str.len().min() > 10
    return dict(zip(table["fact"], table["value"], strict=True))


def test_facts_of_a_fleet_worked_by_hand():
    facts = facts_of(two_parts())
    assert facts["servers"] == 6
    assert facts["choices"] == 5
    assert facts["total_demand"] == 42
    assert facts["total_capacity"] == 85
    assert facts["optimum"] == 1.5  # 30 units confined to quay and mill
    assert facts["mean"] == pytest.approx(42 / 85)
    assert facts["optimum_over_mean"] == pytest.approx(1.5 * 85 / 42)
    assert facts["balanceable"] is False
    assert facts["bottleneck"] == ("quay", "mill")
    assert facts["bottleneck_servers"] == 2
    assert facts["bottleneck_capacity_share"] == pytest.approx(20 / 85)
    assert facts["bottleneck_demand_share"] == pytest.approx(30 / 42)
    assert facts["levels"] == 3  # 1.5; 12 units on 60; nothing
    assert facts["components"] == 3
    assert facts["servers_without_demand"] == 1
    assert (facts["fewest_choices"], facts["most_choices"]) == (0, 3)
    assert facts["connectivity"] == 0
    assert facts["weakest_cut"] == ("shed",)
    assert facts["algebraic_connectivity"] == 0
    assert abs(facts["proof"]) <= 1e-9


def test_profile_has_one_row_a_server():
    profile = lk.survey(two_parts()).profile
    assert profile["server"].tolist() == ["quay", "mill", "ford", "weir", "barn", "shed"]
    assert profile["fair_utilisation"].tolist() == pytest.approx([1.5, 1.5, 0.2, 0.2, 0.2, 0.0])
    assert profile["fair_load"].tolist() == pytest.approx([15, 15, 4, 2, 6, 0])
    assert profile["level"].tolist() == [1, 1, 2, 2, 2, 3]
    assert profile["component"].tolist() == [1, 1, 2, 2, 2, 3]
    assert profile["choices"].tolist() == [1, 1, 2, 3, 2, 0]
    assert profile["demand"].tolist() == [30, 30, 10, 12, 6, 0]
    assert profile["bottleneck"].tolist() == [True, True, False, False, False, False]


def test_split_reaches_the_profile():
    best = lk.survey(two_parts())
    split = best.split
    shares = split.filter(like="share_").to_numpy()
    assert np.nansum(shares, axis=1) == pytest.approx(1)
    assert np.isnan(shares[:, 2]).tolist() == [True, True, True, False, True]
    assert shares[4].tolist()[:2] == [0.5, 0.5]  # no demand: evenly
    load = dict.fromkeys(best.profile["server"], 0.0)
    for _, row in split.iterrows():
        for place in (1, 2, 3):
            if isinstance(row[f"option_{place}"], str):
                load[row[f"option_{place}"]] += row["demand"] * row[f"share_{place}"]
    assert list(load.values()) == pytest.approx(best.profile["fair_load"].tolist(), abs=1e-9)


def test_whole_fleets_of_one_level():
    facts = facts_of(lk.torus(4, 5))
    assert facts["balanceable"] is True
    assert facts["optimum"] == facts["mean"] == 2.0
    assert facts["bottleneck_servers"] == 20
    assert facts["connectivity"] == 4
    assert facts["levels"] == 1


@pytest.mark.parametrize(("options", "distinct"), [(2, True), (3, True), (2, False), (3, False)])
def test_unlisted_choices_have_the_facts_of_their_list(options, distinct):
    size = 5
    law = facts_of(lk.complete(size, options=options, distinct=distinct))
    rows = (
        [list(c) for c in itertools.combinations(range(size), options)]
        if distinct
        else [sorted(set(c)) for c in itertools.product(range(size), repeat=options)]
    )
    # A draw of one and the same server cannot be listed as a choice; it is loaded evenly and joins nothing.
    listed = [row for row in rows if len(row) > 1]
    table = pd.DataFrame([row + [None] * (options - len(row)) for row in listed], dtype="Int64")
    table.columns = [f"option_{place + 1}" for place in range(options)]
    facts = facts_of(lk.Fleet(pd.DataFrame({"server": range(size)}), table))
    alone = len(rows) - len(listed)
    assert law["choices"] == len(rows)
    assert law["total_demand"] == facts["total_demand"] + alone
    assert law["optimum"] == pytest.approx(facts["optimum"] + alone / size)
    assert law["most_choices"] == facts["most_choices"] + alone / size
    for fact in ("connectivity", "algebraic_connectivity"):
        assert law[fact] == pytest.approx(facts[fact]), fact
    assert law["components"] == facts["components"] == 1


def test_a_law_of_any_size_is_surveyed():
    best = lk.survey(lk.complete(10**6, options=3))
    assert best.optimum == pytest.approx(math.comb(10**6, 3) / 10**6)
    assert best.balanceable


def test_numbered_servers_keep_their_numbers():
    best = lk.survey(lk.fleet_from_graph(nx.path_graph(4)))
    assert best.bottleneck == (0, 1, 2, 3)
    assert repr(best) == "<survey of 4 servers: optimum 0.75 (= mean: balanceable)>"


@pytest.mark.parametrize("given", [None, "demo", pd.DataFrame()])
def test_what_is_no_fleet_is_refused(given):
    with pytest.raises(lk.InputError, match=r"^fleet is \w+; give a labkit Fleet"):
        lk.survey(given)


def test_numbers_too_far_apart_are_refused_not_guessed():
    # Twenty-one orders of magnitude inside one block: its split cannot be balanced in double precision.
    servers = pd.DataFrame({"server": ["a", "b", "c"], "capacity": [1e-12, 1e9, 1e-6]})
    ends = [("a", "b", 1e2), ("c", "a", 1e-10), ("c", "a", 1e-12), ("b", "a", 1e5), ("c", "b", 1e-15)]
    fleet = lk.Fleet(servers, pd.DataFrame(ends, columns=["option_1", "option_2", "demand"]))
    with pytest.raises(
        lk.InputError, match=r"so far apart that its optimum, about 0\.0001001, cannot be proved"
    ):
        lk.survey(fleet)
    table = lk.place(fleet, "least-loaded", tasks=100, rng=1).measures
    assert table["excess"].isna().all()
    assert table["gap"].notna().all()


def test_the_function_can_be_sent_to_other_processes_whoever_imports_first():
    import labkit.survey.outages  # noqa: F401  (binds the room to the name)

    for kept in (lk.survey, sys.modules["labkit.survey"]):
        assert pickle.loads(pickle.dumps(kept))(lk.ring(4)).optimum == 1.0


def test_an_idle_server_makes_a_fleet_unbalanceable_however_small_it_is():
    servers = pd.DataFrame({"server": ["a", "b", "c"], "capacity": [1e10, 1e10, 1.0]})
    best = lk.survey(lk.Fleet(servers, pd.DataFrame({"option_1": ["a"], "option_2": ["b"], "demand": [1e9]})))
    assert not best.balanceable
    assert best.bottleneck == ("a", "b")
