"""`labkit survey` and its notebook: what is printed, written, recorded, repeated and refused."""

import json
import re
import subprocess
import sys

import pandas as pd
import pytest

import labkit as lk
from labkit.analysis import survey_words
from labkit.analysis.survey_words import links_in_words
from labkit.analysis.wording import percent
from labkit.cli import main
from labkit.records.project import ROOT
from labkit.records.store import Store
from tests.journeys.ways import environment
from tests.records.tiny import snapshot

DEMO = ROOT / "experiments" / "demo"


@pytest.fixture
def barn(tmp_path):
    """A fleet folder: two busy kilns, a chain of three barns, one choice without demand."""
    folder = tmp_path / "barn"
    folder.mkdir()
    (folder / "servers.csv").write_text(
        "server,capacity\nkiln-1,10\nkiln-2,10\nbarn-1,20\nbarn-2,20\nbarn-3,20\n"
    )
    (folder / "choices.csv").write_text(
        "option_1,option_2,demand\nkiln-1,kiln-2,18\nbarn-1,barn-2,4\nbarn-2,barn-3,4\nkiln-2,barn-1,2\n"
        "kiln-1,barn-3,0\n"
    )
    return folder


def survey(*words, cwd):
    done = subprocess.run(
        [sys.executable, "-m", "labkit", "survey", *map(str, words)],
        cwd=cwd,
        env=environment(),
        capture_output=True,
        text=True,
        check=False,
    )
    return done.returncode, done.stdout, done.stderr


def test_a_folder_is_surveyed_recorded_and_repeated(barn, tmp_path, capsys):
    places = ["--store", str(tmp_path / "runs"), "--output", str(tmp_path / "out")]
    status, printed, said = survey("barn", *places, "--json", cwd=tmp_path)
    assert status == 0, said
    answer = json.loads(printed)
    facts = answer["facts"]
    assert facts["optimum"] == 0.9
    assert facts["bottleneck"] == ["kiln-1", "kiln-2"]
    assert facts["mean"] == pytest.approx(28 / 80)
    assert [row["server"] for row in answer["profile"]] == ["kiln-1", "kiln-2", "barn-1", "barn-2", "barn-3"]
    losses = {row["server"]: row for row in answer["outages"]}
    assert losses["kiln-1"]["optimum"] == pytest.approx(1.8)
    assert losses["barn-2"]["extra_headroom"] == 0
    assert answer["links"][0]["option_1"] in ("kiln-1", "kiln-2")
    assert answer["links"][0]["optimum"] < 0.9

    place = tmp_path / "out" / "barn-survey"
    tables = {f"{name}.csv" for name in ("facts", "profile", "split", "outages", "links", "rerouted")}
    drawn = {f"{name}.{kind}" for name in ("choice_graph", "fair_levels", "links") for kind in ("png", "svg")}
    own = {"barn-survey.html", "barn-survey.ipynb", "answer.txt", "survey.json", "made_from.json"}
    assert {path.name for path in place.iterdir()} == tables | drawn | own
    assert pd.read_csv(place / "profile.csv")["server"].tolist()[0] == "kiln-1"
    page = (place / "barn-survey.html").read_text(encoding="utf-8")
    assert "No rule can keep the fullest server" in page
    assert "Stopped:" not in page
    assert "The next cell is" not in page  # a page has no code

    # The same survey again is not made again; it prints the words.
    before = {path: path.stat().st_mtime_ns for path in place.iterdir()}
    assert main(["survey", str(barn), *places]) == 0
    words = capsys.readouterr().out
    assert "the servers kiln-1 and kiln-2" in words
    share = 100 * sum(row["demand"] for row in answer["links"]) / 28
    assert f"with {percent(share)} % of all demand re-routed," in " ".join(words.split())
    assert f"record: {answer['record']}" in words
    assert {path: path.stat().st_mtime_ns for path in place.iterdir()} == before

    # The record holds the same numbers and can be rerun to the bit.
    records = lk.read_study_records("barn-survey", store=tmp_path / "runs")
    value = records.set_index(["part", "subject", "measure"])["value"]
    assert value["fleet", "", "optimum"] == 0.9
    assert value["server", "barn-1", "fair_utilisation"] == answer["profile"][2]["fair_utilisation"]
    assert value["outage", "kiln-1", "optimum"] == losses["kiln-1"]["optimum"]
    assert main(["rerun", answer["run"], *places[:2]]) == 0
    assert "identical to the bit" in capsys.readouterr().out


def test_links_are_told_with_the_share_of_demand_and_what_shows_of_them():
    fleet = lk.read_fleet(DEMO)
    best, links = lk.survey(fleet), lk.advise_links(fleet, count=3)
    assert links["optimum"].round(4).tolist() == [0.8, 0.8, 0.8]
    told = links_in_words(links, best, 2)
    assert "with 1.8 % of all demand re-routed, lower the optimum from 0.8333 to 0.8000" in told
    assert told.endswith("Steps 2 and 3 have no visible effect on it.")
    alone = links_in_words(links.head(1), best, 2)
    assert alone.startswith("The link below, with 0.25 % of all demand re-routed, lowers the optimum from")
    assert "visible" not in alone
    slight = links.head(1).assign(optimum=best.optimum * (1 - 1e-7))
    assert "lowers the optimum, 0.8333, by less than the digits shown;" in links_in_words(slight, best, 2)


def test_long_names_are_cut_in_tables_for_reading_only(barn):
    long = "kiln-" + "x" * 195
    for path in barn.iterdir():
        path.write_text(path.read_text().replace("kiln-1", long))
    fleet = lk.read_fleet(barn)
    best, lost, links = lk.survey(fleet), lk.outages(fleet), lk.advise_links(fleet, count=1)
    cut = f"{long[:39]}…"
    for table in (
        survey_words.fact_rows(best), survey_words.fullest_rows(best), survey_words.outage_rows(lost),
        survey_words.link_rows(links), survey_words.rerouted_rows(fleet, links),
    ):  # fmt: skip
        shown = table.drop(columns="meaning", errors="ignore").reset_index().astype(str)
        assert shown.map(len).to_numpy().max() <= 2 * 40 + 3
        assert shown.map(lambda cell: cut in cell).to_numpy().any()
    assert long in survey_words.rerouted_table(fleet, links)["option_1"].tolist()
    assert long in survey_words.survey_record(best, lost, links)["subject"].tolist()


def test_parts_can_be_left_out(barn, tmp_path, capsys):
    places = ["--store", str(tmp_path / "runs"), "--output", str(tmp_path / "out")]
    assert main(["survey", str(barn), *places, "--links", "0", "--outages", "2", "--json"]) == 0
    answer = json.loads(capsys.readouterr().out)
    assert answer["links"] is None
    # The two with the highest fair load.
    assert [row["server"] for row in answer["outages"]] == ["kiln-1", "kiln-2"]


@pytest.mark.parametrize(
    ("words", "refusal"),
    [
        (["--links", "-1"], r"links is -1; give a whole number of at least 0"),
        (["--distance", "1"], r"distance is 1; give a whole number of at least 2"),
        (["--outages", "some"], r"--outages is 'some'; give a whole number"),
        (["--name", "a/b"], r"study is 'a/b'; a study's name"),
    ],
)
def test_wrong_values_are_refused_before_anything_is_written(barn, tmp_path, capsys, words, refusal):
    before = snapshot(tmp_path)
    places = ["--store", str(tmp_path / "runs"), "--output", str(tmp_path / "out")]
    assert main(["survey", str(barn), *places, *words]) == 2
    said = capsys.readouterr().err
    assert said.count("\n") == 1
    assert re.search(refusal, said)
    assert snapshot(tmp_path) == before


def test_a_faulty_table_is_refused_with_its_row(barn, tmp_path, capsys):
    (barn / "choices.csv").write_text("option_1,option_2\nkiln-1,kiln-9\n")
    before = snapshot(tmp_path)
    assert main(["survey", str(barn), "--store", str(tmp_path / "runs")]) == 2
    assert "kiln-9" in capsys.readouterr().err
    assert snapshot(tmp_path) == before


def test_a_study_may_survey_several_fleets(barn, tmp_path, capsys):
    study = tmp_path / "two.toml"
    study.write_text(
        'notebook = "survey"\nparameters.links = 0\nparameters.outages = 0\n'
        f'grid.fleet = ["barn", "{DEMO.as_posix()}"]\n'
    )
    places = ["--store", str(tmp_path / "runs"), "--output", str(tmp_path / "out")]
    assert main(["run", str(study), *places, "--json"]) == 0
    done = json.loads(capsys.readouterr().out)
    assert len(done["recorded"]) == 2
    assert {path.name for path in (tmp_path / "out" / "two").iterdir()} == set(done["recorded"])
    records = lk.read_study_records("two", runs=done["recorded"], store=tmp_path / "runs")
    optima = records[(records["part"] == "fleet") & (records["measure"] == "optimum")]["value"]
    assert sorted(optima.round(12)) == [round(600 / 720, 12), 0.9]
    assert len(list(Store(tmp_path / "runs").files("two"))) == 2
