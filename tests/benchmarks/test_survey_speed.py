"""Time and memory of an exact survey, and its ratio to a general linear program on the same fleets."""

import subprocess
import sys

import networkx as nx
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.survey.fair import fair_profile, top_of_profile
from tests.benchmarks.side_by_side import seconds
from tests.survey.oracles import assert_fair, linear_program

pytestmark = pytest.mark.benchmark

# HiGHS gets so long for each of its two methods.
PATIENCE = 120


def fleet_on(servers, options, demand=None, capacity=None):
    """Return a fleet of servers 0, 1, ... with one row of options a choice."""
    choices = pd.DataFrame(options, columns=[f"option_{place + 1}" for place in range(options.shape[1])])
    table = pd.DataFrame({"server": np.arange(servers)})
    return lk.Fleet(
        table if capacity is None else table.assign(capacity=capacity),
        choices if demand is None else choices.assign(demand=demand),
    )


def grid(side):
    """Return the edges of a square grid."""
    place = np.arange(side * side).reshape(side, side)
    across = np.stack([place[:, :-1].ravel(), place[:, 1:].ravel()], axis=1)
    down = np.stack([place[:-1].ravel(), place[1:].ravel()], axis=1)
    return np.concatenate([across, down])


def road_like(side=317):
    """Return a fleet like a road network: a grid of about 100,000 servers with 130,000 of its edges left."""
    rng = np.random.default_rng(1)
    ends = grid(side)
    ends = ends[rng.random(len(ends)) < 0.65]
    return fleet_on(side * side, ends, rng.exponential(1, len(ends)), rng.uniform(1, 3, side * side))


def at_random(servers, choices):
    """Return the two servers of each choice, drawn at random."""
    rng = np.random.default_rng(1)
    one = rng.integers(0, servers, choices)
    return np.stack([one, (one + rng.integers(1, servers, choices)) % servers], axis=1)


@pytest.fixture(scope="module", autouse=True)
def warm():
    fleet = lk.ring_with_chords(30, 5, rng=1)
    top_of_profile(fleet)
    fair_profile(fleet)


def linear_program_seconds(fleet, method):
    """Return the time of a plain linear program, and its optimum, None where the time was up."""
    found = []
    spent = seconds(lambda: found.append(linear_program(fleet, method=method, time_limit=PATIENCE)))
    return spent, found[0]


@pytest.mark.parametrize(
    ("make", "target"),
    [(road_like, 3), (lambda: fleet_on(10_000, at_random(10_000, 100_000)), 20)],
    ids=["road-like", "random"],
)
def test_against_a_general_linear_program(make, target, report, request):
    fleet = make()
    found = []
    top = min(seconds(lambda: found.append(top_of_profile(fleet))) for _ in range(3))
    whole = seconds(lambda: found.append(fair_profile(fleet)))
    tried = {method: linear_program_seconds(fleet, method) for method in ("highs-ds", "highs-ipm")}
    ended = {method: spent for method, (spent, value) in tried.items() if value is not None}
    theirs = min(ended.values(), default=PATIENCE)
    word = "" if ended else "more than "
    each = ", ".join(
        f"{method} {spent:.1f} s{'' if value is not None else ' (not ended)'}"
        for method, (spent, value) in tried.items()
    )
    report(
        f"survey, {request.node.callspec.id}, {len(fleet)} servers and {len(fleet.options)} choices: optimum "
        f"and bottleneck {top:.2f} s, whole profile {whole:.2f} s, linear program {each}: "
        f"{word}{theirs / top:.0f} x"
    )
    for _, value in tried.values():
        assert value is None or value == pytest.approx(found[0].optimum, rel=1e-6)
    assert found[-1].optimum == pytest.approx(found[0].optimum, rel=1e-12)
    assert_fair(fleet, found[-1])
    assert top <= 10
    assert whole <= 60
    assert theirs >= target * top


def test_memory_of_a_road_like_fleet(report):
    code = (
        "import resource\nfrom tests.benchmarks.test_survey_speed import road_like\nimport labkit as lk\n"
        "best = lk.survey(road_like())\nbest.profile\nbest.table()\n"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    peak = int(done.stdout) * (1 if sys.platform == "darwin" else 1024)
    report(f"survey, road-like, all facts: {peak / 2**20:.0f} MiB at most, Python and all packages included")
    assert peak <= 1.5 * 2**30


RING = np.stack([np.arange(100_000), (np.arange(100_000) + 1) % 100_000], axis=1)


def thinned_slope():
    """Return a thinned grid whose demand grows from one side to the other."""
    rng = np.random.default_rng(3)
    ends = grid(317)
    ends = ends[rng.random(len(ends)) < 0.65]
    return fleet_on(317 * 317, ends, 1 + 2 * (ends[:, 0] // 317) / 317)


def heavy_tailed():
    """Return a graph with hubs and demands of infinite variance."""
    ends = np.array(nx.barabasi_albert_graph(50_000, 2, seed=1).edges)
    return fleet_on(50_000, ends, np.random.default_rng(1).pareto(1.2, len(ends)) + 1e-3)


def windows():
    """Return choices of 100 neighbouring servers each."""
    rng = np.random.default_rng(1)
    options = (np.arange(20_000)[:, None] + np.arange(100)) % 20_000
    return fleet_on(20_000, options, rng.exponential(1, 20_000), rng.uniform(1, 10, 20_000))


def ten_options():
    """Return choices of ten servers each, with demands and capacities over six orders of magnitude."""
    rng = np.random.default_rng(1)
    options = np.array([rng.choice(5_000, 10, replace=False) for _ in range(25_000)])
    return fleet_on(5_000, options, 10 ** rng.uniform(-3, 3, 25_000), 10 ** rng.uniform(-3, 3, 5_000))


def many_parallel():
    """Return a million choices among a thousand servers."""
    rng = np.random.default_rng(1)
    ends = at_random(1_000, 1_000_000)
    return fleet_on(1_000, ends, rng.exponential(1, 1_000_000), rng.uniform(1, 5, 1_000))


HARD = {
    "ring with chords": lambda: lk.ring_with_chords(100_000, 20_000, rng=1),
    "torus": lambda: lk.torus(300, 300),
    "ring of two halves": lambda: fleet_on(100_000, RING, np.where(np.arange(100_000) < 50_000, 1.0, 0.9)),
    "ring of rising demand": lambda: fleet_on(100_000, RING, 1 + np.arange(100_000) / 100_000),
    "path to one large server": lambda: fleet_on(
        100_000, RING[:-1], None, np.append(np.ones(99_999), 100_000.0)
    ),
    "path of capacities from 1e-140 to 1e140": lambda: fleet_on(
        100_000, RING[:-1], None, 10 ** np.linspace(-140, 140, 100_000)
    ),
    "tree": lambda: fleet_on(100_000, np.array(nx.random_labeled_tree(100_000, seed=1).edges)),
    "star": lambda: fleet_on(
        100_000,
        np.stack([np.zeros(99_999, int), np.arange(1, 100_000)], axis=1),
        np.random.default_rng(1).uniform(0, 2, 99_999),
    ),
    "thinned slope": thinned_slope,
    "heavy tails": heavy_tailed,
    "windows of 100 options": windows,
    "ten options, amounts far apart": ten_options,
    "a million choices": many_parallel,
}


@pytest.mark.parametrize("name", HARD)
def test_hard_shapes(name, report):
    fleet = HARD[name]()
    found = []
    top = seconds(lambda: top_of_profile(fleet))
    whole = seconds(lambda: found.append(fair_profile(fleet)))
    report(
        f"survey, {name}: optimum {top:.2f} s, whole profile {whole:.2f} s, {len(found[0].level)} levels "
        f"({len(fleet)} servers, {len(fleet.options)} choices of up to {fleet.options.shape[1]})"
    )
    assert_fair(fleet, found[0])
    assert top <= 10
    assert whole <= 60


def test_time_grows_in_proportion_where_work_travels_far(report):
    # A ring of which one half has a little more demand: work moves over a quarter of it.
    spent = []
    for size in (100_000, 800_000):
        server = np.arange(size)
        ends = np.stack([server, (server + 1) % size], axis=1)
        fleet = fleet_on(size, ends, np.where(server < size // 2, 1.0, 0.9))
        spent.append(min(seconds(lambda fleet=fleet: top_of_profile(fleet)) for _ in range(2)))
    report(f"survey, ring of two halves: 8 x the servers (800000) take {spent[1] / spent[0]:.1f} x the time")
    assert spent[1] <= 24 * spent[0]
