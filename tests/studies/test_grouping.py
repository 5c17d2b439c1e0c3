"""Runs that one answer cannot mix have an answer each; what it compares stays together."""

import pytest

from labkit.studies.grouping import groups_of
from labkit.studies.model import make_study
from tests.records.tiny import PARAMETERS, write_notebook

ANSWER = 'study: str = ""\nruns: list = []\nstore: str = ""\noutput: str = ""'


@pytest.fixture
def grouped(tmp_path):
    parameters = PARAMETERS + 'report_every: int = 0\nfleet: str = ""\nwide: list = []'
    write_notebook(tmp_path / "tiny.ipynb", "x = 1", parameters=parameters)
    write_notebook(tmp_path / "answer.ipynb", "x = 1", parameters=ANSWER)
    for place in ("a/demo", "b/demo", "c/other"):
        (tmp_path / place).mkdir(parents=True)
        (tmp_path / place / "servers.csv").write_text(f"server\n{place}\n")

    def groups(grid, **answer):
        content = {"notebook": "tiny.ipynb", "replicates": 3, "entropy": 1, "grid": grid}
        content["answer"] = {"notebook": "answer.ipynb", **answer}
        study = make_study("s", content, folder=tmp_path)
        found = groups_of(study)
        points = [point.run_id for group in found for point in group.points]
        assert sorted(points) == sorted(point.run_id for point in study.points)
        return {group.folder: len(group.points) for group in found}

    return groups


def test_what_an_answer_compares_stays_together(grouped):
    assert grouped({}) == {"": 1}
    assert grouped({"tasks": [5]}) == {"": 1}
    assert grouped({"report_every": [0, 5], "policies": [["a", "b"], ["c"]]}) == {"": 4}


def test_what_it_cannot_mix_is_told_apart(grouped):
    assert grouped({"tasks": [50, 60], "report_every": [0, 5]}) == {"tasks-50": 2, "tasks-60": 2}
    assert grouped({"tasks": [50, 60], "share": [0.5, 1]}) == {
        **{"tasks-50_share-0.5": 1, "tasks-50_share-1.0": 1},
        **{"tasks-60_share-0.5": 1, "tasks-60_share-1.0": 1},
    }
    assert grouped({"policies": [["a", "b"], ["a", "c"]]}) == {"policies-a-b": 1, "policies-a-c": 1}


def test_an_answer_may_mix_more(grouped):
    assert grouped({"tasks": [50, 60], "share": [0.5, 1]}, mixes=["tasks"]) == {
        "share-0.5": 2,
        "share-1.0": 2,
    }


def test_folders_never_meet(grouped):
    folders = grouped({"fleet": ["a/demo", "b/demo", "c/other"]})
    assert len(folders) == 3
    assert "fleet-other" in folders
    assert sum(folder.startswith("fleet-demo-") for folder in folders) == 2
    folders = grouped({"wide": [["x" * 90], ["x" * 90, "y"]], "mode": ["A b", "a B"]})
    assert len({folder.lower() for folder in folders}) == 4
    assert all(len(folder) <= 80 for folder in folders)
