import networkx as nx
import numpy as np

import labkit as lk
from tests.published.counties import county_graph
from tests.published.telecom import telecom_graph


def test_county_contiguity_has_the_known_size():
    graph = county_graph()
    assert (len(graph), graph.number_of_edges(), nx.number_connected_components(graph)) == (3_223, 9_112, 7)
    fleet = lk.fleet_from_graph(graph)
    assert len(fleet) == 3_223
    assert fleet.options.shape == (9_112, 2)
    assert nx.utils.edges_equal(fleet.to_networkx().edges, graph.edges)


def test_county_codes_keep_their_leading_zeros_through_files(tmp_path):
    fleet = lk.fleet_from_graph(county_graph())
    fleet.servers.to_csv(tmp_path / "servers.csv", index=False)
    fleet.choices.to_csv(tmp_path / "choices.csv", index=False)
    read = lk.read_fleet(tmp_path)
    assert "01001" in read.names
    assert read.digest == fleet.digest


def test_a_telecom_demand_matrix_is_a_fleet(tmp_path):
    graph = telecom_graph("germany50")
    fleet = lk.fleet_from_graph(graph)
    assert len(fleet) == 50
    # SNDlib lists 662 demands for germany50, 2,365 units of traffic together.
    assert len(fleet.options) == 662
    assert fleet.demand.sum() == 2_365
    degree = dict(graph.degree(weight="demand"))
    at_server = np.bincount(fleet.options.ravel(), np.repeat(fleet.demand, 2), minlength=50)
    assert at_server.tolist() == [degree[name] for name in fleet.names]
    fleet.servers.to_parquet(tmp_path / "servers.parquet")
    fleet.choices.to_csv(tmp_path / "choices.csv", index=False)
    assert lk.read_fleet(tmp_path).digest == fleet.digest
