"""Each point of a study is executed once, whatever the order, the number of kernels or the fate of others."""

import json
import os
import subprocess
import sys

import pytest

import labkit as lk
from labkit.records.project import ROOT
from labkit.records.schema import first_difference, measured_part
from labkit.records.store import Store
from labkit.studies import kernels, places, running
from labkit.studies.model import read_study
from tests.records.tiny import MEASURE, snapshot, write_notebook, write_tiny


@pytest.fixture(autouse=True)
def nothing_is_left():
    """No kernel and no socket folder outlives a command."""
    yield
    assert not kernels._alive


def measured(project, store=None):
    place = Store(store or project.store)
    return {path.name[:16]: measured_part(place.read(path)) for path in place.files("s")}


def test_order_and_number_of_kernels_change_no_bit(project):
    path = project.study(grid="tasks = [1, 2]\nshare = [0.25]")
    status, out, _ = project("run", path, "--jobs", "1", "--json")
    assert status == 0
    report = json.loads(out)
    assert (len(report["recorded"]), report["skipped"], report["failed"]) == (2, [], [])
    path = project.study(grid="share = [0.25]\ntasks = [2, 1]")
    assert project("run", path, "--jobs", "2", store=project.folder / "others")[0] == 0
    one, other = measured(project), measured(project, project.folder / "others")
    assert one.keys() == other.keys()
    assert [first_difference(one[run], other[run]) for run in one] == ["", ""]
    assert not one[report["recorded"][0]].equals(one[report["recorded"][1]])


def test_a_study_picks_up_where_it_stopped(project):
    first = project.record(project.study(grid="tasks = [1]"))
    before = snapshot(project.store)
    status, out, err = project("run", project.study(grid="tasks = [2, 1]"), "--json")
    report = json.loads(out)
    assert (status, report["skipped"]) == (0, first)
    assert len(report["recorded"]) == 1
    assert "s: 2 of 2 in " in err
    after = snapshot(project.store)
    assert before.items() < after.items()
    status, out, _ = project("run", project.study(grid="tasks = [2, 1]"))
    assert status == 0
    assert "0 recorded now, 2 before" in out
    assert snapshot(project.store) == after


def test_failures_keep_their_evidence_and_the_others_go_on(project):
    modes = ["good", "broken", "exit", "killed", "silent", "refused"]
    path = project.study(grid=f"mode = {json.dumps(modes)}")
    status, out, err = project("run", path, "--jobs", "2", "--json")
    assert status == 1, err
    report = json.loads(out)
    assert len(report["recorded"]) == 1
    said = dict(zip(modes[1:], report["failed"], strict=True))
    assert said["broken"]["error"] == "RuntimeError: the well is dry"
    assert "cell 3 ended the notebook with SystemExit" in said["exit"]["error"]
    assert said["killed"]["error"].startswith("DeadKernelError")
    assert "ended without a record" in said["silent"]["error"]
    assert said["refused"]["error"] == "mode is 'refused'; give another."
    for mode, trouble in said.items():
        assert trouble["values"] == {"mode": mode}
        kind = "refused" if mode == "refused" else "failed"
        assert f"run {trouble['run_id']} (mode = {mode}) {kind}: " in err
    kept = project.store / "s" / "failed"
    expected = {f"{said[mode]['run_id']}{end}" for mode in modes[1:5] for end in (".ipynb", ".txt")}
    assert {path.name for path in kept.iterdir()} == expected
    text = (kept / f"{said['broken']['run_id']}.txt").read_text()
    assert text.startswith("RuntimeError: the well is dry\n")
    assert "Traceback" in text
    assert "\x1b" not in text
    cells = json.loads((kept / f"{said['broken']['run_id']}.ipynb").read_text())["cells"]
    assert any(output["output_type"] == "error" for cell in cells for output in cell.get("outputs", []))


def test_evidence_goes_when_the_run_is_recorded(project):
    path = project.study()
    run = read_study(path).points[0].run_id
    evidence = project.store / "s" / "failed"
    evidence.mkdir(parents=True)
    for end in (".ipynb", ".txt"):
        (evidence / f"{run}{end}").write_text("of a run that was killed")
    assert project("run", path)[0] == 0
    assert list(evidence.iterdir()) == []


def test_a_value_refused_by_the_notebook_leaves_nothing(project):
    path = project.study(extra='mode = "refused"')
    before = snapshot(project.folder)
    status, _, err = project("run", path)
    assert status == 2
    assert "refused: mode is 'refused'; give another.\n" in err
    assert "Traceback" not in err
    assert snapshot(project.folder) == before


@pytest.mark.parametrize(
    ("extra", "grid", "sentence"),
    [
        ("taks = 3", "", "did you mean 'tasks'"),
        ('tasks = "3"', "", "give a whole number"),
        ("", "tasks = 3", "give a list of one or more values"),
        ("tasks = 1 2", "", "cannot be read"),
    ],
)
def test_a_refused_study_is_one_sentence_and_status_2(project, extra, grid, sentence):
    path = project.study(extra=extra, grid=grid)
    before = snapshot(project.folder)
    status, out, err = project("run", path)
    assert (status, out) == (2, "")
    assert err.startswith("labkit: study ")
    assert err.count("\n") == 1
    assert sentence in err
    assert snapshot(project.folder) == before


def test_a_store_that_cannot_be_written_is_refused_before_any_kernel(project):
    (project.folder / "file").write_text("x")
    status, _, err = project("run", project.study(), store=project.folder / "file" / "runs")
    assert status == 2
    assert "cannot be written (Not a directory); name a folder" in err
    assert err.count("\n") == 1
    for words in (["run", project.study()], ["list"], ["show", "a"], ["rerun", "a"]):
        status, out, err = project(*words, store=project.folder / "file")
        assert (status, out) == (2, "")
        assert err == f"labkit: store {project.folder / 'file'} is a file; name a folder.\n"


def test_a_study_that_is_all_recorded_needs_no_store_that_can_be_written(project, monkeypatch):
    path = project.study(grid="tasks = [1, 2]")
    project.record(path)
    refused = lk.StoreError("the store cannot be written")
    monkeypatch.setattr(Store, "check_writable", lambda *given: (_ for _ in ()).throw(refused))
    assert project("run", path)[0] == 0
    assert project("run", project.study(grid="tasks = [1, 2, 3]"))[0] == 2


def test_no_kernel_at_all_is_refused(project):
    status, _, err = project("run", project.study(), "--jobs", "0")
    assert (status, err) == (2, "labkit: jobs is 0; give a whole number of at least 1.\n")


@pytest.mark.parametrize("warm", [True, False])
def test_compiling_is_announced_once(project, monkeypatch, warm):
    for module in (running, places):
        monkeypatch.setattr(module, "is_warm", lambda: warm)
    announced = 0 if warm else 1
    _, out, err = project("run", project.study(grid="tasks = [1, 2]"), "--json")
    assert err.count("labkit: compiling for the first time") == announced
    assert "compiling" not in project("run", project.study(grid="tasks = [1, 2]"))[2]
    assert project("rerun", json.loads(out)["recorded"][0])[2].count("compiling for the first") == announced


def test_a_damaged_record_is_refused_by_name_before_any_kernel(project):
    path = project.study(grid="tasks = [1]")
    project.record(path)
    record = next(Store(project.store).files("s"))
    record.write_bytes(record.read_bytes()[:-1])
    status, _, err = project("run", path)
    assert status == 2
    assert f"{record.name} is torn or altered" in err
    assert err.count("\n") == 1
    status, _, err = project("list")
    assert status == 2
    assert record.name in err


def test_files_elsewhere_in_the_store_do_not_stand_in_the_way(project):
    (run,) = project.record(project.study())
    other = project.store / "other"
    other.mkdir()
    (other / "mine.parquet").write_text("x")
    (other / f"{run}.parquet").write_text("x")
    copy = other / next(Store(project.store).files("s")).name
    copy.write_bytes(b"torn")
    status, out, err = project("show", run, "--json")
    assert (status, json.loads(out)["study"]) == (0, "s")
    assert [line.split(" is ")[0] for line in err.splitlines()] == [
        f"labkit: file {other / run}.parquet",
        f"labkit: record {copy}",
    ]
    copy.unlink()
    status, out, err = project("list", "--json")
    assert (status, [row["run_id"] for row in json.loads(out)]) == (0, [run])
    assert "mine.parquet is not a record of this store" in err


class TestRecords:
    """What a study left can be listed, shown and executed again."""

    def test_list_show_and_rerun(self, project):
        project("run", project.study(extra="tasks = 4"))
        _, out, _ = project("list", "--json")
        (row,) = json.loads(out)
        assert (row["study"], row["rows"], row["parameters"]["tasks"]) == ("s", 6, 4)
        assert row["run_id"] in project("list")[1]
        status, out, err = project("list", "other")
        assert (status, out) == (2, "")
        assert "study is 'other', which has no records; allowed: s." in err
        _, out, _ = project("show", row["run_id"][:6], "--json")
        shown = json.loads(out)
        assert shown["run_id"] == row["run_id"]
        assert len(shown["measures"]) == 6
        assert "numba" in project("show", row["run_id"])[1]
        before = snapshot(project.store)
        status, out, _ = project("rerun", row["run_id"][:6])
        assert status == 0
        assert "identical to the bit: 6 rows" in out
        assert snapshot(project.store) == before
        status, _, err = project("rerun", "f" * 17)
        assert (status, err.count("\n")) == (2, 1)

    def test_rerun_says_where_bits_differ_and_what_changed(self, project):
        (run,) = project.record(project.study(extra='mode = "noise"'))
        write_tiny(project.notebook, measure=MEASURE + "\n# edited")
        status, out, _ = project("rerun", run)
        assert status == 1
        assert "note: the code of notebook" in out
        assert f"run {run} differs: column 'gap' in 6 of 6 rows, first in row 0: " in out


ANSWER = """
study: str = ""
runs: list = []
risk: float = 0.5
store: str = ""
output: str = ""
"""
ANSWERING = """
import pathlib
import labkit as lk
records = lk.read_study_records(study, runs=runs, store=store)
if risk == 0.25:
    raise lk.InputError("risk is 0.25; take another.")
table = records.groupby("policy")["gap"].max()
table.to_csv(pathlib.Path(output) / "answer.csv")
table
"""
GUARD = """
if risk == 0.375:
    raise lk.HeadroomExceeded("policy 'a' needs more.")
"""


class TestAnswer:
    """The answer notebook runs on the study's own runs; a page that fetches nothing is made of it once."""

    @pytest.fixture
    def asked(self, project):
        write_notebook(project.folder / "answer.ipynb", ANSWERING, GUARD, parameters=ANSWER)

        def study(risk, grid="", more=""):
            answer = f'[answer]\nnotebook = "answer.ipynb"\nrisk = {risk}\n{more}'
            path = project.study(answer=answer, grid=grid, replicates=20)
            project.record(path)
            return path

        return study

    def test_the_answer_is_printed_and_its_page_fetches_nothing(self, project, asked):
        output = project.folder / "answers"
        status, out, _ = project("run", asked(0.5), "--output", str(output))
        assert status == 0
        assert out.startswith("policy        gap\nleast-loaded  ")
        page = (output / "s" / "s.html").read_text()
        assert f"page:    {output / 's' / 's.html'}" in out
        assert "least-loaded" in page
        assert "read_study_records" not in page
        assert 'src="http' not in page
        assert "<title>s</title>" in page
        before = {path: path.stat().st_mtime_ns for path in output.rglob("*")}
        assert project("run", asked(0.5), "--output", str(output))[1].startswith("policy        gap\n")
        assert {path: path.stat().st_mtime_ns for path in output.rglob("*")} == before
        (output / "s" / "answer.csv").write_text("tampered")
        assert "tampered" not in project("run", asked(0.5), "--output", str(output))[1]

    def test_a_guard_fails_the_command_and_keeps_the_page(self, project, asked):
        output = project.folder / "answers"
        status, _, err = project("run", asked(0.375), "--output", str(output))
        assert status == 1
        assert "labkit: policy 'a' needs more.\n" in err
        assert (output / "s" / "s.html").exists()

    def test_an_output_that_cannot_be_written_is_refused_first(self, project, asked):
        (project.folder / "file").write_text("x")
        status, _, err = project("run", asked(0.5), "--output", str(project.folder / "file"))
        assert status == 2
        assert "output" in err
        assert "cannot be written (Not a directory)" in err

    def test_a_refused_answer_leaves_nothing(self, project, asked):
        output = project.folder / "answers"
        status, _, err = project("run", asked(0.25), "--output", str(output))
        assert status == 2
        assert "labkit: risk is 0.25; take another.\n" in err
        assert list(output.iterdir()) == []

    def test_each_group_of_the_grid_has_an_answer(self, project, asked):
        output = project.folder / "answers"
        words = ["run", asked(0.5, grid="tasks = [1, 2]"), "--output", str(output)]
        status, out, err = project(*words)
        assert status == 0, err
        pages = [output / "s" / f"tasks-{tasks}" / "s.html" for tasks in (1, 2)]
        assert [line for line in out.splitlines() if line.startswith(("===", "policy", "page"))] == [
            *("=== tasks = 1 ===", "policy        gap", f"page:    {pages[0]}"),
            *("=== tasks = 2 ===", "policy        gap", f"page:    {pages[1]}"),
        ]
        assert "<title>s: tasks = 2</title>" in pages[1].read_text()
        report = json.loads(project(*words, "--json")[1])
        assert report["answer"] is None
        assert report["answers"] == [
            {"group": {"tasks": tasks}, "page": str(page), "error": ""}
            for tasks, page in zip((1, 2), pages, strict=True)
        ]

    def test_an_answer_notebook_that_can_mix_gets_all_runs(self, project, asked):
        output = project.folder / "answers"
        path = asked(0.5, grid="tasks = [1, 2]", more='mixes = ["tasks"]')
        report = json.loads(project("run", path, "--output", str(output), "--json")[1])
        assert report["answer"]["page"] == str(output / "s" / "s.html")
        assert [answer["group"] for answer in report["answers"]] == [{}]


def test_reading_a_record_leaves_no_thread_that_could_abort_the_end(project):
    project.record(project.study(replicates=2000))
    code = (
        "import os, sys\nfrom pathlib import Path\nimport pyarrow, pyarrow.parquet, pandas, numpy\n"
        "from labkit.records.store import Store\nstore = Store(Path(sys.argv[1]))\n"
        "path = next(store.files('s'))\nbefore = len(os.listdir('/proc/self/task'))\n"
        "store.read(path)\nprint(len(os.listdir('/proc/self/task')) - before)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(project.store)],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        check=True,
    )
    assert (done.stdout, done.stderr) == ("0\n", "")


def test_kernels_side_by_side_leave_no_folder(project, tmp_path, monkeypatch):
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path / "scratch"))
    os.mkdir(tmp_path / "scratch")
    assert project("run", project.study(grid="tasks = [1, 2]"), "--jobs", "2")[0] == 0
    assert os.listdir(tmp_path / "scratch") == []
