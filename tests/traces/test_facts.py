"""What a log shows is counted row by row, in whatever pieces it is read."""

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.errors import InputError
from labkit.traces.facts import trace_facts
from labkit.traces.reading import open_trace

FLEET = lk.ring(5)


def log(count=400, seed=3):
    rng = np.random.default_rng(seed)
    first = rng.integers(0, 3, count)
    return pd.DataFrame(
        {
            "time": np.sort(rng.integers(0, 90, count)).astype(float) + 7.0,
            "option_1": first,
            "option_2": first + 1,
            "size": rng.integers(1, 5, count),
            "duration": rng.random(count),
        }
    )


def test_facts_are_those_of_a_plain_count(tmp_path):
    table = log()
    table.to_csv(tmp_path / "log.csv", index=False)
    for trace in (table, tmp_path / "log.csv"):
        facts = trace_facts(open_trace(trace, FLEET), FLEET, day=24.0, parts=6)
        times = table["time"].to_numpy()
        assert facts.tasks == len(table)
        assert (facts.first, facts.last, facts.span) == (times[0], times[-1], times[-1] - times[0])
        assert facts.tied == len(table) - table["time"].nunique()
        assert facts.used == 4
        assert facts.work == pytest.approx((table["size"] * table["duration"]).sum())
        assert facts.longest == table["duration"].max()
        part = ((times - times[0]) // 4.0).astype(int)
        counted = facts.arrivals.set_index(["day", "part"])["tasks"]
        assert counted.sum() == len(table)
        for at in range(part.max() + 1):
            assert counted[(at // 6, at % 6)] == np.count_nonzero(part == at)


def test_work_that_stays_has_no_duration_and_one_row_no_span():
    table = log(1).drop(columns=["size", "duration"])
    facts = trace_facts(open_trace(table, FLEET), FLEET, day=24.0)
    assert (facts.tasks, facts.tied, facts.span, facts.mean_size) == (1, 0, 0.0, 1.0)
    assert np.isnan(facts.mean_duration)


def test_a_wrong_unit_of_time_is_refused():
    with pytest.raises(InputError, match=r"day is 1e-05, but trace spans .* more than 100,000 days"):
        trace_facts(open_trace(log(), FLEET), FLEET, day=1e-5)
