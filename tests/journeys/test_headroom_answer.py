"""The answer notebook by plain papermill and by labkit: what it writes, what it refuses, and its guard."""

import re

import papermill
import pytest

import labkit as lk
from labkit.records.project import NOTEBOOKS
from labkit.studies.execution import execute

STUDY = {"study": "answer-journey", "tasks": 960, "replicates": 80, "checkpoints": 4}
ANSWER = NOTEBOOKS / "headroom_answer.ipynb"


@pytest.fixture(scope="module")
def store(tmp_path_factory):
    folder = tmp_path_factory.mktemp("records")
    done = execute(NOTEBOOKS / "headroom.ipynb", {**STUDY, "store": str(folder)}, folder / "run.ipynb")
    assert done.error == ""
    return folder


def asked(store, output, **values):
    return {"study": STUDY["study"], "store": str(store), "output": str(output), "risk": 0.05, **values}


def test_a_broken_guard_fails_after_the_same_answer_is_written(store, tmp_path, monkeypatch, caplog):
    monkeypatch.chdir(tmp_path)
    parameters = asked(store, tmp_path / "kept", max_headroom=5.0)
    with caplog.at_level("WARNING", logger="papermill"):
        papermill.execute_notebook(ANSWER, tmp_path / "kept.ipynb", parameters=parameters, progress_bar=False)
    assert [line for line in caplog.messages if "parameter" in line or "parse" in line] == []
    done = execute(ANSWER, asked(store, tmp_path / "broken", max_headroom=0.001), tmp_path / "broken.ipynb")
    assert not done.refused
    assert re.search(r"policy 'least-loaded' .* above max_headroom 0.001", done.error)

    folders = (tmp_path / name for name in ("kept", "broken"))
    kept, broken = ({path.name: path.read_bytes() for path in folder.iterdir()} for folder in folders)
    assert kept == broken
    figures = {f"{name}.{kind}" for name in ("headroom", "load", "choice_graph") for kind in ("png", "svg")}
    assert set(kept) == {"answer.csv", "answer.txt"} | figures
    text = kept["answer.txt"].decode()
    assert text.startswith("Use least-loaded: it needs a headroom of ")
    [run] = set(lk.read_study_records(STUDY["study"], store=store)["run_id"])
    assert f"runs: {run}" in text


def test_what_is_refused_writes_nothing(store, tmp_path):
    done = execute(ANSWER, asked(store, tmp_path / "out", riskk=0.01), tmp_path / "refused.ipynb")
    assert done.refused
    assert re.search("riskk is no parameter .*did you mean 'risk'", done.error)
    assert not (tmp_path / "out").exists()
