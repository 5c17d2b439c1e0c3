"""Tables and sentences about work that leaves say what the numbers say."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.service_words import (
    bands_page,
    failure_page,
    limits_by,
    provision_page,
    replay_page,
    stability_words,
    steady_words,
    tasks_over_time,
    warm_up_words,
    with_limits,
)
from labkit.errors import InputError


def test_the_limit_names_its_bottleneck_and_what_one_choice_overloads():
    servers = pd.DataFrame({"server": list("abcd"), "capacity": [1.0, 1.0, 1.0, 3.0]})
    choices = pd.DataFrame(
        {"option_1": ["a", "b", "c"], "option_2": ["b", "c", "d"], "demand": [6.0, 1.0, 1.0]}
    )
    words = stability_words(lk.Fleet(servers, choices), ["one-choice", "least-loaded"])
    # a and b: 2 of the 6 units of capacity, with 6 of the 8 units of demand confined to them
    assert "load factor of 0.4444" in words
    assert "confined to 'a', 'b'" in words
    # b gets half of 6 and half of 1
    assert "overloads 'b' from 0.381 on" in words
    even = stability_words(lk.ring(8), ["one-choice"])
    assert "all servers fill alike" in even
    assert "overloads" not in even


@pytest.mark.parametrize(
    ("numbers", "text"),
    [
        ((8.68, 8.56, 8.80), "8.68 (8.56 – 8.80)"),
        ((159.2, 147.4, 171.0), "159 (147 – 171)"),
        ((-0.3401, -0.46, -0.231), "−0.34 (−0.46 to −0.23)"),
        ((12345.6, 12100.0, 12600.0), "12,346 (12,100 – 12,600)"),
        ((0.0, 0.0, 0.0), "0"),
        ((np.nan, 0.0, 1.0), "–"),
    ],
)
def test_numbers_are_rounded_as_their_limits_allow(numbers, text):
    assert with_limits(*numbers) == text


def test_a_row_a_load_and_a_column_a_rule_in_the_order_asked_for():
    rows = [(rule, load, 1.0 + load, 0.9 + load, 1.1 + load) for rule in "ab" for load in (0.5, 0.25)]
    table = pd.DataFrame(rows, columns=["policy", "load_factor", "estimate", "lower", "upper"])
    wide = limits_by(table, "load_factor", ["b", "b"], "mean")
    assert wide.columns.tolist() == ["b", "a"]
    assert wide.index.tolist() == ["0.25", "0.5"]
    assert wide.loc["0.5", "a"] == "1.50 (1.40 – 1.60)"


def test_drifts_are_named_and_chance_is_shared():
    steady = pd.DataFrame({"rule": ["a", "b"], "load factor": [0.5, 0.9]})
    calm = steady.assign(**{"p of a drift by chance": [0.03, 0.5]})
    assert steady_words(calm).startswith("None of the 2 sets of runs drifts")
    moving = steady.assign(**{"p of a drift by chance": [0.3, 0.02]})
    assert steady_words(moving).startswith("**Still drifting**: b at 0.9.")


def test_numbers_of_tasks_are_areas_by_time():
    table = pd.DataFrame(
        {"replicate": [0, 0, 1, 1], "interval": [0, 1, 0, 1], "start": [0.0, 2.0] * 2, "end": [2.0, 4.0] * 2,
         "area": [2.0, 4.0, 6.0, 8.0]}
    )  # fmt: skip
    series, times = tasks_over_time(table)
    assert series.tolist() == [[1.0, 2.0], [3.0, 4.0]]
    assert times.tolist() == [1.0, 3.0]
    assert warm_up_words({"one-choice": 1200.0}, "minutes") == (
        "MSER-5 begins to measure at (minutes): one-choice 1,200. "
    )


def test_failures_are_counted_beside_runs_without():
    rows = [
        ("a", kind, 100, 5.0, 9.0, 3.0, lost, 0, 4 * lost)
        for kind, lost in (("none", 0), ("random(up=9.0, down=1.0), lost", 2))
    ]
    columns = ["policy", "failures", "arrivals", "sojourn_mean", "sojourn_p99", "max_load", "lost"]
    table = pd.DataFrame(rows, columns=[*columns, "requeued", "waited"])
    page = failure_page(table, "hours")
    assert page.loc[("a", "as given"), "lost, %"] == 2.0
    assert page.loc[("a", "as given"), "held up, %"] == 8.0
    with pytest.raises(InputError, match="no rows without failures"):
        failure_page(table.tail(1), "hours")


def test_a_replay_is_told_block_by_block():
    measured = {"max_load": 3.0, "utilisation": 0.5, "sojourn_mean": 1.0, "sojourn_p99": 2.0}
    measures = pd.DataFrame({"policy": ["a"], "max_utilisation": [1.5], "blocked_share": [0.0], **measured})
    blocks = pd.DataFrame({"policy": "a", "interval": range(4), "max_utilisation": [0.5, 1.0, 1.2, 1.5]})
    page = replay_page(measures, blocks, unit="hours", sessions=True)
    assert page.loc["a", "blocks beyond capacity, of 4"] == 2.0
    assert "mean sojourn, hours" in replay_page(measures, blocks, unit="hours", sessions=False)


def test_bands_of_shares_stay_shares():
    row = {"policy": "a", "of": "overload_share", "confidence": 0.95}
    level = pd.DataFrame([row | {"estimate": 0.1, "lower": -0.2, "upper": 0.4}])
    less = pd.DataFrame([row | {"estimate": -0.5, "lower": -0.8, "upper": -0.2}])
    [shown, against] = bands_page(level, less, "as-placed").loc["a"]
    assert shown == "0.10 (0.00 – 0.40)"
    assert against == "−0.50 (−0.80 to −0.20)"


def test_provisions_are_told_in_capacity():
    found = pd.DataFrame([{"policy": "a", "scale": 1.25, "lower": 1.2, "upper": 1.3, "confidence": 0.95}])
    page = provision_page([SimpleNamespace(table=found)], lk.ring(8))
    assert page.loc["a", "total capacity"] == "10"
    assert page.loc["a", "more than today"] == "2"
