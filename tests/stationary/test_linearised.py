"""The linear field: its equations hold, and its three ways of solving agree."""

import networkx as nx
import numpy as np
import pytest
from scipy.special import erf

import labkit as lk
from labkit.stationary import linearised, solver
from labkit.stationary.linearised import linearise
from labkit.stationary.network import network_of
from labkit.stationary.solver import Solver, widest_layer
from tests.stationary.fleets import balanced, neighbours, uneven_tree


def laplacian(network, conductance):
    matrix = np.zeros((network.room.size,) * 2)
    for one, other, amount in zip(network.first, network.second, conductance, strict=True):
        matrix[[one, other], [one, other]] += amount
        matrix[[one, other], [other, one]] -= amount
    return matrix


@pytest.mark.parametrize(
    ("dense", "small", "widest"), [(10**6, 0, 0), (1, 10**6, 0), (1, 0, 10**6), (1, 0, 0)]
)
def test_every_way_of_solving_gives_the_pseudo_inverse(monkeypatch, dense, small, widest):
    for name, value in (("DENSE", dense), ("SMALL", small), ("WIDEST", widest)):
        monkeypatch.setattr(solver, name, value)
    network = network_of(neighbours(60))
    conductance = np.random.default_rng(1).uniform(0.1, 3.0, network.demand.size)
    inverse = np.linalg.pinv(laplacian(network, conductance))
    right = np.random.default_rng(2).standard_normal((3, network.room.size))
    right -= right.mean(axis=1, keepdims=True)
    solve = Solver(network.first, network.second, conductance, network.room.size)
    assert solve(right) == pytest.approx(right @ inverse, abs=1e-4)
    assert solve(right[0]) == pytest.approx(inverse @ right[0], abs=1e-4)


def test_the_widest_layer():
    for fleet, width in ((lk.ring(50), 2), (lk.ladder(20), 2), (lk.hypercube(4), 6)):
        network = network_of(fleet)
        solve = Solver(network.first, network.second, network.demand, fleet.size)
        joined = -solve.matrix
        joined.setdiag(0)
        assert widest_layer(joined) == width


def test_alike_pairs_have_the_gain_of_the_closed_form():
    # On edge-transitive graphs k = (2/π) / R with conductance times resistance (servers - 1) / pairs.
    fleet = lk.torus(6, 6)
    field = linearise(network_of(fleet), 1.0, 1.25, np.random.default_rng(1))
    assert field.gain == pytest.approx(2 / np.pi * 36 / 35, rel=1e-3)
    assert field.height == pytest.approx(0, abs=1e-12)


def test_spreads_are_those_of_the_field_they_make():
    fleet = neighbours(80)
    network = network_of(fleet)
    field = linearise(network, 1.0, 1.25, np.random.default_rng(1))
    inverse = np.linalg.pinv(laplacian(network, network.demand * field.gain))
    own = np.diag(inverse)
    square = own[network.first] + own[network.second] - 2 * inverse[network.first, network.second]
    assert field.spread**2 == pytest.approx(square, rel=0.03)
    # gain = 2 φ(z) / spread, share turned = 2 Φ(z) - 1
    z = np.sqrt(2) * erfinv_by_bisection(field.turned)
    assert field.gain == pytest.approx(2 * np.exp(-z * z / 2) / np.sqrt(2 * np.pi) / field.spread, rel=1e-6)
    # What is turned carries the surplus away.
    assert network.divergence(0.5 * network.demand * field.turned) == pytest.approx(network.surplus, abs=1e-5)


def erfinv_by_bisection(values):
    low, high = np.full(values.shape, -6.0), np.full(values.shape, 6.0)
    for _ in range(80):
        middle = (low + high) / 2
        low, high = np.where(erf(middle) < values, middle, low), np.where(erf(middle) < values, high, middle)
    return low


def test_draws_have_the_covariance_of_the_free_field():
    network = network_of(uneven_tree(12))
    field = linearise(network, 1.0, 1.0, np.random.default_rng(1))
    draws = field.draw(np.random.default_rng(2), 40_000)
    slope = network.slope(draws)
    # On a tree the slopes are independent, resistances 1 / conductance. 40,000 draws: 0.7 % each, 4 of them.
    covariance = slope.T @ slope / len(draws)
    scale = 1 / np.sqrt(network.demand * field.gain)
    assert covariance / np.outer(scale, scale) == pytest.approx(np.eye(scale.size), abs=0.03)
    assert draws @ network.room == pytest.approx(0, abs=1e-9)


def test_on_a_tree_the_flow_is_given_by_the_surplus_alone():
    fleet = uneven_tree(25)
    network = network_of(fleet)
    field = linearise(network, 1.0, 1.25, np.random.default_rng(1))
    tree = nx.Graph(list(zip(network.first.tolist(), network.second.tolist(), strict=True)))
    for pair, (one, other) in enumerate(zip(network.first, network.second, strict=True)):
        cut = tree.copy()
        cut.remove_edge(one, other)
        behind = list(nx.node_connected_component(cut, one))
        assert 0.5 * network.demand[pair] * field.turned[pair] == pytest.approx(
            network.surplus[behind].sum(), abs=1e-5
        )


def test_spreads_of_large_fleets_are_estimated_well_enough(monkeypatch):
    network = network_of(balanced(nx.grid_2d_graph(12, 12), 4))
    exact = linearise(network, 1.0, 1.25, np.random.default_rng(1))
    monkeypatch.setattr(linearised, "DENSE", 1)
    drawn = linearise(network, 1.0, 1.25, np.random.default_rng(1))
    # 24 draws: a standard deviation is right to 15 % at each pair, and hardly biased.
    ratio = drawn.spread / exact.spread
    assert abs(ratio.mean() - 1) < 0.05
    assert ratio.std() < 0.25
    assert drawn.height == pytest.approx(exact.height, abs=0.2 * np.abs(exact.height).max())
