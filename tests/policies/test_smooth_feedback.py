"""Smooth feedback: the tilt is what the formula says, and it tames the slow patterns of sparse fleets."""

import itertools
from pathlib import Path

import networkx as nx
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.compiled import compiled
from labkit.policies.naming import parse_policy
from labkit.policies.smooth_feedback import GAIN, WIDTH, choose, renew
from labkit.survey.fair import fair_profile

STRIDE, SHORT_STRIDE = 20_011, 1_009  # tasks between measurements: prime, so that all phases of loads count
DEMO = Path(__file__).parents[2] / "experiments" / "demo"


def uneven_tree(size=30, seed=3):
    # Unit demand on a tree with capacities that its halves of demand fill evenly: balanced by construction.
    tree = nx.random_labeled_tree(size, seed=seed)
    rng = np.random.default_rng(seed)
    demand = rng.uniform(0.5, 2.0, size - 1)
    capacity = np.zeros(size)
    for (one, other), amount in zip(tree.edges, demand, strict=True):
        share = rng.uniform(0.2, 0.8)
        capacity[one] += amount * share
        capacity[other] += amount * (1 - share)
    choices = pd.DataFrame(list(tree.edges), columns=["option_1", "option_2"]).assign(demand=demand)
    return lk.Fleet(pd.DataFrame({"server": range(size), "capacity": capacity}), choices)


def dense_tilt(fleet, loads, gain):
    """Return the tilts that gain × M^(-1/2) gives, each pattern of rate r by h(r), from dense matrices.

    M = C^(-1/2) L C^(-1/2); h(r) = r^(-1/2) where r is far below gain², by trapezoids above.
    """
    size = fleet.size
    laplacian = np.zeros((size, size))
    demand = np.ones(len(fleet.options)) if fleet.demand is None else fleet.demand
    for (one, other), amount in zip(fleet.options.astype(int), demand * size / demand.sum(), strict=True):
        laplacian[[one, other], [one, other]] += amount
        laplacian[[one, other], [other, one]] -= amount
    capacity = np.ones(size) if fleet.capacity is None else fleet.capacity
    root = np.sqrt(capacity / capacity.mean())
    rate, pattern = np.linalg.eigh(laplacian / np.outer(root, root))
    rate, pattern = rate[1:], pattern[:, 1:]
    shift = gain**2 * np.exp(-2.0 * (2 * np.arange(40) + 1))
    response = 4 / np.pi * (np.sqrt(shift) / (rate[:, None] + shift)).sum(axis=1)
    beyond = (loads / capacity - fair_profile(fleet).of_unit_work * loads.sum()) * root
    return gain * ((pattern * response) @ (pattern.T @ beyond)) / root


@pytest.mark.parametrize(
    "fleet",
    [lk.ring(17), lk.ring(200), lk.torus(4, 5), lk.ladder(30), uneven_tree(), uneven_tree(150, 5)],
    ids=["ring", "long ring", "torus", "ladder", "tree", "large tree"],
)
def test_the_tilt_is_the_formula(fleet):
    assert lk.survey(fleet).balanceable
    rule = lk.SmoothFeedback(gain=0.3, every=fleet.size)
    state = rule.prepare(fleet)
    loads = np.random.default_rng(1).integers(0, 50, fleet.size)
    renew(state, loads)
    tilt = state[0] / (1.0 if fleet.capacity is None else fleet.capacity)
    mean = np.average(tilt, weights=fleet.capacity)
    wanted = dense_tilt(fleet, loads, 0.3)
    # Shifts that all give the same picture are summed up in one: up to 5 % for the slowest pattern.
    assert np.linalg.norm(tilt - mean - wanted) < 0.05 * np.linalg.norm(wanted)


@pytest.mark.parametrize("count", [2, 3])
def test_where_nothing_is_slow_it_is_least_loaded_to_the_bit(count):
    size = 12
    choices = pd.DataFrame(list(itertools.combinations(range(size), count)))
    servers = pd.DataFrame({"server": range(size)})
    if count == 3:
        servers["capacity"] = np.where(np.arange(size) % 3, 1.0, 1.2)
    fleet = lk.Fleet(servers, choices.rename(columns=lambda place: f"option_{place + 1}"))
    for information in (lk.Fresh(), lk.Snapshot(every=7)):
        ours, theirs = (
            lk.place(fleet, rule, tasks=300, replicates=3, rng=1, information=information).loads
            for rule in ("smooth-feedback", "least-loaded")
        )
        assert (ours == theirs).all()


@pytest.mark.parametrize("every", [0, 5])
def test_tasks_go_where_utilisation_plus_tilt_is_lowest(every):
    fleet, tasks, renewal = uneven_tree(12), 80, 7
    rule = lk.SmoothFeedback(gain=0.3, every=renewal)
    information = lk.Snapshot(every=every) if every else lk.Fresh()
    loads = [
        lk.place(fleet, rule, tasks=count, rng=5, information=information).loads[0]
        for count in range(1, tasks + 1)
    ]
    arrivals = [
        lk.place(fleet, "least-loaded(ties=first)", tasks=count, rng=5).loads[0]
        for count in range(1, tasks + 1)
    ]
    state = rule.own_state(rule.prepare(fleet))
    before, seen, told = np.zeros(12, np.int64), np.zeros(12, np.int64), 0
    other = np.zeros(12, np.int64)
    for task in range(tasks):
        seen = before.copy() if not every or task % every == 0 else seen
        if task % renewal == 0:
            renew(state, seen)
        went = int(np.flatnonzero(loads[task] - before)[0])
        # The server that another rule took on the same arrival narrows down which choice it was.
        rival = int(np.flatnonzero(arrivals[task] - other)[0])
        level = (seen + state[0]) / fleet.capacity
        width = WIDTH / fleet.capacity.min()
        pair = [row for row in fleet.options.tolist() if went in row and rival in row]
        if rival != went:
            assert len(pair) == 1
            assert level[went] <= level[rival] + width / 2
            told += 1
        before, other = loads[task], arrivals[task]
    assert told > 10


@pytest.mark.parametrize("capacity", [None, np.array([1.0, 2.0, 4.0])], ids=["equal", "unequal"])
@pytest.mark.parametrize("count", [2, 3])
def test_equal_loads_are_parted_by_tilt_and_coin(count, capacity):
    options, row = np.array([[0, 1, 2]], np.uint32), np.uint64(0)
    size = np.ones(3) if capacity is None else capacity
    pick = compiled(choose)
    coins = np.random.default_rng(1).integers(0, 2**64, 3_000, np.uint64)

    def shares(tilt, loads, width=WIDTH):
        state = (np.array(tilt) * size, width)
        seen = np.array(loads) * size
        picked = [pick(state, seen, capacity, options, row, count, row, coin, None) for coin in coins]
        return np.bincount(np.array(picked, np.int64), minlength=3)[:count] / len(coins)

    # No tilt: all equal ones alike. 4 standard errors: false 1 time in 2,000.
    even = 4 * np.sqrt(0.25 / len(coins))
    for width in (WIDTH, 0.0):
        assert shares([0, 0, 0], [5, 5, 5], width) == pytest.approx(1 / count, abs=even)
    # A tilt as large as the noise decides, a quarter of it moves the odds, one task counts for more.
    assert shares([WIDTH, 0, WIDTH], [5, 5, 5])[1] == 1.0
    odds = shares([WIDTH / 4, 0, WIDTH / 4], [5, 5, 5])
    assert odds[0] + even < odds[1] < 1.0
    assert shares([0, 0.5, 0], [5, 4, 5])[1] == 1.0
    assert shares([0, 1.5, 2.0], [5, 4, 4])[0] == 1.0


@pytest.mark.parametrize("information", [lk.Fresh(), lk.Snapshot(every=50)], ids=repr)
def test_threads_change_nothing(information):
    given = {"tasks": 30_000, "replicates": 6, "rng": 2, "information": information}
    alone, shared = (lk.place(lk.torus(40, 41), "smooth-feedback", **given, workers=n).loads for n in (1, 3))
    assert (alone == shared).all()


def stationary_gap(fleet, rule, rounds, start=None, replicates=4, rng=11, information=None):
    """Return mean gap and standard error over replicates, from the second half of the run."""
    tasks = rounds * fleet.size
    moments = np.arange(tasks // 2, tasks + 1, STRIDE if fleet.size > 200 else SHORT_STRIDE)
    given = {"checkpoints": moments, "start": start, "information": information, "workers": 2}
    table = lk.place(fleet, rule, tasks=tasks, replicates=replicates, rng=rng, **given).measures
    each = table.groupby("replicate")["gap"].mean()
    return float(each.mean()), float(each.std(ddof=1) / np.sqrt(replicates))


@pytest.mark.parametrize(("size", "least", "share"), [(1024, 26.9, 0.52), (4096, 54, 0.37)])
def test_the_gap_on_long_rings(size, least, share):
    # Mean stationary gaps of least-loaded on these rings, 26.9 and about 54, from an independent program.
    # Ours are 12.5 and 17.3 (0.47 and 0.32 of those), standard error about 0.5 in such a run.
    fleet = lk.ring(size)
    flat, _ = stationary_gap(fleet, "smooth-feedback", 16_000, replicates=2)
    # Shown stationary: a start with a slow wave brackets the gap from above, and ends nearly at the same.
    wave = np.round(4 * (1 + np.cos(2 * np.pi * np.arange(size) / size)))
    tall, _ = stationary_gap(fleet, "smooth-feedback", 16_000, start=wave, replicates=2)
    assert abs(flat - tall) < 0.15 * flat
    assert max(flat, tall) < share * least


@pytest.mark.parametrize("every", [64, 256, 1024])
def test_the_gap_on_a_ring_when_reports_are_late(every):
    # Gaps are 0.65 to 0.68 of those of least-loaded, 13.3, 14.8 and 22.7, standard errors 0.6 and 0.2.
    ours, theirs = (
        stationary_gap(lk.ring(256), rule, 8_000, replicates=8, information=lk.Snapshot(every=every))[0]
        for rule in ("smooth-feedback", "least-loaded")
    )
    assert ours < 0.85 * theirs


def wheel_of(size):
    return lk.fleet_from_graph(nx.wheel_graph(size))


@pytest.mark.parametrize(
    ("fleet", "rounds", "share"),
    [
        (lk.torus(32, 32), 1_500, 0.9),
        (lk.ladder(256), 4_000, 0.8),
        (lk.hypercube(8), 1_000, 1.0),
        (lk.random_regular(64, 3, rng=1), 4_000, 0.98),
        (wheel_of(40), 4_000, 1.0),
        (uneven_tree(60), 4_000, 1.0),
    ],
    ids=["torus", "ladder", "hypercube", "regular", "wheel", "tree"],
)
def test_elsewhere_it_is_not_worse_than_least_loaded(fleet, rounds, share):
    ours, error = stationary_gap(fleet, "smooth-feedback", rounds, replicates=8)
    theirs, other = stationary_gap(fleet, "least-loaded", rounds, replicates=8)
    assert ours < share * theirs + 3 * np.hypot(error, other)


@pytest.mark.parametrize("every", [0, 200])
def test_on_the_demo_fleet_it_is_not_worse_than_least_loaded(every):
    # Paired over common arrivals. Fresh it is better by 8 standard errors, with late reports the two are
    # level, so that the bound of 2 is false 1 time in 40 for a new seed.
    information = lk.Snapshot(every=every) if every else lk.Fresh()
    fleet = lk.read_fleet(DEMO)
    ours, theirs = (
        lk.place(fleet, rule, tasks=9_600, replicates=800, rng=1, information=information, workers=2).measures
        for rule in ("smooth-feedback", "least-loaded")
    )
    for measure in ("excess", "gap"):
        worse = ours[measure] - theirs[measure]
        assert worse.mean() <= 2 * worse.std() / np.sqrt(800)


def test_names_read_back():
    for rule in (lk.SmoothFeedback(), lk.SmoothFeedback(gain=0.3, every=100), lk.SmoothFeedback(every=7)):
        assert parse_policy(rule.name) == rule
    assert lk.SmoothFeedback(gain=GAIN).name == "smooth-feedback"


@pytest.mark.parametrize(
    ("values", "refusal"),
    [
        ({"gain": 0}, "gain is 0; give a number above 0"),
        ({"gain": float("inf")}, "gain is inf; give a finite number"),
        ({"gain": 1e308}, "gain is 1e.308; give a number of at most 100"),
        ({"every": 0}, "every is 0; give a whole number of at least 1"),
        ({"every": 2.5}, "every is 2.5; give a whole number"),
    ],
)
def test_wrong_values_are_refused(values, refusal):
    with pytest.raises(lk.InputError, match=refusal):
        lk.SmoothFeedback(**values)


def test_a_complete_fleet_is_refused():
    with pytest.raises(lk.InputError, match="use least-loaded"):
        lk.place(lk.complete(5), "smooth-feedback", tasks=5, rng=1)
