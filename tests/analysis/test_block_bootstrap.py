"""Bands from one trace: what they are by hand, how often they cover, and what is refused."""

from itertools import product

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import labkit as lk
from labkit.analysis.block_bootstrap import MEASURES, block_bootstrap


def intervals(values, *, policy="p", replicate=0, length=2.0, **columns):
    """Return a table of intervals with these numbers of tasks present."""
    values = np.asarray(values, float)
    number = np.arange(len(values))
    table = pd.DataFrame({"policy": policy, "replicate": replicate, "interval": number})
    table = table.assign(start=length * number, end=length * (number + 1), area=length * values)
    sums = (
        "arrivals",
        "completed",
        "blocked",
        "late",
        "sojourn_sum",
        "waiting_sum",
        "max_load",
        "max_utilisation",
    )
    return table.assign(**{name: 1.0 for name in sums}).assign(**columns)


def test_the_estimate_of_each_measure():
    draw = np.random.default_rng(1)
    columns = {
        name: draw.integers(1, 9, 12).astype(float) for name in ("arrivals", "completed", "blocked", "late")
    }
    columns |= {
        name: draw.random(12) * 2 for name in ("sojourn_sum", "waiting_sum", "max_load", "max_utilisation")
    }
    present = draw.random(12)
    table = intervals(present, **columns)
    sums = {name: values.sum() for name, values in columns.items()}
    expected = {
        "sojourn_mean": sums["sojourn_sum"] / sums["completed"],
        "waiting_mean": sums["waiting_sum"] / sums["completed"],
        "late_share": sums["late"] / sums["completed"],
        "blocked_share": sums["blocked"] / sums["arrivals"],
        "tasks_present": present.mean(),
        "max_load": columns["max_load"].mean(),
        "max_utilisation": columns["max_utilisation"].mean(),
        "overload_share": (columns["max_utilisation"] > 1).mean(),
    }
    assert set(expected) == set(MEASURES)
    for of, value in expected.items():
        [row] = block_bootstrap(table, of=of, rng=1).to_dict("records")
        assert row["estimate"] == pytest.approx(value, rel=1e-12)
        assert row["lower"] <= row["estimate"] <= row["upper"]
        assert row["lower"] < row["upper"]
        assert (row["policy"], row["of"], row["intervals"], row["left_out"]) == ("p", of, 12, 0)
        assert (row["length"], row["confidence"]) == (1, 0.95)


def test_blocks_by_hand():
    # Starts drawn as the function draws them.
    values = np.array([3.0, 1, 4, 1, 5, 9, 2, 6, 5, 3])
    resamples, length, count = 99, 2, 10
    starts = np.random.Generator(np.random.SFC64(np.random.SeedSequence(7))).integers(0, 10, (resamples, 5))
    means = [np.mean([values[(s + k) % count] for s in row for k in range(length)]) for row in starts]
    [row] = block_bootstrap(
        intervals(values), of="tasks_present", length=length, rng=7, resamples=resamples, confidence=0.8
    ).to_dict("records")
    wider = stats.t.ppf(0.9, 4) / stats.norm.ppf(0.9) * np.sqrt(5 / 4)
    low, high = np.quantile(means, [0.1, 0.9])
    centre = values.mean()
    assert row["lower"] == pytest.approx(centre - wider * (centre - low), rel=1e-12)
    assert row["upper"] == pytest.approx(centre + wider * (high - centre), rel=1e-12)


def test_the_last_block_is_cut_to_as_many_intervals_as_there_are():
    # All sums are of 11 intervals, so that equal ones leave no spread at all.
    table = intervals(np.full(11, 3.0))
    for length in (1, 2):
        [row] = block_bootstrap(table, of="tasks_present", length=length, rng=1).to_dict("records")
        assert (row["estimate"], row["lower"], row["upper"]) == (3.0, pytest.approx(3.0), pytest.approx(3.0))


def test_replicates_are_averaged_within_an_interval():
    draw = np.random.default_rng(3)
    one, other = draw.random((2, 20))
    both = pd.concat([intervals(one), intervals(other, replicate=1)])
    mean = intervals((one + other) / 2)
    pd.testing.assert_frame_equal(
        block_bootstrap(both, of="tasks_present", rng=1), block_bootstrap(mean, of="tasks_present", rng=1)
    )


def test_differences_are_paired():
    draw = np.random.default_rng(4)
    day = draw.normal(50.0, 20.0, 40)
    better = day - 1.0 + draw.normal(0.0, 0.1, 40)
    table = pd.concat([intervals(day, policy="one"), intervals(better, policy="two")])
    [row] = block_bootstrap(table, of="tasks_present", baseline="one", rng=1).to_dict("records")
    assert (row["policy"], row["baseline"]) == ("two", "one")
    assert row["estimate"] == pytest.approx((better - day).mean(), rel=1e-9)
    assert -1.1 < row["lower"] < row["estimate"] < row["upper"] < -0.9
    alone = block_bootstrap(table, of="tasks_present", rng=1)
    assert alone["policy"].tolist() == ["one", "two"]
    assert (alone["upper"] - alone["lower"]).min() > 5


def test_a_shorter_last_interval_is_left_out():
    table = intervals(np.arange(13.0))
    table.loc[12, "end"] -= 0.5
    table.loc[12, "area"] = 1e6
    [row] = block_bootstrap(table, of="tasks_present", rng=1).to_dict("records")
    assert (row["intervals"], row["left_out"], row["estimate"]) == (12, 1, 5.5)


def series(draw, correlation, count=100):
    """Return a series whose neighbours correlate, of mean 10."""
    noise = draw.standard_normal(count)
    values = [noise[0]]
    for each in noise[1:]:
        values.append(correlation * values[-1] + np.sqrt(1 - correlation**2) * each)
    return 10 + np.array(values)


@pytest.mark.parametrize(
    ("correlation", "length", "least", "most"),
    [(0.0, 1, 0.94, 0.965), (0.5, 10, 0.91, 0.945), (0.5, 1, 0.70, 0.76)],
)
def test_coverage_of_95_percent_bands(correlation, length, least, most):
    """250 series of 100 intervals; simulated coverage (4,000 series) is 0.954, 0.929 and 0.732.

    A right function, whose coverage is within the bounds, fails with probability below 0.001.
    """
    draw = np.random.default_rng(6)
    covered = 0
    for number in range(250):
        table = intervals(series(draw, correlation))
        row = block_bootstrap(table, of="tasks_present", length=length, rng=number, resamples=399).iloc[0]
        covered += row["lower"] <= 10 <= row["upper"]
    assert stats.binom.ppf(0.0005, 250, least) <= covered <= stats.binom.ppf(0.9995, 250, most)


def test_same_rng_same_band_and_any_order_of_rows():
    table = pd.concat(
        [intervals(np.arange(20.0) % 7, policy=policy, replicate=r) for policy, r in product("ab", range(2))]
    )
    one = block_bootstrap(table, of="tasks_present", rng=5)
    pd.testing.assert_frame_equal(
        one, block_bootstrap(table.sample(frac=1, random_state=1), of="tasks_present", rng=5)
    )
    assert not one.equals(block_bootstrap(table, of="tasks_present", rng=6))


GOOD = intervals(np.arange(12.0))


@pytest.mark.parametrize(
    ("table", "given", "words"),
    [
        ([1, 2], {}, "by_interval is list; give the DataFrame"),
        (GOOD.iloc[:0], {}, "by_interval has no rows"),
        (GOOD.iloc[:9], {}, "9 intervals of full length; give at least 10"),
        (GOOD, {"length": 3}, "length is 3, and by_interval has 12 intervals .* a fifth of them, 2"),
        (GOOD, {"length": 0}, "length is 0; give a whole number of at least 1"),
        (GOOD, {"of": "max_lod"}, "of is 'max_lod'; did you mean 'max_load'"),
        (GOOD, {"confidence": 1.0}, "confidence is 1.0"),
        (GOOD, {"resamples": 5}, "resamples is 5; give a whole number of at least 99"),
        (GOOD, {"rng": None}, "rng is None"),
        (GOOD, {"baseline": "q"}, "baseline is 'q', which is not in by_interval"),
        (GOOD, {"baseline": "p"}, "holds only the baseline 'p'; add another policy"),
        (GOOD.assign(policy=None), {}, "a policy that is no text"),
        (GOOD.drop(columns="sojourn_sum"), {}, "by_interval has no column 'sojourn_sum'"),
        (GOOD.drop(columns="replicate"), {}, "by_interval has no column 'replicate'"),
        (GOOD.assign(completed=np.nan), {}, "values of 'completed' that are no finite"),
        (GOOD.assign(completed=0.0), {}, "divides by 'completed', which is 0"),
        (pd.concat([GOOD, GOOD]), {}, "has interval 0 of replicate 0 of policy 'p' twice"),
        (pd.concat([GOOD, intervals(np.arange(13.0), policy="q")]), {}, "not the same intervals"),
        (pd.concat([GOOD, intervals(np.arange(12.0), policy="q", length=3.0)]), {}, "not the same intervals"),
        (GOOD.assign(end=GOOD["end"].where(GOOD["interval"] != 4, 9.0)), {}, "an interval, 4, shorter than"),
    ],
)  # fmt: skip
def test_refusals(table, given, words):
    with pytest.raises(lk.InputError, match=words):
        lk.block_bootstrap(table, **{"rng": 1, **given})
