"""The first page: every number of it against the records or the fleet, worked out by hand."""

import re

import numpy as np
import pytest

from labkit.errors import InputError
from labkit.reports.case import case_of
from labkit.reports.decision import headroom_decision
from labkit.reports.other_answers import split_answer
from labkit.reports.sources import check_answered
from labkit.studies.grouping import groups_of
from labkit.studies.model import read_study
from tests.reports.small import REPLICATES, SERVERS, record_small, write_small


@pytest.fixture(scope="module")
def case(tmp_path_factory):
    folder = tmp_path_factory.mktemp("decision")
    path = write_small(folder, "max_headroom = 0.05")
    store = record_small(path, folder / "runs")
    study = read_study(str(path))
    [group] = groups_of(study)
    return case_of(study, group, store)


@pytest.fixture(scope="module")
def decision(case):
    return headroom_decision(case)


def gaps(case, policy, information):
    rows = case.records[(case.records["tasks"] == 24) & (case.records["policy"] == policy)]
    rows = rows[rows["information"] == information].sort_values("replicate")
    assert len(rows) == REPLICATES
    return rows["gap"].to_numpy()


def test_two_sentences_say_all(case, decision):
    assert len(decision.recommendation) == 2
    worst = case.verdict.worst
    first, second = decision.recommendation
    assert first.startswith("Use least-loaded: ")
    assert f"{worst['headroom']:.4f}" in first
    assert "saves" in second
    seen = gaps(case, "least-loaded", worst["information"])
    assert np.mean(seen > worst["headroom"] + 1e-12) <= 0.1  # the accepted risk
    assert np.mean(seen >= worst["headroom"] - 1e-12) > 0.1  # and no less would do


def test_the_glance_is_the_verdict(case, decision):
    found = {what: value for what, value, _ in decision.glance}
    worst = case.verdict.worst
    assert found["Rule"] == "least-loaded"
    assert found["Headroom"] == f"{worst['headroom']:.4f}"
    assert found["Accepted risk"] == "10 %"
    assert float(found["Capacity to provision"].replace(",", "")) == pytest.approx(
        30 * (0.8 + worst["headroom"]), rel=0.005
    )


def test_a_broken_limit_stands_before_anything_else(decision):
    assert decision.warning.startswith("The limit of this study does not hold: ")
    assert "0.05" in decision.warning


def test_the_pairs_are_counted_on_the_same_arrivals(case, decision):
    kind = case.verdict.worst["information"]
    lower = int((gaps(case, "least-loaded", kind) < gaps(case, "one-choice", kind)).sum())
    said = f"On the same arrivals it ended lower than one-choice in {lower} of {REPLICATES} replicates."
    assert said in decision.uncertainty
    assert any("Doubt about demands and capacities" in each for each in decision.uncertainty)


def test_the_loss_of_a_server_is_that_of_the_fleet(case, decision):
    changes = dict(decision.changes)
    assert list(changes) == [
        "Later load reports",
        "Loss of a server",
        "More work",
        "Another network",
        "More replicates",
    ]
    # 24 tasks on two servers of 10 are 1.2, whichever is lost
    assert "below a utilisation of 1.200" in changes["Loss of a server"]
    beyond = 3 if 0.8 + case.verdict.worst["headroom"] < 1.2 else 0
    assert f"{beyond or 'None'} of 3 " in changes["Loss of a server"]
    assert any(f"If {name} were lost" in changes["Loss of a server"] for name in SERVERS)
    assert "24 tasks" in changes["More work"]
    assert f"{REPLICATES} were run" in changes["More replicates"]
    needs = re.findall(r"(\d\.\d{4}) with loads reported", changes["Later load reports"])
    mine = case.table[case.table["policy"] == "least-loaded"].set_index("information")["headroom"]
    assert sorted(needs) == sorted(f"{value:.4f}" for value in mine)


def test_other_risks_are_asked_of_the_same_records(case, decision):
    by_risk = {row[0]: row for row in decision.risks}
    assert "10 %" in by_risk
    assert by_risk["10 %"][1] == f"{case.verdict.worst['headroom']:.4f}"
    needed = [float(row[1]) for row in decision.risks]
    assert needed == sorted(needed)  # a smaller risk asks for more
    assert "1 %" not in by_risk  # 60 replicates cannot tell


def test_an_answer_as_text_is_parted_into_what_it_says_and_its_remarks():
    text = "One is so.\nOther is so.\n\na  b\n1  2\n\nBands: 95 %,\nand no more.\n"
    assert split_answer(text) == (["One is so.", "Other is so."], ["Bands: 95 %, and no more."])
    assert split_answer("") == ([], [])


def test_a_study_without_an_answer_is_refused():
    with pytest.raises(InputError, match=r"study serve has no \[answer\]"):
        check_answered(read_study("serve"))
