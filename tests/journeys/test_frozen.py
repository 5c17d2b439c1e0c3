"""A table frozen, cited, cloned, damaged and verified, by commands in a repository of its own."""

import hashlib
import json
import shutil
import struct
import subprocess
import sys
from pathlib import Path

import pyarrow as pa
import pytest

from labkit.records.frozen import MANIFEST, RUNS, TABLE, encode, manifest_text
from labkit.records.frozen_index import write_index
from labkit.records.project import ROOT
from labkit.records.store import decode
from labkit.studies.freezing import table_of
from tests.records.tiny import snapshot, write_notebook
from tests.studies.copies import WHO, Copy

STUDY = """
title = "Study: two rules"
notebook = "tiny"
replicates = 20
entropy = 1
[grid]
share = [0.5, 0.25]
[answer]
notebook = "answer"
mixes = ["share"]
"""
ANSWER = """
study: str = ""
runs: list = []
risk: float = 0.25
store: str = ""
output: str = ""
"""
ANSWERING = """
import pathlib
import labkit as lk
records = lk.read_study_records(study, runs=runs, store=store)
records.groupby("policy")["gap"].max().to_csv(pathlib.Path(output) / "answer.csv")
for name in ("answer.txt", "gap.png", "gap.svg"):
    (pathlib.Path(output) / name).write_bytes(b"a\\r\\nb")
"""


@pytest.fixture(scope="module", autouse=True)
def templates():
    """The copy's environment has no page templates of its own."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("JUPYTER_PATH", str(Path(sys.prefix, "share", "jupyter")))
        yield


@pytest.fixture(scope="module")
def copy(tmp_path_factory, templates):
    """A committed project with a study whose runs are recorded, and one frozen table."""
    made = Copy(tmp_path_factory.mktemp("frozen"))
    for name in (".gitattributes", "CITATION.cff"):
        shutil.copyfile(ROOT / name, made.root / name)
    (made.root / "results").mkdir()
    made.write("results/README.md", "`runs/` holds files.\n`frozen/` holds tables.\n")
    made.write("experiments/s.toml", STUDY)
    write_notebook(made.root / "notebooks" / "answer.ipynb", ANSWERING, parameters=ANSWER)
    made.commit()
    status, out, err = made("run", "s")
    assert status == 0, out + err
    status, out, err = made("freeze", "s", "--name", "first")
    assert status == 0, err
    assert "table:    " in out
    return made


@pytest.fixture
def place(copy, tmp_path):
    """The folder of the frozen table; what a test does to it or to the index is undone."""
    kept = tmp_path / "kept"
    results = copy.root / "results"
    shutil.copytree(results, kept)
    yield results / "frozen" / "first"
    shutil.rmtree(results)
    shutil.copytree(kept, results)


def forge(place, file, content):
    """Replace a file and make every digest right again."""
    (place / file).write_bytes(content)
    manifest = json.loads((place / MANIFEST).read_text())
    manifest["files"][file] = hashlib.sha256(content).hexdigest()
    (place / MANIFEST).write_text(manifest_text(manifest))
    write_index(place.parent)


def last_bit(table, column, row):
    values = table[column].to_pylist()
    (whole,) = struct.unpack("<q", struct.pack("<d", values[row]))
    (values[row],) = struct.unpack("<d", struct.pack("<q", whole ^ 1))
    return table.set_column(table.column_names.index(column), column, pa.array(values))


def test_a_committed_study_is_frozen_without_a_word_of_changes(copy, place):
    manifest = json.loads((place / MANIFEST).read_text())
    commit = copy.git("rev-parse", "HEAD")
    assert (manifest["git_hash"], manifest["dirty"], manifest["note"]) == (commit, False, "")
    figures = {"answer.csv", "answer.txt", "gap.png", "gap.svg"}
    tables = {"table.csv", "table.md", "table.tex", TABLE, RUNS}
    assert manifest["files"].keys() == figures | tables | {"CITATION.bib", "statement.txt"}
    assert commit in (place / "CITATION.bib").read_text()
    assert commit in (place / "statement.txt").read_text()
    index = (copy.root / "results" / "README.md").read_text()
    assert index.startswith("`runs/` holds files.\n`frozen/` holds tables.\n\n| frozen table | ")
    assert (
        f"| [first](frozen/first/table.md) | Study: two rules | 4 | 2 | {manifest['frozen'][:10]} | "
        f"{commit[:10]} | {manifest['digest'][:12]} |\n"
    ) in index


def test_the_same_runs_executed_again_give_the_same_bits(copy, place):
    before = snapshot(place)
    status, out, err = copy("verify", "first", "--rerun", "3")
    assert status == 0, out + err
    assert "frozen table first holds: 12 files as frozen" in out
    assert out.count(" drawn (policy '") == 3
    assert out.endswith("2 runs are identical to the bit: 80 measured rows\n")
    status, out, _ = copy("verify", "first", "--rerun", "99", "--json")
    said = json.loads(out)
    assert (status, said["holds"], said["findings"]) == (0, True, [])
    assert [row["at"] for row in said["sampled"]] == [0, 1, 2, 3]
    assert snapshot(place) == before


def test_a_fresh_clone_verifies_after_the_code_moved_on(copy, place, tmp_path):
    clone = tmp_path / "clone"
    copy.commit()
    words = ["git", *WHO, "clone", "-q", str(copy.root), str(clone)]
    subprocess.run(words, check=True, capture_output=True)
    copy.git("reset", "-q", "HEAD~1")
    status, out, err = copy("verify", "first", "--rerun", "3", root=clone)
    assert status == 0, out + err
    source = clone / "labkit" / "engine" / "shift.py"
    source.write_text("SHIFT = 0.125\n")
    for step in (["add", "."], ["commit", "-q", "-m", "A change"]):
        subprocess.run(["git", *WHO, *step], cwd=clone, check=True, capture_output=True)
    status, out, err = copy("verify", "first", "--rerun", "3", root=clone)
    assert status == 0, out + err
    assert "labkit: making a work tree of commit " in err
    assert "identical to the bit" in out


def test_without_its_commit_equal_bits_hold_and_others_are_told(copy, place, tmp_path):
    """A shallow clone lacks the commit of the runs; today's code may give the same bits, or not."""
    source = copy.root / "labkit" / "engine" / "shift.py"
    before = source.read_text()
    try:
        for text, holds in (("SHIFT = 0.0  # as it was\n", True), ("SHIFT = 0.125\n", False)):
            source.write_text(text)
            copy.commit()
            clone = tmp_path / f"clone-{holds}"
            copy.git("clone", "-q", "--depth", "1", copy.root.as_uri(), str(clone))
            status, out, err = copy("verify", "first", "--rerun", "1", root=clone)
            assert (status == 0) is holds, out + err
            assert "which is shallow; executed with today's code" in out
            assert "labkit was 0.1.0+" in out
            assert ("identical to the bit" in out) is holds
            copy.git("reset", "-q", "HEAD~1")
    finally:
        source.write_text(before)


def test_every_file_is_missed_and_every_changed_byte_found(copy, place):
    held = {path.name: path.read_bytes() for path in place.iterdir()}
    files = sorted(held.keys() - {MANIFEST})
    assert len(files) == 11

    def change(file):
        content = held[file]
        middle = len(content) // 2
        (place / file).write_bytes(content[:middle] + bytes([content[middle] ^ 1]) + content[middle + 1 :])

    for file in files:
        change(file)
    status, out, _ = copy("verify", "first")
    lines = sorted(out.splitlines())
    assert (status, len(lines)) == (1, len(files))
    for file, line in zip(files, lines, strict=True):
        assert line.startswith(f"frozen table first: file {file} has changed: its SHA-256 is ")
    for file in files:
        (place / file).write_bytes(held[file])
    change(MANIFEST)
    status, out, _ = copy("verify", "first")
    assert (status, "file manifest.json is not as it was written" in out) == (1, True)
    (place / MANIFEST).write_bytes(held[MANIFEST])
    gone = (TABLE, "gap.svg")
    for file in gone:
        (place / file).unlink()
    status, out, _ = copy("verify", "first", "--json")
    found = {each["sentence"] for each in json.loads(out)["findings"] if each["kind"] == "missing"}
    assert (status, found) == (1, {f"file {file} is missing; restore it." for file in gone})
    for file in gone:
        (place / file).write_bytes(held[file])
    assert copy("verify", "first")[0] == 0


def test_a_file_too_many_is_found(copy, place):
    (place / "more.csv").write_text("")
    status, out, _ = copy("verify", "first")
    sentence = "file more.csv is not part of the frozen table; move it elsewhere."
    assert (status, out) == (1, f"frozen table first: {sentence}\n")


def test_one_bit_with_all_digests_made_right_is_found(copy, place):
    table = decode((place / TABLE).read_bytes())
    original = (place / TABLE).read_bytes()
    forge(place, TABLE, encode(last_bit(table, "gap", 2)))
    status, out, _ = copy("verify", "first")
    assert status == 1
    assert (
        "file table.parquet is not what runs.parquet gives: column 'gap' in 1 of 4 rows, first in row 2"
        in out
    )
    forge(place, TABLE, original)
    runs = decode((place / RUNS).read_bytes())
    changed = last_bit(runs, "gap", 45)
    query = json.loads((place / MANIFEST).read_text())["query"]
    forge(place, RUNS, encode(changed))
    forge(place, TABLE, encode(pa.Table.from_pandas(table_of(changed, query), preserve_index=False)))
    assert copy("verify", "first")[0] == 0
    status, out, _ = copy("verify", "first", "--rerun", "4")
    run = runs["run_id"][45].as_py()
    assert status == 1
    assert out == (
        f"frozen table first: run {run} executed again differs from runs.parquet: column 'gap' in 1 of 40 "
        f"rows, first in row 5: {changed['gap'][45].as_py()!r} against {runs['gap'][45].as_py()!r}.\n"
    )


def test_a_table_made_anew_with_all_digests_is_found_by_the_index(copy, place):
    """Whoever changes a table and its manifest must change the index as well, which readers have seen."""
    index = copy.root / "results" / "README.md"
    before = index.read_text()
    forge(place, "statement.txt", b"other\n")
    index.write_text(before)
    status, out, _ = copy("verify", "first")
    assert status == 1
    assert out.startswith("frozen table first: results/README.md lists the frozen table first with manifest ")


@pytest.mark.parametrize("name", ["../x", "a/b", "", ".hidden", "/tmp/labkit-x", "first", "FIRST"])
def test_a_name_that_leaves_the_folder_or_is_in_use_is_refused(copy, place, name):
    before = snapshot(copy.root / "results")
    status, out, err = copy("freeze", "s", "--name", name)
    assert (status, out, err.count("\n")) == (2, "", 1)
    assert err.startswith(f"labkit: name is {name!r}; ")
    assert err.endswith("choose another name.\n" if "irst" in name.lower() else "choose such a name.\n")
    assert snapshot(copy.root / "results") == before


@pytest.mark.parametrize(
    ("words", "sentence"),
    [
        (["furst"], "frozen table is 'furst'; did you mean 'first' (allowed: first)."),
        (["../frozen/first"], "frozen table is '../frozen/first'; allowed: first."),
        (["first", "--rerun", "0"], "rerun is 0; give a whole number of at least 1."),
        (["first", "--rerun", "x"], "--rerun is 'x'; give a whole number."),
    ],
)
def test_bad_input_to_verify(copy, words, sentence):
    assert copy("verify", *words) == (2, "", f"labkit: {sentence}\n")


def test_no_manifest_is_bad_input(copy, place):
    (place / MANIFEST).unlink()
    status, out, err = copy("verify", "first")
    assert (status, out) == (2, "")
    assert err.startswith("labkit: frozen table first has no manifest.json")


def test_changes_are_refused_or_told_in_the_table_itself(copy, place):
    before = snapshot(copy.root / "results")
    try:
        (copy.root / "new.py").write_text("x = 1\n")
        status, out, err = copy("freeze", "s", "--name", "second")
        commit = copy.git("rev-parse", "HEAD")[:10]
        assert (status, out) == (2, "")
        assert err.startswith(
            f"labkit: table second cannot be frozen: the work tree differs from commit {commit}. Commit all"
        )
        assert snapshot(copy.root / "results") == before
        status, out, err = copy("freeze", "s", "--name", "second", "--allow-changes", "--measures", "gap")
        assert status == 0, err
        note = f"No commit holds all that this table rests on: the work tree differs from commit {commit}."
        other = place.with_name("second")
        for name in (MANIFEST, "statement.txt", "table.md", "table.tex"):
            assert note in (other / name).read_text()
        assert f"{commit} with changes |" in (copy.root / "results" / "README.md").read_text()
        assert copy("verify", "second")[0] == copy("verify", "first")[0] == 0
    finally:
        (copy.root / "new.py").unlink()


def test_a_study_that_is_not_committed_is_refused(copy, place, tmp_path):
    path = copy.root / "experiments" / "t.toml"
    path.write_text(STUDY)
    try:
        assert copy("run", "t")[0] == 0
        status, _, err = copy("freeze", "t", "--name", "third")
        assert status == 2
        assert "the study experiments/t.toml is not committed" in err
    finally:
        path.unlink()


def test_a_study_without_all_its_records_is_refused(copy, place):
    status, out, err = copy("freeze", "s", "--name", "third", "--store", str(copy.root.parent / "empty"))
    assert (status, out) == (2, "")
    assert "study s: 2 of 2 runs are not recorded in " in err
    assert err.endswith("; run labkit run s.\n")
