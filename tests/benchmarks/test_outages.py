"""All outages of a fleet, against solving the fleet that is left from zero each time."""

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.survey.fair import fair_profile, top_of_profile
from tests.benchmarks.side_by_side import ratio, seconds
from tests.survey.left_over import left_over

pytestmark = pytest.mark.benchmark

SAMPLE = 40


def road_like(side, rng):
    """Return a square grid thinned to 1.3 choices a server."""
    here = np.arange(side * side).reshape(side, side)
    across = np.column_stack([here[:, :-1].ravel(), here[:, 1:].ravel()])
    down = np.column_stack([here[:-1].ravel(), here[1:].ravel()])
    ends = np.concatenate([across, down])
    chosen = np.random.default_rng(rng).choice(len(ends), int(1.3 * side * side), replace=False)
    choices = pd.DataFrame(ends[np.sort(chosen)], columns=["option_1", "option_2"])
    return lk.Fleet(pd.DataFrame({"server": here.ravel()}), choices)


def at_random(servers, each, rng):
    """Return a fleet of `each` choices a server, between servers drawn at random."""
    drawn = np.random.default_rng(rng)
    one = drawn.integers(servers, size=each * servers)
    other = (one + drawn.integers(1, servers, size=one.size)) % servers
    choices = pd.DataFrame({"option_1": one, "option_2": other})
    return lk.Fleet(pd.DataFrame({"server": range(servers)}), choices)


@pytest.mark.parametrize(
    ("name", "make", "least"),
    [
        ("road-like", lambda: road_like(32, rng=1), 20),
        ("ring with chords", lambda: lk.ring_with_chords(1_000, 300, rng=1), 2),
        ("ten choices a server", lambda: at_random(1_000, 10, rng=1), 2),
        ("torus", lambda: lk.torus(32, 32), 2),
    ],
    ids=lambda value: value if isinstance(value, str) else "",
)
def test_a_thousand_servers(name, make, least, report):
    fleet = make()
    fair_profile(fleet)
    sample = np.linspace(0, fleet.size - 1, SAMPLE).astype(int)

    def each_from_zero():
        return [top_of_profile(left_over(fleet, [place])).optimum for place in sample]

    def all_at_once():
        return lk.outages(fleet)

    assert all_at_once()["optimum"][sample].to_numpy() == pytest.approx(each_from_zero(), rel=1e-12)
    found = ratio(each_from_zero, all_at_once, rounds=3) * fleet.size / SAMPLE
    spent = seconds(all_at_once)
    report(
        f"outages, {name}, {fleet.size} servers: {found:.1f} x as fast as from zero ({spent:.2f} s for all)"
    )
    assert found >= least


def test_pairs(report):
    fleet = road_like(18, rng=2)
    fair_profile(fleet)
    one, other = np.triu_indices(fleet.size, 1)
    sample = np.linspace(0, one.size - 1, SAMPLE).astype(int)

    def each_from_zero():
        return [top_of_profile(left_over(fleet, [one[row], other[row]])).optimum for row in sample]

    def all_at_once():
        return lk.outages(fleet, pairs=True)

    assert all_at_once()["optimum"][sample].to_numpy() == pytest.approx(each_from_zero(), rel=1e-12)
    found = ratio(each_from_zero, all_at_once, rounds=3) * one.size / SAMPLE
    spent = seconds(all_at_once)
    report(
        f"outages, {one.size} pairs, road-like: {found:.1f} x as fast as from zero ({spent:.2f} s for all)"
    )
    assert found >= 3


def test_the_cost_follows_the_region_not_the_fleet(report):
    small, large = road_like(50, rng=3), road_like(200, rng=3)
    for fleet in (small, large):
        fair_profile(fleet)
    found = ratio(lambda: lk.outages(large), lambda: lk.outages(small), rounds=3)
    report(f"outages, road-like: 16 x the servers (40000) take {found:.1f} x the time")
    assert found <= 64
