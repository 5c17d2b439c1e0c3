"""Components, weakest cut and algebraic connectivity: oracles, closed forms, published graphs, laws."""

import itertools
import math
from fractions import Fraction

import networkx as nx
import numpy as np
import pandas as pd
import pytest
import scipy.sparse
import scipy.sparse.linalg
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import labkit as lk
from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.survey import connectivity, elimination, laplacian, minimum_cut
from labkit.survey.connectivity import algebraic_connectivity, components, demand_graph, weakest_cut
from labkit.survey.local_flow import grow_hubs
from labkit.survey.union_find import number_sets
from tests.published.counties import county_graph

# The settings of a module are changed for a whole test, not for each example.
changing = settings(max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture])


def fleet_of(size, rows, demand=None):
    """Return a fleet of servers 0 .. size - 1 from rows of options and their demands."""
    width = max(2, *map(len, rows))
    choices = pd.DataFrame([list(row) + [None] * (width - len(row)) for row in rows], dtype="Int64")
    choices.columns = [f"option_{place + 1}" for place in range(width)]
    if demand is not None:
        choices["demand"] = np.asarray(demand, float)
    return Fleet(pd.DataFrame({"server": range(size)}), choices)


@st.composite
def parts(draw, most_servers=9, demands=(0.0, 0.5, 1.0, 1.0, 3.0), most_options=4):
    """Draw size, rows and demands; ties, zeros, doubles and several components are frequent."""
    size = draw(st.integers(2, most_servers))
    options = st.lists(st.integers(0, size - 1), min_size=2, max_size=min(most_options, size), unique=True)
    rows = draw(st.lists(options, min_size=1, max_size=2 * size))
    demand = st.lists(st.sampled_from(demands), min_size=len(rows), max_size=len(rows))
    return size, rows, draw(demand.filter(any))


def weights_of(rows, demand):
    """Return exact weights by pair of servers."""
    weights = {}
    for row, amount in zip(rows, demand, strict=True):
        for pair in itertools.combinations(sorted(row), 2):
            weights[pair] = weights.get(pair, 0) + Fraction(amount) / (len(row) - 1)
    return {pair: weight for pair, weight in weights.items() if weight}


def cut_of(weights, side):
    return sum(weight for pair, weight in weights.items() if len(side.intersection(pair)) == 1)


def smallest_cut(size, weights):
    """Return the exact minimum over all ways to part the servers."""
    return min(
        cut_of(weights, {0, *others})
        for count in range(size - 1)
        for others in itertools.combinations(range(1, size), count)
    )


def laplacian_of(size, weights, number=float):
    matrix = [[number(0)] * size for _ in range(size)]
    for (one, other), weight in weights.items():
        matrix[one][other] = matrix[other][one] = -number(weight)
        matrix[one][one] += number(weight)
        matrix[other][other] += number(weight)
    return matrix


def eigenvalues_below(matrix, limit):
    """Count the eigenvalues below a limit by the signs of exact pivots (Sylvester's law of inertia)."""
    rows = [[entry - (limit if i == j else 0) for j, entry in enumerate(row)] for i, row in enumerate(matrix)]
    negative = 0
    for pivot in range(len(rows)):
        assert rows[pivot][pivot] != 0
        negative += rows[pivot][pivot] < 0
        for row in range(pivot + 1, len(rows)):
            factor = rows[row][pivot] / rows[pivot][pivot]
            for column in range(pivot, len(rows)):
                rows[row][column] -= factor * rows[pivot][column]
    return negative


def check_cut(fleet, size, weights):
    value, side = weakest_cut(fleet)
    best = smallest_cut(size, weights)
    assert value == pytest.approx(float(best), rel=1e-12, abs=0)
    assert cut_of(weights, set(side.tolist())) == pytest.approx(float(best), rel=1e-12, abs=0)
    assert 1 <= len(side) <= size / 2
    assert side.dtype == np.int64
    assert (np.diff(side) > 0).all()
    if 2 * len(side) == size and best > 0:
        assert side[0] == 0


@given(parts())
def test_graph_components_and_cut_against_every_server_set(drawn):
    size, rows, demand = drawn
    fleet, weights = fleet_of(*drawn), weights_of(rows, demand)
    indptr, neighbour, weight = demand_graph(fleet)
    found = scipy.sparse.csr_array((weight, neighbour, indptr), shape=(size, size))
    assert found.has_canonical_format
    np.testing.assert_array_equal(found.toarray(), found.toarray().T)
    np.testing.assert_allclose(-laplacian_of_offdiagonal(size, weights), found.toarray(), rtol=1e-14)
    received = [
        sum(d for row, d in zip(rows, demand, strict=True) if server in row) for server in range(size)
    ]
    np.testing.assert_allclose(found.sum(axis=1), received)

    graph = nx.Graph(list(weights))
    graph.add_nodes_from(range(size))
    groups = sorted(map(sorted, nx.connected_components(graph)))
    count, label = components(fleet)
    assert count == len(groups)
    assert label.dtype == np.int64
    assert [np.flatnonzero(label == number).tolist() for number in range(count)] == groups
    check_cut(fleet, size, weights)
    if count > 1:
        assert weakest_cut(fleet)[0] == algebraic_connectivity(fleet) == 0.0
        assert weakest_cut(fleet)[1].tolist() == min(groups, key=len)


def laplacian_of_offdiagonal(size, weights):
    matrix = np.array(laplacian_of(size, weights))
    np.fill_diagonal(matrix, 0.0)
    return matrix


@given(parts(demands=(1e-12, 1e-12, 3e-5, 1.0, 7e6, 1e12)))
def test_demands_far_apart_keep_their_relative_accuracy(drawn):
    size, rows, demand = drawn
    fleet, weights = fleet_of(*drawn), weights_of(rows, demand)
    check_cut(fleet, size, weights)
    if components(fleet)[0] > 1:
        return
    value = Fraction(algebraic_connectivity(fleet))
    matrix = laplacian_of(size, weights, Fraction)
    assert eigenvalues_below(matrix, value * (1 - Fraction(1, 10**10))) == 1
    assert eigenvalues_below(matrix, value * (1 + Fraction(1, 10**10))) >= 2


@pytest.mark.parametrize(("after_heavy", "after_scan", "budget"), [(0, 0, 1), (0, 0, 10**6), (0, 10**9, 64)])
@changing
@given(drawn=parts(most_servers=8))
def test_scans_alone_and_flows_always_find_the_same_cut(monkeypatch, after_heavy, after_scan, budget, drawn):
    monkeypatch.setattr(minimum_cut, "FEW_AFTER_HEAVY", after_heavy)
    monkeypatch.setattr(minimum_cut, "FEW_AFTER_SCAN", after_scan)
    monkeypatch.setattr(minimum_cut, "FIRST_BUDGET", budget)
    check_cut(fleet_of(*drawn), drawn[0], weights_of(*drawn[1:]))


# Near ties, so that a proof that is a little too generous joins what the best cut parts.
near = parts(most_servers=8, demands=(0.9375, 1.0, 1.0, 1.0625), most_options=2)


def least_between(size, weights, one, other):
    """Return the smallest cut that parts two servers."""
    rest = [server for server in range(size) if server not in (one, other)]
    return min(
        cut_of(weights, {one, *others})
        for count in range(len(rest) + 1)
        for others in itertools.combinations(rest, count)
    )


def started(fleet):
    """Return a connected fleet's graph, each server's set and weight, and the smallest weight."""
    graph = demand_graph(fleet)
    parent, total = np.empty(len(fleet), np.int64), np.empty(len(fleet))
    lightest = kept(minimum_cut.weigh)(graph[0], graph[2], len(fleet), parent, total)
    assert total[lightest] == total.min()
    return graph, parent, total


def roots_of(parent):
    while (parent[parent] != parent).any():
        parent = parent[parent]
    return parent


def check_joined(size, weights, parent, best):
    for server, root in enumerate(parent.tolist()):
        if server != root:
            assert least_between(size, weights, server, root) >= best * (1 - 1e-12)


@given(near, st.booleans())
def test_a_scan_joins_only_what_no_better_cut_parts(drawn, nothing_known):
    size, weights, fleet = drawn[0], weights_of(*drawn[1:]), fleet_of(*drawn)
    if components(fleet)[0] > 1:
        return
    graph, parent, total = started(fleet)
    known = total.sum() if nothing_known else total.min()
    key, (heap, place, scanned, order) = np.empty(size), np.empty((4, size), np.int64)
    bound = np.empty(len(graph[1]))
    best, length, joined = kept(minimum_cut.scan)(
        *graph, size, parent, total, known, key, heap, place, scanned, order, bound
    )
    assert joined == np.count_nonzero(parent != np.arange(size)) >= 1
    assert (length > 0) == (best < known)
    if length:
        assert cut_of(weights, set(order[:length].tolist())) == best
    check_joined(size, weights, parent, best)
    # The weights are exact in binary, so the bounds can be told again from the order alone.
    joined = nx.Graph([order[-2:].tolist()])
    seen = dict.fromkeys(range(size), 0)
    for step, vertex in enumerate(order.tolist()):
        assert seen[vertex] == max(seen[other] for other in order[step:].tolist())
        for other in order[step + 1 :].tolist():
            weight = weights.get((min(vertex, other), max(vertex, other)), 0)
            seen[other] += weight
            if weight and seen[other] >= best:
                joined.add_edge(vertex, other)
    joined.add_nodes_from(range(size))
    expected = {min(group): group for group in nx.connected_components(joined)}
    found = {
        root: set(np.flatnonzero(roots_of(parent) == root).tolist()) for root in roots_of(parent).tolist()
    }
    assert found == expected


@given(near)
def test_heavy_edges_join_nothing_that_is_needed(drawn):
    size, weights, fleet = drawn[0], weights_of(*drawn[1:]), fleet_of(*drawn)
    if components(fleet)[0] > 1:
        return
    graph, parent, total = started(fleet)
    kept(minimum_cut.join_heavy)(*graph, size, parent, total)
    number = np.empty(size, np.int64)
    sets = kept(number_sets)(parent, size, number)
    left = {}
    for pair, weight in weights.items():
        one, other = sorted(number[list(pair)].tolist())
        if one != other:
            left[one, other] = left.get((one, other), 0) + weight
    found = [float(total.min())] + ([float(smallest_cut(sets, left))] if sets > 1 else [])
    assert min(found) == pytest.approx(float(smallest_cut(size, weights)))


@given(near, st.sampled_from([8, 60, 10**6]), st.booleans())
def test_flows_alone_find_the_best_cut_and_join_only_what_it_does_not_part(drawn, budget, nothing_known):
    size, weights, fleet = drawn[0], weights_of(*drawn[1:]), fleet_of(*drawn)
    if components(fleet)[0] > 1:
        return
    graph, parent, total = started(fleet)
    side, known = np.zeros(size, bool), total.sum() if nothing_known else total.min()
    best, joined = kept(grow_hubs)(*graph, size, parent, known, budget, 10**6, np.empty(size, np.int64), side)
    assert joined == np.count_nonzero(parent != np.arange(size))
    assert side.any() == (best < known)
    if side.any():
        assert float(cut_of(weights, set(np.flatnonzero(side).tolist()))) == pytest.approx(best)
    check_joined(size, weights, parent, best)
    if budget == 10**6:
        assert joined == size - 1
        assert best == pytest.approx(float(smallest_cut(size, weights)))


def circulant(size, steps, weights):
    here = np.arange(size)
    rows = np.concatenate([np.column_stack([here, (here + step) % size]) for step in steps])
    demand = np.concatenate([np.broadcast_to(np.asarray(weight, float), size) for weight in weights])
    return fleet_of(size, rows.tolist(), demand)


def drawn_weights(fleet, seed, values):
    demand = np.random.default_rng(seed).choice(values, len(fleet.options))
    return fleet_of(fleet.size, fleet.options.tolist(), demand)


@pytest.mark.parametrize("first_budget", [1, 64])
@pytest.mark.parametrize(
    "fleet",
    [
        lk.torus(5, 6),
        lk.torus(3, 20),
        lk.hypercube(5),
        lk.random_regular(60, 3, rng=1),
        lk.random_regular(50, 8, rng=2),
        lk.ring_with_chords(50, 20, rng=3),
        circulant(60, [1, 3], [1000, 1]),
        circulant(
            60, [1, 3], [1000 + np.random.default_rng(4).random(60), np.random.default_rng(5).random(60)]
        ),
        circulant(40, [1, 2, 7], [1, 1, 0.3]),
        drawn_weights(lk.torus(6, 7), 6, [0.5, 1.0, 1.5]),
        drawn_weights(lk.random_regular(60, 5, rng=7), 8, [1.0, 1.1]),
        drawn_weights(lk.random_regular(40, 12, rng=9), 10, [1e-9, 1.0, 1e9]),
        # Server 3 has an edge of nearly half its weight, which is the best cut.
        fleet_of(
            7,
            [[0, 1], [1, 2], [2, 0], [4, 5], [5, 6], [6, 4], [3, 0], [3, 4], [3, 5]],
            [5.0] * 6 + [0.97, 0.53, 0.53],
        ),
    ],
    ids=range(13),
)
def test_cut_against_stoer_and_wagner(monkeypatch, first_budget, fleet):
    monkeypatch.setattr(minimum_cut, "FIRST_BUDGET", first_budget)
    graph = nx.Graph()
    demand = np.ones(len(fleet.options)) if fleet.demand is None else fleet.demand
    for (one, other), amount in zip(fleet.options.tolist(), demand.tolist(), strict=True):
        before = graph.get_edge_data(one, other, {"weight": 0.0})["weight"]
        graph.add_edge(one, other, weight=before + amount)
    assert weakest_cut(fleet)[0] == pytest.approx(nx.stoer_wagner(graph)[0], rel=1e-9)


@changing
@given(drawn=parts(demands=(0.0, 0.5, 1.0, 3.0, 40.0)))
def test_algebraic_connectivity_against_numpy(drawn):
    size, rows, demand = drawn
    fleet = fleet_of(*drawn)
    if components(fleet)[0] > 1:
        return
    expected = np.linalg.eigvalsh(laplacian_of(size, weights_of(rows, demand)))[1]
    assert algebraic_connectivity(fleet) == pytest.approx(expected, rel=1e-10)
    graph = demand_graph(fleet)
    assert laplacian._from_lanczos(*graph) == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize("fill", [0.0, 1.0, 1.5])
@changing
@given(drawn=parts(demands=(0.5, 1.0, 3.0, 40.0, 1e4)))
def test_conjugate_gradients_give_the_same(monkeypatch, fill, drawn):
    monkeypatch.setattr(elimination, "ALWAYS", 1)
    monkeypatch.setattr(laplacian, "FILL", fill)
    fleet = fleet_of(*drawn)
    if components(fleet)[0] == 1:
        value = laplacian._from_lanczos(*demand_graph(fleet))
        assert value == pytest.approx(algebraic_connectivity(fleet), rel=1e-9)


def path(size):
    return fleet_of(size, [[server, server + 1] for server in range(size - 1)])


def star(size):
    return fleet_of(size, [[0, server] for server in range(1, size)])


def halves(one, other):
    return fleet_of(one + other, list(itertools.product(range(one), range(one, one + other))))


def all_sets(size, options):
    return fleet_of(size, list(itertools.combinations(range(size), options)))


# Laplacian spectra of these families are textbook (Fiedler 1973; Anderson & Morley 1985; from memory).
@pytest.mark.parametrize(
    ("fleet", "cut", "value"),
    [
        (path(2), 1, 2.0),
        (path(10), 1, 4 * math.sin(math.pi / 20) ** 2),
        (path(3000), 1, 4 * math.sin(math.pi / 6000) ** 2),
        (lk.ring(9), 2, 4 * math.sin(math.pi / 9) ** 2),
        (lk.ring(50_000), 2, 4 * math.sin(math.pi / 50_000) ** 2),
        (star(12), 1, 1.0),
        (star(2000), 1, 1.0),
        (halves(4, 7), 4, 4.0),
        (all_sets(8, 2), 7, 8.0),
        (lk.torus(4, 9), 4, 4 * math.sin(math.pi / 9) ** 2),
        (lk.torus(40, 60), 4, 4 * math.sin(math.pi / 60) ** 2),
        (lk.torus(12, 12, 12), 6, 4 * math.sin(math.pi / 12) ** 2),
        (lk.hypercube(6), 6, 2.0),
        (lk.hypercube(12), 12, 2.0),
        (fleet_of(10, nx.petersen_graph().edges), 3, 2.0),
    ],
    ids=str,
)
def test_closed_forms(fleet, cut, value):
    assert weakest_cut(fleet)[0] == cut
    assert algebraic_connectivity(fleet) == pytest.approx(value, rel=1e-10)


@pytest.mark.parametrize("weights", [(1.0, 1.0), (1e-12, 1e12), (1e12, 3e-12), (1e-150, 3e-149)])
def test_path_of_three(weights):
    a, b = weights
    fleet = fleet_of(3, [[0, 1], [1, 2]], weights)
    # The roots of x² - 2(a + b)x + 3ab, the smaller one without cancellation, in a unit of the larger weight.
    unit = max(a, b)
    p, q = a / unit, b / unit
    expected = 3 * p * q / (p + q + math.sqrt(p * p - p * q + q * q))
    assert algebraic_connectivity(fleet) == pytest.approx(expected * unit, rel=1e-9, abs=0)
    assert weakest_cut(fleet)[0] == min(a, b)


@pytest.mark.parametrize(("size", "options"), [(2, 2), (6, 2), (6, 3), (7, 5), (5, 5), (6, 1)])
def test_all_sets_without_a_table(size, options):
    law = lk.complete(size, options)
    if options == 1:  # no server shares anything
        assert components(law)[0] == size
        assert components(law)[1].tolist() == list(range(size))
        assert weakest_cut(law)[0] == algebraic_connectivity(law) == 0.0
        return
    listed = all_sets(size, options)
    assert components(law)[0] == 1
    assert weakest_cut(law)[0] == pytest.approx(weakest_cut(listed)[0], rel=1e-12)
    assert weakest_cut(law)[1].tolist() == [0]
    assert algebraic_connectivity(law) == pytest.approx(algebraic_connectivity(listed), rel=1e-9)


@pytest.mark.parametrize(("size", "options"), [(2, 2), (5, 2), (4, 3), (3, 5)])
def test_all_draws_without_a_table(size, options):
    draws = [sorted(set(draw)) for draw in itertools.product(range(size), repeat=options)]
    listed = fleet_of(size, [draw for draw in draws if len(draw) > 1])
    law = lk.complete(size, options, distinct=False)
    assert weakest_cut(law)[0] == pytest.approx(weakest_cut(listed)[0], rel=1e-12)
    assert algebraic_connectivity(law) == pytest.approx(algebraic_connectivity(listed), rel=1e-9)


def test_numbers_beyond_any_float_are_infinite():
    assert weakest_cut(lk.complete(10**7))[0] == 10**7 - 1
    assert algebraic_connectivity(lk.complete(10**7)) == 10**7
    for law in (lk.complete(10**7, 10**6), lk.complete(10**7, 10**12, distinct=False)):
        assert weakest_cut(law)[0] == algebraic_connectivity(law) == math.inf
    # (n - 1) C(n - 2, k - 2) / (k - 1) just fits; C(n - 1, k - 1) is the same number.
    assert weakest_cut(lk.complete(1029, 515))[0] == pytest.approx(math.comb(1028, 514), rel=1e-12)


def test_karate_club():
    # W. W. Zachary, J. Anthropol. Res. 33, 1977, as built into networkx; member 11 has one tie only.
    graph = nx.karate_club_graph()
    plain = nx.Graph((str(one), str(other)) for one, other in graph.edges)
    fleet = lk.fleet_from_graph(plain)
    value, side = weakest_cut(fleet)
    assert (value, fleet.names[side].tolist()) == (1.0, ["11"])
    assert algebraic_connectivity(fleet) == pytest.approx(
        np.linalg.eigvalsh(nx.laplacian_matrix(plain).toarray().astype(float))[1], rel=1e-10
    )
    # The network has a smaller known value with ties weighted by shared contexts; both by networkx.
    nx.set_edge_attributes(graph, nx.get_edge_attributes(graph, "weight"), "demand")
    weighted = fleet_of(34, graph.edges, [data["weight"] for *_, data in graph.edges(data=True)])
    assert weakest_cut(weighted)[0] == nx.stoer_wagner(graph)[0]


def test_county_contiguity():
    # Counties from the bokeh-sampledata package: seven parts, the mainland with 3,109 counties.
    fleet = lk.fleet_from_graph(county_graph())
    count, label = components(fleet)
    assert count == 7
    value, side = weakest_cut(fleet)
    assert value == algebraic_connectivity(fleet) == 0.0
    assert len(side) == np.bincount(label).min()
    mainland = county_graph().subgraph(max(nx.connected_components(county_graph()), key=len))
    fleet = lk.fleet_from_graph(mainland)
    assert weakest_cut(fleet)[0] == 1.0
    expected = scipy.sparse.linalg.eigsh(
        nx.laplacian_matrix(mainland).astype(float).tocsc(), 2, sigma=-1e-3, v0=np.arange(1.0, len(fleet) + 1)
    )[0]
    assert algebraic_connectivity(fleet) == pytest.approx(max(expected), rel=1e-7)


@given(parts(demands=(0.5, 1.0, 3.0, 7.0)), st.randoms(use_true_random=False), st.integers(-300, 300))
def test_names_order_halves_and_units_change_nothing(drawn, random, exponent):
    size, rows, demand = drawn
    cut, value = weakest_cut(fleet_of(*drawn))[0], algebraic_connectivity(fleet_of(*drawn))
    name = random.sample(range(size), size)
    renamed = [random.sample([name[server] for server in row], len(row)) for row in rows]
    order = random.sample(range(len(rows)), len(rows))
    again = fleet_of(size, [renamed[row] for row in order], [demand[row] for row in order])
    halved = fleet_of(size, rows + rows, [amount / 2 for amount in demand] * 2)
    for same in (again, halved):
        assert weakest_cut(same)[0] == pytest.approx(cut, rel=1e-14)
        assert algebraic_connectivity(same) == pytest.approx(value, rel=1e-10)
        assert components(same)[0] == components(fleet_of(*drawn))[0]
    unit = 2.0**exponent
    scaled = fleet_of(size, rows, [amount * unit for amount in demand])
    assert weakest_cut(scaled)[0] == cut * unit
    assert algebraic_connectivity(scaled) == value * unit
    assert weakest_cut(scaled)[1].tolist() == weakest_cut(fleet_of(*drawn))[1].tolist()


def joined_regular(size, links, demand):
    """Two random regular fleets with a few light choices between them: the cut is known."""
    rows = [lk.random_regular(size, 6, rng=seed).options.astype(np.int64) + seed * size for seed in (0, 1)]
    between = np.column_stack([np.arange(links), size + 7 * np.arange(links)])
    options = np.concatenate([*rows, between]).tolist()
    return fleet_of(2 * size, options, [1.0] * (6 * size) + [demand] * links)


@pytest.mark.parametrize(("links", "demand"), [(5, 1.0), (50, 0.1), (1, 1e-12)])
def test_a_known_cut_between_two_large_halves(links, demand):
    fleet = joined_regular(3000, links, demand)
    value, side = weakest_cut(fleet)
    assert value == pytest.approx(links * demand, rel=1e-14)
    assert side.tolist() == list(range(3000))
    if links == 1:
        # A light link between two parts of n / 2: the eigenvalue tends to weight · 4 / n.
        assert algebraic_connectivity(fleet) == pytest.approx(demand * 4 / 6000, rel=1e-9, abs=0)


def road_like(side, seed):
    """Return the edges of a grid of which about a third are taken out, still connected."""
    here = np.arange(side * side).reshape(side, side)
    edges = np.concatenate(
        [
            np.column_stack([here[:, :-1].ravel(), here[:, 1:].ravel()]),
            np.column_stack([here[:-1].ravel(), here[1:].ravel()]),
        ]
    )
    edges = edges[np.random.default_rng(seed).permutation(len(edges))]
    numbered = scipy.sparse.coo_array((np.arange(1.0, len(edges) + 1), edges.T), shape=(side**2, side**2))
    tree = scipy.sparse.csgraph.minimum_spanning_tree(numbered.tocsr()).data.astype(int) - 1
    others = np.setdiff1d(np.arange(len(edges)), tree)[: int(0.3 * side**2)]
    return edges[np.concatenate([tree, others])]


def large(kind):
    """Return a fleet of some thousand servers, with unequal demands."""
    edges = road_like(60, 1) if kind == "road" else lk.random_regular(1400, 10, rng=1).options
    demand = np.random.default_rng(2).lognormal(0.0, 1.0, len(edges))
    return fleet_of(int(edges.max()) + 1, edges.tolist(), demand)


@pytest.mark.parametrize("kind", ["road", "random"])
def test_large_fleets_against_scipy_and_themselves(kind):
    fleet = large(kind)
    indptr, neighbour, weight = demand_graph(fleet)
    graph = scipy.sparse.csr_array((weight, neighbour, indptr), shape=(len(fleet), len(fleet)))
    matrix = scipy.sparse.csgraph.laplacian(graph).tocsc()
    start = np.random.default_rng(3).random(len(fleet))
    expected = max(scipy.sparse.linalg.eigsh(matrix, 2, sigma=-1e-4, v0=start)[0])
    value = algebraic_connectivity(fleet)
    assert value == pytest.approx(expected, rel=1e-7)
    cut, side = weakest_cut(fleet)
    # Fiedler's bound, and the lightest server's.
    assert value <= len(fleet) / (len(fleet) - 1) * graph.sum(axis=1).min()
    assert cut <= graph.sum(axis=1).min() * (1 + 1e-14)
    inside = np.isin(np.arange(len(fleet)), side)
    assert cut == pytest.approx(graph[inside][:, ~inside].sum(), rel=1e-12)
    # Rerun to the bit.
    assert algebraic_connectivity(large(kind)) == value
    assert weakest_cut(large(kind))[0] == cut
    assert weakest_cut(large(kind))[1].tolist() == side.tolist()


def test_a_road_with_demands_far_apart():
    # By elimination alone, from the dense and from the sparse side; they share no loop.
    edges = road_like(15, 4)
    demand = 10.0 ** np.random.default_rng(5).uniform(-12, 12, len(edges))
    graph = demand_graph(fleet_of(225, edges.tolist(), demand))
    assert laplacian._from_lanczos(*graph) == pytest.approx(laplacian._from_dense(*graph), rel=1e-10, abs=0)


def test_no_number_rather_than_a_wrong_one(monkeypatch):
    far = fleet_of(3, [[0, 1], [1, 2]], [1e-100, 1e100])
    assert math.isnan(algebraic_connectivity(far))
    assert weakest_cut(far)[0] == 1e-100
    monkeypatch.setattr(laplacian, "SOLVES", 3)
    assert math.isnan(algebraic_connectivity(large("road")))
    monkeypatch.setattr(laplacian, "SOLVES", 300)
    monkeypatch.setattr(laplacian, "STEPS", 3)
    assert math.isnan(algebraic_connectivity(large("random")))
    monkeypatch.setattr(connectivity, "MOST_PAIRS", 20)
    wide = fleet_of(6, [[0, 1, 2, 3, 4], [4, 5]])
    assert math.isnan(algebraic_connectivity(wide))
    assert math.isnan(weakest_cut(wide)[0])
    assert len(weakest_cut(wide)[1]) == 0
    with pytest.raises(InputError, match=r"hold 22 ordered pairs of servers; give one with at most 20"):
        demand_graph(wide)


def test_a_fleet_without_a_table_has_no_list_of_weights():
    with pytest.raises(InputError, match="lists no choices; give one with a table of choices"):
        demand_graph(lk.complete(5))
