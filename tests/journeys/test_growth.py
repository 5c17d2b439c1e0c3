"""From a study over networks and sizes to laws of growth, by the command line and from a frozen table."""

import csv
import json

import pytest

from labkit.cli import main
from labkit.records.project import NOTEBOOKS
from labkit.studies.execution import execute

STUDY = """
title = "Small growth"
notebook = "long_run"
replicates = 80
entropy = 5

[parameters]
policies = ["one-choice", "least-loaded"]
reference = ""
horizon = 40

[grid]
family = {families}
servers = {sizes}

[answer]
notebook = "growth"
mixes = ["family", "servers"]
"""


@pytest.fixture(scope="module")
def done(tmp_path_factory):
    """Run a small growth study once; return its folder, status and what it said."""
    folder = tmp_path_factory.mktemp("growth")
    (folder / "small.toml").write_text(STUDY.format(families='["ring", "complete"]', sizes="[9, 16, 36]"))
    status = run(folder, "small")
    return folder, status


def run(folder, name, *more):
    places = ["--store", str(folder / "runs"), "--output", str(folder / "answers")]
    return main(["run", str(folder / f"{name}.toml"), *places, *more])


def test_the_study_ends_with_laws_of_growth(done):
    folder, status = done
    assert status == 0
    answers = folder / "answers" / "small"
    text = (answers / "answer.txt").read_text()
    assert "On a ring of 144 servers only least-loaded was measured: the fullest server would be at " in text
    assert "one-choice, after 40 tasks a server" in text
    with (answers / "answer.csv").open() as stream:
        rows = list(csv.DictReader(stream))
    assert [(row["family"], row["policy"]) for row in rows] == [
        (family, policy) for family in ("ring", "complete") for policy in ("one-choice", "least-loaded")
    ]
    for row in rows:
        assert (row["sizes"], row["largest"], row["ahead"]) == ("3", "36", "144")
        assert float(row["lower"]) < float(row["estimate"]) < float(row["upper"])
    page = (answers / "small.html").read_text()
    assert "6 of 6 means are shown stationary" in page
    assert {path.name for path in answers.iterdir()} >= {"growth.png", "growth.svg", "small.ipynb"}


def of_one_network(sizes, replicates):
    """Return a study of one-choice on rings."""
    text = STUDY.format(families='["ring"]', sizes=sizes).replace('["family", "servers"]', '["servers"]')
    text = text.replace('["one-choice", "least-loaded"]', '["one-choice"]')
    return text.replace("replicates = 80", f"replicates = {replicates}")


def test_a_study_with_a_single_network_is_enough(done, capsys):
    folder, _ = done
    (folder / "one.toml").write_text(of_one_network("[9, 12, 15]", 20))
    assert run(folder, "one", "--json") == 0
    said = json.loads(capsys.readouterr().out)
    assert said["answer"]["error"] == ""
    assert "On a ring of 60" in (folder / "answers" / "one" / "answer.txt").read_text()


def test_more_precision_means_more_replicates_and_says_so(done, capsys):
    folder, _ = done
    text = STUDY.format(families='["complete"]', sizes="[9]").split("[answer]")[0]
    text = text.replace("replicates = 80", "replicates = 80\nprecision = 0.05\nmost_replicates = 4000")
    (folder / "precise.toml").write_text(text)
    assert run(folder, "precise", "--json") == 0
    (run_id,) = json.loads(capsys.readouterr().out)["recorded"]
    assert main(["show", run_id, "--json", "--store", str(folder / "runs")]) == 0
    shown = json.loads(capsys.readouterr().out)
    assert (shown["parameters"]["precision"], shown["parameters"]["most_replicates"]) == (0.05, 4000)
    assert 80 < len(shown["measures"]) / 2 < 4000
    for row in shown["measures"]:
        assert row["stopping"].startswith("mean excess within 5 % at 95 %: reached with ")


@pytest.mark.parametrize(
    ("values", "sentence"),
    [
        ({"study": "no-such-study"}, "holds no record of it"),
        ({"measure": "gapp"}, "gap"),
        ({"ahead": -4.0}, "ahead is -4.0"),
    ],
)
def test_the_growth_page_refuses_in_one_sentence(tmp_path, values, sentence):
    result = execute(
        NOTEBOOKS / "growth.ipynb", values | {"output": str(tmp_path / "out")}, tmp_path / "growth.ipynb"
    )
    assert result.refused
    assert sentence in result.error
    assert not (tmp_path / "out").exists()
