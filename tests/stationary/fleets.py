"""Fleets that have a stationary state, because their capacities come from a split of the demand."""

import networkx as nx
import numpy as np
import pandas as pd

import labkit as lk


def balanced(graph, seed, low=0.25, high=0.75):
    """Return a fleet on a graph with random demands, and capacities that some split of them fills alike."""
    rng = np.random.default_rng(seed)
    graph = nx.convert_node_labels_to_integers(graph)
    pairs = np.array(graph.edges)
    demand = rng.uniform(0.5, 2.0, len(pairs))
    share = rng.uniform(low, high, len(pairs))
    capacity = np.bincount(pairs[:, 0], demand * share, minlength=len(graph))
    capacity += np.bincount(pairs[:, 1], demand * (1 - share), minlength=len(graph))
    return lk.Fleet(
        pd.DataFrame({"server": range(len(graph)), "capacity": capacity / capacity.mean()}),
        pd.DataFrame({"option_1": pairs[:, 0], "option_2": pairs[:, 1], "demand": demand}),
    )


def uneven_tree(size=30, seed=3):
    """Return a balanced fleet on a random tree."""
    return balanced(nx.random_labeled_tree(size, seed=seed), seed)


def neighbours(size=200, seed=5):
    """Return a balanced fleet on points of the plane that are near each other."""
    graph = nx.random_geometric_graph(size, 1.8 / np.sqrt(size), seed=seed)
    return balanced(graph.subgraph(max(nx.connected_components(graph), key=len)), seed)
