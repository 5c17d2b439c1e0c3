"""`labkit size`: a pilot in a store that is thrown away, and what it says."""

import json

import pytest

from labkit.cli import main
from tests.records.tiny import snapshot, write_notebook

PARAMETERS = """
servers: int = 1  # a replicate sleeps 0.1 ms for each
policies: list = ["one-choice", "least-loaded"]
spread: float = 0.1
mode: str = "good"
replicates: int = 3
precision: float = None
most_replicates: int = 10000
entropy: int = 1
study: str = "by-hand"
store: str = ""
workers: int = 1
"""
CODE = """
import time
import numpy as np, pandas as pd
import labkit as lk
run = lk.begin_run({path!r}, globals())
if mode == "broken":
    raise RuntimeError("the well is dry")
if mode == "refused":
    raise lk.InputError("mode is 'refused'; give another.")
assert precision is None
time.sleep(1e-4 * replicates * servers)
draws = np.random.default_rng(run.seed).standard_normal(replicates)
tables = [
    pd.DataFrame({{"policy": name, "replicate": range(replicates), "tasks": 5, "gap": 2 + share * draws}})
    for name, share in zip(policies, (spread / 3, spread))
]
run.record(pd.concat(tables))
"""


class Asked:
    def __init__(self, folder, capsys):
        self.folder, self.capsys = folder, capsys
        self.write("slow.ipynb")

    def write(self, name, parameters=PARAMETERS):
        path = self.folder / name
        write_notebook(path, CODE.format(path=str(path)), parameters=parameters)

    def __call__(self, *words, top="", extra="", grid="", notebook="slow.ipynb"):
        path = self.folder / "asked.toml"
        path.write_text(f'notebook = "{notebook}"\nentropy = 1\n{top}\n[parameters]\n{extra}\n[grid]\n{grid}')
        before = snapshot(self.folder)
        status = main(["size", str(path), "--store", str(self.folder / "runs"), *words])
        assert snapshot(self.folder) == before
        return status, *self.capsys.readouterr()


@pytest.fixture
def asked(tmp_path, capsys):
    return Asked(tmp_path, capsys)


def test_sizes_that_take_too_long_are_extrapolated_and_left_out(asked):
    words = ("--precision", "0.01", "--minutes", "1", "--pilot", "10", "--jobs", "1", "--json")
    status, out, _ = asked(*words, top="replicates = 3", grid="servers = [100000, 100, 1000]")
    assert status == 0
    found = json.loads(out)
    large, small, middle = found["points"]
    assert [point["piloted"] for point in (large, small, middle)] == [False, True, True]
    assert large["source"] == "extrapolated from servers = 1000"
    # Sleeping is never shorter than asked, and longer on a busy machine.
    assert 0.08 < middle["seconds_a_replicate"] < 1
    assert large["seconds_a_replicate"] > 2
    assert {point["policy"] for point in found["points"]} == {"least-loaded"}
    # a spread of 5 % to 1 % takes 97 replicates; pilots of ten or more tell it to a factor of two
    assert all(50 < point["replicates"] < 250 for point in found["points"])
    assert (found["fits"], found["left_out"]) == (False, ["servers = 100000"])
    assert found["lines"][:2] == ["replicates = 30", "precision = 0.01"]
    assert found["precision_in_time"] is None or found["precision_in_time"] > 0.01


def test_a_study_without_a_size_is_piloted_at_every_point(asked):
    top = "replicates = 30\nprecision = 0.04\nmost_replicates = 40"
    status, out, _ = asked("--pilot", "10", top=top, grid="spread = [0.1, 0.5]")
    assert status == 0
    lines = out.splitlines()
    assert lines[2].startswith("spread = 0.1  least-loaded")
    assert lines[3].startswith("spread = 0.5  least-loaded")
    assert lines[2].endswith(" replicates")
    assert "Both points to a precision of 0.04: about " in out
    assert "which fits into 10 minutes." in out
    assert out.endswith(f"replicates = 30\nprecision = 0.04\nmost_replicates = {lines[-1].split()[-1]}\n")


def test_a_notebook_that_cannot_stop_gets_a_number_of_replicates(asked):
    plain = PARAMETERS.replace("precision: float = None\nmost_replicates: int = 10000\n", "")
    path = asked.folder / "plain.ipynb"
    write_notebook(
        path, CODE.format(path=str(path)).replace("assert precision is None", ""), parameters=plain
    )
    status, out, _ = asked("--pilot", "5", top="replicates = 3", notebook="plain.ipynb")
    assert status == 0
    assert "the only point  least-loaded" in out
    assert out.splitlines()[-1].startswith("replicates = ")


@pytest.mark.parametrize(
    ("mode", "expected", "sentence"),
    [
        ("broken", 1, "the pilot of study asked failed: RuntimeError: the well is dry"),
        ("refused", 2, "the pilot of study asked was refused: mode is 'refused'; give another."),
    ],
)
def test_a_pilot_that_ends_early_says_why(asked, mode, expected, sentence):
    status, out, err = asked(top="replicates = 3", extra=f'mode = "{mode}"')
    assert (status, out) == (expected, "")
    assert sentence in err


def test_a_measure_that_is_not_recorded_is_refused(asked):
    status, _, err = asked("--measure", "gp", top="replicates = 3")
    assert status == 2
    assert "measure is 'gp'; did you mean 'gap'" in err


@pytest.mark.parametrize(
    ("words", "grid", "sentence"),
    [
        (("--precision", "0"), "", "precision is 0.0; give a number above 0 and below 1"),
        (("--precision", "5"), "", "precision is 5.0; give a number above 0 and below 1"),
        (("--precision", "x"), "", "precision is 'x'; give a number"),
        (("--minutes", "0"), "", "minutes is 0.0; give a number above 0"),
        (("--minutes", "nan"), "", "minutes is nan; give a finite number"),
        (("--pilot", "4"), "", "pilot is 4; give a whole number of at least 5"),
        (("--jobs", "0"), "", "jobs is 0; give a whole number of at least 1"),
        (("--x", "server"), "servers = [1, 2]", "x is 'server', which is no grid parameter; did you mean 's"),
        (("--x", "servers"), "", "x is 'servers', which is no grid parameter; this study has none"),
        (("--x", "mode"), 'mode = ["good"]', "x is 'mode', whose values are not all numbers above 0"),
    ],
)
def test_what_cannot_be_is_refused_before_any_kernel(asked, monkeypatch, words, grid, sentence):
    monkeypatch.setattr("labkit.studies.kernels.start_kernel", None)
    status, out, err = asked(*words, top="replicates = 3", grid=grid)
    assert (status, out) == (2, "")
    assert sentence in err
    assert err.count("\n") == 1


def test_a_notebook_without_replicates_is_refused(asked):
    asked.write("none.ipynb", PARAMETERS.replace("replicates: int = 3\nprec", "prec"))
    status, _, err = asked(notebook="none.ipynb")
    assert status == 2
    assert "declares no parameter replicates, so there is nothing to size" in err
