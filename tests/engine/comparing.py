"""Run a fleet through the compiled loop and the slow one and compare every load and measure."""

import pandas as pd
import pytest

import labkit as lk
from labkit.engine import placement
from labkit.engine.arrivals import arrivals_of
from labkit.survey.demand import evenly_balanced
from labkit.survey.fair import fair_profile
from tests import reference

RULES = {
    "one-choice": ("one-choice",),
    "least-loaded": ("least-loaded", "random"),
    "least-loaded(ties=first)": ("least-loaded", "first"),
    "mixed(beta=0.3)": ("mixed", 0.3),
    "static-split": ("static-split",),
    "pairwise-averaging": ("pairwise-averaging",),
}


def mixed_fleet():
    """Return a fleet with two and three options a choice, unequal capacities and demands."""
    servers = pd.DataFrame({"server": list("abcde"), "capacity": [1, 2, 3, 2, 1]})
    choices = pd.DataFrame(
        {
            "option_1": ["a", "b", "c", "d", "e", "a"],
            "option_2": ["b", "c", "d", "e", "a", "c"],
            "option_3": ["c", None, "e", None, None, "e"],
            "demand": [1.0, 0.5, 2.0, 0.0, 1.5, 1.0],
        }
    )
    return lk.Fleet(servers, choices)


def assert_same_path(fleet, rule, *, ahead, entropy, every=0, sizes=None, start=None, dispatchers=0):
    """Place 60 tasks both ways, two replicates, and compare."""
    tasks, moments = 60, [1, 2, 17, 60]
    near = placement.NEAR_BYTES
    information = lk.Snapshot(every) if every else lk.Fresh()
    if dispatchers:
        information = lk.Dispatchers(dispatchers, every=every)
    try:
        placement.NEAR_BYTES = 0 if ahead else near
        outcome = lk.place(
            fleet, rule, tasks=tasks, replicates=2, rng=entropy, checkpoints=moments, sizes=sizes,
            start=start, information=information,
        )  # fmt: skip
    finally:
        placement.NEAR_BYTES = near
    law = arrivals_of(fleet)
    told = RULES[rule]
    if rule == "static-split":
        told = (*told, [] if evenly_balanced(fleet) else fair_profile(fleet).split.by_option().tolist())
    table = None if law.threshold is None else (law.threshold, law.alias)
    for replicate in range(2):
        history = reference.place(
            fleet, told, tasks=tasks, replicate=replicate, entropy=entropy,
            table=table, sizes=sizes, every=every, start=start, dispatchers=dispatchers,
        )  # fmt: skip
        if rule == "pairwise-averaging":
            assert outcome.loads[replicate] == pytest.approx(history[-1], rel=1e-12)
        else:
            assert outcome.loads[replicate].tolist() == history[-1].tolist()
        rows = outcome.measures.query("replicate == @replicate").set_index("tasks")
        for moment in moments:
            for name, value in reference.measures(fleet, history[moment - 1]).items():
                assert rows.loc[moment, name] == pytest.approx(value, rel=1e-12, abs=1e-12, nan_ok=True), name
