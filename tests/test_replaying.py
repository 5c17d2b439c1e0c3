"""`replay` against slow oracles, task by task on the same coins: compiled and as plain Python.

Compiling every rule would take minutes, so any trace under any circumstances is replayed with the loop left
as plain Python, in a process of its own, and a few cases with the loop compiled.
"""

import math
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.policies.naming import parse_policy
from labkit.randomness import FAILURES, generator, seed_sequence
from labkit.survey.fair import fair_profile
from labkit.traces.reading import Trace
from tests.event_measures import measures, overlap
from tests.events import plain_python_replay, serve
from tests.plain_python import in_plain_python
from tests.reference import WORD, pick, words
from tests.reference import measures as measures_of_loads

NAMES = list("abcde")
CHOICES = [[0, 1, 2], [1, 2], [2, 3, 4], [3, 4], [4, 0], [0, 2]]
CAPACITY = [1.0, 2.0, 4.0, 2.0, 1.0]
RULES = {
    "one-choice": ("one-choice",),
    "least-loaded": ("least-loaded", "random"),
    "least-loaded(ties=first)": ("least-loaded", "first"),
    "mixed(beta=0.3)": ("mixed", 0.3),
}
INFORMATION = {
    ("fresh",): lk.Fresh(),
    ("snapshot", 0.75): lk.Snapshot(every=0.75),
    ("dispatchers", 3, 1.5): lk.Dispatchers(count=3, every=1.5),
}
COUNTS = ("arrivals", "completed", "blocked", "lost", "requeued", "waited", "max_load")
SUMS = ("sojourn_sum", "waiting_sum", "area", "max_utilisation")
MEANS = ("sojourn_mean", "waiting_mean", "queue_mean", "utilisation", "max_utilisation", "blocked_share")


def the_fleet():
    """Return a fleet with two and three options a choice, unequal capacities and demands."""
    servers = pd.DataFrame({"server": NAMES, "capacity": CAPACITY})
    rows = [[NAMES[server] for server in choice] + [None] * (3 - len(choice)) for choice in CHOICES]
    choices = pd.DataFrame(rows, columns=["option_1", "option_2", "option_3"])
    return lk.Fleet(servers, choices.assign(demand=[1.0, 0.5, 2.0, 0.25, 1.5, 1.0]))


class Log:
    """A trace as a table for labkit and as lists for the oracles; times are quarters, and many are equal."""

    def __init__(self, seed, *, tasks=70, shuffled=True, single=True, origin=100.0, grid=True, zeros=False):
        draw = np.random.default_rng(seed)
        self.fleet, self.origin = the_fleet(), origin
        self.times = origin + np.sort(draw.integers(0, 4 * tasks // 5, tasks)) / 4
        self.times[0], self.times[-1] = origin, origin + tasks / 5
        self.rows = draw.integers(0, len(CHOICES), tasks)
        self.options = [list(CHOICES[row]) for row in self.rows]
        if shuffled:
            self.options = [draw.permutation(one).tolist() for one in self.options]
        if single:
            self.options = [one[:1] if draw.random() < 0.15 else one for one in self.options]
        self.sizes = draw.integers(0, 5, tasks).astype(float)
        self.durations = draw.integers(1, 24, tasks) / 4 if grid else draw.exponential(3.0, tasks)
        if zeros:
            self.durations[(draw.random(tasks) < 0.2) & (self.times > origin)] = 0.0
        self.placed = [int(draw.choice(one)) for one in self.options]
        self.span = float(self.times[-1] - origin)

    def table(self, *columns):
        """Return the log with some of the columns size, duration and placed."""
        named = [[NAMES[server] for server in one] + [None] * (3 - len(one)) for one in self.options]
        table = pd.DataFrame({"time": self.times})
        table[["option_1", "option_2", "option_3"]] = pd.DataFrame(named, dtype=object)
        more = {"size": self.sizes, "duration": self.durations, "placed": [NAMES[v] for v in self.placed]}
        return table.assign(**{name: more[name] for name in columns})

    def plain(self, *, durations):
        """Return the rows for `plain_python_replay`."""
        lasting = self.durations.tolist() if durations else [None] * len(self.times)
        return list(zip(self.times.tolist(), self.options, self.sizes, lasting, self.placed, strict=True))


# Work that leaves


def assert_served_alike(
    log, rule, told, *, entropy, parts=3, warmup=0.0, failures=None, on_failure="wait",
    information=("fresh",), limit=None, on_full="another", discipline="sessions",
):  # fmt: skip
    """Compare the tables of two replicates with the oracle's list of tasks."""
    block = (log.span - warmup) / parts
    outcome = lk.replay(
        log.fleet, log.table("size", "duration", "placed"), rule, rng=entropy, replicates=2, warmup=warmup,
        block=block, information=INFORMATION[information], discipline=discipline, limit=limit,
        on_full=on_full, failures=failures, on_failure=on_failure, target=2.0,
    )  # fmt: skip
    # What arrives at the last time belongs to the last interval.
    last = math.nextafter(log.span, math.inf)
    bounds = [warmup + part * block for part in range(parts)] + [last]
    for replicate in range(2):
        record = serve(
            log.fleet, told, times=log.times - log.origin, requirements=log.durations, entropy=entropy,
            replicate=replicate, options=log.options, sizes=log.sizes.tolist(), discipline=discipline,
            limits=None if limit is None else [limit] * log.fleet.size, on_full=on_full,
            failures=happening(log, failures, entropy, replicate), on_failure=on_failure,
            information=information, end=last,
        )  # fmt: skip
        rows = outcome.by_interval.query("replicate == @replicate").to_dict("records")
        assert len(rows) == parts
        for row, (since, until) in zip(rows, pairwise(bounds), strict=True):
            assert (row["start"], row["end"]) == pytest.approx((log.origin + since, log.origin + until))
            part = measures(record, since, until)
            for name in COUNTS:
                assert row[name] == part[name], name
            for name in SUMS:
                assert row[name] == pytest.approx(part[name], rel=1e-9, abs=1e-9), name
        row = outcome.measures.query("replicate == @replicate").to_dict("records")[0]
        whole = measures(record, warmup, last)
        for name in MEANS:
            assert row[name] == pytest.approx(whole[name], rel=1e-9, abs=1e-9, nan_ok=True), name
        assert abs(row["little_error"]) < 1e-9
        assert (row["warmup"], row["horizon"]) == (log.origin + warmup, log.origin + log.span)
        held = outcome.by_server.query("replicate == @replicate")["queue_mean"] * (log.span - warmup)
        stays = [stay for task in record.tasks for stay in task.stays]
        for server in range(log.fleet.size):
            here = [overlap(s.start, s.end, warmup, log.span) for s in stays if s.server == server]
            assert held.iloc[server] == pytest.approx(math.fsum(here), rel=1e-9, abs=1e-9)


def happening(log, failures, entropy, replicate):
    """Return what the oracle is told about failures, in time since the first row."""
    if failures is None:
        return (), (), ()
    scheduled = isinstance(failures, lk.Failures)
    shift = log.origin if scheduled else 0.0
    draws = generator(seed_sequence(entropy), replicate, FAILURES)
    times, servers, backs = failures.events(log.fleet, shift + log.span + 1e-9, draws)
    return np.maximum(times - shift, 0.0), servers, backs


def schedule(log, draw):
    """Return failures at the times of the trace: before the first row, at rows, and at the last row."""
    rows = []
    for server in range(log.fleet.size):
        ticks = np.sort(draw.choice(np.arange(-4, 4 * log.span + 1), size=draw.integers(0, 5), replace=False))
        rows += [
            (log.origin + tick / 4, NAMES[server], ["down", "up"][k % 2]) for k, tick in enumerate(ticks)
        ]
    rows.append((log.origin + log.span + 1, "a", "down"))
    table = pd.DataFrame(sorted(rows, key=lambda row: row[0]), columns=["time", "server", "state"])
    # The last one may already be down.
    return lk.Failures(table.iloc[:-1])


def any_case(seed):
    """Return a trace and circumstances."""
    draw = np.random.default_rng([seed, 1])

    def one_of(*values):
        return values[draw.integers(len(values))]

    discipline, on_failure = one_of("sessions", "fcfs", "ps"), one_of("wait", "lost", "requeue")
    fails = one_of("never", "schedule", "random")
    moves = fails != "never" and on_failure == "requeue"
    # Whether what comes and goes at the end of an interval belongs to it, is told for tasks that take time.
    parts = one_of(1, 3, 4)
    # Tasks that are moved take their options in the fleet's order, and a single one needs no coin.
    log = Log(
        seed,
        shuffled=not moves,
        single=not moves,
        grid=discipline != "ps",
        tasks=one_of(2, 40, 70),
        zeros=parts == 1,
    )
    failures = {"never": None, "schedule": schedule(log, draw), "random": lk.RandomFailures(up=3.0, down=1.0)}
    return log, one_of(*RULES), {
        "entropy": seed, "parts": parts, "warmup": 0.0 if parts == 1 else one_of(0.0, log.span / 4),
        "failures": failures[fails], "on_failure": on_failure, "information": one_of(*INFORMATION),
        "limit": one_of(None, None, 1, 2, 4), "on_full": one_of("another", "lost"), "discipline": discipline,
    }  # fmt: skip


def agree_on_any_case():
    """Compare 60 cases drawn at random, and rules with tables by choice."""
    for seed in range(60):
        log, rule, given = any_case(seed)
        try:
            assert_served_alike(log, rule, RULES[rule], **given)
        except AssertionError as error:
            raise AssertionError(f"seed {seed}: {rule}, {given}") from error
    for seed in range(4):
        log = Log(seed)
        assert_static_split_as_by_hand(log, seed)
        assert_tree_flow_as_by_hand(log, seed)


def test_plain_python_loop_replays_any_trace_as_the_oracle_does():
    in_plain_python("tests.test_replaying", "agree_on_any_case()")


def in_fleet_order(log):
    """Return for each task the number of its choice and its options in the order of the fleet's table."""
    number = {frozenset(choice): row for row, choice in enumerate(CHOICES)}
    rows = [number.get(frozenset(one), 0) for one in log.options]
    return [(row, CHOICES[row] if len(one) > 1 else one) for row, one in zip(rows, log.options, strict=True)]


def assert_static_split_as_by_hand(log, entropy):
    """Compare static-split with servers picked by hand, from shares in the order of the fleet's table."""
    shares = fair_profile(log.fleet).split.by_option().tolist()
    picked = {}
    for replicate in range(2):
        coins = words(entropy, replicate, 0)
        picked[replicate] = [
            options[pick(("static-split", shares), log.fleet, options, row, None, next(coins), None)]
            for row, options in in_fleet_order(log)
        ]
    table = log.table("size")
    outcome = lk.replay(log.fleet, table, "static-split", rng=entropy, replicates=2)
    assert outcome.loads.tolist() == [np.bincount(p, log.sizes, 5).tolist() for p in picked.values()]
    log.placed = picked[0]
    assert_placed_alike(log, "static-split", entropy)


def assert_placed_alike(log, rule, entropy):
    """Compare a rule on a trace with durations to what happens when servers are as in `log.placed`."""
    with_durations = lk.replay(
        log.fleet, log.table("size", "duration", "placed"), rule, rng=entropy, block=3.0
    )
    as_placed = lk.replay(log.fleet, log.table("size", "duration", "placed"), "as-placed", rng=9, block=3.0)
    for name in ("measures", "by_interval", "by_server"):
        one, other = getattr(with_durations, name), getattr(as_placed, name)
        pd.testing.assert_frame_equal(one.drop(columns="policy"), other.drop(columns="policy"))


def assert_tree_flow_as_by_hand(log, entropy):
    """Compare tree-flow with a loop that calls its own pieces with the number and order of each choice."""
    rule = parse_policy("tree-flow")
    state = rule.own_state(rule.prepare(log.fleet))
    coins, own = (
        words(entropy, 0, 0),
        np.random.SFC64(np.random.SeedSequence(entropy, spawn_key=(0, 1))).state["state"]["state"].copy(),
    )
    weights = np.array(CAPACITY)
    loads, tasks = np.zeros(5), zip(in_fleet_order(log), log.sizes, strict=True)
    rule.renew(state, loads)
    for (row, options), size in tasks:
        pair = options * 2 if len(options) == 1 else options
        line = np.array([pair], np.uint32)
        with np.errstate(over="ignore"):
            position = rule.choose(
                state, loads, weights, line, np.uint64(0), len(pair), np.uint64(row), np.uint64(next(coins)),
                own,
            )  # fmt: skip
        server = pair[int(position)]
        loads[server] += size
        rule.after(state, loads, weights, line, np.uint64(0), len(pair), server, size, True)
    outcome = lk.replay(log.fleet, log.table("size"), rule, rng=entropy)
    assert outcome.loads.tolist() == [loads.tolist()]


def agree_on_tables_of_any_width():
    """Replay rules with tables where the trace has fewer columns than the fleet, and on a complete
    fleet."""
    servers = pd.DataFrame({"server": list("abc")})
    rows = [["a", "b", "c"], ["b", "a", None]]
    fleet = lk.Fleet(servers, pd.DataFrame(rows, columns=["option_1", "option_2", "option_3"]))
    loads = lk.replay(fleet, small(), "static-split", rng=1).loads
    assert (loads.sum(), loads[0, 2]) == (3, 0)
    anywhere = pd.DataFrame({"time": [0.0, 1, 2], "option_1": [0, 1, 2], "option_2": [1, 2, 3]})
    for rule in ("static-split", "one-choice"):
        assert lk.replay(lk.complete(4), anywhere, rule, rng=1).loads.sum() == 3


def test_what_has_one_option_waits_there_when_its_server_fails():
    in_plain_python("tests.test_replaying", "single_options_wait_where_their_server_failed()")


def test_tables_of_any_width():
    in_plain_python("tests.test_replaying", "agree_on_tables_of_any_width()")


FAILING = pd.DataFrame(
    {
        "time": [90.0, 102.0, 103.0, 105.0, 106.0, 108.5, 110.0, 114.0],
        "server": list("abbaccdd"),
        "state": ["down", "down", "up", "up", "down", "up", "down", "up"],
    }
)


@pytest.mark.parametrize("discipline", ["fcfs", "ps", "sessions"])
@pytest.mark.parametrize(
    "given",
    [
        {},
        {"information": ("snapshot", 0.75), "limit": 2, "warmup": 3.0},
        {
            "information": ("dispatchers", 3, 1.5),
            "limit": 4,
            "on_full": "lost",
            "failures": lk.Failures(FAILING),
        },
        {"failures": lk.RandomFailures(up=4.0, down=2.0), "on_failure": "lost"},
    ],
    ids=["plain", "snapshot and limit", "dispatchers and schedule", "lost at random"],
)
def test_compiled_loop_replays_as_the_oracle_does(discipline, given):
    log = Log(7, grid=discipline != "ps", tasks=150)
    assert_served_alike(log, "least-loaded", RULES["least-loaded"], entropy=3, discipline=discipline, **given)


def test_as_placed_is_what_happened():
    log = Log(5, tasks=150)
    assert_served_alike(log, "as-placed", ("as placed", log.placed), entropy=1)
    assert_served_alike(log, "as-placed", ("as placed", log.placed), entropy=1, discipline="fcfs", warmup=4.0)
    outcome = lk.replay(log.fleet, log.table("placed"), "as-placed", rng=1)
    assert outcome.loads.tolist() == [np.bincount(log.placed, minlength=5).tolist()]
    assert outcome.loads.dtype == np.int64
    assert outcome.measures["policy"].tolist() == ["as-placed"]


@pytest.mark.parametrize("durations", [False, True])
def test_loads_are_those_of_one_obvious_loop(durations):
    log = Log(11, tasks=300)
    columns = ("size", "duration") if durations else ("size",)
    outcome = lk.replay(log.fleet, log.table(*columns), "least-loaded", rng=4, first_replicate=2)
    told = plain_python_replay(
        log.fleet, log.plain(durations=durations), RULES["least-loaded"], entropy=4, replicate=2
    )
    row = outcome.measures.iloc[0]
    assert row["replicate"] == 2
    assert ((row["max_utilisation"] == told["max_utilisation"]) and durations) or outcome.loads[
        0
    ].tolist() == told["loads"]
    if durations:
        assert (row["max_load"], row["max_utilisation"]) == (told["max_load"], told["max_utilisation"])


# Work that stays


def loads_after_each(log, *, entropy, replicate, every, dispatchers, sizes):
    """Return the loads after each task, those seen being as old as the last of the reports."""
    coins, turns, own = (words(entropy, replicate, stream) for stream in (0, 3, 1))
    loads, history = np.zeros(5), []
    seen = [loads.copy() for _ in range(max(dispatchers, 1))]
    for task, options in enumerate(log.options):
        if every == 0 or task % every == 0:
            seen = [loads.copy() for _ in seen]
        turn = next(turns) * dispatchers // WORD if dispatchers else 0
        rule = RULES["least-loaded"]
        server = options[pick(rule, log.fleet, options, None, seen[turn], next(coins), own)]
        loads[server] += log.sizes[task] if sizes else 1
        if dispatchers:
            seen[turn][server] += log.sizes[task] if sizes else 1
        history.append(loads.copy())
    return history


@pytest.mark.parametrize("sizes", [False, True])
@pytest.mark.parametrize(
    "information", [lk.Fresh(), lk.Snapshot(every=7), lk.Dispatchers(count=3, every=20)], ids=str
)
def test_tasks_that_stay(information, sizes):
    log = Log(2, tasks=100)
    outcome = lk.replay(
        log.fleet, log.table("size") if sizes else log.table(), "least-loaded", rng=6, replicates=2,
        checkpoints=np.array([1, 60, 100]), information=information,
    )  # fmt: skip
    for replicate in range(2):
        history = loads_after_each(
            log, entropy=6, replicate=replicate, every=information.every, dispatchers=information.dispatchers,
            sizes=sizes,
        )  # fmt: skip
        assert outcome.loads[replicate].tolist() == history[-1].tolist()
        rows = outcome.measures.query("replicate == @replicate")
        assert rows["tasks"].tolist() == [1, 60, 100]
        for row in rows.to_dict("records"):
            for name, value in measures_of_loads(log.fleet, history[row["tasks"] - 1]).items():
                assert row[name] == pytest.approx(value, rel=1e-12, abs=1e-12, nan_ok=True), name


# Whatever the form


def assert_same_bits(one, other):
    for name in ("measures", "by_server"):
        pd.testing.assert_frame_equal(getattr(one, name), getattr(other, name), check_exact=True)
    if isinstance(one, lk.ServiceOutcome):
        pd.testing.assert_frame_equal(one.by_interval, other.by_interval, check_exact=True)


@pytest.mark.parametrize("durations", [False, True])
def test_same_bits_in_any_format_block_and_number_of_threads(durations, tmp_path, monkeypatch):
    log = Log(3, tasks=400)
    table = log.table("size", "duration") if durations else log.table("size")
    given = (
        {"block": 7.0, "limit": 3, "failures": lk.Failures(FAILING)}
        if durations
        else {"checkpoints": [50, 400], "information": lk.Snapshot(every=30)}
    )

    def replayed(trace, **more):
        return lk.replay(log.fleet, trace, "least-loaded", rng=5, replicates=3, **given, **more)

    whole = replayed(table)
    table.to_csv(tmp_path / "log.csv", index=False)
    table.to_parquet(tmp_path / "log.parquet")
    for trace in (tmp_path / "log.csv", str(tmp_path / "log.parquet")):
        assert_same_bits(replayed(trace), whole)
    assert_same_bits(replayed(table, workers=3), whole)
    stamped = table.assign(time=pd.Timestamp("2031-05-02") + pd.to_timedelta(table["time"] - log.origin, "s"))
    if durations:
        given["failures"] = lk.Failures(FAILING.assign(time=np.maximum(FAILING["time"] - 100, 0.0)))
        later = replayed(table.assign(time=table["time"] - 100))
        assert_same_bits(replayed(stamped), later)
        given["failures"] = lk.Failures(FAILING)
    else:
        assert_same_bits(replayed(stamped), whole)
    blocks = Trace.blocks
    for rows in (1, 7, 399):
        monkeypatch.setattr(Trace, "blocks", lambda self, _, rows=rows: blocks(self, rows))
        assert_same_bits(replayed(table, workers=2), whole)


def test_replicates_keep_their_bits_in_any_call():
    log = Log(3)
    several, last = (
        lk.replay(
            log.fleet, log.table("duration"), "least-loaded", rng=5, replicates=count, first_replicate=first
        )
        for count, first in ((3, 0), (1, 2))
    )
    pd.testing.assert_frame_equal(several.measures.iloc[2:].reset_index(drop=True), last.measures)
    assert several.measures["sojourn_mean"].nunique() == 1
    assert several.measures["queue_mean"].nunique() == 1
    assert several.measures["max_load"].nunique() > 1 or several.by_server["max_load"].nunique() > 1


def test_the_last_interval_may_be_shorter_and_none_is_empty():
    log = Log(1, tasks=50)
    for block, ends in ((4.0, [104, 108, 110]), (5.0, [105, 110]), (10.0, [110]), (25.0, [110]), (0.1, None)):
        table = lk.replay(log.fleet, log.table("duration"), "least-loaded", rng=1, block=block)
        rows = table.by_interval
        if ends is None:
            assert len(rows) == 100
            assert (rows["end"] - rows["start"]).min() > 0.099
        else:
            assert rows["end"].tolist() == ends
        assert rows["arrivals"].sum() == 50


def test_an_end_that_misses_the_last_row_by_rounding_is_none():
    table = small(duration=1.0).assign(time=[0.0, 0.5, 2.1])
    # In floats 2.1 ÷ 0.3 is a little more than 7.
    rows = lk.replay(pair_fleet(), table, "least-loaded", rng=1, block=0.3).by_interval
    assert len(rows) == 7
    assert rows["arrivals"].iloc[-1] == 1


def small(**columns):
    """Return a trace of three tasks, on a and b, a and b, and a alone."""
    return pd.DataFrame(
        {"time": [0.0, 1.0, 2.0], "option_1": list("aaa"), "option_2": ["b", "b", None], **columns}
    )


def pair_fleet():
    """Return a fleet of two servers and one choice; capacities differ, so that no other code is compiled."""
    return lk.Fleet(
        pd.DataFrame({"server": ["a", "b"], "capacity": [4, 5]}),
        pd.DataFrame({"option_1": ["a"], "option_2": ["b"]}),
    )


def single_options_wait_where_their_server_failed():
    """Requeue tasks that have one option, and those placed as they were."""
    fails = lk.Failures(pd.DataFrame({"time": [2.5, 8.0], "server": ["a", "a"], "state": ["down", "up"]}))
    table = small(duration=[20.0, 20.0, 2.0], placed=["a", "a", "a"])
    table.loc[3] = [30.0, "b", None, 1.0, "b"]
    outcome = lk.replay(
        pair_fleet(), table, "as-placed", rng=1, failures=fails, on_failure="requeue", block=10.0
    )
    row = outcome.measures.iloc[0]
    assert (row["requeued"], row["waited"], row["completed"], row["max_load"]) == (0, 3, 3, 3)
    # Each stays 5.5 longer.
    assert row["sojourn_mean"] == pytest.approx((25.5 + 25.5 + 7.5) / 3)
    moved = lk.replay(pair_fleet(), table, "least-loaded", rng=1, failures=fails, on_failure="requeue")
    # The first two are on a and b; one of a's can go to b, and the third cannot.
    assert moved.measures[["requeued", "waited", "completed"]].values.tolist() == [[1, 1, 3]]


# What is refused


@pytest.mark.parametrize(
    ("table", "given", "words"),
    [
        (small().assign(option_2=["b", "z", "b"]), {}, "trace row 2: option_2 is 'z'"),
        (small().iloc[:0], {}, "trace has no rows"),
        (small().assign(time=[0.0, 2.0, 1.0]), {}, "row 3: time is 1, before the 2 of the row above; sort"),
        (small(duration=[1.0, -1.0, 1.0]), {}, "row 2: duration is -1"),
        (small(duration=[1.0, None, 1.0]), {}, "row 2: duration is"),
        (small(size=[1.0, 1.0, -2.0]), {}, "row 3: size is -2"),
        (small(), {"policy": "as-placed"}, "policy is 'as-placed', but trace has no column 'placed'"),
        (small(), {"policy": "as-place"}, "policy is 'as-place'"),
        (small(), {"policy": "pairwise-averaging"}, "moves work already placed"),
        (small(), {"checkpoints": [1, 4]}, "checkpoints holds 4, but trace has 3 tasks; give at most that"),
        (small(), {"checkpoints": [2, 2]}, "give increasing whole numbers"),
        (small(), {"checkpoints": []}, "give increasing whole numbers"),
        (small(), {"checkpoints": 3}, "give increasing whole numbers"),
        (small(), {"checkpoints": [0]}, "checkpoints is 0; give a whole number of at least 1"),
        (small(duration=1.0), {"checkpoints": [1]}, "checkpoints are for traces without durations"),
        (small(), {"information": lk.Snapshot(every=0.5)}, "every is 0.5; give a whole number"),
        (small(), {"limit": 2}, "limit has a meaning only where work leaves, but trace has no column 'dur"),
        (small(), {"failures": "random(up=9, down=1)"}, "failures has a meaning only where work leaves"),
        (small(), {"target": 1.0}, "target has a meaning only"),
        (small(), {"block": 1.0}, "block has a meaning only"),
        (small(), {"warmup": 1.0}, "warmup has a meaning only"),
        (small(), {"levels": 3}, "levels has a meaning only"),
        (small(), {"discipline": "ps"}, "discipline has a meaning only"),
        (small(), {"on_full": "lost"}, "on_full has a meaning only"),
        (small(), {"on_failure": "lost"}, "on_failure has a meaning only"),
        (small(duration=1.0), {"warmup": 2.0}, "warmup is 2, but trace spans 2 units of time; give less"),
        (small(duration=1.0), {"warmup": -1.0}, "warmup is -1; give a length of time of at least 0"),
        (small(duration=1.0).assign(time=5.0), {}, "trace has all its tasks at one time"),
        (small(duration=1.0), {"block": 0.0}, "block is 0.0; give a number above 0"),
        (small(duration=1.0), {"block": 1e-6}, "block is 1e-06, which cuts .* more than 100,000 intervals"),
        (small(duration=1.0), {"discipline": "lifo"}, "discipline is 'lifo'"),
        (small(duration=1.0), {"on_full": "x"}, "on_full is 'x'"),
        (small(duration=1.0), {"on_failure": "x"}, "on_failure is 'x'"),
        (small(duration=1.0), {"limit": 0}, "limit is 0 for server 'a'"),
        (small(duration=1.0), {"replicates": 0}, "replicates is 0"),
        (small(duration=1.0), {"workers": 0}, "workers is 0"),
        (small(duration=1.0), {"target": -1.0}, "target is -1.0"),
        (small(duration=1.0), {"failures": lk.Failures(FAILING)}, "'c'"),
        (
            small(duration=1.0),
            {"fleet": lk.complete(4), "failures": "random(up=9, down=1)", "on_failure": "requeue"},
            "needs a fleet with a table of choices",
        ),
    ],
)  # fmt: skip
def test_refusals(table, given, words):
    given = {"fleet": pair_fleet(), "policy": "least-loaded", "rng": 1, **given}
    if given["fleet"].implicit is not None:
        table = table.assign(option_1=[0, 1, 2], option_2=[1, 2, 3])
    with pytest.raises(lk.InputError, match=words):
        lk.replay(trace=table, **given)


def test_options_that_are_no_choice_are_refused_where_choices_count():
    servers = pd.DataFrame({"server": list("abc")})
    fleet = lk.Fleet(servers, pd.DataFrame({"option_1": ["a", "b"], "option_2": ["b", "c"]}))
    table = small(duration=1.0).assign(option_2=["b", "c", None])
    words = "trace row 2: the options 'a', 'c' are no choice of the fleet, as policy static-split needs"
    with pytest.raises(lk.InputError, match=words):
        lk.replay(fleet, table, "static-split", rng=1)
    given = {"failures": "random(up=9, down=1)", "on_failure": "requeue"}
    with pytest.raises(
        lk.InputError, match=r'row 2: .* no choice of the fleet, as on_failure="requeue" needs'
    ):
        lk.replay(fleet, table, "least-loaded", rng=1, **given)
    alone = table.assign(option_2=["b", None, "b"])
    with pytest.raises(lk.InputError, match="row 2: 'a' is the only option, and policy static-split has no"):
        lk.replay(fleet, alone, "static-split", rng=1, **given)
    assert lk.replay(fleet, table, "least-loaded", rng=1).measures["arrivals"].item() == 3


def test_a_cut_file_is_refused(tmp_path):
    path = tmp_path / "log.csv"
    small().to_csv(path, index=False)
    path.write_text(path.read_text()[:-3])
    with pytest.raises(lk.InputError, match="may be cut in the middle of its last line"):
        lk.replay(pair_fleet(), path, "least-loaded", rng=1)
    path.write_text("time,option_1,option_2\n0,a,b\n1,a\n")
    with pytest.raises(lk.InputError, match="line 3"):
        lk.replay(pair_fleet(), path, "least-loaded", rng=1)
