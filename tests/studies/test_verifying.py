"""Verifying finds what was changed of a frozen table, and says each thing in its own sentence."""

import hashlib
import json
import struct

import pyarrow as pa
import pyarrow.compute as pc
import pytest

import labkit as lk
from labkit.records.frozen import MANIFEST, RUNS, TABLE, encode, frozen_names, manifest_text
from labkit.records.frozen_index import write_index
from labkit.records.project import FROZEN
from labkit.records.schema import with_origin
from labkit.records.store import decode
from labkit.studies import freezing, verifying
from labkit.studies.freezing import table_of
from labkit.studies.places import ExecutionFailed
from labkit.studies.verifying import verify
from tests.records.tiny import write_tiny


class Again:
    """Stands for executing runs: gives what `tables` holds, one a run id, or raises it."""

    def __init__(self, tables):
        self.tables, self.asked = tables, []

    def __call__(self, say):
        return self

    def __enter__(self):
        return self

    def __exit__(self, *error):
        return None

    def measured_again(self, origin):
        self.asked.append(origin)
        found = self.tables[origin["run_id"]]
        if isinstance(found, Exception):
            raise found
        return found, ["numpy was 1 and is 2"]


def forge(place, file, content):
    """Replace a file and make all digests right again, the index as well."""
    (place / file).write_bytes(content)
    path = place / MANIFEST
    manifest = json.loads(path.read_text())
    manifest["files"][file] = hashlib.sha256(content).hexdigest()
    path.write_text(manifest_text(manifest))
    write_index(place.parent)


def one_bit(table, column, row, bit=0):
    """Return a table with one bit of one float flipped."""
    values = table[column].to_pylist()
    (whole,) = struct.unpack("<q", struct.pack("<d", values[row]))
    (values[row],) = struct.unpack("<d", struct.pack("<q", whole ^ (1 << bit)))
    return table.set_column(table.column_names.index(column), column, pa.array(values))


class TestVerify:
    """Each thing that does not hold has its own sentence."""

    @pytest.fixture(autouse=True)
    def trusted(self, monkeypatch):
        """The tiny notebook lies in no repository; `test_hostile_studies.py` tests what is refused."""
        monkeypatch.setattr(verifying, "_is_of_the_project", lambda *given: True)

    def test_one_bit_of_the_table_is_found_by_computing_it_again(self, frozen, folder):
        place = frozen().place
        table = decode((place / TABLE).read_bytes())
        before, after = table["gap"][5].as_py(), one_bit(table, "gap", 5)["gap"][5].as_py()
        forge(place, TABLE, encode(one_bit(table, "gap", 5)))
        (finding,) = verify("first", folder=folder).findings
        assert (finding.kind, finding.file) == ("recomputed", TABLE)
        assert finding.sentence == (
            "file table.parquet is not what runs.parquet gives: column 'gap' in 1 of 8 rows, first in row 5: "
            f"{after!r} against {before!r}; one of the two was changed: restore both."
        )

    def test_one_bit_of_the_evidence_is_found_by_computing_or_by_executing_again(
        self, frozen, folder, project, monkeypatch
    ):
        made = frozen()
        place, run = made.place, made.manifest["runs"][0]["run_id"]
        runs = decode((place / RUNS).read_bytes())
        measured = {each: rows_of(runs, each) for each in ids(made)}
        high, low = one_bit(runs, "gap", 0, bit=40), one_bit(runs, "gap", 0)
        forge(place, RUNS, encode(high))
        assert [each.kind for each in verify("first", folder=folder).findings] == ["recomputed"]
        forge(place, RUNS, encode(low))
        forge(place, TABLE, encode(pa.Table.from_pandas(table_of(low, made.manifest["query"]))))
        assert verify("first", folder=folder).findings == []
        again = Again(measured)
        monkeypatch.setattr("labkit.studies.places.Places", again)
        result = verify("first", 100, folder=folder)
        (finding,) = result.findings
        assert finding.sentence == (
            f"run {run} executed again differs from runs.parquet: column 'gap' in 1 of 10 rows, "
            f"first in row 0: {low['gap'][0].as_py()!r} against {runs['gap'][0].as_py()!r}."
        )
        assert len(result.sampled) == 8
        assert [origin["run_id"] for origin in again.asked] == ids(made)

    def test_equal_bits_hold_and_the_sample_is_drawn(self, frozen, folder, monkeypatch):
        made = frozen()
        runs = decode((made.place / RUNS).read_bytes())
        again = Again({run: rows_of(runs, run) for run in ids(made)})
        monkeypatch.setattr("labkit.studies.places.Places", again)
        drawn = set()
        for _ in range(40):
            result = verify("first", 1, folder=folder)
            assert result.findings == []
            (row,) = result.sampled
            assert (len(result.runs), result.rows) == (1, 10)
            assert result.runs == row.runs
            assert result.notes[0].startswith("No commit holds all that this table rests on: ")
            assert result.notes[1:] == [f"run {row.runs[0]}: numpy was 1 and is 2"]
            assert row.about.startswith(f"policy {made.table.loc[row.at, 'policy']!r}, share ")
            drawn.add(row.at)
        # 40 equal draws from 8 rows miss more than four of them with a probability below 10⁻¹⁰
        assert len(drawn) >= 4

    def test_a_run_that_breaks_or_measures_otherwise_is_named(self, frozen, folder, monkeypatch):
        made = frozen()
        runs = decode((made.place / RUNS).read_bytes())
        first, second, *others = ids(made)
        measured = {run: rows_of(runs, run) for run in others}
        measured[first] = ExecutionFailed("RuntimeError: the well is dry", None, [])
        measured[second] = rows_of(runs, second).slice(1)
        monkeypatch.setattr("labkit.studies.places.Places", Again(measured))
        findings = verify("first", 8, folder=folder).findings
        assert [each.sentence for each in findings] == [
            f"run {first} could not be executed again: RuntimeError: the well is dry.",
            f"run {second} executed again differs from runs.parquet: 10 rows against 9.",
        ]

    def test_nothing_is_executed_when_the_files_do_not_hold(self, frozen, folder):
        place = frozen().place
        (place / "table.md").write_text("x")
        result = verify("first", 3, folder=folder)
        assert [each.kind for each in result.findings] == ["changed"]
        assert result.sampled == []
        assert result.notes[1:] == ["nothing was executed again, since the files do not hold"]

    def test_a_forged_file_that_is_no_table_is_found(self, frozen, folder):
        place = frozen().place
        forge(place, RUNS, b"PAR1")
        (finding,) = verify("first", folder=folder).findings
        assert finding.kind == "unreadable"
        assert finding.sentence.startswith("file runs.parquet cannot be read as a table (")

    def test_a_forged_query_is_found(self, frozen, folder):
        place = frozen().place
        path = place / MANIFEST
        manifest = json.loads(path.read_text())
        manifest["query"]["measures"] = ["gup"]
        path.write_text(manifest_text(manifest))
        findings = verify("first", folder=folder).findings
        assert [each.kind for each in findings] == ["index", "recomputed"]
        assert "it cannot be computed: measures names 'gup'" in findings[1].sentence

    @pytest.mark.parametrize(
        ("change", "words"),
        [
            (lambda runs: runs.slice(1), "has 9 rows of run {0} and manifest.json says 10"),
            (lambda runs: pa.concat_tables([runs, runs.slice(0, 1)]), "has 11 rows of run {0}"),
            (lambda runs: runs.drop_columns("run_id"), "has no column 'run_id'"),
            (lambda runs: pa.concat_tables([runs, stranger(runs)]), "has rows of run x, which manifest.json"),
        ],
    )
    def test_forged_rows_are_counted(self, frozen, folder, change, words):
        made = frozen()
        forge(made.place, RUNS, encode(change(decode((made.place / RUNS).read_bytes()))))
        (finding,) = verify("first", folder=folder).findings
        assert finding.sentence.startswith(f"file runs.parquet {words.format(*ids(made))}")

    def test_the_projects_own_frozen_tables_hold(self):
        found = {name: verify(name).findings for name in frozen_names(FROZEN)}
        assert {name: findings for name, findings in found.items() if findings} == {}

    @pytest.mark.parametrize("rerun", [0, -1, 1.5, True])
    def test_a_number_that_is_none_is_refused(self, frozen, folder, rerun):
        frozen()
        with pytest.raises(lk.InputError, match="rerun is "):
            verify("first", rerun, folder=folder)

    def test_real_executions_give_the_same_bits(self, frozen, folder, project):
        """The tiny notebook with a share of 0.5 measures what the fixture recorded without a kernel."""
        frozen(study=project.study(extra="tasks = 4"))
        result = verify("first", 5, folder=folder)
        assert result.findings == []
        assert (len(result.sampled), len(result.runs), result.rows) == (2, 1, 6)
        write_tiny(project.notebook, measure="draws = [0.5] * replicates\n" + MEASURE_OTHERWISE)
        (finding,) = verify("first", 1, folder=folder).findings
        assert "executed again differs from runs.parquet: column 'gap' in 6 of 6 rows, first in row 0" in (
            finding.sentence
        )


MEASURE_OTHERWISE = """
tables = [
    pd.DataFrame({"policy": name, "replicate": range(replicates), "tasks": tasks, "gap": draws})
    for name in policies
]
"""


def stranger(runs):
    """One row of a run that no manifest names."""
    return runs.slice(0, 1).set_column(0, "run_id", pa.array(["x"]))


def ids(made):
    return [run["run_id"] for run in made.manifest["runs"]]


def rows_of(runs, run):
    rows = runs.filter(pc.equal(runs["run_id"], run))
    return rows.select(["policy", "replicate", "tasks", "gap"])


def test_runs_that_measure_different_columns_are_compared_with_their_own(tmp_path):
    wide = pa.table({"replicate": [0, 1], "tasks": [1, 1], "gap": [0.1, 0.2], "excess": [0.1, 0.1]})
    narrow = wide.drop_columns("excess")
    facts = {
        name: "" for name in ("git_hash", "diff_digest", "bit_generator", "draws", "notebook", "started")
    }
    facts |= {"study": "s", "dirty": False, "versions": "{}", "entropy": "1", "spawn_key": "[1]"}
    facts |= {"notebook_digest": "", "parameters": "{}", "inputs": "{}", "rules": "{}", "elapsed": 0.0}
    records = [with_origin(each, {**facts, "run_id": run}) for run, each in (("a", wide), ("b", narrow))]
    origins = [{"run_id": run, "parameters": {"share": share}} for run, share in (("a", 1), ("b", 2))]
    runs, parameters = freezing.evidence(records, origins)
    assert parameters == ["share"]
    assert runs["share"].to_pylist() == [1, 1, 2, 2]
    assert verifying._run_difference(runs, "a", wide, parameters) == ""
    assert verifying._run_difference(runs, "b", narrow, parameters) == ""
    # In another order than the first run has them.
    late = wide.select(["replicate", "tasks", "excess", "gap"])
    runs, parameters = freezing.evidence(
        [with_origin(narrow, {**facts, "run_id": "b"}), records[0]], origins[::-1]
    )
    assert verifying._run_difference(runs, "a", wide, parameters) == ""
    assert verifying._run_difference(runs, "a", late, parameters) == ""
    runs, parameters = freezing.evidence(records, origins)
    assert "columns" in verifying._run_difference(runs, "a", narrow, parameters)
    assert "columns" in verifying._run_difference(runs, "b", wide.drop_columns("gap"), parameters)
