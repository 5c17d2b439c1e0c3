"""Each notebook as it is, everything compiled, takes at most what the landing notebook says."""

import json
import re
import time

import pytest

from labkit.cli import main
from labkit.records.project import NOTEBOOKS
from labkit.studies.execution import execute

pytestmark = pytest.mark.benchmark
LONGEST = 60  # seconds for any notebook
ROW = re.compile(r"^\| \[(\w+)\.ipynb\]\(\w+\.ipynb\) \|.*\| (\d+) \|$", re.MULTILINE)


def stated():
    """Return the seconds of each notebook in the landing notebook's table."""
    cells = json.loads((NOTEBOOKS / "start.ipynb").read_text(encoding="utf-8"))["cells"]
    return {
        name: int(seconds) for name, seconds in ROW.findall("\n".join("".join(c["source"]) for c in cells))
    }


def test_every_notebook_takes_what_is_stated(tmp_path, report):
    said = stated() | {"start": 15}
    assert said.keys() == {path.stem for path in NOTEBOOKS.glob("*.ipynb")}
    places = {"store": str(tmp_path / "runs"), "output": str(tmp_path / "answers")}
    assert main(["run", "demo", "--store", places["store"], "--output", places["output"]]) == 0
    took = {}
    for name in said:
        path = NOTEBOOKS / f"{name}.ipynb"
        source = path.read_text(encoding="utf-8")
        given = {key: value for key, value in places.items() if f'"{key}: str' in source}
        for _ in range(2):  # the first compiles
            start = time.perf_counter()
            assert execute(path, given, tmp_path / "out.ipynb").error == ""
            took[name] = time.perf_counter() - start
    report(", ".join(f"{name} {seconds:.0f} s" for name, seconds in took.items()))
    assert {name: seconds for name, seconds in took.items() if seconds > min(said[name], LONGEST)} == {}
