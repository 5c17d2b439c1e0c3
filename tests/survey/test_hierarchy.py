"""Nested server sets with connected halves, flows that touch one difference each, and their strengths."""

import sys

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import labkit as lk
from labkit.survey.efficiency import efficiency
from labkit.survey.hierarchy import SMALL, hierarchy
from labkit.survey.orthogonal_flows import electrical_flow, least_congestion, orthogonal_flows
from labkit.survey.strengths import equal_strengths, optimised_strengths, steerable_pairs, strengths_with_coin


@pytest.fixture(params=["partitioner", "none"], autouse=True)
def with_and_without_a_partitioner(request, monkeypatch):
    if request.param == "none":
        monkeypatch.setitem(sys.modules, "pymetis", None)
    else:
        pytest.importorskip("pymetis")


def graph_of(size, extra, seed):
    """Return ends and weights of a random tree with more edges, some parallel, and unequal capacities."""
    rng = np.random.default_rng(seed)
    tree = nx.random_labeled_tree(size, seed=seed)
    edges = [*tree.edges, *rng.integers(0, size, (extra, 2)).tolist()]
    edges = np.array([edge for edge in edges if edge[0] != edge[1]])
    return edges[:, 0], edges[:, 1], rng.uniform(0.2, 3.0, len(edges)), rng.uniform(0.5, 4.0, size)


def edges_of(fleet):
    return fleet.options[:, 0].astype(np.int64), fleet.options[:, 1].astype(np.int64)


def sets_of(tree):
    for low, middle, high in zip(tree.low, tree.middle, tree.high, strict=True):
        yield tree.order[low:middle], tree.order[middle:high]


def check_tree(tree, size, one, other):
    graph = nx.Graph(zip(one.tolist(), other.tolist(), strict=True))
    assert sorted(tree.order.tolist()) == list(range(size))
    whole = {frozenset(part) for part in nx.connected_components(graph)}
    halves = set()
    for first, second in sets_of(tree):
        both = frozenset(first.tolist()) | frozenset(second.tolist())
        assert both in whole or both in halves
        for half in (first, second):
            assert nx.is_connected(graph.subgraph(half.tolist()))
            halves.add(frozenset(half.tolist()))
    assert len(tree.low) == sum(len(part) - 1 for part in whole)


@settings(max_examples=25, deadline=None)
@given(size=st.integers(2, 40), extra=st.integers(0, 60), seed=st.integers(0, 10**6))
def test_sets_are_parted_into_connected_halves(size, extra, seed):
    one, other, weight, _ = graph_of(size, extra, seed)
    check_tree(hierarchy(size, one, other, weight), size, one, other)


@pytest.mark.parametrize(
    ("fleet", "least"),
    [(lk.ring(200), 0.48), (lk.torus(14, 14), 0.35), (lk.ladder(90), 0.45), (lk.hypercube(7), 0.3)],
    ids=["ring", "torus", "ladder", "hypercube"],
)
def test_large_sets_are_halved_evenly(fleet, least):
    one, other = edges_of(fleet)
    tree = hierarchy(fleet.size, one, other, np.ones(one.size))
    check_tree(tree, fleet.size, one, other)
    size, smaller = tree.high - tree.low, np.minimum(tree.middle - tree.low, tree.high - tree.middle)
    assert (smaller[size > SMALL] >= least * size[size > SMALL]).all()


def test_several_parts_and_single_servers():
    one, other = np.array([0, 1, 5, 6, 7]), np.array([1, 2, 6, 7, 5])
    tree = hierarchy(9, one, other, np.ones(5))
    check_tree(tree, 9, one, other)
    assert tree.level.tolist() == [0, 0, 1, 1]


def test_a_hub_is_refused():
    leaf = np.arange(1, 200)
    with pytest.raises(lk.InputError, match="cannot be halved evenly into connected parts"):
        hierarchy(200, np.zeros(199, np.int64), leaf, np.ones(199))


def changes(tree, flows, one, other, size, capacity):
    """Return how much each flow (column) changes the difference of mean utilisations of each set (row)."""
    moved = np.zeros((size, len(tree.low)))
    np.add.at(moved, (other[flows.edge], flows.owner), flows.amount)
    np.add.at(moved, (one[flows.edge], flows.owner), -flows.amount)
    apart = np.zeros((len(tree.low), size))
    for row, (first, second) in enumerate(sets_of(tree)):
        apart[row, first] = 1.0 / capacity[first].sum()
        apart[row, second] = -1.0 / capacity[second].sum()
    return apart @ moved


@settings(max_examples=25, deadline=None)
@given(size=st.integers(2, 60), extra=st.integers(0, 60), seed=st.integers(0, 10**6))
def test_a_flow_changes_the_difference_of_its_set_and_no_other(size, extra, seed):
    one, other, weight, capacity = graph_of(size, extra, seed)
    tree = hierarchy(size, one, other, weight)
    flows = orthogonal_flows(tree, one, other, weight, capacity)
    change = changes(tree, flows, one, other, size, capacity)
    wanted = [-1 / capacity[first].sum() - 1 / capacity[second].sum() for first, second in sets_of(tree)]
    assert change == pytest.approx(np.diag(wanted), abs=1e-9 * np.abs(wanted).max())
    # And it stays inside the set.
    for row, (first, second) in enumerate(sets_of(tree)):
        ends = flows.edge[flows.owner == row]
        assert np.isin(np.concatenate([one[ends], other[ends]]), np.concatenate([first, second])).all()


@settings(max_examples=25, deadline=None)
@given(size=st.integers(2, 40), extra=st.integers(0, 40), seed=st.integers(0, 10**6))
def test_strengths_stay_within_the_authority(size, extra, seed):
    one, other, authority, capacity = graph_of(size, extra, seed)
    authority *= size / authority.sum()
    tree = hierarchy(size, one, other, authority)
    flows = orthogonal_flows(tree, one, other, authority, capacity)
    part, weight = np.zeros(len(tree.low), np.int64), np.ones(len(tree.low))
    found = [
        equal_strengths(flows, authority, part),
        strengths_with_coin(flows, authority, weight, part),
        *(
            optimised_strengths(flows, authority, authority * share, weight, part, np.array([reward]))
            for share, reward in ((1.0, 1.0), (0.3, 0.5))
        ),
    ]
    for strength in found:
        use = np.bincount(flows.edge, strength[flows.owner] * np.abs(flows.amount), authority.size)
        assert (strength >= 0).all()
        assert (use <= authority * (1 + 1e-9)).all()
    # The equal ones are as large as they can be.
    use = np.bincount(flows.edge, found[0][flows.owner] * np.abs(flows.amount), authority.size)
    assert np.max(use / authority) == pytest.approx(1.0)


def efficiency_of(fleet):
    pairs = steerable_pairs(fleet)
    ends = pairs.one, pairs.other, pairs.authority
    tree = hierarchy(fleet.size, *ends)
    part = np.zeros(len(tree.low), np.int64)
    flows = orthogonal_flows(tree, *ends, pairs.capacity)
    return efficiency(tree, flows, part, *ends, pairs.capacity)[0]


def test_efficiency_of_known_networks():
    # By dense algebra it is 0.80 on rings of 16 to 1,024 servers.
    assert efficiency_of(lk.ring(64)) == pytest.approx(0.8, abs=0.03)
    assert efficiency_of(lk.fleet_from_graph(nx.path_graph(40))) == 1.0
    assert efficiency_of(lk.hypercube(6)) < 0.35
    assert efficiency_of(lk.random_regular(300, 3, rng=1)) < 0.4


def test_efficiency_is_a_ratio_of_energies():
    # All energies by dense algebra: the mean over the sets of how far least-loaded's field moves apart.
    fleet = lk.torus(6, 9)
    pairs = steerable_pairs(fleet)
    tree = hierarchy(fleet.size, pairs.one, pairs.other, pairs.authority)
    flows = orthogonal_flows(tree, pairs.one, pairs.other, pairs.authority, pairs.capacity)
    laplacian = np.zeros((fleet.size, fleet.size))
    np.add.at(laplacian, (pairs.one, pairs.other), -pairs.authority)
    laplacian += laplacian.T
    field = np.linalg.pinv(laplacian - np.diag(laplacian.sum(axis=0)))
    free = inside = 0.0
    for index, (first, second) in enumerate(sets_of(tree)):
        apart = np.zeros(fleet.size)
        apart[first], apart[second] = 1.0 / first.size, -1.0 / second.size
        weight = first.size * second.size / (first.size + second.size)
        free += weight * apart @ field @ apart
        here = flows.owner == index
        inside += weight * np.sum(flows.amount[here] ** 2 / pairs.authority[flows.edge[here]])
    # The small sets' flows are not electrical, so cost a little more.
    assert efficiency_of(fleet) == pytest.approx(free / inside, abs=0.05)


def test_least_congestion_is_no_more_than_the_electrical_flow_has():
    for seed in range(10):
        one, other, authority, _ = graph_of(9, 8, seed)
        gain = np.random.default_rng(seed).normal(size=9)
        gain -= gain.mean()
        both = [way(one, other, authority, gain) for way in (least_congestion, electrical_flow)]
        for flow in both:
            assert np.bincount(other, flow, 9) - np.bincount(one, flow, 9) == pytest.approx(gain)
        most = [np.max(np.abs(flow) / authority) for flow in both]
        assert most[0] <= most[1] * 1.01
        work = [np.sum(flow**2 / authority) for flow in both]
        assert work[1] <= work[0] * (1 + 1e-9)


def test_authority_is_what_the_static_split_leaves():
    # A path of three equal servers: the outer ones get two thirds of their choice, the middle one the rest.
    pairs = steerable_pairs(lk.fleet_from_graph(nx.path_graph(3)))
    assert pairs.authority == pytest.approx(1.5 * 2 / 3)
    # Regular fleets have all of the demand.
    assert steerable_pairs(lk.ring(7)).authority == pytest.approx(1.0)


def test_nothing_is_steered_between_levels():
    graph = nx.disjoint_union(nx.complete_graph(6), nx.path_graph(4))
    graph.add_edge(0, 6)
    pairs = steerable_pairs(lk.fleet_from_graph(graph))
    assert not ((pairs.one < 6) != (pairs.other < 6)).any()


def test_three_options_share_their_demand_among_the_pairs():
    import pandas as pd

    choices = pd.DataFrame(
        [[0, 1, 2], [2, 3, 0], [1, 2, 3], [3, 0, 1]], columns=[f"option_{k}" for k in (1, 2, 3)]
    )
    pairs = steerable_pairs(lk.Fleet(pd.DataFrame({"server": range(4)}), choices))
    assert np.bincount(pairs.choice, pairs.authority) == pytest.approx(1.0)
