"""A run notebook gives the same record by `labkit run`, papermill and `jupyter execute`, from anywhere."""

import ast
import sys

import pandas as pd
import pytest
from papermill.inspection import inspect_notebook

from labkit.cli import main
from labkit.records.declared import read_notebook
from labkit.records.project import NOTEBOOKS, ROOT
from labkit.records.store import Store
from tests.journeys.ways import (
    JUPYTER,
    POLICIES,
    VALUES,
    assert_same,
    copy_with_defaults,
    finish,
    start,
    the_record,
    write_study,
)

NOTEBOOK = str(ROOT / "notebooks" / "headroom.ipynb")


def papermill(folder, store, *, at, **values):
    given = {**VALUES, "policies": ", ".join(POLICIES), "store": store, **values}
    words = [word for name, value in given.items() for word in ("-p", name, str(value))]
    out = str(folder / "out.ipynb")
    return start(sys.executable, "-m", "papermill", NOTEBOOK, out, "--no-progress-bar", *words, cwd=at)


@pytest.fixture(scope="module")
def by_study(tmp_path_factory):
    folder = tmp_path_factory.mktemp("study")
    assert main(["run", str(write_study(folder)), "--store", str(folder / "runs")]) == 0
    return folder


def test_the_record_is_that_of_the_study(by_study):
    origin, measures = the_record(by_study / "runs")
    stopping = {"precision": None, "most_replicates": 10000, "precision_of": "gap"}
    assert origin["parameters"] == {**VALUES, **stopping, "fleet": "experiments/demo"}
    assert "stopping" not in measures.column_names
    assert measures.num_rows == len(POLICIES) * VALUES["replicates"] * VALUES["checkpoints"]
    assert set(measures["policy"].to_pylist()) == set(POLICIES)
    assert set(measures["information"].to_pylist()) == {"snapshot(every=7)"}


def test_a_precision_adds_replicates_to_those_of_the_study(by_study, tmp_path):
    path = write_study(tmp_path)
    top = "replicates = 10\nprecision = 0.02\nmost_replicates = 24"
    path.write_text(path.read_text().replace("replicates = 5", top))
    assert main(["run", str(path), "--store", str(tmp_path / "runs")]) == 0
    _, plain = the_record(by_study / "runs")
    origin, measures = the_record(tmp_path / "runs")
    assert (origin["parameters"]["precision"], origin["parameters"]["most_replicates"]) == (0.02, 24)
    rows = measures.to_pandas()
    assert rows["replicate"].nunique() == 24
    assert rows["stopping"].str.startswith("mean gap within 2 % at 95 %: not reached with the most, 24").all()
    first = rows[rows["replicate"] < VALUES["replicates"]].drop(columns="stopping").reset_index(drop=True)
    pd.testing.assert_frame_equal(first, plain.to_pandas(), check_exact=True)


def test_papermill_and_jupyter_execute_give_the_same_record(by_study, tmp_path):
    copy = copy_with_defaults(tmp_path, tmp_path / "executed")
    ways = {
        "milled": papermill(tmp_path, tmp_path / "milled", at=tmp_path),
        "executed": start(JUPYTER, "execute", str(copy), cwd=tmp_path),
    }
    done = {store: finish(process) for store, process in ways.items()}
    for store, (status, _, err) in done.items():
        assert status == 0, err
        assert "unknown parameter" not in err
        assert "Unable to parse" not in err
        assert_same(the_record(tmp_path / store), the_record(by_study / "runs"))


@pytest.mark.parametrize("notebook", sorted(NOTEBOOKS.glob("*.ipynb")), ids=lambda path: path.stem)
def test_papermill_knows_every_declared_parameter(notebook):
    declared = read_notebook(notebook).parameters
    known = inspect_notebook(notebook)
    assert list(known) == list(declared)
    for name, parameter in declared.items():
        assert known[name]["inferred_type_name"] == parameter.kind
        assert ast.literal_eval(known[name]["default"]) == parameter.default
        assert known[name]["help"]


def test_plain_papermill_refuses_what_the_study_would(tmp_path):
    ways = {
        "tsks is no parameter of the notebook headroom; did you mean 'tasks'": {"tsks": 5},
        "tasks is 2.5; give a whole number (int).": {"tasks": 2.5},
    }
    processes = [papermill(tmp_path, tmp_path / "runs", at="/", **values) for values in ways.values()]
    done = [finish(process) for process in processes]
    for sentence, (status, _, err) in zip(ways, done, strict=True):
        assert status != 0
        assert f"InputError: {sentence}" in err
    assert not (tmp_path / "runs").exists()


def test_policies_of_a_study_meet_the_same_arrivals(by_study):
    """One-choice alone has the rows that it has beside other policies."""
    path = by_study / "alone.toml"
    path.write_text((by_study / "ways.toml").read_text().replace(', "least-loaded(ties=first)"', ""))
    assert main(["run", str(path), "--store", str(by_study / "alone")]) == 0
    (alone,) = [Store(by_study / "alone").read(each) for each in Store(by_study / "alone").files("alone")]
    both = the_record(by_study / "runs")[1].to_pandas()
    rows = both[both["policy"] == "one-choice"].reset_index(drop=True)
    assert rows.equals(alone.select(rows.columns.tolist()).to_pandas())
