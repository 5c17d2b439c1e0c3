"""Pairwise averaging, whose differences are known exactly on rings.

E (x_i - x_{i+k})^2 = (k (n - k) - 1) / n, derived; first as a bound: Alistarh, Nadiradze & Sabour 2020.
"""

import numpy as np
import pytest

import labkit as lk
from tests.published.standard_error import assert_within


@pytest.mark.parametrize("apart", [1, 3])
def test_differences_on_a_ring(apart):
    # 300 tasks a server from empty: the slowest wave has had some 40 times its time to relax.
    size = 8
    loads = lk.place(
        lk.ring(size), "pairwise-averaging", tasks=300 * size, replicates=4_000, rng=4, workers=2
    ).loads
    square = ((loads - np.roll(loads, -apart, axis=1)) ** 2).mean(axis=1)
    assert_within(square, (apart * (size - apart) - 1) / size)


def test_work_is_kept_and_levels_follow_capacity():
    servers = lk.ring(6).servers.assign(capacity=[1.0, 2.0, 3.0, 1.0, 2.0, 3.0])
    fleet = lk.Fleet(servers, lk.ring(6).choices)
    outcome = lk.place(
        fleet, "pairwise-averaging", tasks=3_000, replicates=3, rng=1, sizes=np.full(3_000, 0.5)
    )
    assert outcome.loads.sum(axis=1) == pytest.approx(1_500)
    # Some work arrived last; otherwise every pair is level.
    assert outcome.measures["gap"].max() < 1.0
    assert outcome.loads.dtype == np.float64


def test_no_placement_rule_is_as_level():
    fleet = lk.ring(64)
    gaps = [
        lk.place(fleet, rule, tasks=64_000, replicates=20, rng=2).measures["gap"].mean()
        for rule in ("pairwise-averaging", "smooth-feedback", "least-loaded")
    ]
    assert gaps[0] < gaps[1] < gaps[2]
