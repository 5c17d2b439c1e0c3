"""What rules need at dispatch time, and forecasts beside simulations."""

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.forecast_check import forecast_table
from labkit.analysis.needs import rule_needs
from labkit.analysis.wording import report_age, reports


def test_messages_memory_and_what_is_moved():
    fleet = lk.ring(40)
    rules = ["one-choice", "static-split", "least-loaded", "mixed(beta=0.25)", "pairwise-averaging"]
    table = rule_needs(fleet, [*rules, "smooth-feedback(every=80)"]).set_index("policy")
    # Two options' loads a task; a picture of 40 loads every 80 tasks.
    assert table["messages_per_task"].to_dict() == {
        "one-choice": 0.0,
        "static-split": 0.0,
        "least-loaded": 2.0,
        "mixed(beta=0.25)": 0.5,
        "pairwise-averaging": 2.0,
        "smooth-feedback(every=80)": 2.5,
    }
    assert table.loc[table["moves_work"], "knows"].index.tolist() == ["pairwise-averaging"]
    assert "moves work already placed" in table.loc["pairwise-averaging", "knows"]
    assert table.loc["least-loaded", "memory"] == 0
    assert table.loc["smooth-feedback(every=80)", "memory"] >= 40 * 8


def test_with_reports_one_message_a_server_is_shared_by_the_tasks_between():
    table = rule_needs(lk.ring(40), ["one-choice", "least-loaded"], report_every=10).set_index("policy")
    assert table["messages_per_task"].to_dict() == {"one-choice": 0.0, "least-loaded": 4.0}


def test_options_count_by_demand():
    choices = pd.DataFrame(
        {"option_1": [0, 0], "option_2": [1, 1], "option_3": [None, 2], "demand": [3.0, 1.0]}
    )
    fleet = lk.Fleet(pd.DataFrame({"server": [0, 1, 2]}), choices.astype({"option_3": "Int64"}))
    [row] = rule_needs(fleet, ["least-loaded"]).to_dict("records")
    assert row["messages_per_task"] == pytest.approx(2.25)


def test_information_in_words():
    assert report_age("fresh") == (0, 0)
    assert report_age(lk.Snapshot(every=70).name) == (70, 0)
    assert report_age(lk.Dispatchers(count=3, every=7).name) == (7, 3)
    assert reports("dispatchers(count=3, every=1200)") == "every 1,200 tasks, 3 dispatchers"
    assert reports("of my own") == "of my own"
    with pytest.raises(lk.InputError, match="information is 'snapshot'"):
        report_age("snapshot")


def test_forecasts_stand_beside_simulations():
    table = forecast_table({"ring": lk.ring(10), "long": lk.ring(300)}, rounds=3_000, rng=1)
    assert table["fleet"].tolist() == ["ring", "long"]
    ring, long = table.to_dict("records")
    assert abs(ring["forecast"] - ring["simulated"]) < ring["forecast_error"] + 4 * ring["simulated_error"]
    # Chains of 3,000 rounds are too short on a ring of 300.
    assert np.isnan(long["simulated"])
    assert long["forecast"] == pytest.approx(15, rel=0.1)
