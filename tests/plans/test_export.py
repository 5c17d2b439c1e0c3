"""Making and writing plans: what they hold, and what is refused."""

import hashlib
import json

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.engine.weights import comparison_weights
from labkit.errors import InputError
from labkit.fleet.model import ABSENT
from labkit.plans import model
from labkit.plans.export import write_plan
from labkit.plans.tables import csv_bytes, read_csv_bytes
from labkit.plans.vectors import MOST
from tests.plans.makers import RULES, odd_fleet


@pytest.mark.parametrize("rule", RULES)
def test_the_same_fleet_gives_the_same_plan(rule):
    one, other = (lk.plan(odd_fleet(), rule) for _ in range(2))
    assert one.header == other.header
    assert one.digest != lk.plan(lk.ring(8), rule).digest


def test_the_header_says_what_the_tables_are(plan, written, fleet):
    assert plan.header == json.loads((written / "plan.json").read_text(encoding="utf-8"))
    assert plan.header["fleet"]["digest"] == fleet.digest
    assert set(plan.header["files"]) == set(plan.tables)
    for name, about in plan.header["files"].items():
        assert hashlib.sha256((written / name).read_bytes()).hexdigest() == about["sha256"]
        assert len(plan.tables[name]) == about["rows"]
        repeated = {"pivot_k", "share_k", "report_k"}
        told = {
            f"{column[:-1]}{k}" for column in about["columns"] if column in repeated for k in range(1, 99)
        }
        assert set(plan.tables[name]) <= told | set(about["columns"]) - repeated


def test_the_tables_are_the_fleets_own(plan, fleet):
    servers, choices = plan.tables["servers.csv"], plan.tables["choices.csv"]
    assert servers["name"].tolist() == fleet.names.tolist()
    assert servers["kind"].tolist() == ["text"] * 5 + ["number"] + ["text"] * 2
    assert servers["weight"].tolist() == comparison_weights(fleet.capacity).tolist()
    assert choices["demand"].tolist() == fleet.demand.tolist()
    options = choices.filter(like="option_").fillna(ABSENT).to_numpy(np.int64)
    assert (options == fleet.options).all()
    assert ABSENT in options


def words_of(rule):
    return int(rule.startswith(("mixed", "tree-flow")) and "coin" not in rule)


@pytest.mark.parametrize("rule", RULES)
def test_the_vectors_meet_ties_many_options_and_extreme_coins(rule):
    plan = lk.plan(odd_fleet(), rule)
    vectors, choices = plan.tables["vectors.csv"], plan.tables["choices.csv"]
    assert len(vectors) == 320
    assert vectors["report"].notna().sum() == len(plan.tables["vectors_loads.csv"].columns) - 1 >= 8
    assert set(vectors["coin"]) >= {0, MOST}
    options = choices.filter(like="option_").notna().sum(axis=1)
    assert (options[vectors["choice"]] >= 3).sum() >= 100
    assert set(vectors["own"].str.split().str.len()) == {words_of(rule)}
    assert vectors["server"].nunique() == 8


@pytest.mark.parametrize("decisions", [1, 2, 9, 10])
def test_a_few_vectors_will_do(decisions):
    assert len(lk.plan(lk.ring(4), "least-loaded", decisions=decisions).tables["vectors.csv"]) == decisions


def test_tables_round_trip_to_the_bit(plan):
    for name, table in plan.tables.items():
        again = read_csv_bytes(name, csv_bytes(name, table))
        pd.testing.assert_frame_equal(again, table, check_exact=True)


def test_floats_round_trip_to_the_bit():
    words = np.random.default_rng(5).integers(0, 2**63, 20_000).view(np.float64)
    values = words[np.isfinite(words)]
    table = pd.DataFrame({"strength": np.concatenate([values, [0.1, -0.0, 5e-324, 1e16, 2.0**53]])})
    again = read_csv_bytes("shifts.csv", csv_bytes("shifts.csv", table))
    assert again["strength"].to_numpy().tobytes() == table["strength"].to_numpy().tobytes()


@lk.policy
def own_rule(options, loads, capacity, coin):
    return 0


@pytest.mark.parametrize(
    ("fleet", "policy", "sentence"),
    [
        ("ring", "least-loaded", "fleet is str; give a labkit Fleet"),
        (lk.complete(8), "least-loaded", "fleet is complete: its choices are not listed"),
        (lk.ring(8), "fastest", "policy is 'fastest'; allowed"),
        (lk.ring(8), own_rule, "policy own-rule is a rule of your own, which no table holds"),
        (lk.ring(8), "tree-flow(steering=drawn)", "draws sets from alias tables, .* with steering=net"),
        (lk.ring(8), "pairwise-averaging", "policy pairwise-averaging moves work already placed"),
    ],
)
def test_what_cannot_be_planned_is_refused_in_a_sentence(fleet, policy, sentence):
    with pytest.raises(InputError, match=sentence) as refusal:
        lk.plan(fleet, policy)
    assert "\n" not in str(refusal.value)
    assert str(refusal.value).endswith(".")


@pytest.mark.parametrize("decisions", [0, 1.5, "many", 10**7])
def test_decisions_are_a_whole_number(decisions):
    with pytest.raises(InputError, match="decisions is"):
        lk.plan(lk.ring(4), "least-loaded", decisions=decisions)


def test_writing_the_same_plan_again_leaves_it(plan, written):
    before = {path: path.stat().st_mtime_ns for path in written.iterdir()}
    assert plan.write(written) == written
    assert {path: path.stat().st_mtime_ns for path in written.iterdir()} == before
    assert [path.name for path in written.parent.iterdir()] == [written.name]


def test_an_empty_folder_and_missing_parents_will_do(plan, tmp_path):
    (tmp_path / "empty").mkdir()
    assert lk.read_plan(plan.write(tmp_path / "empty")).header == plan.header
    assert lk.read_plan(plan.write(str(tmp_path / "a" / "b"))).header == plan.header


def tree(folder):
    return {path: path.read_bytes() if path.is_file() else None for path in folder.rglob("*")}


@pytest.mark.parametrize(
    ("name", "content", "sentence"),
    [
        ("plan/other.txt", "mine", "is not empty; name a new folder"),
        ("plan/plan.json", "{}", "holds another plan, or more than a plan"),
        ("plan", "mine", "is a file; name a new folder"),
    ],
)
def test_what_is_there_is_not_overwritten(plan, tmp_path, name, content, sentence):
    path = tmp_path / name
    path.parent.mkdir(exist_ok=True)
    path.write_text(content)
    before = tree(tmp_path)
    with pytest.raises(InputError, match=sentence):
        plan.write(tmp_path / "plan")
    assert tree(tmp_path) == before


def test_another_plan_is_not_overwritten(tmp_path):
    folder = lk.plan(lk.ring(8), "least-loaded").write(tmp_path / "plan")
    before = tree(tmp_path)
    with pytest.raises(InputError, match="holds another plan"):
        lk.plan(lk.ring(8), "one-choice").write(folder)
    assert tree(tmp_path) == before


def test_a_failure_leaves_nothing(plan, tmp_path, monkeypatch):
    def full(*arguments):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(model.os, "rename", full)
    with pytest.raises(InputError, match=r"cannot be written \(No space left on device\); name a folder"):
        plan.write(tmp_path / "a" / "b" / "plan")
    assert list(tmp_path.iterdir()) == []


def test_a_parent_that_is_a_file_is_refused(plan, tmp_path):
    (tmp_path / "a").write_text("")
    with pytest.raises(InputError, match="cannot be written"):
        plan.write(tmp_path / "a" / "plan")


def test_the_command_says_what_it_wrote(tmp_path):
    fleet = lk.ring(16)
    (tmp_path / "fleet").mkdir()
    fleet.servers.to_csv(tmp_path / "fleet" / "servers.csv", index=False)
    fleet.choices.to_csv(tmp_path / "fleet" / "choices.csv", index=False)
    said = []
    folder = write_plan(tmp_path / "fleet", "smooth-feedback", tmp_path / "plan", say=said.append)
    assert folder == tmp_path / "plan"
    assert said[0].startswith("plan of smooth-feedback: 16 servers, 16 choices, 320 test decisions, ")
    assert "every 160 tasks" in said[1]
    assert said[2].endswith(f"python {folder / 'dispatcher.py'} {folder}")
    with pytest.raises(InputError, match="nowhere"):
        write_plan(tmp_path / "nowhere", "smooth-feedback", tmp_path / "other", say=said.append)
    assert not (tmp_path / "other").exists()
