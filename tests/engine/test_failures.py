"""Failures and returns: schedules read and refused, random times against their laws.

Random times: each comparison fails a correct program with probability 6e-5 (4 standard errors) or 1e-6
(goodness of fit); seeds are fixed, so that a pass stays a pass.
"""

import pickle

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import labkit as lk
from labkit.engine.failures import checked_failures
from tests.published.standard_error import assert_within

ROWS = [(5.0, "b", "down"), (7.5, "a", "down"), (7.5, "b", "up"), (7.5, "a", "up"), (30, "a", "down")]
UNUSED = np.random.default_rng(0)


def table(rows=ROWS):
    return pd.DataFrame(rows, columns=["time", "server", "state"])


def fleet(names=("a", "b", "c")):
    ends = pd.DataFrame({"option_1": [names[0], names[1]], "option_2": [names[1], names[2]]})
    return lk.Fleet(pd.DataFrame({"server": list(names)}), ends)


def listed(events):
    return [(float(time), int(server), bool(up)) for time, server, up in zip(*events, strict=True)]


EXPECTED = [(5.0, 1, False), (7.5, 0, False), (7.5, 1, True), (7.5, 0, True), (30.0, 0, False)]


def test_events_keep_the_order_of_the_rows():
    times, servers, ups = lk.Failures(table()).events(fleet(), 100.0, UNUSED)
    assert (times.dtype, servers.dtype, ups.dtype) == (np.float64, np.uint32, np.bool_)
    assert listed((times, servers, ups)) == EXPECTED


def test_only_events_before_the_horizon():
    failures = lk.Failures(table())
    assert listed(failures.events(fleet(), 30.0, UNUSED)) == EXPECTED[:4]
    assert listed(failures.events(fleet(), 7.5, UNUSED)) == EXPECTED[:1]
    assert listed(failures.events(fleet(), 1.0, UNUSED)) == []


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_files_say_what_tables_say(tmp_path, suffix):
    path = tmp_path / f"schedule.{suffix}"
    table().to_csv(path, index=False) if suffix == "csv" else table().to_parquet(path)
    for given in (path, str(path)):
        failures = lk.Failures(given)
        assert listed(failures.events(fleet(), 100.0, UNUSED)) == EXPECTED
        assert failures == lk.Failures(table())


def test_whole_numbers_in_text_name_servers_named_by_numbers(tmp_path):
    path = tmp_path / "schedule.csv"
    path.write_text("time,server,state\n1,7,down\n2,7,up\n")
    failures = lk.Failures(path)
    assert listed(failures.events(fleet((5, 6, 7)), 9.0, UNUSED)) == [(1.0, 2, False), (2.0, 2, True)]
    assert listed(failures.events(fleet(("5", "6", "7")), 9.0, UNUSED))[0] == (1.0, 2, False)
    with pytest.raises(lk.InputError, match=r"schedule\.csv holds '7', which names no server"):
        failures.events(fleet(), 9.0, UNUSED)


def test_no_rows_are_no_failures(tmp_path):
    path = tmp_path / "none.csv"
    path.write_text("time,server,state\n")
    for given in (table([]), path):
        failures = lk.Failures(given)
        assert [len(part) for part in failures.events(fleet(), 10.0, UNUSED)] == [0, 0, 0]
        assert failures.availability(fleet(), 10.0) == 1.0


def test_the_name_tells_schedules_apart():
    name = lk.Failures(table()).name
    assert name.startswith("schedule(events=5, digest=")
    assert lk.Failures(table()).name == name
    others = [
        [*ROWS[:4], (30.5, "a", "down")],
        [*ROWS[:4], (30, "b", "down")],
        ROWS[:4],
        [*ROWS[:1], *ROWS[2:3], *ROWS[1:2], *ROWS[3:]],
    ]
    assert len({name, *(lk.Failures(table(rows)).name for rows in others)}) == 5
    assert pickle.loads(pickle.dumps(lk.Failures(table()))) == lk.Failures(table())
    assert hash(lk.Failures(table())) == hash(lk.Failures(table()))
    assert repr(lk.Failures(table())) == f"<failures {name}>"


def test_the_table_may_be_changed_afterwards():
    given = table()
    failures = lk.Failures(given)
    given.loc[0, "time"] = 0.0
    times, _, _ = failures.events(fleet(), 100.0, UNUSED)
    assert times[0] == 5.0
    times[0] = 1.0
    assert failures.events(fleet(), 100.0, UNUSED)[0][0] == 5.0


def test_availability_of_a_schedule():
    # b is down from 5 to 7.5, a at no time up to 30 and then to the end
    assert lk.Failures(table()).availability(fleet(), 100.0) == pytest.approx(1 - (2.5 + 70) / 300)
    assert lk.Failures(table()).availability(fleet(), 6.0) == pytest.approx(1 - 1 / 18)


@pytest.mark.parametrize(
    ("rows", "words"),
    [
        ([(5, "a", "down"), (4, "a", "up")], "schedule row 2: time is 4.0, before the 5.0 of the row above"),
        ([(-1, "a", "down")], "schedule row 1: time is -1.0; give a finite number of at least 0"),
        ([(1, "a", "down"), (np.inf, "a", "up")], "row 2: time is inf"),
        ([(1, "a", "down"), (np.nan, "a", "up")], "row 2: time is blank"),
        ([("soon", "a", "down")], "time is of type .*, such as 'soon'"),
        ([(True, "a", "down")], "time is of type bool"),
        ([(pd.Timestamp(0), "a", "down")], "time is of type datetime64"),
        ([(1, "a", "dwn")], "row 1: state is 'dwn'; did you mean 'down'"),
        ([(1, "a", "Down")], "row 1: state is 'Down'; did you mean 'down'"),
        ([(1, "a", 0)], "row 1: state is 0; allowed: down, up"),
        ([(1, "a", None)], "row 1: state is blank"),
        ([(1, "a", pd.NA)], "row 1: state is blank"),
        ([(1, "a", "down"), (2, None, "up")], "row 2: server is blank"),
        ([(1, "a", "up")], "row 1: server 'a' comes back but is up"),
        ([(1, "b", "down"), (1, "a", "down"), (3, "a", "down")], "row 3: server 'a' goes down but is down"),
        ([*ROWS[:4], (8, "b", "up")], "row 5: server 'b' comes back but is up"),
        ([(1, "a", "down"), (2, "a", "up"), (2, "a", "up"), (3, "b", "up")], "row 3: server 'a' comes back"),
    ],
)
def test_bad_rows_are_refused(rows, words):
    with pytest.raises(lk.InputError, match=words):
        lk.Failures(table(rows))


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda t: t.drop(columns="state"), "schedule has no column 'state'"),
        (lambda t: t.rename(columns={"server": "sever"}), "unknown column 'sever'; did you mean 'server'"),
        (lambda t: t.iloc[:0].drop(columns="time"), "schedule has no column 'time'"),
        (lambda t: pd.concat([t, t["time"]], axis=1), "two columns named 'time'"),
        (lambda t: 7, "schedule is int; give a pandas DataFrame or the path"),
        (lambda t: "schedule.txt", "schedule is 'schedule.txt'; give the path of a file that ends in"),
        (lambda t: "missing.csv", "schedule 'missing.csv' does not exist"),
    ],
)
def test_bad_schedules_are_refused(change, words):
    with pytest.raises(lk.InputError, match=words):
        lk.Failures(change(table()))


@pytest.mark.parametrize(
    ("content", "words"),
    [
        ("time,server,state\n1,a,down\n0.5,a,up\n", "line 3: time is 0.5, before"),
        ("time,server,state\n1,a,down\nx,a,up\n", "line 3: time is 'x', which is not a number"),
        ("time,server,state\n1,a,down\n2,,up\n", "line 3: server is blank"),
        ("time,server,state\n1,a\n", "line 2 has 2 cells and the header 3"),
        ("time;server;state\n1;a;down\n", "separates its columns by semicolons"),
        ("", "is empty"),
        (b"time,server,state\n1,\xe9,down\n", "is not UTF-8"),
    ],
)
def test_bad_files_are_refused(tmp_path, content, words):
    path = tmp_path / "s.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(lk.InputError, match=words):
        lk.Failures(path)


def test_torn_parquet_and_folders_are_refused(tmp_path):
    path = tmp_path / "s.parquet"
    table().to_parquet(path)
    path.write_bytes(path.read_bytes()[:-20])
    with pytest.raises(lk.InputError, match="is not a whole parquet file"):
        lk.Failures(path)
    (tmp_path / "folder.csv").mkdir()
    with pytest.raises(lk.InputError, match="is not a file"):
        lk.Failures(tmp_path / "folder.csv")


def test_unknown_servers_are_refused_even_beyond_the_horizon():
    failures = lk.Failures(table([*ROWS, (90.0, "nort", "down")]))
    with pytest.raises(
        lk.InputError, match="schedule holds 'nort', which names no server; did you mean 'north'"
    ):
        failures.events(fleet(("a", "b", "north")), 10.0, UNUSED)
    with pytest.raises(lk.InputError, match="'nort', which names no server"):
        failures.availability(fleet(), 10.0)


def durations(times, servers, ups, server):
    """Return the lengths of the spans up and down of one server."""
    own = servers == server
    assert np.array_equal(ups[own], np.arange(own.sum()) % 2 == 1)
    spans = np.diff(times[own], prepend=0)
    return spans[~ups[own]], spans[ups[own]]


def test_random_times_follow_their_laws():
    failures = lk.RandomFailures(up=4.0, down=0.5)
    times, servers, ups = failures.events(lk.ring(5), 20_000.0, np.random.default_rng(8))
    assert (times.dtype, servers.dtype, ups.dtype) == (np.float64, np.uint32, np.bool_)
    assert (np.diff(times) >= 0).all()
    assert times[0] > 0
    assert times[-1] < 20_000
    assert set(servers) == set(range(5))
    for server in range(5):
        up, down = durations(times, servers, ups, server)
        assert_within(up, 4.0)
        assert_within(down, 0.5)
        assert stats.kstest(up, stats.expon(scale=4.0).cdf).pvalue > 1e-6
        assert stats.kstest(down, stats.expon(scale=0.5).cdf).pvalue > 1e-6


def test_random_share_of_time_up():
    failures = lk.RandomFailures(up=3.0, down=1.0)
    assert failures.availability(lk.ring(5), 10.0) == 0.75
    down = []
    for replicate in range(40):
        times, _, ups = failures.events(lk.ring(3), 4_000.0, np.random.default_rng(replicate))
        down.append(np.where(ups, -1.0, 1.0) @ (4_000.0 - times) / 12_000)
    assert_within(1 - np.array(down), 0.75)


def test_servers_fail_on_their_own():
    # two servers up or down at 1,000 far-apart moments: Fisher's exact test, false alarm 1e-6
    times, servers, _ = lk.RandomFailures(1.0, 1.0).events(lk.ring(3), 20_000.0, np.random.default_rng(3))
    moments = np.arange(20, 20_000, 20)
    # after an odd number of events a server is down
    state = [np.searchsorted(times[servers == server], moments) % 2 for server in range(2)]
    counts = np.histogram2d(*state, bins=2)[0]
    assert stats.fisher_exact(counts).pvalue > 1e-6
    assert counts.min() > 150


@pytest.mark.parametrize("servers", [3, 200, 20_000])
def test_a_longer_horizon_only_adds_events(servers):
    failures, some = lk.RandomFailures(up=5.0, down=1.0), lk.ring(servers)
    short = failures.events(some, 20.0, np.random.default_rng(1))
    long = failures.events(some, 60.0, np.random.default_rng(1))
    count = len(short[0])
    assert count > servers
    assert all(np.array_equal(part, more[:count]) for part, more in zip(short, long, strict=True))
    assert long[0][count] >= 20.0


def test_rare_failures_may_be_none():
    events = lk.RandomFailures(up=1e12, down=1.0).events(lk.ring(3), 1.0, np.random.default_rng(1))
    assert [len(part) for part in events] == [0, 0, 0]
    assert [part.dtype for part in events] == [np.float64, np.uint32, np.bool_]


def test_too_many_events_are_refused():
    with pytest.raises(lk.InputError, match=r"up is 1e-06 and down is 1e-06; 3 servers .* give longer times"):
        lk.RandomFailures(1e-6, 1e-6).events(lk.ring(3), 1e6, np.random.default_rng(1))


@pytest.mark.parametrize(
    ("up", "down", "words"),
    [(0, 1, "up is 0; give a number above 0"), (1, -1, "down is -1"), (1, np.inf, "down is inf")],
)
def test_bad_mean_times_are_refused(up, down, words):
    with pytest.raises(lk.InputError, match=words):
        lk.RandomFailures(up=up, down=down)


def test_failures_at_the_door():
    random = lk.RandomFailures(up=9, down=1)
    assert checked_failures(None) is None
    assert checked_failures(random) is random
    assert checked_failures(random.name) == random
    assert checked_failures("random(up=9, down=1)") == random
    assert random != lk.RandomFailures(up=9, down=2)
    assert hash(random) == hash(lk.RandomFailures(9, 1))


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ("random", r"it needs up and down, as in 'random\(up=9, down=9\)'"),
        ("rando", r"failures is 'rando'; give lk.Failures\(schedule\)"),
        (True, "failures is True"),
        (table(), "failures is DataFrame; give lk.Failures"),
    ],
)
def test_other_failures_are_refused(given, words):
    with pytest.raises(lk.InputError, match=words):
        checked_failures(given)
