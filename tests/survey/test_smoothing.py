"""The smoothed picture is the sum of resolvents it is said to be, near the inverse square root where slow."""

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from scipy.linalg import block_diag

import labkit as lk
from labkit.survey.smoothing import ENOUGH, VISITS, free_pairs, smooth, smoothing

TOP = 0.04


def fleet_of(size, pairs, capacity=None, demand=None):
    servers = pd.DataFrame({"server": range(size)})
    choices = pd.DataFrame(list(pairs), columns=["option_1", "option_2"])
    servers = servers if capacity is None else servers.assign(capacity=capacity)
    return lk.Fleet(servers, choices if demand is None else choices.assign(demand=demand))


def uneven(size=60, seed=1):
    # A tree has one block when capacities are halves of the demands beside; it has slow patterns, too.
    tree, rng = nx.random_labeled_tree(size, seed=seed), np.random.default_rng(seed)
    demand, capacity = rng.uniform(0.5, 2.0, size - 1), np.zeros(size)
    for (one, other), amount in zip(tree.edges, demand, strict=True):
        capacity[[one, other]] += amount / 2
    return fleet_of(size, tree.edges, capacity, demand)


def parted():
    # Three rings and a server alone.
    pairs = [(a + k, a + (k + 1) % n) for a, n in ((0, 20), (20, 30), (50, 9)) for k in range(n)]
    return fleet_of(60, pairs)


def matrices(fleet):
    """Return L and C, dense, for equal options: one task a server arrives per unit of time."""
    row, column, weight = free_pairs(fleet)
    laplacian = np.zeros((fleet.size, fleet.size))
    demand = len(fleet.options) if fleet.demand is None else fleet.demand.sum()
    for one, other, amount in zip(row, column, weight * fleet.size / demand, strict=True):
        laplacian[[one, other], [one, other]] += amount
        laplacian[[one, other], [other, one]] -= amount
    capacity = np.ones(fleet.size) if fleet.capacity is None else fleet.capacity
    return laplacian, np.diag(capacity / capacity.mean())


def centred(field, prepared):
    parts = np.bincount(prepared.part, field) / np.bincount(prepared.part, prepared.room)
    return field - prepared.room * parts[prepared.part]


def by_formula(fleet, prepared, field):
    laplacian, room = matrices(fleet)
    due = centred(field, prepared)
    return sum(
        strength * np.linalg.solve(laplacian + shift * room, due)
        for strength, shift in zip(prepared.strength, prepared.shift, strict=True)
    )


def picture(prepared, field, memory=None):
    field = field.astype(float)
    smooth(*prepared.kernel_part(), *(memory or prepared.memory()), field)
    return field


def without_constants(field, prepared):
    # A constant in a part changes no comparison, and rounding may leave one.
    mean = np.bincount(prepared.part, prepared.room * field) / np.bincount(prepared.part, prepared.room)
    return field - mean[prepared.part]


@pytest.mark.parametrize(
    "fleet",
    [lk.ring(50), lk.torus(9, 10), uneven(), parted(), lk.hypercube(5), lk.ladder(40)],
    ids=["ring", "torus", "tree", "parts", "hypercube", "ladder"],
)
def test_the_picture_is_the_sum(fleet):
    prepared = smoothing(fleet, TOP)
    field = np.random.default_rng(2).normal(size=fleet.size)
    wanted = by_formula(fleet, prepared, field)
    found = without_constants(picture(prepared, field), prepared)
    assert found == pytest.approx(wanted, abs=1e-9 * np.abs(wanted).max())


@pytest.mark.parametrize("shape", ["torus", "regular"])
def test_gradients_come_close_where_elimination_stops(monkeypatch, shape):
    fleet = lk.torus(20, 21) if shape == "torus" else lk.random_regular(400, 3, rng=1)
    monkeypatch.setattr("labkit.survey.smoothing.WORK", 6_000)
    monkeypatch.setattr("labkit.survey.elimination.ALWAYS", 3)
    prepared = smoothing(fleet, TOP)
    assert fleet.size + 1 - prepared.taken > 50
    rng, memory = np.random.default_rng(3), prepared.memory()
    field = rng.normal(size=fleet.size)
    for _ in range(5):  # loads change little from one picture to the next
        wanted = by_formula(fleet, prepared, field)
        miss = without_constants(picture(prepared, field, memory), prepared) - wanted
        assert np.linalg.norm(miss) < 0.05 * np.linalg.norm(wanted)
        field += 0.3 * rng.normal(size=fleet.size)


def test_slow_patterns_by_the_inverse_root_and_fast_ones_less():
    size = 2_000
    prepared = smoothing(lk.ring(size), TOP)
    rates, responses = [], []
    for waves in (1, 2, 3, 5, 8, 13, 21, 34, 55, 144, 400, 1_000):
        wave = np.cos(2 * np.pi * waves * np.arange(size) / size)
        rates.append(2 - 2 * np.cos(2 * np.pi * waves / size))
        responses.append(picture(prepared, wave) @ wave / (wave @ wave))
    rates, relative = np.array(rates), np.array(responses) * np.sqrt(rates)
    # 1.5 % from the rule, and what the shifts left out would add: sqrt(rate / top) and less.
    assert rates[0] > 1e-6
    assert np.abs(relative - 1.0)[rates < TOP / 400] == pytest.approx(0.0, abs=0.05)
    assert (np.diff(responses) < 0).all()
    assert (relative[rates > 10 * TOP] < 0.3).all()


@pytest.mark.parametrize("fleet", [lk.ring(300), lk.ring(5_000), lk.ladder(400), lk.torus(50, 50)])
def test_shifts_reach_below_the_slowest_rate(fleet):
    prepared = smoothing(fleet, TOP)
    side = {300: 300, 5_000: 5_000, 800: 800, 2_500: 50}[fleet.size]
    share = {800: 800 / 1_198, 2_500: 0.5}.get(fleet.size, 1.0)
    slowest = share * (2 - 2 * np.cos(2 * np.pi / side))
    # Inverse iteration finds the slowest rate within a small factor.
    assert slowest / (ENOUGH * 60) < prepared.shift[-1] < 2 * slowest / ENOUGH


def test_parts_do_not_touch():
    fleet = parted()
    prepared = smoothing(fleet, TOP)
    field = np.zeros(60)
    field[20:50] = np.random.default_rng(1).normal(size=30)
    found = picture(prepared, field)
    assert np.ptp(found[:20]) < 1e-9
    assert np.ptp(found[50:59]) < 1e-9
    assert np.ptp(found[20:50]) > 0.1


def test_only_free_choices_join():
    # Two cliques of different level: the choice between them always goes down, so nothing is steered across.
    graph = nx.disjoint_union(nx.complete_graph(6), nx.path_graph(4))
    graph.add_edge(0, 6)
    fleet = lk.fleet_from_graph(graph)
    assert lk.survey(fleet).profile["level"].nunique() == 2
    row, column, _ = free_pairs(fleet)
    assert len(row) == len(graph.edges) - 1
    assert ((row < 6) == (column < 6)).all()


def test_a_choice_of_three_is_a_clique():
    servers = pd.DataFrame({"server": range(3)})
    choices = pd.DataFrame({"option_1": [0], "option_2": [1], "option_3": [2], "demand": [6.0]})
    row, column, weight = free_pairs(lk.Fleet(servers, choices))
    assert sorted(zip(row, column, weight, strict=True)) == [(0, 1, 3.0), (0, 2, 3.0), (1, 2, 3.0)]


@pytest.mark.parametrize(
    ("fleet", "shifts"),
    [(lk.fleet_from_graph(nx.complete_graph(30)), 0), (lk.hypercube(6), 1), (lk.ring(100), 2)],
    ids=["complete", "hypercube", "ring"],
)
def test_where_all_is_quick_there_is_nothing_to_smooth(fleet, shifts):
    prepared = smoothing(fleet, TOP, quick=0.8)
    assert len(prepared.shift) == shifts
    found = picture(prepared, np.arange(fleet.size))
    assert found.any() == (shifts > 0)


def test_servers_without_choices_between_them():
    # Each choice has one option alone, or one on the lower level.
    fleet = fleet_of(3, [(0, 1), (1, 2)], demand=[1.0, 0.0])
    assert not picture(smoothing(fleet, TOP, quick=0.8), np.array([3, 1, 2]))[2:].any()


@pytest.mark.parametrize("least", [1e-12, 1e-140])
def test_demands_far_apart_stay_finite(least):
    demand = np.where(np.arange(40) % 20 == 0, least, 1.0)
    fleet = fleet_of(40, [(k, (k + 1) % 40) for k in range(40)], demand=demand)
    prepared = smoothing(fleet, TOP)
    assert np.isfinite(picture(prepared, np.random.default_rng(1).normal(size=40))).all()


@pytest.mark.parametrize("kind", ["regular", "star", "ring"])
def test_large_fleets_take_bounded_room_and_work(kind):
    size = 50_000
    end = np.arange(1, size, dtype=np.uint32)
    fleet = {
        "regular": lambda: lk.random_regular(size, 3, rng=1),
        "ring": lambda: lk.ring(size),
        "star": lambda: lk.Fleet._from_positions(size, np.column_stack([np.zeros_like(end), end])),
    }[kind]()
    prepared = smoothing(fleet, TOP)
    left = size + 1 - prepared.taken
    visited = prepared.start[-1] - prepared.start[prepared.taken] + 8 * left
    assert prepared.share.size < 60 * size
    assert left == 1 or len(prepared.shift) * prepared.steps * visited <= VISITS


def test_too_many_pairs_are_refused(monkeypatch):
    monkeypatch.setattr("labkit.survey.smoothing.MOST_PAIRS", 10)
    with pytest.raises(lk.InputError, match="more than 10 pairs of options; use least-loaded"):
        smoothing(lk.ring(11), TOP)


def test_dense_root_agrees_over_all_patterns():
    # The whole operator at once, on parts of different size: M^(-1/2) for rates well below the top.
    fleet = parted()
    prepared = smoothing(fleet, 400.0)
    laplacian = block_diag(*(
        matrices(lk.ring(n))[0] * (60 / 59) for n in (20, 30, 9)
    ), np.zeros((1, 1)))  # fmt: skip
    rate, pattern = np.linalg.eigh(laplacian)
    moving = rate > 1e-9
    root = (pattern[:, moving] / np.sqrt(rate[moving])) @ pattern[:, moving].T
    field = np.random.default_rng(4).normal(size=60)
    wanted = root @ field
    found = without_constants(picture(prepared, field), prepared)
    assert np.linalg.norm(found - wanted) < 0.05 * np.linalg.norm(wanted)
