"""What an answer is about: shared facts of its runs, and a placement repeated from its record."""

import json

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.errors import InputError
from labkit.records.project import ANSWERS
from labkit.studies.subject import begin_answer, drawable, final_utilisation, subject_of

SEED = np.random.SeedSequence(7, spawn_key=(11,))


@pytest.fixture
def folder(tmp_path):
    fleet = lk.ring_with_chords(12, 3, rng=1)
    servers = fleet.servers.assign(capacity=np.arange(1, 13) * 2.0)
    servers.to_csv(tmp_path / "servers.csv", index=False)
    fleet.choices.to_csv(tmp_path / "choices.csv", index=False)
    return tmp_path


@pytest.fixture
def records(folder):
    fleet = lk.read_fleet(folder)
    tables = []
    for every in (0, 9):
        for policy in ("one-choice", "least-loaded"):
            information = lk.Snapshot(every=every) if every else lk.Fresh()
            outcome = lk.place(
                fleet, policy, tasks=60, replicates=3, rng=SEED, information=information, checkpoints=[30, 60]
            )
            asked = {"fleet": str(folder), "tasks": 60, "replicates": 3, "report_every": every}
            tables.append(
                outcome.measures.assign(
                    information=outcome.information,
                    run_id=f"run {every}",
                    parameters=json.dumps(asked),
                    inputs=json.dumps({"fleet": "digest"}),
                    entropy="7",
                    spawn_key="[11]",
                    git_hash="a" * 40,
                    dirty=False,
                    diff_digest="",
                    started="2030-01-01T00:00:00",
                    elapsed=1.0,
                )
            )
    return pd.concat(tables, ignore_index=True)


def test_the_subject_is_what_the_runs_share(records, folder):
    subject = subject_of(records)
    assert (subject.tasks, subject.replicates, subject.place) == (60, 3, str(folder))
    assert len(subject.fleet) == 12
    assert subject.runs["run_id"].tolist() == ["run 0", "run 9"]
    assert subject.runs["information"].tolist() == ["fresh", "snapshot(every=9)"]


@pytest.mark.parametrize("information", ["fresh", "snapshot(every=9)"])
@pytest.mark.parametrize("policy", ["one-choice", "least-loaded"])
def test_one_replicate_is_repeated_to_the_bit(records, policy, information):
    full = final_utilisation(subject_of(records), records, policy, information)
    mine = records[(records["policy"] == policy) & (records["information"] == information)]
    row = mine[(mine["replicate"] == 0) & (mine["tasks"] == 60)]
    assert full.max() == row["max_utilisation"].item()


def test_a_fleet_changed_since_is_noticed(records, folder):
    servers = pd.read_csv(folder / "servers.csv")
    servers.assign(capacity=servers["capacity"] + 1).to_csv(folder / "servers.csv", index=False)
    with pytest.raises(
        InputError, match=r"run 0 cannot be repeated from .* changed since; run the study again"
    ):
        final_utilisation(subject_of(records), records, "least-loaded", "fresh")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"tasks": 70}, r"the runs have tasks 60 and 70; one answer needs one tasks"),
        ({"fleet": "elsewhere"}, r"the runs have fleet .* and elsewhere"),
        ({"replicates": 4}, r"the runs have replicates 3 and 4"),
    ],
)
def test_runs_on_different_subjects_are_refused(records, change, message):
    later = records["run_id"] == "run 9"
    records.loc[later, "parameters"] = json.dumps(json.loads(records["parameters"].iloc[-1]) | change)
    with pytest.raises(InputError, match=message):
        subject_of(records)


def test_runs_without_a_fleet_are_refused(records):
    with pytest.raises(InputError, match="the runs have fleet None"):
        subject_of(records.assign(parameters="{}"))


def test_runs_of_other_tables_are_refused(records):
    later = records["run_id"] == "run 9"
    records.loc[later, "inputs"] = json.dumps({"fleet": "other"})
    with pytest.raises(InputError, match="read different tables"):
        subject_of(records)


def test_only_rules_with_a_name_of_their_own_are_drawn():
    assert drawable(["my rule", "mixed(beta=0.5)", "one-choice"]) == "mixed(beta=0.5)"
    assert drawable(["my rule"]) is None


def test_the_answer_goes_where_it_is_told(tmp_path):
    names = {"study": "demo", "risk": 1, "output": str(tmp_path)}
    names = {"runs": "a1,b2"} | names
    assert begin_answer("headroom_answer", names) == tmp_path
    assert names["runs"] == ["a1", "b2"]
    assert isinstance(names["risk"], float)
    assert begin_answer("headroom_answer", {"study": "demo"}) == ANSWERS / "demo"


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"risk": "much"}, "^risk is 'much'; give a number"),
        ({"max_headroom": "0.1"}, "^max_headroom is '0.1'"),
        ({"study": "../demo"}, "^study is '../demo'"),
        ({"baseline": None}, "^baseline is None"),
    ],
)
def test_wrong_values_are_refused_in_one_sentence(values, message):
    with pytest.raises(InputError, match=message):
        begin_answer("headroom_answer", {"study": "demo", **values})
