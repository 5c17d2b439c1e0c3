"""The closed forms and small models of `queues.py` against printed or otherwise derived values."""

import networkx as nx
import pytest

from tests.published import queues

TWO, PATH, TRIANGLE, RING = nx.path_graph(2), nx.path_graph(3), nx.complete_graph(3), nx.cycle_graph(4)


@pytest.mark.parametrize(
    ("options", "means"),
    [
        (1, [2, 3.333333, 10, 20, 100]),
        (2, [1.265686, 1.614454, 2.614057, 3.383046, 5.431997]),
        (3, [1.125244, 1.356842, 2.027856, 2.535133, 3.857847]),
    ],
)
def test_large_fleets(options, means):
    # Vvedenskaya, Dobrushin & Karpelevich 1996; Mitzenmacher 2001 (table from memory, recomputed)
    for load, mean in zip((0.5, 0.7, 0.9, 0.95, 0.99), means, strict=True):
        assert queues.large_fleet_sojourn(load, options) == pytest.approx(mean, abs=5.1e-7)
    assert queues.large_fleet_sojourn(0.9, 1) == pytest.approx(queues.mm1_sojourn(0.9))


def test_tails_of_large_fleets():
    assert [queues.large_fleet_tail(0.5, 2, level) for level in (0, 1, 2, 3)] == [1, 0.5, 0.125, 0.5**7]
    assert [queues.large_fleet_tail(0.5, 1, level) for level in (0, 1, 2)] == [1, 0.5, 0.25]
    assert queues.large_fleet_tail(0.99, 3, 60) == 0


@pytest.mark.parametrize(
    ("load", "age", "mean"), [(0.5, 1, 1.434800), (0.5, 5, 1.806268), (0.9, 5, 3.970324)]
)
def test_bulletin_boards(load, age, mean):
    # values derived from Mitzenmacher's model of 2000
    assert queues.bulletin_board_sojourn(load, 2, age) == pytest.approx(mean, abs=6e-7)


def test_bulletin_boards_from_fresh_to_old():
    # a line through ages 0.05 and 0.1 meets age 0 at the value with fresh loads
    young, older = (queues.bulletin_board_sojourn(0.5, 2, age, levels=20) for age in (0.05, 0.1))
    assert 2 * young - older == pytest.approx(queues.large_fleet_sojourn(0.5, 2), abs=1e-3)
    # one option does not look at the board
    assert queues.bulletin_board_sojourn(0.5, 1, 5) == pytest.approx(queues.mm1_sojourn(0.5), rel=1e-9)
    # herding: with an old board two options are worse than one
    assert queues.bulletin_board_sojourn(0.5, 2, 20, levels=100) > queues.mm1_sojourn(0.5)


@pytest.mark.parametrize(
    ("graph", "load", "most", "mean"),
    [
        (TWO, 0.5, 20, 1.426320751),
        (TWO, 0.7, 45, 2.108197274),
        (PATH, 0.5, 16, 1.404242053),
        (TRIANGLE, 0.5, 14, 1.352003472),
        (RING, 0.5, 11, 1.337836645),
    ],
    ids=["two", "two at 0.7", "path of 3", "triangle", "ring of 4"],
)
def test_tiny_graphs(graph, load, most, mean):
    # derived elsewhere by truncated chains of their own; truncation below 1e-8, shown by one task less
    found = queues.graph_sojourn(graph, load, most)
    assert found == pytest.approx(mean, abs=1e-8)
    assert found - queues.graph_sojourn(graph, load, most - 1) < 1e-8


def test_tiny_graphs_without_symmetry_agree_with_themselves():
    # fewer symmetries: the path of 4 and a triangle with a pendant server
    for graph in (nx.path_graph(4), nx.Graph([(0, 1), (1, 2), (2, 0), (2, 3)])):
        low, high = (queues.graph_sojourn(graph, 0.3, most) for most in (6, 7))
        assert 1 < low < high < queues.mm1_sojourn(0.3)
        assert high - low < 1e-5


@pytest.mark.parametrize(
    ("offered", "servers", "blocked"),
    [
        (10, 10, 0.2145823431),
        (5, 10, 0.0183845703),
        (20, 30, 0.0084574983),
        (4.461177, 10, 0.01),
        (12.030615, 20, 0.01),
    ],
)
def test_erlang_b(offered, servers, blocked):
    # one-decimal table in "Carrier Grade Voice over IP", 2nd ed., App. A; more digits derived
    assert queues.erlang_b(offered, servers) == pytest.approx(blocked, abs=2e-9 if blocked != 0.01 else 1e-8)


def test_two_servers_with_one_queue():
    # Jensen & Bard, Operations Research Models and Methods, M/M/2: λ = 5, μ = 3
    assert queues.mmc_wait(5, 3, 2) == pytest.approx(0.757576, abs=5e-7)
    blocked, wait = queues.mmc_places(5, 3, 2, 5)
    assert wait == pytest.approx(0.177992, abs=5e-7)
    assert wait + 1 / 3 == pytest.approx(0.511325, abs=5e-7)
    assert 5 * (1 - blocked) == pytest.approx(4.424345, abs=5e-7)
    # as many places as servers: Erlang's loss; very many: no loss
    assert queues.mmc_places(10, 1, 10, 10) == pytest.approx((queues.erlang_b(10, 10), 0))
    assert queues.mmc_places(5, 3, 2, 400) == pytest.approx((0, queues.mmc_wait(5, 3, 2)))
    assert queues.mmc_wait(0.7, 1, 1) == pytest.approx(queues.mm1_sojourn(0.7) - 1)


def test_one_server():
    # exponential service has second moment 2, deterministic 1: half the wait
    assert queues.mg1_wait(0.7, 1, 2) + 1 == pytest.approx(queues.mm1_sojourn(0.7))
    assert queues.mg1_wait(0.7, 1, 1) == pytest.approx(queues.mg1_wait(0.7, 1, 2) / 2)
    assert queues.mg1_wait(0.35, 2, 8) == pytest.approx(2 * queues.mg1_wait(0.7, 1, 2))
    assert queues.sharing_sojourn(0.7) == queues.mm1_sojourn(0.7)
    assert queues.sharing_sojourn(0.5, 3) == 6


def test_sessions_without_limit():
    assert sum(queues.poisson_share(3.0, tasks) for tasks in range(60)) == pytest.approx(1)
    assert sum(tasks * queues.poisson_share(3.0, tasks) for tasks in range(60)) == pytest.approx(3)
    assert queues.poisson_share(3.0, 0) == pytest.approx(0.0497870684)
