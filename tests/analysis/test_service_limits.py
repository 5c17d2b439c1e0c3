"""Limits from replicates and from batches of one run: formulas, coverage, refusals.

Coverage is that of seeded runs of a queue whose means are known; the bounds are those of a program whose
coverage is as stated, at a false alarm below 1e-4 (binomial).
"""

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from scipy.signal import lfilter

import labkit as lk
from labkit.analysis.service_limits import ratio_error, service_limits
from tests.analysis.one_queue import one_queue

RATIO_MEASURES = ["sojourn_mean", "waiting_mean", "waiting_share", "queue_mean", "blocked_share"]


@pytest.fixture(scope="module")
def run():
    return one_queue(np.random.default_rng(1), load=0.7, horizon=5_200.0, warmup=200.0)


@pytest.fixture(scope="module")
def runs():
    made = [
        one_queue(np.random.default_rng(number), load=0.7, horizon=700.0, warmup=200.0, replicate=number)
        for number in range(12)
    ]  # fmt: skip
    return tuple(pd.concat(tables, ignore_index=True) for tables in zip(*made, strict=True))


def test_replicates_have_students_limits(runs):
    measures, intervals = runs
    for given in (None, intervals):
        found = service_limits(measures, given, of=["sojourn_mean", "sojourn_p99"], confidence=0.9)
        assert found["measure"].tolist() == ["sojourn_mean", "sojourn_p99"]
        for row in found.itertuples():
            outside = stats.ttest_1samp(measures[row.measure], 0).confidence_interval(0.9)
            assert (row.lower, row.upper) == pytest.approx(tuple(outside))
            assert row.estimate == pytest.approx(measures[row.measure].mean())
            assert (row.method, row.count, row.confidence) == ("replicates", 12, 0.9)
            assert np.isnan(row.correlation)


def test_two_replicates_are_enough(runs):
    measures, _ = runs
    row = service_limits(measures[:2]).iloc[0]
    pair = measures["sojourn_mean"][:2]
    assert row["upper"] - row["estimate"] == pytest.approx(stats.t.ppf(0.975, 1) * np.ptp(pair) / 2)


def test_one_run_has_limits_from_batches(run):
    measures, intervals = run
    found = service_limits(measures, intervals, of=RATIO_MEASURES).set_index("measure")
    assert set(found["method"]) == {"batch means"}
    for name in RATIO_MEASURES:
        assert found["estimate"][name] == measures[name].item()
    assert (found["count"].isin([30, 20, 15, 10])).all()
    batches = found["count"]["sojourn_mean"]
    top, bottom = (
        [part.sum() for part in np.array_split(intervals[name].to_numpy(float), batches)]
        for name in ("sojourn_sum", "completed")
    )
    # the jackknife of the same ratio, batch by batch, agrees to the order of 1/batches
    left = [(sum(top) - a) / (sum(bottom) - b) for a, b in zip(top, bottom, strict=True)]
    jackknife = np.sqrt((batches - 1) ** 2 / batches * np.var(left, ddof=1))
    half = (found["upper"] - found["estimate"])["sojourn_mean"]
    assert half == pytest.approx(stats.t.ppf(0.975, batches - 1) * jackknife, rel=0.03)


def test_limits_follow_the_unit_of_the_measure(run):
    measures, intervals = run
    per_server = measures.assign(queue_mean=measures["queue_mean"] / 8)
    whole, part = (
        service_limits(table, intervals, of="queue_mean").iloc[0] for table in (measures, per_server)
    )
    assert part["upper"] == pytest.approx(whole["upper"] / 8)
    assert part["lower"] == pytest.approx(whole["lower"] / 8)


def test_the_order_of_rows_and_the_warm_up_do_not_matter(run):
    measures, intervals = run
    before = intervals[:7].assign(start=np.arange(7.0) * 20, end=np.arange(1.0, 8) * 20, sojourn_sum=1e9)
    mixed = pd.concat([intervals, before]).sample(frac=1, random_state=1)
    pd.testing.assert_frame_equal(service_limits(measures, mixed), service_limits(measures, intervals))


def test_nothing_blocked_has_width_zero(run):
    row = service_limits(*run, of="blocked_share").iloc[0]
    assert (row["estimate"], row["lower"], row["upper"], row["correlation"]) == (0, 0, 0, 0)


def test_alike_neighbours_lower_the_number_of_batches():
    # an autoregression whose relaxation is 30 of 1,000 intervals: 30 batches of it have a correlation of 0.4
    noise = np.random.default_rng(4).normal(size=1_000)
    intervals = pd.DataFrame(
        {
            "policy": "one-choice", "replicate": 0, "start": np.arange(1_000.0), "end": np.arange(1.0, 1_001),
            "area": 50 + lfilter([1], [1, -np.exp(-1 / 30)], noise),
        }
    )  # fmt: skip
    measures = pd.DataFrame(
        {"policy": ["one-choice"], "replicate": 0, "queue_mean": intervals["area"].mean()}
    )
    row = service_limits(measures, intervals, of="queue_mean").iloc[0]
    assert row["count"] < 30
    wide = ratio_error(intervals["area"].to_numpy(), np.ones(1_000), 30)
    assert wide[1] > 0.2
    assert row["upper"] - row["estimate"] > wide[0] * stats.t.ppf(0.975, 29)
    trend = intervals.assign(area=np.arange(1_000.0))
    row = service_limits(measures, trend, of="queue_mean").iloc[0]
    assert row["count"] == 10
    assert row["correlation"] > 0.2


@pytest.mark.parametrize(("count", "batches"), [(10, 10), (13, 13), (25, 25), (30, 30), (400, 30)])
def test_few_intervals_are_batches_themselves(count, batches):
    intervals = pd.DataFrame(
        {
            "policy": "a", "replicate": 0, "start": np.arange(count), "end": np.arange(count) + 1,
            # up and down: neighbours are unlike, so that the first number of batches is taken
            "area": 5 + (-1.0) ** np.arange(count) + np.linspace(0, 0.01, count),
        }
    )  # fmt: skip
    measures = pd.DataFrame({"policy": ["a"], "replicate": 0, "queue_mean": 5.0})
    assert service_limits(measures, intervals, of="queue_mean")["count"].item() == batches


def test_coverage_of_one_run():
    # M/M/1 at load 0.7: mean sojourn 1/0.3, mean number 0.7/0.3; 200 runs, coverage 94 % (docstring)
    rng = np.random.default_rng(7)
    truth = {"sojourn_mean": 1 / 0.3, "waiting_mean": 0.7 / 0.3, "queue_mean": 0.7 / 0.3}
    held = []
    for _ in range(200):
        tables = one_queue(rng, load=0.7, horizon=10_200.0, warmup=200.0)
        found = service_limits(*tables, of=list(truth)).set_index("measure")
        held.append([found["lower"][name] <= mean <= found["upper"][name] for name, mean in truth.items()])
    error = np.sqrt(0.94 * 0.06 / 200)
    assert (np.mean(held, axis=0) > 0.94 - 4 * error).all()
    assert (np.mean(held, axis=0) < 1).any()


def test_coverage_of_replicates():
    rng = np.random.default_rng(9)
    held = []
    for _ in range(200):
        means = [
            one_queue(rng, load=0.5, horizon=400.0, warmup=50.0, intervals=1, replicate=number)[0]
            for number in range(5)
        ]
        row = service_limits(pd.concat(means)).iloc[0]
        held.append(row["lower"] <= 2.0 <= row["upper"])
    assert 0.95 - 4 * np.sqrt(0.95 * 0.05 / 200) < np.mean(held) < 1


def test_groups_are_kept_apart(runs, run):
    measures, intervals = runs
    other, parts = run
    table = pd.concat([measures, other.assign(policy="least-loaded")])
    both = pd.concat([intervals, parts.assign(policy="least-loaded")])
    found = service_limits(table, both)
    assert found[["policy", "method"]].values.tolist() == [
        ["least-loaded", "batch means"],
        ["one-choice", "replicates"],
    ]
    alone = service_limits(other, parts).iloc[0]
    assert found.iloc[0][["lower", "upper"]].tolist() == alone[["lower", "upper"]].tolist()
    loads = pd.concat([measures, measures.assign(load_factor=0.8)])
    assert service_limits(loads)["load_factor"].tolist() == [0.7, 0.8]
    named = pd.concat({"a": measures, "b": measures}, names=["case"])
    assert service_limits(named)["case"].tolist() == ["a", "b"]
    plain = service_limits(measures[["replicate", "sojourn_mean"]])
    assert plain.columns[0] == "measure"
    assert plain["estimate"].item() == pytest.approx(measures["sojourn_mean"].mean())


def test_one_run_without_intervals_is_refused(run):
    measures, intervals = run
    for given, words in (
        (
            {},
            "one replicate of policy 'one-choice', load_factor 0.7; run at least 2 replicates or give by_int",
        ),
        ({"by_interval": intervals, "of": "sojourn_p99"}, "sojourn_p99 has no limits from one run"),
        ({"by_interval": intervals[:9]}, "by_interval holds 9 intervals of .* need at least 10"),
        ({"by_interval": intervals[intervals["start"] > 4_900]}, "ask for more intervals"),
    ):
        with pytest.raises(lk.TooFewReplicates, match=words):
            service_limits(measures, **given)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda m, b: (m.drop(columns="replicate"), b), "measures has no column 'replicate'"),
        (lambda m, b: (m[:0], b), "measures has no rows"),
        (lambda m, b: (m.to_dict(), b), "measures is dict; give the DataFrame of outcome.measures"),
        (lambda m, b: (pd.concat([m, m]), b), "replicate 0 of policy 'one-choice', .* more than once"),
        (lambda m, b: (m.assign(policy=None), b), "measures row 0 has no policy"),
        (
            lambda m, b: (m.assign(sojourn_mean=np.nan), b),
            "measures holds sojourn_mean nan for policy 'one-c",
        ),
        (lambda m, b: (m, b.drop(columns="completed")), "by_interval has no column 'completed'"),
        (lambda m, b: (m, b.assign(completed=0)), "by_interval holds no completed of"),
        (lambda m, b: (m, b.assign(sojourn_sum=np.inf)), "by_interval holds sojourn_sum inf for"),
        (lambda m, b: (m, pd.concat([b, b])), "two rows for one interval"),
        (
            lambda m, b: (pd.concat([m, m.assign(load_factor=0.8)]), b),
            "by_interval has no column 'load_factor', by which the runs of measures differ",
        ),
    ],
)
def test_bad_tables_are_refused(run, change, words):
    with pytest.raises(lk.InputError, match=words):
        service_limits(*change(*run))


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"of": "sojorn_mean"}, "of holds 'sojorn_mean', which .* not measure; did you mean 'sojourn_mean'"),
        ({"of": "replicate"}, "of holds 'replicate'"),
        ({"of": []}, "of is "),
        ({"of": 3}, "of is 3; give the name of a measure"),
        ({"confidence": 95}, "confidence is 95"),
    ],
)
def test_bad_options_are_refused(runs, options, words):
    with pytest.raises(lk.InputError, match=words):
        service_limits(*runs, **options)
