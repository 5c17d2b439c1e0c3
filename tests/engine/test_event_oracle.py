"""The oracle of work that leaves against numbers worked out on paper and against closed forms.

The statistical tests compare the mean of 20 independent servers or pairs with theory, within 4 standard
errors estimated from them: a right oracle fails one comparison with probability 0.0008 (Student, 19 degrees
of freedom). Their seeds are fixed.
"""

import math

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from tests.event_measures import measures, measures_by_interval, overlap, time_at_levels
from tests.events import arrival_times, plain_python_replay, requirements_of, serve
from tests.reference import WORD, arrival, words

FIRST = ("least-loaded", "first")


def pair(*capacity):
    servers = pd.DataFrame({"server": ["a", "b"], "capacity": capacity or (1, 1)})
    return lk.Fleet(servers, pd.DataFrame({"option_1": ["a"], "option_2": ["b"]}))


def four_tasks(*, capacity=(1, 1), times=(0, 1, 2, 3), requirements=(5, 3.5, 2, 1), **given):
    """Serve tasks on two servers: fresh loads put the first four on a, b, a, b."""
    return serve(pair(*capacity), FIRST, times=times, requirements=requirements, entropy=1, **given)


def ends(record):
    return [task.ended if task.fate == "completed" else task.fate for task in record.tasks]


def servers(record):
    return [[stay.server for stay in task.stays] for task in record.tasks]


def test_first_come_first_served_by_hand():
    # a: 0–5 and 5–7. b: 1–4.5 and 4.5–5.5.
    record = four_tasks()
    assert servers(record) == [[0], [1], [0], [1]]
    assert ends(record) == [5, 4.5, 7, 5.5]
    whole = measures(record, 0, 8)
    assert whole["sojourn_mean"] == (5 + 3.5 + 5 + 2.5) / 4
    assert whole["waiting_mean"] == (0 + 0 + 3 + 1.5) / 4
    assert (whole["sojourn_p50"], whole["sojourn_p90"], whole["waiting_p50"]) == (3.5, 5, 0)
    assert (whole["area"], whole["queue_mean"], whole["utilisation"]) == (16, 1, 11.5 / 16)
    assert (whole["arrivals"], whole["completed"], whole["max_load"], whole["max_utilisation"]) == (
        4,
        4,
        2,
        2,
    )
    assert time_at_levels(record, 0, 0, 8) == {0: 1, 1: 4, 2: 3}
    # From 4.5, when one departs before the window, to 6: tasks end at 5 and 5.5.
    part = measures(record, 4.5, 6)
    assert (part["completed"], part["arrivals"], part["area"], part["max_load"]) == (2, 0, 3, 2)
    assert part["utilisation"] == (1.5 + 1) / 2 / 1.5
    assert [row["completed"] for row in measures_by_interval(record, 0, 8, 2)] == [0, 4]


def test_first_come_first_served_at_the_speed_of_each_server_by_hand():
    # a has speed 2: 0–2.5, then 2.5–3.5; at 3 it has one task, utilisation 1/2, and gets the last: 3.5–4.
    record = four_tasks(capacity=(2, 1))
    assert servers(record) == [[0], [1], [0], [0]]
    assert ends(record) == [2.5, 4.5, 3.5, 4]
    whole = measures(record, 0, 5)
    assert whole["waiting_mean"] == (0 + 0 + 0.5 + 0.5) / 4
    assert whole["utilisation"] == (2 * 4 + 3.5) / 15
    assert whole["max_utilisation"] == 1


def test_processor_sharing_by_hand():
    # a: alone to 2 (3 left), halves: the other's 2 are done at 6, then 1 left. b: alone to 3 (1.5 left),
    # halves: the other's 1 is done at 5, then 0.5 left.
    record = four_tasks(discipline="ps")
    assert ends(record) == [7, 5.5, 6, 5]
    whole = measures(record, 0, 8)
    assert whole["waiting_mean"] == (2 + 1 + 2 + 1) / 4
    assert whole["utilisation"] == 11.5 / 16


def test_sessions_by_hand():
    record = four_tasks(discipline="sessions", capacity=(2, 2))
    assert ends(record) == [5, 4.5, 4, 4]
    whole = measures(record, 0, 5)
    assert whole["waiting_mean"] == 0
    assert whole["utilisation"] == 11.5 / 4 / 5


@pytest.mark.parametrize(
    ("limits", "on_full", "expected"),
    [
        ((1, 1), "another", [5, 4.5, "blocked", "blocked"]),
        # The third is picked for a, which is full, and goes to b: 4.5–6.5. Then both are full.
        ((1, 2), "another", [5, 4.5, 6.5, "blocked"]),
        ((1, 2), "lost", [5, 4.5, "blocked", "blocked"]),
    ],
)
def test_limits_by_hand(limits, on_full, expected):
    record = four_tasks(limits=limits, on_full=on_full)
    assert ends(record) == expected
    assert measures(record, 0, 8)["blocked_share"] == expected.count("blocked") / 4
    assert measures(record, 2, 3)["blocked"] == (expected[2] == "blocked")


# Server a is down from 3 to 6. A task that comes at 3 comes after the failure.
DOWN = ((3, 6), (0, 0), (False, True))


@pytest.mark.parametrize(
    ("discipline", "on_failure", "limits", "expected"),
    [
        # First in line has 2 of 5 left, so 6–8, and the other 8–10. The last waits on b, 4.5–5.5.
        ("fcfs", "wait", None, [8, 4.5, 10, 5.5]),
        ("fcfs", "lost", None, ["lost", 4.5, "lost", 5.5]),
        # Both begin anew on b, before the task that comes at 3: 4.5–9.5–11.5–12.5.
        ("fcfs", "requeue", None, [9.5, 4.5, 11.5, 12.5]),
        # b has room for one of them: 4.5–9.5. The other waits on a, 6–8; for the newcomer nothing is open.
        ("fcfs", "requeue", (9, 2), [9.5, 4.5, 8, "blocked"]),
        # At 3 there are 2.5 and 1.5 left on a, which go on at 6: done at 9, then 1 left. b does not care.
        ("ps", "wait", None, [10, 5.5, 9, 5]),
        ("ps", "lost", None, ["lost", 5.5, "lost", 5]),
        # From 3 four tasks share b: 1.5, 5, 2, 1 left. Done at 3 + 4, + 1.5, + 1, + 3.
        ("ps", "requeue", None, [12.5, 8.5, 9.5, 7]),
        ("sessions", "wait", None, [8, 4.5, 7, 4]),
        ("sessions", "lost", None, ["lost", 4.5, "lost", 4]),
        ("sessions", "requeue", None, [8, 4.5, 5, 4]),
        # The third has 1 of 2 left and no place on b, so that it goes on when a is back.
        ("sessions", "requeue", (9, 2), [8, 4.5, 7, "blocked"]),
    ],
)
def test_failures_by_hand(discipline, on_failure, limits, expected):
    record = four_tasks(discipline=discipline, on_failure=on_failure, limits=limits, failures=DOWN)
    assert ends(record) == [value if isinstance(value, str) else pytest.approx(value) for value in expected]
    whole = measures(record, 0, 15)
    held = {"wait": (0, 0, 2), "lost": (2, 0, 0), "requeue": (0, 2, 0)}[on_failure]
    assert (whole["lost"], whole["requeued"], whole["waited"]) == ((0, 1, 1) if limits else held)


def test_a_server_that_is_down_does_no_work_by_hand():
    record = four_tasks(failures=DOWN)
    assert measures(record, 0, 10)["utilisation"] == (3 + 4 + 4.5) / 20
    assert measures(record, 2, 7)["utilisation"] == (1 + 1 + 3.5) / 10
    # The last, second in line on b, waits 1.5; the first 3 and the third 6 for a.
    assert measures(record, 0, 10)["waiting_mean"] == (3 + 0 + 6 + 1.5) / 4


def test_a_task_with_no_server_up_by_hand():
    # Both fail at 2.5; a returns at 4, b at 6. The task of 3 is put on b, which has fewer tasks.
    downs = ((2.5, 2.5, 4, 6), (0, 1, 0, 1), (False, False, True, True))
    record = four_tasks(failures=downs)
    assert ends(record) == [6.5, 8, 8.5, 9]
    assert measures(record, 0, 9)["waited"] == 4
    record = four_tasks(failures=downs, on_failure="lost")
    assert ends(record) == ["lost"] * 4
    assert [task.ended for task in record.tasks] == [2.5, 2.5, 2.5, 3]
    # a fails first, so both of its tasks join b just before b fails: 6–8–13–15. The last waits on a, 4–5.
    record = four_tasks(failures=downs, on_failure="requeue")
    assert ends(record) == [13, 8, 15, 5]
    assert (measures(record, 0, 9)["requeued"], measures(record, 0, 9)["waited"]) == (2, 4)


def test_late_reports_by_hand():
    # Tasks are short, so that fresh loads are always 0: all go to a.
    given = {"requirements": (0.5,) * 4}
    assert servers(four_tasks(**given)) == [[0]] * 4
    # Reports at 0 and 2. One dispatcher sees its own placements, not the departures before the next report.
    assert servers(four_tasks(**given, information=("dispatchers", 1, 2.0))) == [[0], [1], [0], [1]]
    # Long tasks: reports of (0, 0) and, at 2, of (2, 0).
    record = four_tasks(requirements=(9,) * 4, information=("snapshot", 2.0))
    assert servers(record) == [[0], [0], [1], [1]]
    # A departure at the instant of a report is in it: at 2 one of a's two tasks has left.
    record = four_tasks(times=(0, 0, 1, 2), requirements=(2, 3, 3, 3), discipline="sessions",
                        information=("snapshot", 2.0), limits=(2, 9))  # fmt: skip
    assert servers(record) == [[0], [0], [1], [0]]


def test_departures_come_before_arrivals_of_the_same_instant():
    record = four_tasks(requirements=(1, 1, 1, 1), limits=(1, 1), discipline="sessions")
    assert servers(record) == [[0]] * 4
    record = four_tasks(times=(0, 0, 0, 0), requirements=(0, 0, 0, 0), limits=(1, 1), discipline="sessions")
    assert servers(record) == [[0]] * 4
    assert measures(record, -1, 1)["max_load"] == 1


def test_the_window_ends_with_departures_and_before_arrivals():
    record = four_tasks(end=3)
    assert len(record.tasks) == 3
    assert ends(four_tasks(end=4.5)) == ["present", 4.5, "present", "present"]


def one_choice_of_three():
    return lk.Fleet(
        pd.DataFrame({"server": [0, 1, 2]}),
        pd.DataFrame({"option_1": [0], "option_2": [1], "option_3": [2]}),
    )


def test_the_second_pick_uses_what_the_first_leaves_of_the_coin():
    fleet = one_choice_of_three()
    for entropy in range(20):
        coin = arrival(fleet, words(entropy, 0, 0), None)[2]
        first = coin * 3 // WORD
        limits = [0 if server == first else 1 for server in range(3)]
        given = {"times": [0], "requirements": [1], "entropy": entropy, "limits": limits}
        others = [server for server in range(3) if server != first]
        assert servers(serve(fleet, ("one-choice",), **given)) == [[others[coin * 3 % WORD * 2 // WORD]]]
        assert servers(serve(fleet, ("one-choice",), **given, on_full="lost")) == [[]]


def test_what_is_requeued_has_a_coin_of_its_own_and_leaves_an_empty_server():
    # Three tasks on three servers. That of the first fails, has no load then, and would be picked; of the two
    # others, equal, what the first pick leaves of the coin picks.
    for entropy in range(20):
        given = {"times": [0, 1, 2], "requirements": [9] * 3, "entropy": entropy, "on_failure": "requeue"}
        fleet, rule = one_choice_of_three(), ("least-loaded", "random")
        first = servers(serve(fleet, rule, **given))[0][0]
        others = [server for server in range(3) if server != first]
        record = serve(fleet, rule, **given, failures=([3], [first], [False]))
        coin = next(words(entropy, 0, 8))
        assert servers(record)[0] == [first, others[coin * 3 % WORD * 2 // WORD]]


def test_what_is_requeued_on_complete_fleets_draws_new_options():
    fleet = lk.complete(5)
    kept = 0
    for entropy in range(20):
        options, _, coin = arrival(fleet, words(entropy, 0, 0), None)
        first = options[coin * 2 // WORD]
        options, _, coin = arrival(fleet, words(entropy, 0, 8), None)
        second = options[coin * 2 // WORD]
        if second == first:
            second = next(server for server in options if server != first)
        record = serve(
            fleet, ("one-choice",), times=[0], requirements=[4], entropy=entropy,
            failures=([1], [first], [False]), on_failure="requeue",
        )  # fmt: skip
        assert servers(record) == [[first, second]]
        assert ends(record) == [5]
        kept += second in arrival(fleet, words(entropy, 0, 0), None)[0]
    assert kept < 20


def test_requeued_tasks_go_in_the_order_of_their_first_arrival():
    # Tasks 0 and 1 on a and b; b fails at 2: 1 goes to a; a fails at 4 and both go to b, 0 first.
    downs = ((2, 3, 4), (1, 1, 0), (False, True, False))
    record = four_tasks(times=(0, 1), requirements=(9, 9), failures=downs, on_failure="requeue")
    assert servers(record) == [[0, 1], [1, 0, 1]]
    assert ends(record) == [13, 22]


def test_times_follow_the_profile():
    steady = arrival_times(5, 0, 2.0, 50.0)
    source = np.random.Generator(np.random.SFC64(np.random.SeedSequence(5, spawn_key=(0, 5))))
    assert steady == pytest.approx((source.standard_exponential(len(steady)) / 2).cumsum())
    # Rates 4, 0 and 2 in thirds of a period of 6: 12 arrivals' worth a period, as with the steady rate.
    varied = arrival_times(5, 0, 2.0, 50.0, profile=[2.0, 0.0, 1.0], period=6.0)
    for time, plain in zip(varied, steady, strict=False):
        spent, inside = divmod(time, 6.0)
        rate = 12 * spent + 4 * min(inside, 2) + 2 * max(inside - 4, 0)
        assert rate == pytest.approx(2 * plain)
        assert not 2 < inside < 4


# Closed forms


def many_pairs(count=10):
    """Return pairs of servers that share nothing, so that every server or pair is a sample of its own."""
    return lk.Fleet(
        pd.DataFrame({"server": range(2 * count)}),
        pd.DataFrame({"option_1": range(0, 2 * count, 2), "option_2": range(1, 2 * count, 2)}),
    )


LAWS = {
    "exponential": lambda source, count: source.standard_exponential(count),
    "deterministic": lambda source, count: np.ones(count),
    # Mean 1, mean square 2 × (0.75 × 0.25 + 0.25 × 6.25) = 3.5.
    "hyperexponential": lambda source, count: (
        source.standard_exponential(count) * np.where(source.random(count) < 0.75, 0.5, 2.5)
    ),
}


def long_run(law, discipline, load, horizon, *, fleet=None, rule=("one-choice",), **given):
    fleet = fleet or many_pairs()
    times = arrival_times(11, 0, load * fleet.size, horizon)
    requirements = requirements_of(11, 0, LAWS[law], len(times))
    return serve(
        fleet, rule, times=times, requirements=requirements, entropy=11,
        discipline=discipline, end=horizon, **given,
    )  # fmt: skip


def assert_mean(samples, theory):
    assert len(samples) == 20
    error = np.std(samples, ddof=1) / math.sqrt(len(samples))
    assert error < 0.05 * theory
    assert abs(np.mean(samples) - theory) < 4 * error


def sojourn_of_each(record, since, servers=20):
    groups = [[] for _ in range(servers)]
    for task in record.tasks:
        if task.fate == "completed" and task.ended > since:
            groups[task.stays[-1].server].append(task.ended - task.time)
    return [np.mean(group) for group in groups]


@pytest.mark.parametrize(
    ("law", "discipline", "sojourn"),
    [
        ("exponential", "fcfs", 1 / (1 - 0.6)),  # M/M/1
        ("deterministic", "fcfs", 1 + 0.6 / 2 / (1 - 0.6)),  # M/D/1
        ("hyperexponential", "fcfs", 1 + 0.6 * 3.5 / 2 / (1 - 0.6)),  # Pollaczek–Khinchine
        ("deterministic", "ps", 1 / (1 - 0.6)),  # processor sharing depends on the mean alone
        ("hyperexponential", "ps", 1 / (1 - 0.6)),
    ],
)
def test_single_servers_have_the_mean_sojourn_of_theory(law, discipline, sojourn):
    record = long_run(law, discipline, 0.6, 4100)
    assert_mean(sojourn_of_each(record, 100), sojourn)


def test_two_servers_have_the_mean_sojourn_of_the_exact_chain():
    # Least-loaded, λ = 1/2 a server: 1.426320751 (derived: truncated chain, solved twice).
    record = long_run("exponential", "fcfs", 0.5, 600, fleet=many_pairs(20), rule=("least-loaded", "random"))
    groups = [[] for _ in range(20)]
    for task in record.tasks:
        if task.fate == "completed" and task.ended > 50:
            groups[task.options[0] // 2].append(task.ended - task.time)
    assert_mean([np.mean(group) for group in groups], 1.426320751)


def erlang_b(servers, offered):
    terms = [offered**k / math.factorial(k) for k in range(servers + 1)]
    return terms[-1] / sum(terms)


def blocked_of_each(record, since, groups, group_of):
    came, blocked = np.zeros(groups), np.zeros(groups)
    for task in record.tasks:
        if task.time >= since:
            came[group_of(task)] += 1
            blocked[group_of(task)] += task.fate == "blocked"
    return blocked / came


def test_sessions_with_a_limit_block_as_erlang_says():
    record = long_run("hyperexponential", "sessions", 1.5, 600, limits=[2] * 40, fleet=many_pairs(20))
    # A pair is one group of four places: work that one server refuses goes to the other.
    shares = blocked_of_each(record, 20, 20, lambda task: task.options[0] // 2)
    assert_mean(shares, erlang_b(4, 3.0))


def test_sessions_that_are_lost_when_their_server_is_full_block_as_erlang_says():
    record = long_run(
        "deterministic", "sessions", 1.5, 600, limits=[2] * 40, on_full="lost", fleet=many_pairs(20)
    )
    # The two servers of a pair are alike and independent.
    assert_mean(blocked_of_each(record, 20, 20, lambda task: task.options[0] // 2), erlang_b(2, 1.5))


def test_sessions_without_a_limit_are_poisson():
    record = long_run("hyperexponential", "sessions", 1.5, 600)
    times = [time_at_levels(record, server, 20, 600) for server in range(20)]
    assert_mean([row[2] / 580 for row in times], math.exp(-1.5) * 1.5**2 / 2)
    assert_mean([row[4] / 580 for row in times], math.exp(-1.5) * 1.5**4 / 24)


@pytest.mark.parametrize("discipline", ["fcfs", "ps", "sessions"])
@pytest.mark.parametrize("on_failure", ["wait", "lost", "requeue"])
def test_littles_law_holds_on_the_tasks(discipline, on_failure):
    source = np.random.default_rng(3)
    failures = (np.sort(source.uniform(0, 100, 40)), source.integers(0, 6, 40), source.random(40) < 0.5)
    record = long_run(
        "exponential", discipline, 0.9, 100, fleet=lk.ring(6), rule=("mixed", 0.5), limits=[4] * 6,
        failures=failures, on_failure=on_failure, information=("dispatchers", 2, 1.5),
    )  # fmt: skip
    whole = measures(record, 20, 90)
    spent = math.fsum(
        overlap(task.time, math.inf if task.ended is None else task.ended, 20, 90)
        for task in record.tasks
        if task.stays
    )
    levels = [time_at_levels(record, server, 20, 90) for server in range(6)]
    assert whole["area"] == pytest.approx(spent, rel=1e-12)
    assert whole["area"] == pytest.approx(sum(load * time for row in levels for load, time in row.items()))
    assert [sum(row.values()) for row in levels] == pytest.approx([70] * 6)
    assert max(load for row in levels for load in row) <= 4
    rows = measures_by_interval(record, 20, 90, 7)
    for name in ("arrivals", "completed", "area", "sojourn_sum", "blocked", "lost", "requeued", "waited"):
        assert sum(row[name] for row in rows) == pytest.approx(whole[name]), name
    assert max(row["max_load"] for row in rows) == whole["max_load"]
    assert np.mean([row["utilisation"] for row in rows]) == pytest.approx(whole["utilisation"])


# Traces


def test_a_replay_by_hand():
    rows = [
        (0, [0, 1], 2.0, 3, 1),
        (1, [1, 0], 1.0, 2, 1),
        (3, [0, 1], 1.5, None, 0),  # both others have left by now
        (3, [0, 1], 0.5, 0, 0),
        (3, [0, 1], 0.25, None, 0),  # the one before has left at once
    ]
    least = plain_python_replay(pair(2, 1), rows, FIRST)
    # (2, 0); b has less: (2, 1); (1.5, 0); (1.5, 0.5), gone; (1.5, 0.25).
    assert least == {"servers": [0, 1, 0, 1, 1], "loads": [1.5, 0.25], "max_load": 2, "max_utilisation": 1}
    placed = plain_python_replay(pair(2, 1), rows, ("as placed",))
    assert placed == {"servers": [1, 1, 0, 0, 0], "loads": [1.75, 0], "max_load": 3, "max_utilisation": 3}


@pytest.mark.parametrize("rule", [("least-loaded", "random"), ("one-choice",), ("as placed",)], ids=str)
def test_both_ways_to_replay_agree(rule):
    source = np.random.default_rng(8)
    times = np.sort(source.integers(0, 60, 300)).tolist()
    options = [source.permutation(5)[: source.integers(2, 5)].tolist() for _ in times]
    sizes = (source.integers(1, 9, 300) / 4).tolist()
    durations = source.integers(0, 12, 300).tolist()
    durations[::7] = [None] * len(durations[::7])
    placed = [int(source.choice(row)) for row in options]
    fleet = lk.Fleet(
        pd.DataFrame({"server": range(5), "capacity": [1, 2, 3, 2, 1]}),
        pd.DataFrame({"option_1": [0, 1, 2, 3], "option_2": [1, 2, 3, 4]}),
    )
    rows = list(zip(times, options, sizes, durations, placed, strict=True))
    replay = plain_python_replay(fleet, rows, rule, entropy=4)
    record = serve(
        fleet, (*rule, placed) if rule == ("as placed",) else rule, times=times,
        requirements=[math.inf if duration is None else duration for duration in durations],
        entropy=4, options=options, sizes=sizes, discipline="sessions",
    )  # fmt: skip
    assert [row for (row,) in servers(record)] == replay["servers"]
    assert measures(record, -1, 100)["max_load"] == replay["max_load"]
    assert measures(record, -1, 100)["max_utilisation"] == replay["max_utilisation"]
