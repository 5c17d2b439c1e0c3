"""A real telecom demand matrix as a choice graph, from the topologies in topohub (source: SNDlib).

The matrix gives the traffic between sites a and b. Read here as work that either end can do, for example
a call that the equipment of either city can handle, every pair of sites with traffic is one choice of the
two, and its demand is the traffic in both directions together.
"""

import json
from importlib.resources import files

import networkx as nx


def telecom_graph(name: str = "germany50") -> nx.Graph:
    """Return one SNDlib network: nodes are site names, the edge attribute `demand` is the traffic."""
    stored = json.loads((files("topohub") / "data" / "sndlib" / f"{name}.json").read_text(encoding="utf-8"))
    sites = {node["id"]: node["name"] for node in stored["nodes"]}
    graph = nx.Graph()
    graph.add_nodes_from(sites.values())
    for source, row in stored["graph"]["demands"].items():
        for target, amount in row.items():
            one, other = sites[int(source)], sites[int(target)]
            if one != other and amount > 0:
                before = graph.get_edge_data(one, other, {"demand": 0.0})["demand"]
                graph.add_edge(one, other, demand=before + float(amount))
    return graph
