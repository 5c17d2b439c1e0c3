from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import labkit as lk
from labkit.traces.invented import BY_HOUR, invented_trace
from labkit.traces.reading import open_trace

DEMO = Path(__file__).parents[2] / "experiments" / "demo"


def test_the_demo_log_is_what_the_generator_makes():
    made = invented_trace(lk.read_fleet(DEMO), days=14, tasks_per_day=480, rng=2031)
    content = (DEMO / "log" / "trace.csv").read_bytes()
    assert made.to_csv(index=False, lineterminator="\n").encode() == content


def test_the_demo_log_tells_what_its_page_says():
    fleet = lk.read_fleet(DEMO)
    log = pd.read_csv(DEMO / "log" / "trace.csv")
    page = (DEMO / "README.md").read_text(encoding="utf-8")
    load, full, highest = dict.fromkeys(fleet.names, 0), set(), 0.0
    capacity = dict(zip(fleet.names, fleet.capacity, strict=True))
    ends = log["time"] + log["duration"]
    arrivals = zip(log["time"], [1] * len(log), log["placed"], log["size"], strict=True)
    events = sorted([*arrivals, *zip(ends, [0] * len(log), log["placed"], -log["size"], strict=True)])
    for _, _, server, amount in events:
        load[server] += amount
        highest = max(highest, sum(load.values()) / fleet.total_capacity)
        if load[server] > capacity[server]:
            full.add(server)
    assert f"{len(log):,} rentals filled four sites" in page
    assert len(full) == 4
    assert 1 / 3 < highest < 0.4
    found = lk.fleet_from_trace(DEMO / "log" / "trace.csv", capacity=capacity)
    assert (len(found), len(found.options)) == (100, 126)


def test_a_log_obeys_its_arguments():
    """Chance of a false alarm: below 1e-6 a line, by the normal limit; the seed is fixed."""
    fleet = lk.Fleet(
        pd.DataFrame({"server": [*"abcd"]}),
        pd.DataFrame(
            {"option_1": [*"abc"], "option_2": [*"bcd"], "option_3": [None, "a", None], "demand": [1, 2, 0]}
        ),
    )
    log = invented_trace(
        fleet, days=40, tasks_per_day=500, rng=7, mean_size=4, mean_duration=20, bursts_per_day=0, habit=0.6
    )
    count = len(log)
    assert abs(count - 20_000) < 5 * np.sqrt(20_000)
    assert (log["time"].min(), log["time"].is_monotonic_increasing) >= (0, True)
    assert log["time"].max() < 960
    hours = np.bincount((log["time"] % 24).astype(int), minlength=24)
    assert stats.chisquare(hours, count * np.array(BY_HOUR) / sum(BY_HOUR)).pvalue > 1e-6
    size, duration = log["size"], log["duration"]
    assert abs(size.mean() - 4) < 5 * np.sqrt(12 / count)
    assert abs(duration.mean() - 20) < 5 * 20 * np.sqrt((np.e - 1) / count)
    assert size.min() == 1
    assert duration.min() > 0
    wide = log["option_3"].notna()
    assert abs(wide.mean() - 2 / 3) < 5 * np.sqrt(2 / 9 / count)
    for place in (1, 2, 3):  # any order of the options of a choice
        assert abs((log.loc[wide, f"option_{place}"] == "b").mean() - 1 / 3) < 5 * np.sqrt(2 / 9 / wide.sum())
    assert "d" not in set(log["option_1"])
    assert (log["placed"] == log["option_1"]).mean() > 0.6
    options = log[["option_1", "option_2", "option_3"]]
    assert options.eq(log["placed"], axis=0).any(axis=1).all()
    assert log["time"].duplicated().any()
    assert len(list(open_trace(log, fleet).blocks(rows=7_000))) == 3


def test_who_does_not_follow_habit_takes_the_emptier():
    log = invented_trace(lk.ring(5), days=3, tasks_per_day=200, rng=3, habit=0, mean_size=1)
    load, leaving = np.zeros(5), []
    for row in log.itertuples():
        for end in [end for end in leaving if end[0] <= row.time]:
            load[end[1]] -= end[2]
            leaving.remove(end)
        assert load[row.placed] == min(load[row.option_1], load[row.option_2])
        load[row.placed] += row.size
        leaving.append((row.time + row.duration, row.placed, row.size))
    assert (
        invented_trace(lk.ring(5), days=1, tasks_per_day=90, rng=3, habit=1).eval("placed == option_1")
    ).all()


def test_bursts_hold_one_server():
    calm = invented_trace(lk.ring(200), days=20, tasks_per_day=400, rng=1, bursts_per_day=0)
    busy = invented_trace(lk.ring(200), days=20, tasks_per_day=400, rng=1, bursts_per_day=3)
    top = []
    for log in (calm, busy):
        both = pd.concat([log["option_1"], log["option_2"]])
        quarter = np.tile(log["time"] // 0.5, 2)
        top.append(both.groupby([quarter, both]).size().max())
    assert top[0] <= 5 < 8 <= top[1]


def test_the_seed_says_it_all():
    one, same, other = (invented_trace(lk.ring(6), days=2, tasks_per_day=50, rng=rng) for rng in (1, 1, 2))
    pd.testing.assert_frame_equal(one, same)
    assert not one.equals(other)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"days": 0}, r"days is 0; give a whole number"),
        ({"tasks_per_day": 0}, r"tasks_per_day is 0; give a number above 0"),
        ({"tasks_per_day": 1e-9}, r"tasks_per_day is 1e-09, and no task came"),
        ({"mean_size": 0.5}, r"mean_size is 0\.5; give a number of at least 1"),
        ({"mean_duration": -1}, r"mean_duration is -1; give a number above 0"),
        ({"bursts_per_day": -1}, r"bursts_per_day is -1; give a number of at least 0"),
        ({"habit": 1.5}, r"habit is 1\.5; give a number from 0 to 1"),
        ({"rng": None}, r"rng is None"),
        ({"fleet": lk.complete(10)}, r"fleet is complete"),
        ({"fleet": "demo"}, r"fleet is str"),
    ],
)
def test_a_wrong_argument_is_refused(change, words):
    given = {"fleet": lk.ring(4), "days": 1, "tasks_per_day": 9, "rng": 1, "bursts_per_day": 0, **change}
    with pytest.raises(lk.InputError, match=words):
        invented_trace(given.pop("fleet"), **given)
