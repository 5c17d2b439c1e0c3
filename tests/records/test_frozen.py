"""A frozen table knows every byte of itself; it is written as a whole, once, inside its folder."""

import json

import pyarrow as pa
import pytest

import labkit as lk
from labkit.records import frozen
from labkit.records.frozen import MANIFEST, check_files, manifest_text, read_frozen, write_frozen
from labkit.records.frozen_index import check_index, index_of, index_text, write_index
from labkit.records.project import FROZEN
from labkit.records.provenance import provenance
from labkit.records.schema import row_of_origin, with_origin
from tests.records.tiny import snapshot

FILES = {
    "runs.parquet": frozen.encode(pa.table({"run_id": ["r", "r"], "replicate": [0, 1], "gap": [0.5, 0.25]})),
    "table.parquet": frozen.encode(pa.table({"policy": ["a"], "gap": [0.375]})),
    "table.csv": b"policy,gap\n",
    "note.txt": b"x",
}


def origin(run_id="r"):
    facts = {
        **provenance(),
        "study": "s",
        "run_id": run_id,
        "entropy": str(10**30),
        "spawn_key": "[7]",
        "notebook": "n",
        "notebook_digest": "d",
        "parameters": '{"policies":["a"],"tasks":3}',
        "inputs": "{}",
        "rules": '{"mine":"def mine(): ..."}',
        "started": "2026-01-01T00:00:00.000+00:00",
        "elapsed": 0.1,
    }
    return with_origin(pa.table({"replicate": [0, 1], "gap": [0.5, 0.25]}), facts)


def facts(name="first"):
    return {
        "name": name,
        "title": "A | title",
        "question": "Why?",
        "study": "s",
        "frozen": "2026-12-01T00:00:00+00:00",
        "git_hash": "a" * 40,
        "dirty": False,
        "note": "",
        "query": {
            "study": "s",
            "moment": "last checkpoint",
            "labels": [],
            "parameters": [],
            "measures": ["gap"],
            "risk": None,
            "confidence": 0.95,
        },
        "runs": [{**row_of_origin(origin()), "rows": 2}],
        "rows": 1,
        "versions": {"labkit": "0"},
    }


@pytest.fixture
def folder(tmp_path):
    """A folder of frozen tables with one in it."""
    write_frozen(tmp_path / "frozen", FILES, facts())
    write_index(tmp_path / "frozen")
    return tmp_path / "frozen"


def kinds(findings):
    return [(each.kind, each.file) for each in findings]


def test_a_frozen_table_holds_as_written(folder):
    manifest, findings = check_files(folder / "first", "first")
    assert findings == []
    assert manifest["files"].keys() == FILES.keys()
    assert [path.name for path in folder.iterdir()] == ["first"]


@pytest.mark.parametrize("file", FILES)
def test_any_changed_byte_of_a_file_is_found(folder, file):
    path = folder / "first" / file
    content = path.read_bytes()
    for at in range(0, len(content), max(1, len(content) // 50)):
        path.write_bytes(content[:at] + bytes([content[at] ^ 1]) + content[at + 1 :])
        assert kinds(check_files(folder / "first")[1]) == [("changed", file)]
    path.write_bytes(content + b"\0")
    assert kinds(check_files(folder / "first")[1]) == [("changed", file)]
    path.unlink()
    assert kinds(check_files(folder / "first")[1]) == [("missing", file)]


@pytest.mark.parametrize(("bit", "step"), [(1, 1), (32, 3)])
def test_any_changed_byte_of_the_manifest_is_found(folder, bit, step):
    """Those included that change nothing of what it says, such as a space, or the case of an escape."""
    path = folder / "first" / MANIFEST
    content = path.read_bytes()
    for at in range(0, len(content), step):
        path.write_bytes(content[:at] + bytes([content[at] ^ bit]) + content[at + 1 :])
        assert ("manifest", MANIFEST) in kinds(check_files(folder / "first")[1]), at
    other = json.loads(content)
    for change in ({"rows": "2"}, {"runs": [{}]}, {"query": {}}, {"dirty": "no"}, {"more": 1}):
        path.write_text(manifest_text({**other, **change}))
        assert kinds(check_files(folder / "first")[1]) == [("manifest", MANIFEST)]
    for text in (content + b"\n", content[:-1], b"", b"[]", b"\xff", b"[" * 100_000):
        path.write_bytes(text)
        assert kinds(check_files(folder / "first")[1]) == [("manifest", MANIFEST)]


def test_a_file_too_many_is_found_at_any_depth(folder):
    (folder / "first" / ".hidden").write_text("")
    (folder / "first" / "deep").mkdir()
    (folder / "first" / "deep" / "x").write_text("")
    found = kinds(check_files(folder / "first")[1])
    assert found == [("added", ".hidden"), ("added", "deep"), ("added", "deep/x")]


@pytest.mark.parametrize("litter", [".DS_Store", "Thumbs.db", ".ipynb_checkpoints/table-checkpoint.md"])
def test_what_desktops_leave_is_no_file_of_the_table(folder, litter):
    place = folder / "first"
    (place / litter).parent.mkdir(exist_ok=True)
    (place / litter).write_text("x")
    assert check_files(place, "first")[1] == []


def test_a_manifest_of_another_name_or_schema_is_found(folder):
    (folder / "first").rename(folder / "second")
    _, (finding,) = check_files(folder / "second", "second")
    assert "is that of the frozen table first, in the folder second" in finding.sentence
    path = folder / "second" / MANIFEST
    path.write_text(manifest_text({**json.loads(path.read_text()), "schema": 99}))
    _, (finding,) = check_files(folder / "second")
    assert "is of schema 99 and this labkit reads 1" in finding.sentence


@pytest.mark.parametrize("file", ["../first/note.txt", "a/b", "..", "", MANIFEST])
def test_a_manifest_names_no_file_outside_its_folder(folder, file):
    path = folder / "first" / MANIFEST
    manifest = json.loads(path.read_text())
    path.write_text(manifest_text({**manifest, "files": {file: "0" * 64}}))
    assert kinds(check_files(folder / "first")[1]) == [("manifest", MANIFEST)]


@pytest.mark.parametrize("name", ["first", "FIRST", "First"])
def test_a_name_in_use_is_refused_and_nothing_touched(folder, name):
    before = snapshot(folder)
    with pytest.raises(lk.InputError, match=r"is there, and a frozen table is never overwritten"):
        write_frozen(folder, {"other": b"y"}, facts(name))
    assert snapshot(folder) == before
    assert sorted(path.name for path in folder.iterdir()) == ["first"]


@pytest.mark.parametrize("name", ["../x", "a/b", "", ".hidden", "/tmp/x", "a\\b", "..", "x.", "a" * 65, 3])
def test_a_name_that_could_leave_the_folder_is_refused(tmp_path, name):
    with pytest.raises(lk.InputError, match=r"name is .*a frozen table's name begins with a letter or digit"):
        frozen.check_new_name(name, tmp_path)


def test_what_does_not_read_back_is_not_published(tmp_path, monkeypatch):
    torn = frozen.Finding("changed", "x", "file x has changed.")
    monkeypatch.setattr(frozen, "check_files", lambda place: ({}, [torn]))
    with pytest.raises(lk.StoreError, match="did not read back as written"):
        write_frozen(tmp_path / "frozen", FILES, facts())
    assert list((tmp_path / "frozen").iterdir()) == []


def test_a_folder_that_cannot_be_written_is_refused(tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(lk.StoreError, match="cannot be written"):
        write_frozen(tmp_path / "file" / "frozen", FILES, facts())


class TestReadFrozen:
    """`lk.read_frozen` gives the table and its rows, after all bytes were checked."""

    def test_tables_and_manifest(self, folder):
        read = read_frozen("first", folder)
        assert read.table.to_dict("records") == [{"policy": "a", "gap": 0.375}]
        assert read.runs.equals(origin().to_pandas())
        assert read.manifest["title"] == "A | title"
        assert repr(read).startswith("<frozen table first: A | title: 1 rows from 1 runs of the study s")
        assert "<td>0.375</td>" in read._repr_html_()
        assert "<p>A | title" in read._repr_html_()

    def test_what_does_not_hold_is_refused(self, folder):
        (folder / "first" / "note.txt").write_text("y")
        with pytest.raises(
            lk.StoreError, match=r"frozen table first: file note.txt has changed: its SHA-256"
        ):
            read_frozen("first", folder)

    def test_an_unknown_name_names_the_nearest(self, folder, tmp_path):
        with pytest.raises(lk.InputError, match="frozen table is 'furst'; did you mean 'first'"):
            read_frozen("furst", folder)
        with pytest.raises(lk.InputError, match="holds none"):
            read_frozen("first", tmp_path / "nowhere")
        (folder / "first" / MANIFEST).unlink()
        with pytest.raises(lk.InputError, match=r"has no manifest.json"):
            read_frozen("first", folder)


class TestIndex:
    """results/README.md lists what the folders hold."""

    def test_the_projects_own_index_is_that_of_its_folders(self):
        text = index_of(FROZEN).read_text(encoding="utf-8")
        assert text.startswith("`runs/` holds ")
        table = index_text(FROZEN)
        assert text.endswith(f"\n\n{table}" if table else "git keeps them.\n")

    def test_it_stands_below_what_is_there_and_is_written_anew(self, folder):
        path = index_of(folder)
        path.write_text("Above.\nMore.\n")
        write_index(folder)
        first = path.read_text()
        line = "| [first](frozen/first/table.md) | A \\| title | 1 | 1 | 2026-12-01 | aaaaaaaaaa | "
        assert first.startswith("Above.\nMore.\n\n| frozen table |")
        assert line in first
        write_frozen(folder, FILES, {**facts("second"), "dirty": True})
        write_index(folder)
        second = path.read_text()
        assert second.startswith(first)
        assert "| aaaaaaaaaa with changes |" in second
        assert second.endswith(index_text(folder))
        path.write_text(second + "\nBelow | all.\n")
        write_index(folder)
        assert path.read_text() == second + "\nBelow | all.\n"

    def test_a_line_that_is_missing_or_other_is_found(self, folder):
        path, manifest = index_of(folder), check_files(folder / "first")[0]
        assert check_index(folder, "first", manifest) == []
        text = path.read_text()
        digest = manifest["digest"][:12]
        for changed, words in (
            (text.replace(digest, "0" * 12), f"with manifest {'0' * 12}, and its manifest is {digest}"),
            (text.replace("2026-12-01", "2026-12-02"), "otherwise than its manifest does"),
            (text.replace("| [first]", "| [other]"), "does not list the frozen table first"),
        ):
            path.write_text(changed)
            (finding,) = check_index(folder, "first", manifest)
            assert words in finding.sentence

    def test_a_damaged_manifest_is_refused_before_the_index_is_touched(self, folder):
        before = index_of(folder).read_text()
        (folder / "first" / MANIFEST).write_text("{}")
        with pytest.raises(lk.StoreError, match=r"frozen table first: file manifest.json is not as it was"):
            write_index(folder)
        assert index_of(folder).read_text() == before
