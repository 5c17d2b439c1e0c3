"""Exact identities of the stationary least-loaded process (drift of the load variance is zero; derived).

Samples as in `test_tiny_graphs`: replicates of long runs from empty, a burn-in left out, a stride coprime to
the number of servers. Just before an arrival on a connected regular graph the mean over edges of
E|x_u - x_v| is (1 - 1/n) E[W^2] / E[W] / beta.
"""

import networkx as nx
import numpy as np
import pytest

import labkit as lk
from tests.published.standard_error import assert_within

EXPONENTIAL = {"sizes": lambda generator, count: generator.exponential(size=count)}


@pytest.mark.parametrize(
    ("fleet", "policy", "more", "factor"),
    [
        (lk.ring(10), "least-loaded", {}, 1.0),
        (lk.torus(4, 4), "least-loaded", {}, 1.0),
        (lk.hypercube(3), "mixed(beta=0.5)", {}, 2.0),
        (lk.complete(7), "mixed(beta=0.25)", {}, 4.0),
        (lk.random_regular(12, 3, rng=1), "least-loaded", EXPONENTIAL, 2.0),
        (lk.complete(6), "mixed(beta=0.5)", EXPONENTIAL, 4.0),
    ],
    ids=["ring", "torus", "hypercube mixed", "complete mixed", "regular sized", "complete mixed sized"],
)
def test_energy_balance_on_regular_graphs(fleet, policy, more, factor):
    moments = range(20_000, 300_001, 41 if len(fleet) % 41 else 43)
    table = lk.place(
        fleet, policy, tasks=300_000, replicates=64, rng=12, checkpoints=moments, workers=2, **more
    ).measures
    difference = table.groupby("replicate")["edge_difference"].mean()
    assert_within(difference, factor * (1 - 1 / len(fleet)), largest_error=0.005 * factor)


@pytest.mark.parametrize(
    "graph", [nx.path_graph(5), nx.star_graph(4), nx.balanced_tree(2, 2)], ids=["path", "star", "tree"]
)
def test_energy_balance_on_trees(graph):
    # E[lower load of a random edge] - mean = -(1 - 1/n) / 2; trees always have a stationary state. One
    # sample a replicate, at 3,000 tasks and the next n - 1, so that all phases count alike.
    fleet = lk.fleet_from_graph(graph)
    size = len(fleet)
    one, other = fleet.options.T
    lower = np.zeros(4_000)
    for phase in range(size):
        loads = lk.place(
            fleet, "least-loaded", tasks=3_000 + phase, replicates=4_000, rng=phase, workers=2
        ).loads
        lower += (np.minimum(loads[:, one], loads[:, other]) - loads.mean(axis=1, keepdims=True)).mean(
            axis=1
        ) / size
    assert_within(lower, -(1 - 1 / size) / 2)
