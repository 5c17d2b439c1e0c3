"""Quantiles of times that were counted in bins, against sorted times."""

import numpy as np
import pytest

from labkit.compiled import kept
from labkit.engine import queues as q
from labkit.engine.service_measures import quantiles

SHARES = np.array([0.01, 0.5, 0.9, 0.99, 1.0])


def count(times, counts):
    """Count times in the bins of the loop."""
    for time in times:
        counts[q.bin_of(time)] += 1


def counted(times):
    counts = np.zeros(q.BINS, np.int64)
    kept(count)(np.asarray(times, float), counts)
    return quantiles(counts, SHARES, float(np.max(times)))


@pytest.mark.parametrize(
    "times",
    [
        np.random.default_rng(1).exponential(size=20_000),
        np.random.default_rng(2).lognormal(0, 5, 20_000),
        np.geomspace(1e-11, 1e16, 5_000),
        np.full(300, 0.75),
        np.array([3.0]),
        np.array([1.0, 2.0, 4.0, 1e9]),
    ],
    ids=["exponential", "lognormal", "all sizes", "equal", "one", "few"],
)
def test_quantiles_are_those_of_sorted_times_to_two_in_a_thousand(times):
    exact = np.quantile(times, SHARES, method="inverted_cdf")
    assert counted(times) == pytest.approx(exact, rel=2e-3)
    assert counted(times)[-1] <= times.max()


def test_zeros_stay_zero():
    # nine in ten tasks did not wait at all
    found = counted(np.concatenate([np.zeros(900), np.full(100, 2.5)]))
    assert found == pytest.approx([0, 0, 0, 2.5, 2.5], rel=2e-3)
    assert found[:3].tolist() == [0, 0, 0]
    # what lies beyond the last bin is not known
    assert np.isnan(counted([1e30, 2e30])).all()


def test_nothing_counted_has_no_quantile():
    assert np.isnan(quantiles(np.zeros(q.BINS, np.int64), SHARES, 0.0)).all()
