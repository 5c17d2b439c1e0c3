"""Static split: fixed shares that fill each server, on average, to its fair level."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

import labkit as lk
from labkit.policies.static_split import bounds_of
from labkit.survey.fair import fair_profile

# Two-sided 4.5 standard errors: false alarm 7e-6 a server, below 1e-4 for each test.
BOUND = 4.5


def uneven(size=40, seed=5):
    rng = np.random.default_rng(seed)
    rows = [rng.choice(size, 3, replace=False).tolist() for _ in range(2 * size)]
    choices = pd.DataFrame(rows, columns=["option_1", "option_2", "option_3"], dtype="Int64")
    choices.loc[::3, "option_3"] = pd.NA
    choices["demand"] = rng.exponential(1.0, len(choices))
    servers = pd.DataFrame({"server": range(size), "capacity": rng.integers(1, 5, size)})
    return lk.Fleet(servers, choices)


@pytest.mark.parametrize("near_bytes", [0, 1 << 20], ids=["drawn ahead", "as drawn"])
def test_each_server_gets_its_fair_share(near_bytes, monkeypatch):
    monkeypatch.setattr("labkit.engine.placement.NEAR_BYTES", near_bytes)
    fleet, tasks = uneven(), 4_000
    outcome = lk.place(fleet, "static-split", tasks=tasks, replicates=300, rng=8)
    share = fair_profile(fleet).of_unit_work * fleet.capacity
    assert share.sum() == pytest.approx(1)
    # Tasks are independent: a server's load is binomial.
    error = np.sqrt(tasks * share * (1 - share) / 300)
    assert (np.abs(outcome.loads.mean(axis=0) - tasks * share) < BOUND * error).all()
    spread = outcome.loads.var(axis=0, ddof=1) / (tasks * share * (1 - share))
    assert spread == pytest.approx(1, abs=BOUND * np.sqrt(2 / 299))


def test_the_average_highest_level_is_the_optimum():
    fleet, tasks = uneven(), 4_000
    outcome = lk.place(fleet, lk.StaticSplit(), tasks=tasks, replicates=300, rng=3)
    level = outcome.by_server.groupby("server")[["utilisation", "fair_utilisation"]].mean()
    best = lk.survey(fleet)
    top = level.loc[list(best.bottleneck)]
    assert top["fair_utilisation"].to_numpy() == pytest.approx(
        tasks * best.optimum / fleet.demand.sum(), rel=1e-9
    )
    together = fleet.capacity[fleet.names.get_indexer(list(best.bottleneck))]
    placed = (top["utilisation"] * together).sum()
    chance = (top["fair_utilisation"] * together).sum() / tasks
    assert abs(placed - tasks * chance) < BOUND * np.sqrt(tasks * chance * (1 - chance) / 300)


@pytest.mark.parametrize("fleet", [lk.ring(12), lk.complete(9, options=3), lk.torus(3, 4)])
def test_on_evenly_balanced_fleets_it_is_one_choice(fleet):
    both = [
        lk.place(fleet, rule, tasks=500, replicates=2, rng=4).loads for rule in ("static-split", "one-choice")
    ]
    assert np.array_equal(*both)


def test_loads_and_late_reports_do_not_matter():
    fleet = uneven()
    fresh = lk.place(fleet, "static-split", tasks=900, rng=1).loads
    late = lk.place(fleet, "static-split", tasks=900, rng=1, information=lk.Snapshot(every=100)).loads
    assert np.array_equal(fresh, late)


@given(st.lists(st.lists(st.sampled_from([0.0, 1e-9, 0.3, 2.0, 1e9]), min_size=3, max_size=3), min_size=1))
def test_bounds_leave_empty_options_no_part(rows):
    carried = np.array(rows)
    bounds = np.column_stack([np.zeros(len(carried)), bounds_of(carried), np.ones(len(carried))])
    assert (np.diff(bounds, axis=1) >= 0).all()
    some = carried.sum(axis=1) > 0
    assert (np.diff(bounds, axis=1)[some][carried[some] == 0] == 0).all()
    assert np.diff(bounds, axis=1)[some] == pytest.approx(
        carried[some] / carried[some].sum(axis=1, keepdims=True), abs=1e-12
    )
