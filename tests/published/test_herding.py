"""Herding: with old loads all tasks run to the same servers, until the least loaded is worse than any.

M. Mitzenmacher, "How useful is old information?", IEEE Transactions on Parallel and Distributed Systems 11
(2000), from memory. Differences are paired over 40 replicates and must exceed 6 standard errors, which a
wrong sign does with probability 3e-7; the one comparison with the model is at 4 (3e-4).
"""

import numpy as np
import pytest
from scipy.optimize import brentq

import labkit as lk
from tests.published import queues
from tests.published.standard_error import assert_within

LOAD, REPLICATES = 0.7, 40
FLEETS = {"complete": lk.complete(500), "ring": lk.ring(500)}
# From which age of the reports on least-loaded is worse than one-choice, at load 0.7: simulated for the ring.
AGE = {"complete": 12.79, "ring": 6.90}


def sojourns(fleet, rule, age, horizon=240.0):
    """Return the mean sojourn of each replicate, over whole ages of reports."""
    ages = np.ceil(60.0 / age)
    return lk.serve(
        fleet, rule, load_factor=LOAD, warmup=ages * age, horizon=ages * age + np.ceil(horizon / age) * age,
        replicates=REPLICATES, rng=11, intervals=1, information=lk.Snapshot(every=age),
    ).measures["sojourn_mean"].to_numpy()  # fmt: skip


def in_errors(differences):
    """Return the mean of independent differences in standard errors."""
    return differences.mean() / (differences.std(ddof=1) / np.sqrt(len(differences)))


def test_the_age_follows_from_the_model():
    def beyond(age):
        return queues.bulletin_board_sojourn(LOAD, 2, age, levels=120) - queues.mm1_sojourn(LOAD)

    assert brentq(beyond, 11.0, 14.0, xtol=1e-3) == pytest.approx(AGE["complete"], abs=0.01)


@pytest.mark.parametrize("name", FLEETS)
def test_least_loaded_is_better_below_an_age_and_worse_above(name):
    fleet, age = FLEETS[name], AGE[name]
    found = {}
    for share in (0.25, 0.9, 1.1, 4.0):
        ours, blind = (sojourns(fleet, rule, share * age) for rule in ("least-loaded", "one-choice"))
        found[share] = in_errors(ours - blind)
    assert found[0.25] < -6
    assert found[0.9] < -6
    assert found[1.1] > 6
    assert found[4.0] > 6


@pytest.mark.parametrize("name", FLEETS)
def test_the_age_itself(name):
    # a line through two ages near it, replicate by replicate
    fleet, age = FLEETS[name], AGE[name]
    low, high = (sojourns(fleet, "least-loaded", share * age) for share in (0.9, 1.1))
    crossing = age * (0.9 + 0.2 * (queues.mm1_sojourn(LOAD) - low) / (high - low))
    assert_within(crossing, age, largest_error=0.02 * age)


def test_rings_herd_sooner():
    assert AGE["ring"] < 0.6 * AGE["complete"]
    ours = [sojourns(fleet, "least-loaded", 9.0) for fleet in FLEETS.values()]
    blind = sojourns(FLEETS["ring"], "one-choice", 9.0)
    assert in_errors(ours[0] - blind) < -6
    assert in_errors(ours[1] - blind) > 6
