"""Warm-up by MSER-5, and drift of what is kept, on autoregressions whose transient is known.

Shares over many seeded runs are compared with bounds that a correct program breaks with probability below
1e-4 (binomial).
"""

import numpy as np
import pytest
from scipy.signal import lfilter
from scipy.stats import ttest_rel

import labkit as lk
from labkit.stationary.warm_up import drift_check, first_kept


def series(rng, *, replicates=1, intervals=400, memory=0.5, amplitude=0.0, relaxation=1.0):
    """Return a stationary autoregression of unit innovations minus a transient that decays."""
    noise = rng.normal(size=(replicates, intervals))
    noise[:, 0] /= np.sqrt(1 - memory**2)
    stationary = lfilter([1], [1, -memory], noise, axis=1)
    return stationary - amplitude * np.exp(-np.arange(intervals) / relaxation)


def by_definition(values):
    """Return MSER-5's number of batches, candidates one by one; White's formula."""
    count = len(values) // 5
    batches = [np.mean(values[5 * place : 5 * place + 5]) for place in range(count)]
    errors = [
        sum((batch - np.mean(batches[d:])) ** 2 for batch in batches[d:]) / (count - d) ** 2
        for d in range(count // 2 + 1)
    ]
    return 5 * int(np.argmin(errors))


@pytest.mark.parametrize("intervals", [50, 98, 200])
def test_it_is_whites_formula(intervals):
    rng = np.random.default_rng(intervals)
    for relaxation in (1, 2, 3):
        values = 1e6 + series(rng, replicates=3, intervals=intervals, amplitude=20, relaxation=relaxation)
        assert first_kept(values) == by_definition(values.mean(axis=0))
        assert first_kept(values.mean(axis=0)) == first_kept(values)


def test_a_step_is_left_out_to_the_batch():
    values = np.r_[np.zeros(35), np.ones(165)] + np.random.default_rng(1).normal(0, 0.01, 200)
    assert first_kept(values) == 35
    assert first_kept(np.full(200, 3.7)) == 0


def test_what_is_left_of_a_transient_is_below_the_noise():
    # amplitude 30, relaxation 20 intervals; 100 runs: it is gone to 1 % of the noise (sd 1.15) after 160
    rng = np.random.default_rng(2)
    kept = [first_kept(series(rng, replicates=4, amplitude=30, relaxation=20)) for _ in range(100)]
    left = 30 * np.exp(-np.array(kept) / 20)
    assert np.quantile(left, 0.9) < 1.15
    assert np.median(kept) < 160


def test_a_stationary_series_is_seldom_cut_or_refused():
    # docstring: below 1 % refused at 400 intervals; 500 runs of each, false alarm below 1e-4 at 12 of them
    for replicates in (1, 10):
        rng = np.random.default_rng(replicates)
        kept = []
        for _ in range(500):
            try:
                kept.append(first_kept(series(rng, replicates=replicates, memory=0.8)))
            except lk.NotStationary:
                continue
        assert len(kept) >= 500 - 12
        assert np.mean(kept) < 0.05 * 400


def test_a_run_that_never_settles_is_refused():
    rng = np.random.default_rng(3)
    for values in (
        np.arange(200.0) + rng.normal(0, 10, 200),
        series(rng, replicates=10, intervals=200, amplitude=30, relaxation=150),
        np.cumsum(rng.normal(1, 1, 400)),
    ):
        with pytest.raises(
            lk.NotStationary, match=r"sojourn still changes beyond its first half .* too short"
        ):
            first_kept(values, name="sojourn")


@pytest.mark.parametrize(
    ("given", "words"),
    [
        (np.zeros(49), "series has 49 intervals; give at least 50"),
        (np.zeros((2, 3, 60)), r"series is numbers of shape \(2, 3, 60\); give means of intervals"),
        (np.zeros((0, 60)), r"shape \(0, 60\)"),
        ("ab", "series is str"),
        (None, "series is NoneType"),
        (np.where(np.arange(120).reshape(2, 60) == 75, np.nan, 1.0), "nan at interval 15 of replicate 1"),
    ],
)
def test_other_series_are_refused(given, words):
    for function in (first_kept, drift_check) if np.shape(given)[-1:] != (49,) else (first_kept,):
        with pytest.raises(lk.InputError, match=words):
            function(given)


def test_too_short_for_halves():
    with pytest.raises(lk.InputError, match="kept has 19 intervals; give at least 20"):
        drift_check(np.zeros(19), name="kept")
    with pytest.raises(lk.InputError, match="has 1 intervals; give at least 2"):
        drift_check(np.zeros((5, 1)))


@pytest.mark.parametrize(
    ("replicates", "memory", "share"),
    [(1, 0.0, 0.01), (1, 0.5, 0.012), (3, 0.5, 0.012), (5, 0.9, 0.01), (20, 0.9, 0.01), (1, 0.87, 0.045)],
)
def test_drift_is_seldom_seen_where_there_is_none(replicates, memory, share):
    # share of 1,000 runs with p < 0.01, against what the docstring says; bound at a false alarm below 1e-4
    rng = np.random.default_rng(11)
    seen = [
        drift_check(series(rng, replicates=replicates, intervals=200, memory=memory)).p_value
        for _ in range(1_000)
    ]
    assert np.mean(np.array(seen) < 0.01) < share + 4 * np.sqrt(share / 1_000)
    assert np.mean(np.array(seen) < 0.5) > 0.4


@pytest.mark.parametrize("replicates", [1, 3, 5, 30])
def test_drift_is_seen_where_there_is_one(replicates):
    rng = np.random.default_rng(5)
    drift = np.linspace(-3, 3, 201)
    found = drift_check(series(rng, replicates=replicates, intervals=201) + drift)
    assert found.p_value < 0.01
    assert found.statistic > 0
    assert found.second_half - found.first_half == pytest.approx(3, abs=1)
    assert found.method == ("replicates" if replicates >= 5 else "batch means")
    assert drift_check(-(series(rng, replicates=replicates, intervals=201) + drift)).statistic < 0


def test_drift_over_replicates_is_students_t():
    values = series(np.random.default_rng(6), replicates=8, intervals=61)
    outside = ttest_rel(values[:, 31:].mean(axis=1), values[:, :30].mean(axis=1))
    found = drift_check(values)
    assert found.statistic == pytest.approx(outside.statistic)
    assert found.p_value == pytest.approx(outside.pvalue)
    assert found.degrees == 7


def test_equal_values_do_not_drift():
    for shape in ((1, 40), (6, 40)):
        assert drift_check(np.full(shape, 2.5)).p_value == 1
    step = np.repeat([0.0, 1.0], 20)
    found = drift_check(step)
    assert (found.statistic, found.p_value) == (np.inf, 0.0)
