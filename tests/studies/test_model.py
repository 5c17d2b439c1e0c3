"""A study file says what is asked; what it cannot mean is refused in one sentence that names it."""

import itertools

import pytest

import labkit as lk
from labkit.records.project import EXPERIMENTS
from labkit.studies.model import make_study, read_study
from tests.records.tiny import write_notebook, write_tiny

ANSWER = 'study: str = ""\nruns: list = []\nstore: str = ""\noutput: str = ""\nrisk: float = 0.1'


@pytest.fixture
def folder(tmp_path):
    write_tiny(tmp_path / "tiny.ipynb")
    write_notebook(tmp_path / "answer.ipynb", "x = 1", parameters=ANSWER)
    write_notebook(
        tmp_path / "placed.ipynb",
        "x = 1",
        parameters="fleet: str = 'x'\nreplicates: int = 1\nentropy: int = 1",
    )
    return tmp_path


def study(folder, **changes):
    content = {"notebook": "tiny.ipynb", "replicates": 3, "entropy": 1} | changes
    return make_study("s", {key: value for key, value in content.items() if value is not None}, folder=folder)


def test_the_grid_is_the_product_in_the_order_of_the_file(folder):
    points = study(folder, grid={"tasks": [1, 2], "share": [0.5, 1]}).points
    asked = [(point.parameters["tasks"], point.parameters["share"]) for point in points]
    assert asked == list(itertools.product([1, 2], [0.5, 1.0]))


def test_points_do_not_depend_on_the_order_of_the_grid(folder):
    one = study(folder, grid={"tasks": [1, 2, 3], "share": [0.5, 1]}).points
    other = study(folder, grid={"share": [1, 0.5], "tasks": [3, 1, 2]}).points
    assert {point.run_id: point.identity for point in one} == {
        point.run_id: point.identity for point in other
    }


def test_a_default_written_out_is_the_same_point(folder):
    plain, written = study(folder), study(folder, parameters={"tasks": 5, "mode": "good"})
    assert plain.points[0].run_id == written.points[0].run_id


@pytest.mark.parametrize(
    ("changes", "match"),
    [
        ({"replicats": 3}, "unknown key 'replicats'; did you mean 'replicates'"),
        ({"replicates": None}, "replicates is missing; give replicates ="),
        ({"entropy": None}, "entropy is missing"),
        ({"replicates": 0}, "replicates is 0; give a whole number of at least 1"),
        (
            {"answer": {"notebook": "answer.ipynb", "mixes": ["share"]}},
            "mixes names 'share', which the grid does",
        ),
        ({"answer": {"notebook": "answer.ipynb", "mixes": 3}}, "mixes is 3; give a list"),
        ({"entropy": -1}, "entropy is -1; give a whole number of at least 0"),
        ({"title": 3}, "title is 3; give a text"),
        ({"notebook": None}, "notebook is None; give a text"),
        ({"notebook": "tni"}, "notebook is 'tni'; notebooks/ holds"),
        ({"parameters": {"taks": 3}}, "taks is no parameter of the notebook .*; did you mean 'tasks'"),
        ({"parameters": {"tasks": "3"}}, "tasks is '3'; give a whole number"),
        ({"parameters": {"tasks": 3.0}}, r"tasks is 3\.0; give a whole number"),
        ({"parameters": {"share": float("nan")}}, "share is nan; give a finite number"),
        ({"parameters": {"policies": []}}, "policies is an empty list"),
        ({"parameters": {"study": "x"}}, "parameter study is set by labkit itself"),
        ({"parameters": {"entropy": 2}}, "entropy is given twice"),
        ({"parameters": 3}, r"parameters is 3; give a table \[parameters\]"),
        ({"grid": {"tasks": 3}}, "grid: tasks is 3; give a list of one or more values"),
        ({"grid": {"tasks": []}}, r"grid: tasks is \[\]; give a list"),
        ({"grid": {"taks": [3]}}, "taks is no parameter"),
        ({"grid": {"tasks": [3, "x"]}}, "tasks is 'x'; give a whole number"),
        ({"grid": {"tasks": [1]}, "parameters": {"tasks": 1}}, "tasks is given twice"),
        ({"answer": {"risk": 0.5}}, "notebook is None; give a text"),
        ({"answer": {"notebook": "answer.ipynb", "rsk": 0.5}}, "rsk is no parameter .*did you mean 'risk'"),
        (
            {"answer": {"notebook": "answer.ipynb", "risk": 1.5}},
            r"risk is 1\.5; give a number above 0 and below 1",
        ),
        ({"answer": {"notebook": "answer.ipynb", "runs": []}}, "answer: runs is set by labkit itself"),
        ({"answer": {"notebook": "tiny.ipynb"}}, "declares no parameter output"),
        ({"answer": {"notebook": "answer.ipynb"}}, "replicates is 3; a risk of 0.1 .* needs at least 36"),
    ],
)
def test_what_a_study_cannot_mean_is_refused(folder, changes, match):
    with pytest.raises(lk.InputError, match=match) as caught:
        study(folder, **changes)
    assert "\n" not in str(caught.value)


def test_a_point_twice_is_refused(folder):
    with pytest.raises(lk.InputError, match="grid of study s has a point twice"):
        _ = study(folder, grid={"share": [1, 1.0]}).points


def test_a_fleet_is_given_from_the_folder_of_the_study(folder):
    (folder / "sites").mkdir()
    found = study(folder, notebook="placed.ipynb", parameters={"fleet": "sites"})
    assert found.parameters["fleet"] == (folder / "sites").as_posix()
    with pytest.raises(lk.InputError, match=r"fleet is 'site'; .*site does not exist: give a path"):
        study(folder, notebook="placed.ipynb", parameters={"fleet": "site"})


def test_a_refusal_names_the_file(folder):
    path = folder / "asked.toml"
    path.write_text('notebook = "tiny.ipynb"\nreplicates = 3\nentropy = 1\nextra = 1\n')
    with pytest.raises(lk.InputError, match=r"study .*asked\.toml: unknown key 'extra'"):
        read_study(path)
    path.write_text("notebook =")
    with pytest.raises(lk.InputError, match=r"study .*asked\.toml cannot be read \(Invalid value"):
        read_study(path)
    with pytest.raises(lk.InputError, match=r"study is 'dmo'; .*did you mean 'demo'"):
        read_study("dmo")


@pytest.mark.parametrize("path", sorted(EXPERIMENTS.glob("*.toml")), ids=lambda path: path.stem)
def test_every_study_of_the_project_can_be_read(path):
    assert read_study(path.stem).points


@pytest.fixture
def stopping(folder):
    added = "\nprecision: float = None\nmost_replicates: int = 10000\nreplicates: int = 1\nentropy: int = 1"
    write_notebook(folder / "stopping.ipynb", "x = 1", parameters="tasks: int = 5" + added)
    content = {"notebook": "stopping.ipynb", "replicates": 20, "precision": 0.05, "most_replicates": 90}
    return lambda **changes: study(folder, **(content | changes))


def test_a_precision_and_its_cap_go_to_the_notebook(stopping):
    given = stopping().points[0].parameters
    assert (given["precision"], given["most_replicates"]) == (0.05, 90)
    plain = stopping(precision=None, most_replicates=None).points[0]
    assert "precision" not in plain.parameters
    assert plain.identity.parameters["precision"] is None
    assert plain.identity.key == stopping().points[0].identity.key


@pytest.mark.parametrize(
    ("changes", "match"),
    [
        ({"precision": 0}, "precision is 0; give a number above 0 and below 1"),
        ({"precision": 5}, "precision is 5; give a number above 0 and below 1"),
        ({"precision": "5 %"}, "precision is '5 %'; give a finite number"),
        ({"most_replicates": 19}, "most_replicates is 19; give at least as many as replicates, 20"),
        ({"most_replicates": 99.5}, "most_replicates is 99.5; give a whole number"),
        (
            {"most_replicates": None},
            "most_replicates is missing; a precision needs most_replicates = a whole",
        ),
        ({"precision": None}, "most_replicates is given without a precision"),
        ({"replicates": 9}, "replicates is 9; with a precision the first look"),
        ({"notebook": "tiny.ipynb"}, "tiny.ipynb declares no parameter precision, so it cannot stop"),
        ({"parameters": {"precision": 0.1}}, "precision is given twice; give it once, at the top"),
        ({"grid": {"most_replicates": [99]}}, "most_replicates is given twice; give it once, at the top"),
        (
            {"precision": None, "most_replicates": None, "grid": {"precision": [0.1]}},
            "precision is given in a table; give it once, at the top",
        ),
    ],
)
def test_a_precision_that_cannot_be_is_refused(stopping, changes, match):
    with pytest.raises(lk.InputError, match=match):
        stopping(**changes)
