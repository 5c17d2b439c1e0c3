from collections import Counter

import networkx as nx
import numpy as np
import pytest
from hypothesis import given

import labkit as lk
from tests.fleet.strategies import tables


def as_multiset(fleet):
    choices = fleet.choices
    rows = zip(choices["option_1"], choices["option_2"], choices["demand"], strict=True)
    return Counter(
        (frozenset([(type(one), one), (type(other), other)]), amount) for one, other, amount in rows
    )


@given(tables(most_options=2))
def test_there_and_back(drawn):
    fleet = lk.Fleet(drawn[0], drawn[1])
    graph = fleet.to_networkx()
    pairs = [frozenset(row) for row in fleet.options.tolist()]
    assert graph.is_multigraph() == (len(set(pairs)) < len(pairs))
    again = lk.fleet_from_graph(graph)
    assert again.servers.astype({"server": object}).equals(fleet.servers.astype({"server": object}))
    assert as_multiset(again) == as_multiset(fleet)


def test_attributes_come_along_and_others_do_not_count():
    graph = nx.Graph(name="x")
    graph.add_node("a", capacity=2, colour="red")
    graph.add_edge("a", "b", demand=3, weight=9)
    graph.add_edge("b", "c")
    graph.add_node("alone")
    fleet = lk.fleet_from_graph(graph)
    assert fleet.servers.to_numpy().tolist() == [["a", 2], ["b", 1], ["c", 1], ["alone", 1]]
    assert fleet.choices.to_numpy().tolist() == [["a", "b", 3], ["b", "c", 1]]
    assert nx.utils.graphs_equal(fleet.to_networkx(), lk.fleet_from_graph(fleet.to_networkx()).to_networkx())


def test_numpy_node_names_are_whole_numbers():
    fleet = lk.fleet_from_graph(nx.Graph([(np.int64(4), 7), (7, np.int32(9))]))
    assert fleet.names.dtype == np.int64
    assert fleet.names.tolist() == [4, 7, 9]


def with_edge(*edge, kind=nx.Graph, **attributes):
    graph = kind()
    graph.add_edge(*edge, **attributes)
    return graph


def with_capacity(value):
    graph = nx.path_graph(3)
    graph.nodes[1]["capacity"] = value
    return graph


@pytest.mark.parametrize(
    ("graph", "words"),
    [
        ([(1, 2)], "graph is a list; give an undirected networkx graph"),
        (with_edge(1, 2, kind=nx.DiGraph), "graph is directed"),
        (with_edge(1, 2, kind=nx.MultiDiGraph), "graph is directed"),
        (nx.Graph(), "graph has no nodes"),
        (nx.empty_graph(3), "graph has no edges"),
        (nx.grid_graph((2, 2)), r"graph has the node \(0, 0\); name nodes by text or whole numbers"),
        (with_edge(True, 5), "graph has the node True"),
        (with_edge("a", "a"), r"graph edge \('a', 'a'\): server 'a' is an option twice"),
        (with_edge("a", "b", demand=-1), r"graph edge \('a', 'b'\): demand is -1; "),
        (with_edge("a", "b", demand="much"), r"graph edge \('a', 'b'\): demand is 'much'; "),
        (with_edge("a", "b", demand=None), r"graph edge \('a', 'b'\): demand is blank; "),
        (with_edge("a", "b", demand=0), "graph: every demand is 0"),
        (with_capacity(0), "graph node 1: capacity is 0; give a finite number above 0"),
        (with_capacity([1]), r"graph node 1: capacity is \[1\]; "),
    ],
)
def test_a_graph_that_is_no_fleet_is_refused(graph, words):
    with pytest.raises(lk.InputError, match=words):
        lk.fleet_from_graph(graph)


def test_fleets_that_are_no_graph_are_refused():
    fleet = lk.ring(4)
    wide = fleet.choices.drop(columns="demand").assign(option_3=[None, 3, None, None])
    with pytest.raises(lk.InputError, match="choices row 2 has three or more options"):
        lk.Fleet(fleet.servers, wide).to_networkx()
    for large in (lk.complete(2_001), lk.complete(5, options=3), lk.complete(5, distinct=False)):
        with pytest.raises(lk.InputError, match="a complete fleet is a graph only with two distinct options"):
            large.to_networkx()
