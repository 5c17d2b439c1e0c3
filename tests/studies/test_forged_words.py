"""What a stranger wrote into a manifest or a record is found, and shown as what it is."""

import json

import pytest

from labkit.records.frozen import MANIFEST, Finding, manifest_text
from labkit.records.frozen_index import write_index
from labkit.records.store import Store
from labkit.studies.verifying import Verification, verify
from tests.records.samples import record, run_id

CLEAR = "\x1b[2J"


@pytest.mark.parametrize("name", ["gone", "run_id"])
def test_parameters_that_are_no_columns_are_found_and_nothing_is_executed(frozen, folder, name):
    path = frozen().place / MANIFEST
    manifest = json.loads(path.read_text())
    assert "share" in manifest["query"]["parameters"]
    manifest["query"]["parameters"] = [name]
    path.write_text(manifest_text(manifest))
    write_index(folder)
    result = verify("first", 1, folder=folder)
    (finding,) = result.findings
    assert finding.sentence == (
        f"file runs.parquet has no parameter {name!r} among its columns, and manifest.json names one; "
        "restore it."
    )
    assert result.runs == []


def test_no_command_passes_on_what_a_terminal_obeys(project, monkeypatch):
    store = Store(project.store)
    words = json.dumps({"word": f"{CLEAR}\n\u202e"})
    store.write("s", run_id(1), record(run=run_id(1), notebook=f"a\nb{CLEAR}.ipynb", parameters=words))
    failed = project.store / "s" / "failed" / f"{run_id(2)}.txt"
    failed.parent.mkdir(exist_ok=True)
    failed.write_text(f"ValueError: {CLEAR}\r\nmore")
    held = Verification("first", 3, notes=[f"a{CLEAR}\nfrozen table first holds"])
    wrong = Verification("first", 3, [Finding("added", "x", f"file x{CLEAR} is not part")])
    outputs = [project("list"), project("show", run_id(1))]
    for result in (held, wrong):
        monkeypatch.setattr("labkit.studies.verifying.verify", lambda *given, result=result, **more: result)
        outputs.append(project("verify", "first"))
    assert [status for status, _, _ in outputs] == [0, 0, 0, 1]
    for _, out, err in outputs:
        assert r"\x1b[2J" in out
        assert all(line.isprintable() for line in (out + err).split("\n"))
    listed = outputs[0][1].splitlines()
    assert [len(line.split("  ")) > 1 for line in listed] == [True] * 4  # two tables, each with one row
    assert r"word=\x1b[2J\x0a\u202e" in listed[1]
    assert r"a\x0ab\x1b[2J.ipynb" in listed[1]
    assert outputs[2][1].splitlines()[0] == r"note: a\x1b[2J\x0afrozen table first holds"
