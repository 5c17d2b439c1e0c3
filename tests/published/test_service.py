"""`serve` against the theory of queues: closed forms, large fleets, exact small fleets.

Each comparison is at 4 standard errors over 50 independent replicates, with a standard error of at most 0.5 %
(a few in the far tail 2 %). A correct program fails one with probability 2e-4 (Student's t, 49 degrees of
freedom), and the file, about 90 comparisons, with 2 % for seeds drawn anew; each test has a fixed seed of its
own. All fleets start empty: the warm-up of each is many relaxation times.
"""

import itertools
import zlib

import networkx as nx
import numpy as np
import pandas as pd
import pytest
from scipy.stats import poisson

import labkit as lk
from labkit.engine.service_laws import parse_service
from tests.published import queues
from tests.published.standard_error import assert_within

FLEET = lk.complete(100)
REPLICATES = 50
HYPER, PARETO = "hyperexponential(cv=1.5)", "bounded-pareto(shape=1.5, ratio=30)"
# 60 requirements of three sizes and a spread: mean 0.8325, far from any family of laws.
SAMPLE = lk.Empirical([0.25] * 30 + [0.5] * 15 + [2.0] * 10 + list(np.linspace(1.0, 4.0, 5)))


def served(fleet, policy, **given):
    """Serve 50 replicates from a seed that follows from what is served; Little's law holds on each."""
    told = [f"{name}={value}" for name, value in sorted(given.items())]
    seed = zlib.crc32(repr([policy, fleet.digest, told]).encode())
    outcome = lk.serve(fleet, policy, replicates=REPLICATES, rng=seed, **({"intervals": 1} | given))
    assert outcome.measures["little_error"].abs().max() < 1e-9
    return outcome


def assert_measured(outcome, largest_error=0.005, /, **expected):
    """Assert measures by name; `largest_error` is relative."""
    for name, value in expected.items():
        assert_within(outcome.measures[name], value, largest_error=largest_error * value)


def assert_share(outcome, tasks, expected, largest_error=0.005):
    """Assert the share of server time with at least so many tasks."""
    table = outcome.tails.query("at_least == @tasks").set_index("replicate")["share"]
    shares = table.reindex(range(REPLICATES), fill_value=0.0)
    assert_within(shares, expected, largest_error=largest_error * expected)


# One server at a time: one option of two drawn at random splits a Poisson process into independent ones.


@pytest.mark.parametrize(("load", "horizon"), [(0.5, 900.0), (0.7, 2000.0)])
def test_one_server_exponential(load, horizon):
    left = 1 - load
    outcome = served(
        FLEET, "one-choice", load_factor=load, horizon=horizon, warmup=150.0, target=2 / left, levels=3
    )
    assert_measured(
        outcome,
        sojourn_mean=queues.mm1_sojourn(load),
        waiting_mean=queues.mm1_sojourn(load) - 1,
        waiting_share=load,
        queue_mean=load / left,
        utilisation=load,
        # the sojourn is exponential; to wait longer than w has probability load × exp(−left × w)
        sojourn_p50=np.log(2) / left,
        sojourn_p90=np.log(10) / left,
        late_share=np.exp(-2),
    )
    far = {"sojourn_p99": np.log(100) / left, "waiting_p99": np.log(100 * load) / left}
    assert_measured(outcome, 0.01, waiting_p90=np.log(10 * load) / left, **far)
    for tasks in (0, 1, 2, 3):
        assert_share(outcome, tasks, load**tasks)
    by_server = outcome.by_server.groupby("replicate")["share_at_least_3"].mean()
    assert_within(by_server, load**3, largest_error=0.005 * load**3)


def test_servers_of_unequal_speed():
    # speeds 1 and 3: both are M/M/1 at the same load, and three in four tasks go to the fast one
    fleet = lk.Fleet(
        pd.DataFrame({"server": ["slow", "fast"], "capacity": [1.0, 3.0]}),
        pd.DataFrame({"option_1": ["slow"], "option_2": ["fast"]}),
    )
    outcome = served(fleet, "one-choice", load_factor=0.5, horizon=12_000.0, warmup=200.0)
    assert_measured(outcome, sojourn_mean=0.25 * 2 + 0.75 * 2 / 3, queue_mean=1.0, utilisation=0.5)
    each = outcome.by_server.set_index(["server", "replicate"])["queue_mean"]
    assert_within(each["slow"], 1.0, largest_error=0.01)
    assert_within(each["fast"], 1.0, largest_error=0.01)


@pytest.mark.parametrize(
    ("law", "horizon"),
    [
        ("deterministic", 300.0),
        ("deterministic(mean=2.5)", 700.0),
        ("lognormal(cv=1.5)", 1800.0),
        (HYPER, 1800.0),
        (PARETO, 1800.0),
        (SAMPLE, 900.0),
    ],
    ids=str,
)
def test_one_server_any_law(law, horizon):
    """Pollaczek 1930 and Khinchine 1932."""
    known = parse_service(law)
    wait = queues.mg1_wait(0.5 / known.mean, known.mean, known.second_moment)
    outcome = served(FLEET, "one-choice", load_factor=0.5, horizon=horizon, warmup=200.0, service=law)
    assert_measured(outcome, waiting_share=0.5, utilisation=0.5)
    assert_measured(
        outcome, sojourn_mean=wait + known.mean, queue_mean=0.5 / known.mean * (wait + known.mean)
    )


@pytest.mark.parametrize("law", ["deterministic", "exponential", HYPER, PARETO], ids=str)
def test_shared_server_any_law(law):
    """Kleinrock 1967; Sakata, Noguchi & Oizumi 1971: only the mean of the law counts."""
    outcome = served(
        FLEET, "one-choice", load_factor=0.6, horizon=900.0, warmup=200.0, service=law, discipline="ps"
    )
    assert_measured(outcome, sojourn_mean=queues.sharing_sojourn(0.6), queue_mean=1.5, utilisation=0.6)
    for tasks in (1, 2, 4):
        assert_share(outcome, tasks, 0.6**tasks, 0.01)


def test_servers_that_fail():
    """Exponential times up and down, work going on where it stopped (Avi-Itzhak & Naor 1963).

    Both servers fail together, since tasks avoid one that is down alone.
    """
    load, failing, returning, horizon = 0.4, 0.1, 0.4, 20_000.0
    draws = np.random.default_rng(5)
    rows = []
    for seed in range(REPLICATES):
        lengths = draws.exponential([1 / failing, 1 / returning], (3000, 2)).ravel()
        times = np.repeat(np.cumsum(lengths), 2)
        assert times[-1] > horizon
        states = ["down", "down", "up", "up"] * 3000
        schedule = pd.DataFrame({"time": times, "server": [0, 1] * 6000, "state": states})
        outcome = lk.serve(
            lk.complete(2), "one-choice", load_factor=load, horizon=horizon, warmup=300.0, rng=seed,
            failures=lk.Failures(schedule), intervals=1,
        )  # fmt: skip
        rows.append(outcome.measures)
    measures = pd.concat(rows)
    tasks = queues.failing_tasks(load, failing, returning)
    for name, value in {"sojourn_mean": tasks / load, "queue_mean": tasks, "utilisation": load}.items():
        assert_within(measures[name], value, largest_error=0.01 * value)
    assert measures["little_error"].abs().max() < 1e-9


# Sessions


@pytest.mark.parametrize(
    ("offered", "places", "blocked", "horizon"),
    [
        (10, 10, 0.2145823431, 50.0),
        (5, 10, 0.0183845703, 450.0),
        (20, 30, 0.0084574983, 300.0),
        # 1 % blocking, as planners' tables have it
        (4.461177, 10, 0.01, 900.0),
        (12.030615, 20, 0.01, 300.0),
    ],
)
def test_sessions_with_so_many_places(offered, places, blocked, horizon):
    """Erlang 1917; one-decimal table in "Carrier Grade Voice over IP", 2nd edition, appendix A."""
    outcome = served(
        FLEET, "one-choice", load_factor=offered, horizon=horizon, warmup=20.0, discipline="sessions",
        limit=places, on_full="lost",
    )  # fmt: skip
    assert_measured(outcome, blocked_share=blocked, queue_mean=offered * (1 - blocked), sojourn_mean=1)
    assert_share(outcome, places, blocked)
    assert outcome.measures["max_load"].max() == places
    assert outcome.measures["waiting_mean"].max() == 0


@pytest.mark.parametrize("law", ["exponential", PARETO], ids=str)
def test_sessions_without_limit(law):
    """M/G/∞: Poisson numbers of sessions, whatever the law."""
    outcome = served(
        FLEET, "one-choice", load_factor=3.0, horizon=300.0, warmup=60.0, service=law, discipline="sessions"
    )
    assert_measured(outcome, queue_mean=3.0, utilisation=3.0, sojourn_mean=1.0)
    for tasks in range(1, 9):
        assert_share(outcome, tasks, poisson.sf(tasks - 1, 3.0), 0.005 if tasks < 7 else 0.02)


def test_sessions_by_the_time_of_day():
    """M(t)/M/∞: the mean number m follows m' = rate(t) − m (Eick, Massey & Whitt 1993, from memory)."""
    profile, period = np.array([1.0, 0.0, 4.0, 3.0]), 2.0
    outcome = served(
        lk.complete(1000), "one-choice", load_factor=2.0, horizon=12.0, warmup=10.0, discipline="sessions",
        intervals=4, profile=profile, period=period,
    )  # fmt: skip
    decay, number = np.exp(-period / 4), 0.0
    for _ in range(6):
        means = []
        for rate in profile:
            means.append(rate + (number - rate) * (1 - decay) / (period / 4))
            number = rate + (number - rate) * decay
    areas = outcome.by_interval.pivot(index="replicate", columns="interval", values="area")
    for part, mean in enumerate(means):
        assert_within(areas[part] / 1000 / (period / 4), mean, largest_error=0.005 * mean)


# Many servers


@pytest.mark.parametrize(
    ("load", "options", "horizon", "warmup"),
    [
        (0.5, 2, 60.0, 20.0),
        (0.7, 2, 80.0, 40.0),
        (0.9, 2, 180.0, 100.0),
        (0.5, 3, 60.0, 20.0),
        (0.9, 3, 180.0, 100.0),
    ],
)
def test_many_servers(load, options, horizon, warmup):
    """Vvedenskaya, Dobrushin & Karpelevich 1996; Mitzenmacher 2001.

    The limit is approached like 1/n: what 100 servers are beyond it, 0.1 % and 1.2 % (loads 0.5 and 0.9, two
    options), is 0.006 % and 0.06 % of 2,000 servers, within half a standard error.
    """
    outcome = served(
        lk.complete(2000, options=options), "least-loaded", load_factor=load, horizon=horizon, warmup=warmup
    )
    assert_measured(outcome, sojourn_mean=queues.large_fleet_sojourn(load, options), utilisation=load)
    level = 1
    while (tail := queues.large_fleet_tail(load, options, level)) > 0.01:
        assert_share(outcome, level, tail, 0.005 if level == 1 else 0.02)
        level += 1


@pytest.mark.parametrize(("load", "mean", "horizon"), [(0.5, 1.2673, 500.0), (0.9, 2.6454, 1500.0)])
def test_hundred_servers(load, mean, horizon):
    """Simulated by Mitzenmacher 2001 (table from memory); its last digit is half a standard error."""
    outcome = served(FLEET, "least-loaded", load_factor=load, horizon=horizon, warmup=150.0)
    assert_measured(outcome, sojourn_mean=mean)


@pytest.mark.parametrize(
    ("load", "every", "horizon", "warmup"),
    [(0.5, 1.0, 70.0, 30.0), (0.5, 5.0, 80.0, 30.0), (0.9, 5.0, 220.0, 120.0)],
)
def test_old_reports(load, every, horizon, warmup):
    """Least-loaded of two by loads reported at times (Mitzenmacher 2000); windows of whole reports."""
    outcome = served(
        lk.complete(2000), "least-loaded", load_factor=load, horizon=horizon, warmup=warmup,
        information=lk.Snapshot(every=every),
    )  # fmt: skip
    assert_measured(outcome, sojourn_mean=queues.bulletin_board_sojourn(load, 2, every))


# Few servers


@pytest.mark.parametrize(
    ("graph", "load", "most", "mean", "horizon"),
    [
        (nx.path_graph(2), 0.5, 20, 1.426320751, 8_000.0),
        (nx.path_graph(2), 0.7, 45, 2.108197274, 25_000.0),
        (nx.path_graph(3), 0.5, 10, 1.404242053, 6_000.0),
        (nx.complete_graph(3), 0.5, 9, 1.352003472, 6_000.0),
        (nx.cycle_graph(4), 0.5, 7, 1.337836645, 5_000.0),
    ],
    ids=["two", "two at 0.7", "path of 3", "triangle", "ring of 4"],
)
def test_few_servers(graph, load, most, mean, horizon):
    """The shortest queue on small graphs, by the Markov chain of the numbers of tasks."""
    exact = queues.graph_sojourn(graph, load, most)
    assert exact == pytest.approx(mean, rel=1e-4)
    fleet = lk.fleet_from_graph(graph)
    outcome = served(fleet, "least-loaded", load_factor=load, horizon=horizon, warmup=100.0)
    assert_measured(outcome, sojourn_mean=exact, queue_mean=load * exact, utilisation=load)


def test_rings_do_worse_than_all_servers():
    # each server meets two others only: worse than with all, better than with none (no value is known)
    means = [
        served(fleet, rule, load_factor=0.9, horizon=2_000.0, warmup=500.0).measures["sojourn_mean"]
        for fleet, rule in ((FLEET, "least-loaded"), (lk.ring(100), "least-loaded"), (FLEET, "one-choice"))
    ]
    for lower, higher in itertools.pairwise(means):
        gap = higher - lower
        assert gap.mean() > 4 * gap.std(ddof=1) / np.sqrt(REPLICATES)
