"""`begin_run` refuses before any computing; `record` writes what the saved notebook measured."""

import os
from types import SimpleNamespace

import pandas as pd
import pytest

import labkit as lk
from labkit.records.declared import read_notebook
from labkit.records.project import ROOT
from labkit.records.schema import row_of_origin
from labkit.records.store import Store
from tests.records.tiny import snapshot, write_notebook, write_tiny

MEASURES = pd.DataFrame({"policy": "a", "replicate": range(3), "tasks": 5, "gap": [0.1, 0.2, 0.3]})


@pytest.fixture
def tiny(tmp_path):
    return write_tiny(tmp_path / "tiny.ipynb")


def begin(path, store, executed=None, **values):
    """Begin a run as a session that executed these cells would."""
    namespace = {"store": str(store), **values}
    if executed is not None:
        shell = SimpleNamespace(history_manager=SimpleNamespace(input_hist_raw=["", *executed]))
        namespace["get_ipython"] = lambda: shell
    return lk.begin_run(str(path), namespace), namespace


def test_a_record_carries_where_it_comes_from(tiny, tmp_path):
    run, _ = begin(tiny, tmp_path / "runs", tasks=7, study="here", workers=2)
    path = run.record(MEASURES)
    assert path.parent == tmp_path / "runs" / "here"
    origin = row_of_origin(Store(tmp_path / "runs").read(path))
    assert origin["run_id"] == run.id == path.name[:16]
    assert origin["parameters"]["tasks"] == 7
    assert not {"study", "store", "workers"} & set(origin["parameters"])
    assert origin["spawn_key"] == list(run.seed.spawn_key)
    assert origin["entropy"] == run.seed.entropy == 1
    assert origin["notebook"] == tiny.as_posix()
    assert origin["started"].endswith("+00:00")
    assert origin["elapsed"] > 0
    assert run.id in repr(run)
    assert run.id in run._repr_html_()


def test_a_rule_of_the_users_own_is_recorded_with_its_source(tiny, tmp_path):
    @lk.policy
    def even_ones(options, loads, capacity, coin):
        return 0 if options[0] % 2 == 0 else 1

    run, _ = begin(tiny, tmp_path / "runs")
    path = run.record(pd.concat([MEASURES, MEASURES.assign(policy=even_ones.name)]))
    rules = row_of_origin(Store(tmp_path / "runs").read(path))["rules"]
    assert list(rules) == ["even-ones"]
    assert "options[0] % 2 == 0" in rules["even-ones"]


def test_the_record_is_the_same_from_any_working_directory(tiny, tmp_path, monkeypatch):
    first, _ = begin(tiny, tmp_path / "runs")
    monkeypatch.chdir("/")
    second, _ = begin(tiny, tmp_path / "runs")
    assert first.id == second.id


def test_values_come_back_in_their_declared_type(tiny, tmp_path):
    run, namespace = begin(tiny, tmp_path / "runs", share=1, policies="one-choice, mixed(beta=0.5, x=1)")
    assert namespace["policies"] == run.parameters["policies"] == ["one-choice", "mixed(beta=0.5, x=1)"]
    assert type(namespace["share"]) is float


@pytest.mark.parametrize(
    ("values", "match"),
    [
        ({"tasks": 1e4}, r"tasks is 10000\.0; give a whole number"),
        ({"share": "x"}, "share is 'x'; give a number"),
        ({"entropy": -1}, "entropy is -1; give a whole number of at least 0"),
        ({"study": "a/b"}, "study is 'a/b'; a study's name"),
        ({"policies": ""}, "policies is an empty list"),
    ],
)
def test_a_bad_value_is_refused_and_nothing_written(tiny, tmp_path, values, match):
    before = snapshot(tmp_path)
    with pytest.raises(lk.InputError, match=match):
        begin(tiny, tmp_path / "runs", **values)
    assert snapshot(tmp_path) == before


def test_an_injected_name_that_is_no_parameter_is_refused(tiny, tmp_path):
    cells = read_notebook(tiny).cells
    injected = '# Parameters\ntaks = 9\nstore = "x"\n'
    with pytest.raises(lk.InputError, match=r"taks is no parameter of the notebook .*; did you mean 'tasks'"):
        begin(tiny, tmp_path / "runs", [cells[0], injected, cells[1]])
    begin(tiny, tmp_path / "runs", [cells[0], injected.replace("taks", "tasks"), cells[1]])


def test_a_store_that_cannot_be_written_is_refused_first(tiny, tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(lk.StoreError, match="cannot be written"):
        begin(tiny, tmp_path / "file" / "runs")


def test_a_path_is_the_same_from_anywhere(tmp_path, monkeypatch):
    cells = "fleet: str = 'labkit'\nentropy: int = 1\nstore: str = ''"
    path = write_notebook(tmp_path / "n.ipynb", "x = 1", parameters=cells)
    monkeypatch.chdir(tmp_path)
    run, _ = begin(path, tmp_path / "runs", fleet="labkit")
    assert run.path("fleet") == ROOT / "labkit"
    run, _ = begin(path, tmp_path / "runs", fleet=str(tmp_path))
    assert run.path("fleet") == tmp_path.resolve()
    with pytest.raises(lk.InputError, match=r"path 'fleets' is no path parameter .*did you mean 'fleet'"):
        run.path("fleets")
    with pytest.raises(lk.InputError, match="nothing is there"):
        begin(path, tmp_path / "runs", fleet="absent")


def test_an_unknown_notebook_is_refused_with_those_there():
    with pytest.raises(lk.InputError, match=r"notebook is 'headrom'; notebooks/ holds .*headroom"):
        lk.begin_run("headrom", {})
    with pytest.raises(lk.InputError, match="no such file"):
        lk.begin_run(os.devnull + ".ipynb", {})


class TestSession:
    """The record names the saved notebook, so only its cells may have been executed."""

    def attempt(self, tiny, tmp_path, executed):
        run, _ = begin(tiny, tmp_path / "runs", executed)
        return run.record(MEASURES)

    def test_all_cells_in_order_may_record(self, tiny, tmp_path):
        cells = list(read_notebook(tiny).cells)
        assert self.attempt(tiny, tmp_path, cells)
        injected = "# Parameters\ntasks = 5"
        assert self.attempt(tiny, tmp_path, [cells[0], injected, *cells[1:]])
        assert self.attempt(tiny, tmp_path, ["tasks: int = 6", *cells[1:]])
        assert self.attempt(tiny, tmp_path, ["1 + 1", *cells, *cells])

    @pytest.mark.parametrize("change", ["edited", "left out", "twice", "added"])
    def test_another_session_may_not(self, tiny, tmp_path, change):
        first, begin_cell, measure, record = read_notebook(tiny).cells
        executed = {
            "edited": [first, begin_cell, measure + "\ndraws += 1", record],
            "left out": [first, begin_cell, record],
            "twice": [first, begin_cell, measure, record, record],
            "added": [first, begin_cell, measure, "draws += 1", record],
        }[change]
        with pytest.raises(lk.InputError, match="as saved is not what this session executed; save it"):
            self.attempt(tiny, tmp_path, executed)
        assert not (tmp_path / "runs").exists()
