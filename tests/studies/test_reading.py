"""Rows of recorded runs as one table, chosen by id or by their parameters."""

import math

import numpy as np
import pandas as pd
import pytest

import labkit as lk
from labkit.records.compaction import compact
from labkit.records.store import Store
from tests.records.samples import fill, record, run_id


@pytest.fixture
def store(tmp_path):
    """A store with runs in a pack and runs in files."""
    store = Store(tmp_path / "runs")
    fill(store, 6, study="mine")
    compact(store, "mine")
    fill(store, 4, study="mine", first=6)
    return store


def numbers(store, **options):
    frame = lk.read_study_records("mine", store=store.folder, **options)
    return [] if "number" not in frame else sorted(set(frame["number"]))


@pytest.mark.parametrize(
    ("where", "found"),
    [
        ({"number": [3, 8]}, [3, 8]),
        ({"number": (3.0, np.int64(8))}, [3, 8]),
        ({"number": np.array([3, 8])}, [3, 8]),
        ({"half": 1.5}, [1, 3, 5, 7, 9]),
        ({"half": 0.5, "number": range(5)}, [0, 2, 4]),
    ],
)
def test_runs_are_chosen_by_their_parameters(store, where, found):
    assert numbers(store, where=where) == found


def test_where_also_chooses_among_given_runs(store):
    assert numbers(store, runs=[run_id(at) for at in (8, 3, 1)], where={"half": 1.5}) == [1, 3]
    frame = lk.read_study_records("mine", [run_id(8), run_id(3)], store.folder)
    assert list(frame["run_id"]) == [run_id(8)] * 2 + [run_id(3)] * 2
    assert list(frame["gap"]) == [8.25, 8.5, 3.25, 3.5]
    assert frame["number"].dtype == np.int64


@pytest.mark.parametrize(
    ("where", "said"),
    [
        ({"numbr": 3}, r"where has 'numbr', which is no parameter of a run; did you mean 'number'"),
        ({"number": 77}, r"where is {'number': 77}; none of 10 runs of study mine fits"),
        ({"number": True}, "none of 10 runs"),
        ({"number": "3"}, "none of 10 runs"),
        ({"number": 10**400}, "none of 10 runs"),
        ({"number": [10**5000, math.inf]}, "none of 10 runs"),
        ({"number": b"3"}, r"where has b'3' for 'number'; give a number, a text"),
        ({"number": [b"3"]}, r"where has b'3' for 'number'"),
        ({"number": {3: {1, 2}}}, r"where has \{1, 2\} for 'number'"),
        ({3: "number"}, "where has 3 as a parameter"),
        ("number=3", r"where is 'number=3'; give a mapping of parameters to values"),
        ([("number", 3)], r"where is \[\('number', 3\)\]; give a mapping"),
    ],
)
def test_what_fits_no_run_is_refused(store, where, said):
    with pytest.raises(lk.InputError, match=said):
        lk.read_study_records("mine", store=store.folder, where=where)


def test_values_of_any_kind_keep_theirs(store):
    values = ['[1,"a"]', "null", "true", '"x"', "2"]
    for at, value in enumerate(values):
        store.write("kinds", run_id(at), record(run=run_id(at), parameters=f'{{"p":{value}}}'))
    for where, rows in (({"p": [[1, "a"]]}, 1), ({"p": [1, "a"]}, 1), ({"p": None}, 1), ({"p": ["x", 2]}, 2)):
        frame = lk.read_study_records("kinds", store=store.folder, where=where)
        assert len(frame) == 2 * rows
    frame = lk.read_study_records("kinds", [run_id(at) for at in range(5)], store.folder)
    assert list(frame["p"][::2]) == ['[1,"a"]', None, True, "x", 2]


def test_a_list_means_any_of_its_values_and_a_recorded_list_like_it(store):
    values = ["[1,2]", "1", "2.0", "[1,2,3]", "-0.0", "[true,2]", "null"]
    for at, value in enumerate(values):
        store.write("kinds", run_id(at), record(run=run_id(at), parameters=f'{{"p":{value}}}'))
    for given, found in (
        ([1, 2], [0, 1, 2]),
        (np.array([1, 2]), [0, 1, 2]),
        ([[1, 2]], [0]),
        ([np.array([1, 2, 3]), pd.NA], [3, 6]),
        (0, [4]),
        (pd.NA, [6]),
        ([True, 2], [2, 5]),
    ):
        frame = lk.read_study_records("kinds", store=store.folder, where={"p": given})
        assert set(frame["run_id"]) == {run_id(at) for at in found}


def test_without_runs_the_newest_is_read(store):
    assert set(lk.read_study_records("mine", store=store.folder)["run_id"]) == {run_id(9)}
