"""How much a fleet can serve at all, worked by hand and against the survey."""

import networkx as nx
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.survey.stability import even_split_limit, refuse_unstable


def fleet_of(capacity, pairs, demand=None):
    servers = pd.DataFrame({"server": list("abcdef")[: len(capacity)], "capacity": capacity})
    choices = pd.DataFrame(pairs, columns=["option_1", "option_2"])
    if demand is not None:
        choices["demand"] = demand
    return lk.Fleet(servers, choices)


@pytest.mark.parametrize(
    "fleet",
    [
        lk.ring(12),
        lk.torus(4, 5),
        lk.complete(30),
        lk.complete(30, options=3),
        lk.fleet_from_graph(nx.star_graph(1)),
    ],
    ids=repr,
)
def test_balanceable_fleets_can_be_used_up(fleet):
    assert lk.stability_limit(fleet) == pytest.approx(1.0, rel=1e-12)
    assert lk.stability_limit(fleet) <= 1.0


@pytest.mark.parametrize(
    ("capacity", "pairs", "demand", "limit", "even", "fullest"),
    [
        # all work on a and b: half of four servers
        ([1, 1, 1, 1], ["ab"], [5.0], 1 / 2, 1 / 2, "a"),
        # a and b, half of the capacity, bear 3 in 4
        ([1, 1, 1, 1], ["ab", "cd"], [3.0, 1.0], 2 / 3, 2 / 3, "a"),
        # b gets half of ab and half of bc without looking, 1/2 of all; with care each gets a third
        ([1, 1, 1], ["ab", "bc"], None, 1.0, 2 / 3, "b"),
        # capacity that fits the work: a path whose middle is as large as both ends
        ([1, 2, 1], ["ab", "bc"], None, 1.0, 3 / 4, "b"),
        # a large server that little work reaches
        ([1, 1, 8], ["ab", "bc"], [9.0, 1.0], 2 / 9, 1 / (4.5 + 1 / 9), "b"),
    ],
)
def test_limits_by_hand(capacity, pairs, demand, limit, even, fullest):
    fleet = fleet_of(capacity, [tuple(pair) for pair in pairs], demand)
    assert lk.stability_limit(fleet) == pytest.approx(limit, rel=1e-9)
    found, position = even_split_limit(fleet)
    assert found == pytest.approx(even, rel=1e-9)
    assert fleet.names[position] == fullest
    # units of capacity and demand cancel
    scaled = fleet_of(
        np.array(capacity) * 3.5,
        [tuple(pair) for pair in pairs],
        None if demand is None else np.array(demand) * 0.2,
    )
    assert lk.stability_limit(scaled) == pytest.approx(limit, rel=1e-9)
    assert even_split_limit(scaled)[0] == pytest.approx(found, rel=1e-9)


def test_limit_is_one_over_the_optimum_of_the_survey():
    fleet = lk.read_fleet("experiments/demo")
    survey = lk.survey(fleet)
    assert lk.stability_limit(fleet) == pytest.approx(survey.mean / survey.optimum, rel=1e-9)
    assert lk.stability_limit(fleet) < 1


@pytest.mark.parametrize("seed", range(5))
def test_no_split_needs_more_and_the_best_set_needs_as_much(seed):
    """Against all sets of servers: capacity of a set over the work that can go nowhere else."""
    draws = np.random.default_rng(seed)
    graph = nx.gnm_random_graph(6, 8, seed=seed)
    pairs = [("abcdef"[one], "abcdef"[other]) for one, other in graph.edges]
    capacity, demand = draws.integers(1, 5, 6), draws.integers(1, 9, 8)
    fleet = fleet_of(capacity, pairs, demand.astype(float))
    least = np.inf
    for number in range(1, 64):
        inside = [number >> server & 1 for server in range(6)]
        confined = sum(
            weight
            for (one, other), weight in zip(graph.edges, demand, strict=True)
            if inside[one] & inside[other]
        )
        if confined:
            least = min(least, float(capacity @ inside) / confined)
    expected = least * demand.sum() / capacity.sum()
    assert lk.stability_limit(fleet) == pytest.approx(expected, rel=1e-9)
    assert even_split_limit(fleet)[0] <= lk.stability_limit(fleet) * (1 + 1e-12)


def test_refusals_name_limit_and_bottleneck():
    fleet = fleet_of([1] * 6, [("a", "b"), ("b", "c"), ("c", "d"), ("d", "e"), ("e", "f")], [9.0, 9, 9, 9, 1])
    limit = lk.stability_limit(fleet)
    refuse_unstable(fleet, limit * 0.999, even_split=False)
    with pytest.raises(lk.InputError, match=r"set by 'a', 'b', 'c', 'd' and 1 more; give less, add capacity"):
        refuse_unstable(fleet, limit, even_split=False)
    with pytest.raises(lk.InputError, match=r"limit with servers up 99 % of the time is"):
        refuse_unstable(fleet, limit * 0.995, even_split=False, availability=0.99)
    own, _ = even_split_limit(fleet)
    refuse_unstable(fleet, own * 0.999, even_split=True)
    with pytest.raises(lk.InputError, match=r"one-choice overloads server 'b' from .* on \(other rules: "):
        refuse_unstable(fleet, own, even_split=True)
    # A server in the middle gets half of two choices, and when it is up all of a choice whose other end is
    # down: per unit of work (u²/2 + u(1 − u) + (1 − u)²/2) / u = 1/(2u) of each choice's half.
    path = fleet_of([1, 1, 1], [("a", "b"), ("b", "c")])
    refuse_unstable(path, 2 / 3 * 0.7 * 0.999, even_split=True, availability=0.7)
    with pytest.raises(
        lk.InputError,
        match=r"server 'b' from 0\.466667 on with servers up 70 % of the time \(other rules: 0\.7",
    ):
        refuse_unstable(path, 2 / 3 * 0.7 * 1.001, even_split=True, availability=0.7)
    # Requeued work must be done while it is up: 0.7/2 + 0.3 of each choice.
    own, _ = even_split_limit(path, 0.7, requeued=True)
    assert own == pytest.approx(1 / (3 * 0.65))
    with pytest.raises(lk.InputError, match="overloads server 1 from"):
        refuse_unstable(lk.fleet_from_graph(nx.path_graph(3)), 0.67, even_split=True)
    with pytest.raises(lk.InputError, match="fleet is str"):
        lk.stability_limit("ring")
