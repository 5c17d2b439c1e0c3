"""A run notebook copied with smaller defaults, and its record compared whatever way it was executed."""

import json
import os
import subprocess
import sys
from pathlib import Path

from labkit.records.project import ROOT
from labkit.records.schema import first_difference, measured_part, row_of_origin
from labkit.records.store import Store

POLICIES = ["one-choice", "least-loaded(ties=first)"]
VALUES = {
    "tasks": 300,
    "checkpoints": 4,
    "report_every": 7,
    "replicates": 5,
    "entropy": 11,
    "policies": POLICIES,
}
JUPYTER = str(Path(sys.executable).with_name("jupyter"))


def environment() -> dict[str, str]:
    return {**os.environ, "PYTHONPATH": str(ROOT)}


def copy_with_defaults(folder: Path, store: Path) -> Path:
    """Copy notebooks/headroom.ipynb with these values typed into its parameters cell, as a user would."""
    content = json.loads((ROOT / "notebooks" / "headroom.ipynb").read_text(encoding="utf-8"))
    (cell,) = [cell for cell in content["cells"] if "parameters" in cell["metadata"].get("tags", [])]
    lines = []
    for line in "".join(cell["source"]).splitlines():
        name = line.split(":")[0]
        values = {**VALUES, "store": str(store)}
        declared, _, comment = line.partition("  # ")
        if name in values:
            declared = f"{declared.split(' = ')[0]} = {values[name]!r}"
        lines.append(f"{declared}  # {comment}")
    cell["source"] = "\n".join(lines)
    path = folder / "headroom.ipynb"
    path.write_text(json.dumps(content), encoding="utf-8")
    return path


def write_study(folder: Path) -> Path:
    given = {**VALUES, "fleet": str(ROOT / "experiments" / "demo")}
    top = {name: given.pop(name) for name in ("replicates", "entropy")}
    lines = ['notebook = "headroom"', *(f"{name} = {value}" for name, value in top.items()), "[parameters]"]
    lines += [f"{name} = {json.dumps(value)}" for name, value in given.items()]
    path = folder / "ways.toml"
    path.write_text("\n".join(lines))
    return path


def start(*words: str, cwd: Path) -> subprocess.Popen:
    pipe = subprocess.PIPE
    return subprocess.Popen([*words], cwd=cwd, env=environment(), stdout=pipe, stderr=pipe, text=True)


def finish(process: subprocess.Popen) -> tuple[int, str, str]:
    out, err = process.communicate(timeout=120)
    return process.returncode, out, err


def a_record(store: Path, run: str):
    """Return one record of a store: its origin and measures."""
    place = Store(store)
    table = place.read(place.locate(run))
    return row_of_origin(table), measured_part(table)


def the_record(store: Path):
    """Return the only record of a store: its origin and measures."""
    place = Store(store)
    (study,) = place.studies()
    (run,) = place.runs(study)
    return a_record(store, run)


def assert_same(one, other) -> None:
    """Assert that two records are of the same run and equal to the bit."""
    for name in ("run_id", "spawn_key", "entropy", "parameters", "inputs", "notebook", "notebook_digest"):
        assert one[0][name] == other[0][name]
    assert first_difference(one[1], other[1]) == ""
