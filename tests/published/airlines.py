"""Airline routes of the United States as a choice graph, from the open tables in bokeh-sampledata.

Source: airports from OurAirports, routes from the U.S. Bureau of Transportation Statistics (public domain),
domestic ones of July 2026, as bokeh-sampledata 2026.1 has them. Two airports with a route between them, in
any direction and by any number of airlines, are one choice of unit demand: 3,017 of them. Airports without a
route stay in, as servers that are in no choice.
"""

import networkx as nx
from bokeh_sampledata.airport_routes import airports, routes


def airline_graph() -> nx.Graph:
    """Return the graph: nodes are airport numbers of the source, edges airports with a route between them."""
    known = set(airports["AirportID"].tolist())
    graph = nx.Graph()
    graph.add_nodes_from(sorted(known))
    for source, target in zip(routes["SourceID"], routes["DestinationID"], strict=True):
        if source != target and source in known and target in known:
            graph.add_edge(source, target)
    return graph
