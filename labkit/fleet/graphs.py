"""Fleets from networkx graphs and back."""

from typing import Any

import networkx as nx
import numpy as np
import pandas as pd

from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet
from labkit.fleet.tables import Source

_MOST_LISTED = 2_000  # servers of a complete fleet whose graph is still written out


def fleet_from_graph(graph: nx.Graph) -> Fleet:
    """Read a fleet from an undirected networkx graph.

    Parameters
    ----------
    graph : networkx.Graph or networkx.MultiGraph
        Nodes, named by text or whole numbers, are servers; edges are choices of two. The node attribute
        `capacity` and the edge attribute `demand` are 1.0 where missing; other attributes are ignored.

    Returns
    -------
    Fleet
        Servers in the order of the nodes, choices in the order of the edges.

    Raises
    ------
    InputError
        When the graph is directed, has a self-loop or no edge, a node name is neither text nor a whole
        number, or an attribute breaks the rules of `labkit.Fleet`.

    Examples
    --------
    >>> import networkx as nx
    >>> import labkit as lk
    >>> lk.fleet_from_graph(nx.petersen_graph())
    Fleet(10 servers, 15 choices of 2 options, capacity 1 each, demand 1 each)
    """
    if not isinstance(graph, nx.Graph):
        raise InputError(f"graph is a {type(graph).__name__}; give an undirected networkx graph.")
    if graph.is_directed():
        raise InputError("graph is directed; give an undirected one, for example graph.to_undirected().")
    if graph.number_of_nodes() == 0:
        raise InputError("graph has no nodes; give at least two nodes and an edge.")
    if graph.number_of_edges() == 0:
        raise InputError("graph has no edges; each choice of two servers is an edge.")
    nodes = list(graph.nodes)
    for node in nodes:
        if isinstance(node, bool | np.bool_) or not isinstance(node, str | int | np.integer):
            raise InputError(
                f"graph has the node {node!r}; name nodes by text or whole numbers, "
                "for example with networkx.convert_node_labels_to_integers."
            )
    edges = list(graph.edges(data="demand", default=1.0))
    servers = pd.DataFrame(
        {
            "server": pd.Series(nodes, dtype=object),
            "capacity": _attribute([capacity for _, capacity in graph.nodes(data="capacity", default=1.0)]),
        }
    )
    choices = pd.DataFrame(
        {
            "option_1": pd.Series([edge[0] for edge in edges], dtype=object),
            "option_2": pd.Series([edge[1] for edge in edges], dtype=object),
            "demand": _attribute([edge[2] for edge in edges]),
        }
    )
    return Fleet._from_tables(
        servers,
        choices,
        Source("graph", lambda row: f"graph node {nodes[row]!r}"),
        Source("graph", lambda row: f"graph edge {edges[row][:2]!r}"),
    )


def _attribute(values: list[Any]) -> pd.Series:
    if all(type(value) is float for value in values):
        return pd.Series(values, dtype=np.float64)
    return pd.Series(values, dtype=object)


def graph_of(fleet: Fleet) -> nx.Graph:
    """Return the choice graph of a fleet; see `Fleet.to_networkx`."""
    if fleet.implicit is not None:
        law = fleet.implicit
        if law.options != 2 or not law.distinct or law.servers > _MOST_LISTED:
            raise InputError(
                f"fleet is {fleet!r}; a complete fleet is a graph only with two distinct options "
                f"and at most {_MOST_LISTED} servers."
            )
        first, second = np.triu_indices(law.servers, 1)
        demand = np.ones(len(first))
    else:
        if fleet.options.shape[1] > 2 and (fleet.options[:, 2] != ABSENT).any():
            row = int(np.argmax(fleet.options[:, 2] != ABSENT))
            raise InputError(
                f"choices row {row + 1} has three or more options; only choices of two servers make a graph."
            )
        first, second = fleet.options[:, 0].astype(np.int64), fleet.options[:, 1].astype(np.int64)
        demand = np.full(len(first), fleet.equal_demand) if fleet.demand is None else fleet.demand
    pairs = np.minimum(first, second) * fleet.size + np.maximum(first, second)
    parallel = len(np.unique(pairs)) < len(pairs)
    graph: nx.Graph = nx.MultiGraph() if parallel else nx.Graph()
    names = fleet.names.tolist()
    capacity = np.ones(fleet.size) if fleet.capacity is None else fleet.capacity
    graph.add_nodes_from(
        (name, {"capacity": amount}) for name, amount in zip(names, capacity.tolist(), strict=True)
    )
    graph.add_edges_from(
        (names[one], names[other], {"demand": amount})
        for one, other, amount in zip(first.tolist(), second.tolist(), demand.tolist(), strict=True)
    )
    return graph
