"""What an answer is about: shared facts of its runs, and a placement repeated from its record."""

import json

import nbformat
import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.analysis.answer import answer_table
from labkit.errors import InputError
from labkit.records.project import ANSWERS
from labkit.studies.page import write_page
from labkit.studies.subject import (
    begin_answer,
    drawable,
    facts,
    final_utilisation,
    sources,
    subject_of,
    versions,
)

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
                    versions=json.dumps(
                        {"labkit": "0.1.0+ab", "python": "3.11.7", "numpy": "2.4", "machine": "x"}
                    ),
                    started="2030-01-01T01:02:03.456+00:00",
                    elapsed=1.23,
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
        ({"tasks": 70}, r"the runs have tasks 60 and 70; all runs of one answer need the same tasks"),
        ({"fleet": "elsewhere"}, r"the runs have fleet .* and elsewhere"),
        ({"replicates": 4}, r"the runs have replicates 3 and 4"),
    ],
)
def test_runs_on_different_subjects_are_refused(records, change, message):
    later = records["run_id"] == "run 9"
    records.loc[later, "parameters"] = json.dumps(json.loads(records["parameters"].iloc[-1]) | change)
    with pytest.raises(InputError, match=message):
        subject_of(records)


def test_rules_spread_over_runs_are_repeated_from_their_own_run(records):
    other = records["policy"] == "least-loaded"
    records.loc[other, "run_id"] = records.loc[other, "run_id"] + " again"
    full = final_utilisation(subject_of(records), records, "least-loaded", "fresh")
    assert full.max() > 0


def test_the_facts_name_fleet_work_rules_and_reports(records, folder):
    subject = subject_of(records)
    table = answer_table(
        records, risk=0.5, confidence=0.5, baseline="one-choice", total_capacity=subject.fleet.total_capacity
    )
    text = facts(subject, table, study="mine", baseline="one-choice")
    for words in (
        "`mine`",
        f"`{folder.name}`: 12 servers of 156 work units in total, 15 choices",
        "60 tasks placed on the empty fleet, 3 replicates",
        "`least-loaded`, `one-choice`; savings are counted from `one-choice`",
        "always fresh, every 9 tasks",
        "50 %, limits at 50 % confidence",
    ):
        assert words in text
    assert str(folder.parent) not in text


def test_sources_are_rows_for_reading(records):
    later = records["run_id"] == "run 9"
    records["dirty"] = later
    records.loc[later, "diff_digest"] = "b" * 64
    table = sources(subject_of(records))
    assert table.index.tolist() == ["run 0", "run 9"]
    assert table["commit"].tolist() == ["a" * 12, f"{'a' * 12} + changes {'b' * 12}"]
    assert table.loc["run 9", "load reports"] == "every 9 tasks"
    assert table.loc["run 0", ["started (UTC)", "seconds"]].tolist() == ["2030-01-01 01:02:03", "1.2"]
    assert table.loc["run 0", ["entropy", "spawn key"]].tolist() == ["7", "[11]"]


def test_versions_are_told_once_or_run_by_run(records):
    once = "labkit 0.1.0+ab, python 3.11.7, numpy 2.4; on x."
    assert versions(subject_of(records)) == f"Versions: {once}"
    later = records["run_id"] == "run 9"
    records.loc[later, "versions"] = json.dumps({"labkit": "0.2.0"})
    assert versions(subject_of(records)) == f"Versions of run 0: {once} Versions of run 9: labkit 0.2.0."


def test_a_page_is_headed_by_its_study_and_a_failed_cell_is_a_sentence(tmp_path):
    failed = nbformat.v4.new_output(
        "error", ename="HeadroomExceeded", evalue="needs <more>", traceback=["secret code"]
    )
    note = nbformat.v4.new_markdown_cell("An Exception", metadata={"tags": ["papermill-error-cell-tag"]})
    cells = [
        note,
        nbformat.v4.new_markdown_cell("# Its own heading"),
        nbformat.v4.new_code_cell("1", outputs=[failed]),
    ]
    nbformat.write(nbformat.v4.new_notebook(cells=cells), tmp_path / "n.ipynb")
    write_page(
        tmp_path / "n.ipynb", tmp_path / "n.html", "Where *vaults* <go>", "One\nquestion?\n\nTwo & more"
    )
    page = (tmp_path / "n.html").read_text()
    assert "<title>Where *vaults* &lt;go&gt;</title>" in page
    assert "<h1>Where *vaults* &lt;go&gt;</h1>" in page
    assert "<p>One question?</p>" in page
    assert "<p>Two &amp; more</p>" in page
    assert page.count("<h1") == 1
    assert page.count("HeadroomExceeded: needs &lt;more&gt;") == 2
    assert "An Exception" not in page
    assert "secret code" not in page


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
