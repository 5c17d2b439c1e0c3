"""The optimum against published values, brute force over server sets, and laws."""

import itertools

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import labkit as lk
from labkit.survey.optimum import confined_ratio, evenly_balanced, optimum_if_practical, solve
from tests.published.counties import county_graph


def unweighted(graph):
    """Return the graph without edge weights, nodes as text."""
    plain = nx.Graph()
    plain.add_nodes_from(map(str, graph))
    plain.add_edges_from((str(u), str(v)) for u, v in graph.edges)
    return plain


@pytest.mark.parametrize(
    ("graph", "value"),
    [
        (nx.karate_club_graph(), 42 / 16),
        (nx.petersen_graph(), 1.5),
        (nx.lollipop_graph(6, 4), 2.5),
        (nx.barbell_graph(5, 3), 2.0),
        (nx.florentine_families_graph(), 1.5),
        (nx.les_miserables_graph(), 124 / 23),
        (nx.davis_southern_women_graph(), 81 / 28),
    ],
    ids=["karate", "petersen", "lollipop", "barbell", "florentine", "miserables", "davis"],
)
def test_library_graphs(graph, value):
    # Unit demand and capacity; densest-subgraph densities of networkx's built-in graphs (recomputed).
    fleet = lk.fleet_from_graph(unweighted(graph))
    assert optimum_if_practical(fleet) * len(fleet.options) == pytest.approx(value, rel=1e-9)


def test_county_contiguity():
    # Densest part of the contiguity graph of US counties; counties from the bokeh-sampledata package.
    fleet = lk.fleet_from_graph(county_graph())
    assert optimum_if_practical(fleet) * len(fleet.options) == pytest.approx(2.900744, abs=5e-7)


@settings(max_examples=60)
@given(st.data())
def test_brute_force_over_all_server_sets(data):
    size = data.draw(st.integers(2, 6))
    rows = data.draw(
        st.lists(
            st.lists(st.integers(0, size - 1), min_size=2, max_size=min(3, size), unique=True),
            min_size=1,
            max_size=8,
        )
    )
    choices = pd.DataFrame([row + [None] * (3 - len(row)) for row in rows], dtype="Int64")
    choices.columns = ["option_1", "option_2", "option_3"]
    choices["demand"] = data.draw(
        st.lists(st.sampled_from([0.0, 1.0, 2.5]), min_size=len(rows), max_size=len(rows)).filter(any)
    )
    servers = pd.DataFrame({"server": range(size)})
    servers["capacity"] = data.draw(st.lists(st.sampled_from([0.5, 1.0, 3.0]), min_size=size, max_size=size))
    fleet = lk.Fleet(servers, choices)
    demand, capacity = choices["demand"].to_numpy(float), servers["capacity"].to_numpy(float)
    best = max(
        confined_ratio(fleet.options, demand, capacity, np.isin(np.arange(size), chosen))
        for count in range(1, size + 1)
        for chosen in itertools.combinations(range(size), count)
    )
    assert optimum_if_practical(fleet) * demand.sum() == pytest.approx(best, rel=1e-9)
    assert solve(fleet) * demand.sum() == pytest.approx(best, rel=1e-9)


@settings(max_examples=40)
@given(st.data())
def test_the_optimum_knows_no_unit(data):
    # Capacities in bytes as well as in tonnes, and spread over some orders of magnitude.
    size = 6
    rows = data.draw(
        st.lists(
            st.lists(st.integers(0, size - 1), min_size=2, max_size=2, unique=True), min_size=2, max_size=9
        )
    )
    choices = pd.DataFrame(rows, columns=["option_1", "option_2"])
    choices["demand"] = data.draw(st.lists(st.floats(0.1, 100), min_size=len(rows), max_size=len(rows)))
    base = np.array(data.draw(st.lists(st.floats(0.1, 100), min_size=size, max_size=size)))
    demand = choices["demand"].to_numpy() / choices["demand"].sum()
    unit = 10.0 ** data.draw(st.integers(-12, 15))
    fleet = lk.Fleet(pd.DataFrame({"server": range(size), "capacity": base * unit}), choices)
    best = max(
        confined_ratio(fleet.options, demand, base, np.isin(np.arange(size), chosen))
        for count in range(1, size + 1)
        for chosen in itertools.combinations(range(size), count)
    )
    assert optimum_if_practical(fleet) * unit == pytest.approx(best, rel=1e-9)


@pytest.mark.parametrize(
    "fleet", [lk.ring(7), lk.torus(3, 4), lk.hypercube(3), lk.complete(9), lk.random_regular(10, 3, rng=1)]
)
def test_regular_families_are_balanced(fleet):
    assert optimum_if_practical(fleet) == 1 / len(fleet)
    if fleet.implicit is None:
        assert evenly_balanced(fleet)
        assert solve(fleet) == pytest.approx(1 / len(fleet), rel=1e-9)


def test_a_large_irregular_fleet_has_no_excess_rather_than_a_wrong_one(monkeypatch):
    monkeypatch.setattr("labkit.survey.optimum.PRACTICAL_CHOICES", 10)
    fleet = lk.ring_with_chords(20, 3, rng=1)
    table = lk.place(fleet, "least-loaded", tasks=100, rng=1).measures
    assert table["excess"].isna().all()
    assert table["gap"].notna().all()
