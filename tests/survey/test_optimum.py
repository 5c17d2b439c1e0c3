"""The optimum for any amount of work, as the engine uses it, and the built-in graphs of a library."""

import networkx as nx
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.survey.demand import evenly_balanced, total_demand
from labkit.survey.fair import fair_profile, top_of_profile
from labkit.survey.optimum import optimum_of_unit_work
from tests.survey.oracles import fleet_of, linear_program


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
    assert optimum_of_unit_work(fleet) * len(fleet.options) == pytest.approx(value, rel=1e-12)
    assert lk.survey(fleet).optimum == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize(
    "fleet", [lk.ring(7), lk.torus(3, 4), lk.hypercube(3), lk.complete(9), lk.random_regular(10, 3, rng=1)]
)
def test_regular_families_are_balanced(fleet):
    assert optimum_of_unit_work(fleet) == pytest.approx(1 / len(fleet), rel=1e-15)
    assert evenly_balanced(fleet)
    if fleet.implicit is None:
        assert linear_program(fleet) == pytest.approx(total_demand(fleet) / len(fleet), rel=1e-9)


def test_the_top_alone_is_the_top_of_the_whole():
    rng = np.random.default_rng(6)
    for _ in range(20):
        rows = [rng.choice(50, rng.integers(2, 4), replace=False).tolist() for _ in range(70)]
        given = rows, rng.exponential(1, 70), rng.uniform(1, 3, 50)
        top, whole = top_of_profile(fleet_of(*given)), fair_profile(fleet_of(*given))
        assert top.optimum == pytest.approx(whole.optimum, rel=1e-12)
        assert top.bottleneck.tolist() == whole.bottleneck.tolist()


def test_excess_is_measured_on_large_irregular_fleets():
    size = 60_000
    fleet = lk.ring_with_chords(size, 20_000, rng=1)
    assert len(fleet.options) > 50_000
    row = lk.place(fleet, "least-loaded", tasks=size, rng=1).measures.iloc[0]
    best = lk.survey(fleet)
    work = size * best.optimum / total_demand(fleet)
    assert row["excess"] == pytest.approx(row["max_load"] - work, abs=1e-9)
    assert row["excess"] < row["gap"]


def test_a_fleet_is_surveyed_once(monkeypatch):
    fleet = lk.ring_with_chords(30, 5, rng=2)
    assert fair_profile(fleet) is fair_profile(fleet)
    # Once the whole profile is there, its top is not worked out again.
    assert top_of_profile(fleet) is fair_profile(fleet)


def test_too_many_options_are_refused(monkeypatch):
    monkeypatch.setattr("labkit.survey.split._MOST_ENTRIES", 100)
    choices = pd.DataFrame({"option_1": [0] * 40, "option_2": [1] * 39 + [2]})
    with pytest.raises(
        lk.InputError, match=r"40 choices of up to 2 options; an exact survey takes at most 100"
    ):
        lk.survey(lk.Fleet(pd.DataFrame({"server": range(3)}), choices))
