"""The rules notebook: recorded like any run, repeatable, and refusing what cannot be meant."""

import re

import pytest

import labkit as lk
from labkit.cli import main
from labkit.records.project import NOTEBOOKS, ROOT
from labkit.studies.execution import execute

VALUES = {
    "policies": ["static-split", "least-loaded"],
    "tasks": 400,
    "report_ages": [20],
    "dispatchers": 2,
    "risk": 0.1,
    "replicates": 40,
    "forecast_rounds": 300,
    "study": "rules-journey",
}


def test_rules_are_recorded_with_every_kind_of_report(tmp_path, capsys):
    store = tmp_path / "runs"
    done = execute(NOTEBOOKS / "rules.ipynb", {**VALUES, "store": str(store)}, tmp_path / "out.ipynb")
    assert done.error == ""
    records = lk.read_study_records("rules-journey", store=store)
    kinds = records.groupby("policy")["information"].unique().map(set).to_dict()
    all_kinds = {"fresh", "snapshot(every=20)", "dispatchers(count=2, every=20)"}
    assert kinds == {
        "static-split": all_kinds,
        "least-loaded": all_kinds,
        "pairwise-averaging": {"fresh"},
    }
    assert (records.groupby(["policy", "information"]).size() == 40).all()
    text = (tmp_path / "out.ipynb").read_text(encoding="utf-8")
    assert "moves placed work" in text
    assert "is not balanceable" in text
    assert text.count('"image/png": "') == 2
    [run] = set(records["run_id"])
    assert main(["rerun", run, "--store", str(store)]) == 0
    assert "identical to the bit" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("values", "refusal"),
    [
        ({"report_ages": [0]}, "report_ages is 0; give a whole number of at least 1"),
        ({"dispatchers": 5000}, "count is 5000; give at most 4,096 dispatchers"),
        ({"policies": ["fastest"]}, "policy is 'fastest'"),
    ],
)
def test_what_cannot_be_meant_is_refused(tmp_path, values, refusal):
    given = {**VALUES, **values, "store": str(tmp_path / "runs")}
    done = execute(NOTEBOOKS / "rules.ipynb", given, tmp_path / "out.ipynb")
    assert done.refused
    assert re.search(refusal, done.error)
    assert not list((tmp_path / "runs").rglob("*.parquet"))


def test_the_answer_notebook_is_not_for_its_runs(tmp_path, capsys):
    study = tmp_path / "mixed-up.toml"
    study.write_text(
        'notebook = "rules"\nreplicates = 40\nentropy = 1\n[parameters]\n'
        f'fleet = "{(ROOT / "experiments" / "demo").as_posix()}"\n[answer]\nnotebook = "headroom_answer"\n'
    )
    assert main(["run", str(study), "--store", str(tmp_path / "runs")]) == 2
    assert "reads runs of the notebook headroom, not of rules" in capsys.readouterr().err
