"""A starter folder: written as a whole or not at all, and of one piece with the rest of labkit."""

import json
import os
import re
import shutil
import tomllib

import pytest
import yaml

import labkit as lk
from labkit.cli import main
from labkit.studies.model import read_study
from labkit.studies.starting import write_starter
from tests.records.tiny import snapshot


def test_a_starter_is_a_study_of_a_fleet_in_a_folder_of_its_name(tmp_path):
    study, *others = write_starter(tmp_path / "deep" / "lockers")
    assert study == tmp_path / "deep" / "lockers" / "lockers.toml"
    assert all(path.is_file() for path in others)
    assert set(snapshot(tmp_path)) == set(map(str, (study, *others)))
    found = read_study(study)
    assert (found.name, len(found.points)) == ("lockers", 2)
    fleet = lk.read_fleet(study.parent / "fleet")
    assert found.parameters["tasks"] == fleet.choices["demand"].sum() == 0.8 * fleet.total_capacity
    assert lk.survey(fleet).balanceable
    assert "$" not in (study.parent / "README.md").read_text()


def test_each_starter_has_random_numbers_of_its_own(tmp_path):
    entropies = {read_study(write_starter(tmp_path / name)[0]).parameters["entropy"] for name in "abcd"}
    assert len(entropies) == 4  # false alarm: 6 in 10**8


def test_the_workflow_watches_files_that_are_there_and_calls_the_recipe(tmp_path):
    study, *_ = write_starter(tmp_path / "w.x-1")
    workflow = yaml.load((study.parent / "check-headroom.yml").read_text(), yaml.BaseLoader)
    for event in ("push", "pull_request"):
        for pattern in workflow["on"][event]["paths"]:
            assert list(study.parent.glob(pattern))
    steps = workflow["jobs"]["headroom"]["steps"]
    assert "sh check-headroom.sh" in [step.get("run") for step in steps]
    assert all("uses" in step or "run" in step for step in steps)


def test_new_says_what_it_wrote_and_what_comes_next(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    assert main(["new", "lockers"]) == 0
    out = capsys.readouterr().out
    command = re.search(r"^next:    (\S+) run lockers/lockers\.toml$", out, re.MULTILINE)[1]
    assert shutil.which(command)
    assert main(["new", "others", "--json"]) == 0
    written = json.loads(capsys.readouterr().out)
    assert tomllib.loads((tmp_path / written["study"]).read_text())["notebook"] == "headroom"


@pytest.mark.parametrize("kind", ["full folder", "file", "dangling link", "name", "below a file", "no text"])
def test_what_is_there_is_left_as_it_is(tmp_path, capsys, kind):
    place = tmp_path / ("a*b" if kind == "name" else "x")
    if kind == "full folder":
        place.mkdir()
        (place / "mine").write_text("mine")
    elif kind == "file":
        place.write_text("mine")
    elif kind == "dangling link":
        place.symlink_to(tmp_path / "nowhere")
    elif kind == "below a file":
        place.write_text("mine")
        place /= "y"
    elif kind == "no text":
        place = tmp_path / "\0"
    before = sorted(os.listdir(tmp_path))
    assert main(["new", str(place)]) == 2
    assert capsys.readouterr().err.count("\n") == 1
    assert sorted(os.listdir(tmp_path)) == before


def test_a_starter_that_cannot_be_finished_leaves_nothing(tmp_path, monkeypatch):
    def full(*given):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    with pytest.raises(lk.InputError, match=r"cannot be written \(No space left on device\)"):
        write_starter(tmp_path / "x")
    assert os.listdir(tmp_path) == []
