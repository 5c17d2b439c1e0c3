from collections import Counter
from itertools import combinations

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk


def edges(fleet):
    return sorted(tuple(sorted(row)) for row in fleet.options.tolist())


@pytest.mark.parametrize(
    ("fleet", "graph"),
    [
        (lk.ring(3), nx.cycle_graph(3)),
        (lk.ring(8), nx.cycle_graph(8)),
        (lk.ladder(1), nx.ladder_graph(1)),
        (lk.ladder(6), nx.ladder_graph(6)),
        (lk.complete(7), nx.complete_graph(7)),
    ],
)
def test_same_names_and_edges_as_networkx(fleet, graph):
    assert nx.utils.edges_equal(fleet.to_networkx().edges, graph.edges)
    assert list(fleet.to_networkx()) == sorted(graph)


@pytest.mark.parametrize("sides", [(5,), (3, 3), (3, 4), (4, 3, 5), (3, 3, 3, 3)])
def test_torus_is_the_periodic_grid(sides):
    grid = nx.grid_graph(sides[::-1], periodic=True)
    names = {node: int(np.ravel_multi_index(node if len(sides) > 1 else (node,), sides)) for node in grid}
    assert edges(lk.torus(*sides)) == sorted(tuple(sorted((names[a], names[b]))) for a, b in grid.edges)


@pytest.mark.parametrize("dimension", [1, 2, 5])
def test_hypercube_joins_names_that_differ_in_one_digit(dimension):
    cube = nx.hypercube_graph(dimension)
    names = {node: int("".join(map(str, np.ravel(node))), 2) for node in cube}
    assert edges(lk.hypercube(dimension)) == sorted(
        tuple(sorted((names[a], names[b]))) for a, b in cube.edges
    )


def test_members_of_a_family_are_the_same_fleet_from_tables():
    for fleet in (
        lk.ring(5),
        lk.torus(3, 4),
        lk.hypercube(3),
        lk.ladder(4),
        lk.ring_with_chords(9, 4, rng=1),
    ):
        assert lk.Fleet(fleet.servers, fleet.choices).digest == fleet.digest
        assert not fleet.options.flags.writeable


@given(st.integers(2, 30), st.integers(1, 29), st.integers(0, 2**32))
def test_random_regular_is_simple_and_regular(n, degree, seed):
    if degree >= n or n * degree % 2:
        with pytest.raises(lk.InputError, match="degree"):
            lk.random_regular(n, degree, rng=seed)
        return
    fleet = lk.random_regular(n, degree, rng=seed)
    assert set(Counter(fleet.options.ravel().tolist()).values()) == {degree}
    assert len(set(edges(fleet))) == n * degree // 2
    assert fleet.digest == lk.random_regular(n, degree, rng=seed).digest


def test_random_regular_meets_every_graph_equally_often():
    # Labelled graphs on six servers with degree 2: 60 rings of six and 10 pairs of triangles.
    rng = np.random.default_rng(4)
    seen = Counter(tuple(edges(lk.random_regular(6, 2, rng=rng))) for _ in range(1_400))
    assert len(seen) == 70
    rings = sum(count for graph, count in seen.items() if nx.is_connected(nx.Graph(graph)))
    assert abs(rings / 1_400 - 6 / 7) < 4 * np.sqrt(6 / 49 / 1_400)
    chi_square = sum((count - 20) ** 2 / 20 for count in seen.values())
    assert chi_square < 69 + 4 * np.sqrt(2 * 69)


def test_random_regular_large():
    fleet = lk.random_regular(100_000, 4, rng=5)
    assert set(np.bincount(fleet.options.ravel())) == {4}
    keys = fleet.options.astype(np.int64) @ [100_000, 1]
    assert len(np.unique(keys)) == 200_000


@given(st.integers(3, 25), st.data())
def test_chords_are_different_pairs_off_the_ring(n, data):
    most = n * (n - 3) // 2
    chords = data.draw(st.integers(0, most))
    fleet = lk.ring_with_chords(n, chords, rng=data.draw(st.integers(0, 100)))
    assert fleet.options[:n].tolist() == lk.ring(n).options.tolist()
    drawn = edges(fleet)
    assert len(drawn) == len(set(drawn)) == n + chords
    assert all(one != other for one, other in drawn)
    with pytest.raises(
        lk.InputError, match=f"chords is {most + 1}; a ring of {n} servers has room for at most {most}"
    ):
        lk.ring_with_chords(n, most + 1, rng=1)


@pytest.mark.parametrize("n", [6, 7])
def test_every_chord_is_equally_likely(n):
    rng = np.random.default_rng(8)
    seen = Counter(
        tuple(sorted(lk.ring_with_chords(n, 1, rng=rng).options[-1].tolist())) for _ in range(3_000)
    )
    allowed = set(combinations(range(n), 2)) - set(edges(lk.ring(n)))
    assert set(seen) == allowed
    mean = 3_000 / len(allowed)
    chi_square = sum((count - mean) ** 2 / mean for count in seen.values())
    free = len(allowed) - 1
    assert chi_square < free + 4 * np.sqrt(2 * free)


def test_seeds_may_be_of_three_kinds_and_differ():
    sequence = np.random.SeedSequence(7)
    assert lk.random_regular(20, 3, rng=7).digest == lk.random_regular(20, 3, rng=sequence).digest
    assert lk.random_regular(20, 3, rng=7).digest != lk.random_regular(20, 3, rng=8).digest
    rng = np.random.default_rng(7)
    assert lk.ring_with_chords(20, 3, rng=rng).digest != lk.ring_with_chords(20, 3, rng=rng).digest
    for call in (lk.random_regular, lk.ring_with_chords):
        with pytest.raises(TypeError, match="rng"):
            call(20, 3)
        with pytest.raises(lk.InputError, match="rng is 'x'"):
            call(20, 3, rng="x")


def test_complete_lists_nothing():
    fleet = lk.complete(10**7, options=3, distinct=False)
    assert len(fleet) == 10**7
    assert (fleet.options, fleet.demand, fleet.capacity) == (None, None, None)
    assert (fleet.implicit.servers, fleet.implicit.options, fleet.implicit.distinct) == (10**7, 3, False)
    assert (
        repr(fleet)
        == "Fleet(10000000 servers, any 3 options with replacement equally likely, capacity 1 each)"
    )
    assert lk.complete(4, options=1).implicit.options == 1
    assert lk.complete(3).servers["server"].tolist() == [0, 1, 2]
    with pytest.raises(lk.InputError, match="fleet is complete: its choices follow a law"):
        _ = fleet.choices


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: lk.ring(2), "n is 2; give a whole number of at least 3"),
        (lambda: lk.ring(3.0), r"n is 3\.0; give a whole number"),
        (lambda: lk.ring(True), "n is True; give a whole number"),
        (lambda: lk.ring(2**32), "n asks for 4294967296 servers; a fleet holds at most"),
        (lambda: lk.torus(), "sides is empty"),
        (lambda: lk.torus(3, 2), "side 2 is 2; give a whole number of at least 3"),
        (lambda: lk.torus(2**16, 2**16), "sides asks for 4294967296 servers"),
        (lambda: lk.hypercube(0), "dimension is 0"),
        (lambda: lk.hypercube(32), "dimension is 32; give at most 31"),
        (lambda: lk.ladder(0), "n is 0"),
        (lambda: lk.complete(1), "n is 1; give a whole number of at least 2"),
        (lambda: lk.complete(3, options=4), "options is 4; at most 3 of 3 servers are distinct"),
        (lambda: lk.complete(3, options=0), "options is 0"),
        (lambda: lk.complete(3, distinct=1), "distinct is 1; give True or False"),
        (lambda: lk.random_regular(5, 3, rng=1), "n × degree is 5 × 3, an odd number"),
        (lambda: lk.random_regular(5, 5, rng=1), "degree is 5; with 5 servers give at most 4"),
        (lambda: lk.ring_with_chords(5, -1, rng=1), "chords is -1"),
    ],
)  # fmt: skip
def test_sizes_out_of_range_are_refused(call, words):
    with pytest.raises(lk.InputError, match=words):
        call()
