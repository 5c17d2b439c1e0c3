"""What freezing takes from a study, what it refuses, and that verifying finds what was changed since."""

import csv

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.records.frozen import MANIFEST, RUNS, TABLE
from labkit.records.frozen_index import index_of
from labkit.records.store import Store
from labkit.studies import freezing
from labkit.studies.citing import citation, statement
from labkit.studies.verifying import verify
from tests.records.tiny import snapshot, write_notebook

ANSWER = """
study: str = ""
runs: list = []
risk: float = 0.25
confidence: float = 0.5
mode: str = "good"
store: str = ""
output: str = ""
"""
ANSWERING = """
import pathlib
import labkit as lk
folder = pathlib.Path(output)
records = lk.read_study_records(study, runs=runs, store=store)
records.groupby("policy")["gap"].max().to_csv(folder / "answer.csv")
for name in ("answer.txt", "load.png", "load.svg", "laws.json"):
    (folder / name).write_text(f"{name} of {len(runs)}")
if mode == "broken":
    raise lk.HeadroomExceeded("policy 'a' needs more.")
"""


class TestFreeze:
    """All that is needed to cite, check and repeat the table is in its folder."""

    def test_the_files(self, frozen, folder, project):
        made = frozen()
        table = ["table.csv", "table.md", TABLE, "table.tex"]
        files = sorted(["CITATION.bib", RUNS, "statement.txt", *table])
        assert sorted(made.manifest["files"]) == files
        assert sorted(path.name for path in made.place.iterdir()) == sorted([*files, MANIFEST])
        assert made.place == folder / "first"
        assert verify("first", folder=folder).findings == []
        assert "| [first](frozen/first/table.md) | s | 8 | 4 |" in index_of(folder).read_text()

    def test_the_table_is_that_of_the_records(self, frozen, project):
        made = frozen()
        run_ids = [run["run_id"] for run in made.manifest["runs"]]
        records = lk.read_study_records("s", runs=run_ids, store=project.store)
        pd.testing.assert_frame_equal(made.runs, records, check_exact=True)
        means = records.groupby(["policy", "share", "tasks"])["gap"].agg(["mean", "sem", "size"])
        table = made.table.set_index(["policy", "share", "tasks"])
        assert list(table.columns) == ["replicates", "gap", "gap_error"]
        means = means.loc[table.index]
        np.testing.assert_allclose(table["gap"], means["mean"], rtol=1e-14)
        np.testing.assert_allclose(table["gap_error"], means["sem"], rtol=1e-12)
        assert table["replicates"].tolist() == means["size"].tolist()
        with (made.place / "table.csv").open() as stream:
            shown = list(csv.DictReader(stream))
        for row, text in zip(made.table.to_dict("records"), shown, strict=True):
            assert (text["policy"], int(text["tasks"])) == (row["policy"], row["tasks"])
            assert abs(float(text["gap"]) - row["gap"]) <= row["gap_error"] / 15

    def test_the_manifest_can_execute_each_run_again(self, frozen, project):
        from labkit.records.schema import row_of_origin

        made = frozen()
        store = Store(project.store)
        for run in made.manifest["runs"]:
            record = store.read(store.find("s", run["run_id"]))
            assert run == {**row_of_origin(record), "rows": record.num_rows}
        assert made.manifest["query"]["labels"] == ["policy", "share"]
        assert made.manifest["versions"]["numpy"] == np.__version__

    def test_headroom_figures_and_answer_come_from_the_answer(self, frozen, project):
        write_notebook(project.folder / "answer.ipynb", ANSWERING, parameters=ANSWER)
        answer = '[answer]\nnotebook = "answer.ipynb"\nrisk = 0.125'
        study = project.study(answer=answer, replicates=20)
        made = frozen(study=study)
        assert {"answer.csv", "answer.txt", "load.png", "load.svg"} < made.manifest["files"].keys()
        assert "laws.json" not in made.manifest["files"]
        assert (made.manifest["query"]["risk"], made.manifest["query"]["confidence"]) == (0.125, 0.5)
        assert list(made.table.columns)[-3:] == ["headroom", "headroom_lower", "headroom_upper"]
        expected = lk.headroom(made.runs, risk=0.125, confidence=0.5).set_index("policy")
        assert made.table["headroom"].tolist() == expected.loc[made.table["policy"], "headroom"].tolist()
        assert (
            "headroom: the gap that is exceeded with a probability of at most 12.5 %, with 50 % limits"
            in (made.place / "table.md").read_text().replace("\\", "")
        )

    def test_each_group_has_its_answer(self, frozen, project):
        write_notebook(project.folder / "answer.ipynb", ANSWERING, parameters=ANSWER)
        study = project.study(
            answer='[answer]\nnotebook = "answer.ipynb"', grid="tasks = [1, 2]", replicates=20
        )
        made = frozen(study=study)
        for tasks in (1, 2):
            assert (made.place / f"tasks-{tasks}-load.svg").read_text() == "load.svg of 1"
            assert (made.place / f"tasks-{tasks}-answer.csv").is_file()

    def test_an_answer_that_fails_is_refused(self, frozen, folder, project):
        write_notebook(project.folder / "answer.ipynb", ANSWERING, parameters=ANSWER)
        study = project.study(answer='[answer]\nnotebook = "answer.ipynb"\nmode = "broken"', replicates=20)
        with pytest.raises(lk.InputError, match=r"the answer of study s fails: .*needs more"):
            frozen(study=study)
        assert not folder.exists()

    def test_other_measures(self, frozen, folder):
        with pytest.raises(lk.InputError, match="measures names 'gp'; did you mean 'gap'"):
            frozen(measures=["gp"])
        assert not folder.exists()

    def test_runs_that_are_not_recorded_are_counted(self, frozen, folder, project):
        project.record(project.study(grid="tasks = [1]"))
        path = project.study(grid="tasks = [1, 2, 3]")
        with pytest.raises(lk.InputError) as refusal:
            frozen(study=path)
        assert "study s: 2 of 3 runs are not recorded in " in str(refusal.value)
        assert str(refusal.value).endswith(f"; run labkit run {path}.")
        assert not folder.exists()

    def test_a_damaged_record_is_refused(self, frozen, folder, project):
        project.record(project.study(grid=project.GRID, replicates=5))
        record = next(Store(project.store).files("s"))
        record.write_bytes(record.read_bytes()[:-1])
        with pytest.raises(lk.StoreError, match="torn or altered"):
            frozen()
        assert not folder.exists()

    def test_one_replicate_is_refused(self, frozen, folder, project):
        with pytest.raises(lk.InputError, match="a standard error needs at least 2"):
            frozen(study=project.study(replicates=1))
        assert not folder.exists()

    def test_a_frozen_table_is_never_overwritten(self, frozen, folder):
        frozen()
        before = snapshot(folder)
        with pytest.raises(lk.InputError, match="never overwritten"):
            frozen("First")
        assert snapshot(folder) == before

    def test_nothing_is_left_when_writing_fails(self, frozen, folder, monkeypatch):
        monkeypatch.setattr(freezing, "_texts", lambda *words: {"a/b": b""})
        with pytest.raises(lk.StoreError, match="cannot be written"):
            frozen()
        assert list(folder.iterdir()) == []


class TestChanges:
    """What no commit holds is refused, or told in the table's own note."""

    def test_all_of_it_is_said(self, frozen, folder, project):
        path = project.study(grid=project.GRID, replicates=5)
        with pytest.raises(lk.InputError) as refusal:
            frozen(allow_changes=False)
        said = str(refusal.value)
        assert said.startswith("table first cannot be frozen: ")
        assert f"the study {path} is not committed; the notebook {project.notebook} is not committed" in said
        assert "or give --allow-changes" in said
        assert not folder.exists()
        made = frozen()
        note = made.manifest["note"]
        assert made.manifest["dirty"] is True
        assert f"the study {path} is not committed" in note
        for name in ("statement.txt", "table.md", "table.tex", "CITATION.bib"):
            text = " ".join((made.place / name).read_text().replace("\\", "").split())
            assert note in text, name
        assert note in made._repr_html_()

    @pytest.mark.parametrize(
        ("change", "words"),
        [
            ({"dirty": True}, "1 of 1 runs were recorded with changes, the first being r"),
            ({"git_hash": "", "dirty": True}, "1 of 1 runs were recorded at no commit, the first being r"),
            (
                {"git_hash": "b" * 40},
                "commit bbbbbbbbbb, at which runs were recorded, is not in this repository",
            ),
        ],
    )
    def test_records_of_no_known_commit(self, project, change, words):
        from labkit.records.project import ROOT
        from labkit.records.provenance import source_state
        from labkit.studies.model import read_study

        path = project.study()
        state = {**source_state(ROOT), "dirty": False}
        origin = {"run_id": "r", "git_hash": state["git_hash"], "dirty": False, "inputs": {}}
        found = freezing._changes(ROOT / "README.md", read_study(path), [origin], state, ROOT)
        assert found == [f"the notebook {project.notebook} is not committed"]
        found = freezing._changes(ROOT / "README.md", read_study(path), [{**origin, **change}], state, ROOT)
        assert found[1:] == [words]

    def test_what_runs_read_must_be_committed_too(self, project, tmp_path):
        from labkit.records.project import ROOT
        from labkit.records.provenance import source_state
        from labkit.studies.model import read_study

        state = {**source_state(ROOT), "dirty": False}
        origin = {"run_id": "r", "git_hash": state["git_hash"], "dirty": False}
        own = tmp_path / "own fleet"
        own.mkdir()
        (own / "servers.csv").write_text("server")
        found = [
            freezing._changes(
                ROOT / "README.md",
                read_study(project.study()),
                [{**origin, "inputs": {"fleet": "0"}, "parameters": {"fleet": fleet}}],
                state,
                ROOT,
            )[1:]
            for fleet in ("experiments/demo", own.as_posix())
        ]
        assert found == [[], [f"fleet {own.as_posix()} is not committed"]]


FACTS = {
    "name": "t",
    "title": "50 % of_it",
    "study": "s",
    "rows": 8,
    "frozen": "2026-12-01T00:00:00+00:00",
    "note": "",
    "runs": [{"git_hash": "a" * 40, "rows": 1000}, {"git_hash": "b" * 40, "rows": 500}],
}


class TestCiting:
    """A reference that BibTeX reads, and one line about the data."""

    def test_people_and_groups(self, tmp_path):
        (tmp_path / "CITATION.cff").write_text(
            'title: "A {title}: 50 %"\nauthors:\n'
            "  - family-names: Bold_e\n    given-names: Ann\n  - name: Us all\n"
        )
        text = citation(FACTS, b"", tmp_path)
        assert text.startswith("@misc{labkit-t,\n  author = {Bold\\_e, Ann and {Us all}},\n")
        assert "  title = {{A \\textbraceleft{}title\\textbraceright{}: 50 \\%}},\n  year = {2026},\n" in text
        assert "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855" in text

    @pytest.mark.parametrize("content", [None, "title: x\n", "authors: []\ntitle: x\n", "[", "- a\n"])
    def test_a_file_without_them_is_refused(self, tmp_path, content):
        if content is not None:
            (tmp_path / "CITATION.cff").write_text(content)
        with pytest.raises(lk.InputError, match=r"CITATION\.cff cannot be read as a citation"):
            citation(FACTS, b"", tmp_path)

    def test_the_statement_is_one_line(self):
        text = statement({**FACTS, "title": "Two\nlines"})
        assert text.count("\n") == 1
        assert "8 rows, computed from 1,500 measured rows of 2 runs of the study s" in text
        assert f"at commit {'a' * 40} and commit {'b' * 40}; labkit verify t --rerun 3" in text
