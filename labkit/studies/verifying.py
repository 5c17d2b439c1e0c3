"""Verifying a frozen table: every byte of it, the table from its rows, and a sample of its runs anew."""

import random
import re
import subprocess
from collections import Counter
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.checks import check_whole
from labkit.errors import InputError
from labkit.records.frozen import MANIFEST, RUNS, TABLE, Finding, check_files, find_frozen
from labkit.records.frozen_index import check_index
from labkit.records.project import FROZEN, ROOT, check_study_name, from_root
from labkit.records.provenance import git
from labkit.records.store import decode
from labkit.sharing.waiting import Waiting
from labkit.studies.commits import HASH
from labkit.studies.freezing import table_of

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

    from labkit.studies.places import Places


RUN_ID = re.compile(r"[0-9a-f]{16}")


@dataclass(frozen=True)
class Row:
    """A row of the table: where it is, counted from 0, its labels in words, and the runs behind it."""

    at: int
    about: str
    runs: list[str]


@dataclass
class Verification:
    """What was checked of a frozen table, and what does not hold.

    Attributes
    ----------
    name : str
    files : int
        Files checked, the manifest among them.
    findings : list of Finding
        Empty when all holds.
    sampled : list of Row
        Rows of the table that were drawn; their runs were executed again.
    runs : list of str
        Ids of these runs.
    rows : int
        Measured rows that were compared bit for bit.
    notes : list of str
        What should be known about the executions.
    """

    name: str
    files: int = 0
    findings: list[Finding] = field(default_factory=list)
    sampled: list[Row] = field(default_factory=list)
    runs: list[str] = field(default_factory=list)
    rows: int = 0
    notes: list[str] = field(default_factory=list)


def verify(
    name: str,
    rerun: int | None = None,
    *,
    folder: Path = FROZEN,
    say: Callable[[str], None] = lambda sentence: None,
) -> Verification:
    """Check a frozen table, and execute the runs behind some of its rows again.

    Parameters
    ----------
    name : str
        The name of the table.
    rerun : int, optional
        The number of rows, drawn at random, whose runs are executed again; all when there are fewer. Nothing
        is executed when the files do not hold.
    folder : Path
        The folder of frozen tables.
    say : callable
        Called with a sentence for the user before anything that takes time.

    Raises
    ------
    InputError
        When there is no such table, `rerun` is below 1, or a run cannot be executed here.
    """
    if rerun is not None:
        check_whole("rerun", rerun)
    place = find_frozen(name, folder)
    manifest, findings = check_files(place, name)
    result = Verification(name, len(manifest.get("files", ())) + bool(manifest), findings)
    if not manifest:
        return result
    if manifest["note"]:
        result.notes.append(manifest["note"].rstrip("."))
    findings += check_index(folder, name, manifest)
    wrong = {each.file for each in findings if each.kind in ("missing", "changed", "manifest")}
    if not wrong & {RUNS, TABLE, MANIFEST}:
        findings += _recomputed(place, manifest)
    if rerun is not None:
        if findings:
            result.notes.append("nothing was executed again, since the files do not hold")
        else:
            _rerun(result, place, manifest, rerun, say)
    return result


def _recomputed(place: Path, manifest: dict[str, Any]) -> list[Finding]:
    """Compute the table again from its rows and compare every bit of it."""
    tables = {}
    for file in (RUNS, TABLE):
        try:
            tables[file] = _table(place / file)
        except (OSError, ValueError) as error:
            return [
                Finding("unreadable", file, f"file {file} cannot be read as a table ({error}); restore it.")
            ]
    found = _disagreement(tables[RUNS], tables[TABLE], manifest)
    if found:
        return [Finding("recomputed", RUNS, f"file {found}; restore it.")]
    try:
        found = _difference(tables[TABLE].to_pandas(), table_of(tables[RUNS], manifest["query"]))
    except (ValueError, LookupError, TypeError, AttributeError, ArithmeticError) as error:
        found = f"it cannot be computed: {error}"
    if not found:
        return []
    sentence = f"file {TABLE} is not what {RUNS} gives: {found}; one of the two was changed: restore both."
    return [Finding("recomputed", TABLE, sentence)]


def _table(path: Path) -> "pa.Table":
    """Return a table of a frozen folder; refuse one that Arrow cannot read or that is too large."""
    from labkit.fleet.parquet_files import check_size, frame_of

    content = path.read_bytes()
    try:
        check_size(path, content)
    except InputError as error:
        raise ValueError(str(error).rstrip(".")) from None
    try:
        table = decode(content)
        table.validate(full=True)
    except MemoryError:
        raise
    except Exception as error:  # Arrow's own kinds, those of Python, and those of codecs
        about = (str(error).splitlines() or [type(error).__name__])[0]
        raise ValueError(about) from None
    if len(set(table.column_names)) < len(table.column_names):
        raise ValueError("a column is there twice")
    nested = [field.name for field in table.schema if not _is_flat(field.type)]
    if nested:
        raise ValueError(f"column {nested[0]!r} holds neither numbers nor texts")
    frame_of(path, table.slice(0, 0))
    return table


def _is_flat(kind: "pa.DataType") -> bool:
    import pyarrow.types as types

    fitting = (types.is_integer, types.is_floating, types.is_boolean, types.is_string, types.is_large_string)
    return types.is_null(kind) or any(fits(kind) for fits in fitting)


def _disagreement(runs: "pa.Table", table: "pa.Table", manifest: dict[str, Any]) -> str:
    """Return what the manifest says of columns and of numbers of rows and does not hold."""
    if "run_id" not in runs.column_names:
        return f"{RUNS} has no column 'run_id'"
    for name in manifest["query"]["parameters"]:
        if name == "run_id" or name not in runs.column_names:
            return f"{RUNS} has no parameter {name!r} among its columns, and {MANIFEST} names one"
    held = Counter(runs["run_id"].to_pylist())
    for run in manifest["runs"]:
        rows = held.pop(run["run_id"], 0)
        if rows != run["rows"]:
            return f"{RUNS} has {rows} rows of run {run['run_id']} and {MANIFEST} says {run['rows']}"
    if held:
        return f"{RUNS} has rows of run {next(iter(held))}, which {MANIFEST} does not name"
    if table.num_rows != manifest["rows"]:
        return f"{TABLE} has {table.num_rows} rows and {MANIFEST} says {manifest['rows']}"
    return ""


def _difference(table: "pd.DataFrame", again: "pd.DataFrame") -> str:
    import pyarrow as pa

    from labkit.records.schema import first_difference

    return first_difference(
        pa.Table.from_pandas(table, preserve_index=False), pa.Table.from_pandas(again, preserve_index=False)
    )


def _rerun(
    result: Verification, place: Path, manifest: dict[str, Any], count: int, say: Callable[[str], None]
) -> None:
    from labkit.analysis.summary import runs_behind
    from labkit.analysis.tables import describe
    from labkit.studies.places import ExecutionFailed, Places

    runs = decode((place / RUNS).read_bytes())
    behind = runs_behind(runs.to_pandas(), manifest["query"]["labels"])
    drawn = random.SystemRandom().sample(range(len(behind)), min(count, len(behind)))
    table = decode((place / TABLE).read_bytes()).to_pandas()
    for at in sorted(drawn):
        about = describe(table.iloc[at], [*manifest["query"]["labels"], "tasks"])
        result.sampled.append(Row(at, about, behind[at]))
    result.runs = list(dict.fromkeys(run for row in result.sampled for run in row.runs))
    origins = {run["run_id"]: run for run in manifest["runs"]}
    for run in result.runs:
        check_executable(origins[run], (place.parent, FROZEN))
    measured: dict[str, pa.Table] = {}
    with Places(say) as places, Waiting("runs executed again", len(result.runs), "run") as waiting:
        for run in result.runs:
            try:
                again, notes = _measured_again(places, origins[run])
            except ExecutionFailed as error:
                sentence = f"run {run} could not be executed again: {error}."
                result.findings.append(Finding("failed", RUNS, sentence))
                continue
            result.notes += [f"run {run}: {note}" for note in notes]
            measured[run] = again
            waiting.add()
    for run, again in measured.items():
        difference = _run_difference(runs, run, again, manifest["query"]["parameters"])
        result.rows += again.num_rows
        if difference:
            sentence = f"run {run} executed again differs from {RUNS}: {difference}."
            result.findings.append(Finding("rerun", RUNS, sentence))
    _check_rows(result, place, runs, measured, manifest["query"])


def check_executable(origin: dict[str, Any], frozen: Iterable[Path]) -> None:
    """Refuse to execute a run whose origin is none that labkit writes, or whose notebook came with its table.

    Parameters
    ----------
    origin : dict
        What a manifest, which a stranger may have written, says of a run.
    frozen : iterable of Path
        Folders of frozen tables: what is in them is evidence, never code.

    Raises
    ------
    InputError
    """
    run = origin["run_id"]
    if not RUN_ID.fullmatch(run):
        raise InputError(f"run is {run!r} in {MANIFEST}; a run has 16 hex digits: restore the manifest.")
    if origin["git_hash"] and not HASH.fullmatch(origin["git_hash"]):
        raise InputError(
            f"run {run}: its commit is {origin['git_hash']!r} in {MANIFEST}; a commit has 40 or 64 hex "
            "digits: restore the manifest."
        )
    check_study_name(origin["study"])
    notebook = origin["notebook"]
    if notebook.endswith(".ipynb"):
        place = from_root(notebook)
        among = any(place.is_relative_to(folder.resolve()) for folder in frozen)
        if among or not _is_of_the_project(place, origin["git_hash"]):
            where = "lies among frozen tables" if among else "is no notebook that this project's commits hold"
            raise InputError(
                f"run {run}: its notebook is {notebook!r}, which {where}; a table may bring a stranger's "
                "program, so it is not executed: if the run is yours, use labkit rerun."
            )


def _is_of_the_project(notebook: Path, commit: str) -> bool:
    """Tell whether a notebook is a file of the project that git knows, now or at a commit."""
    if not notebook.is_relative_to(ROOT):
        return False
    name = notebook.relative_to(ROOT).as_posix()
    try:
        if git(ROOT, "ls-files", "--error-unmatch", "--", f":(literal){name}", codes=(0, 1)).returncode == 0:
            return True
        return bool(commit) and (
            git(ROOT, "cat-file", "-e", f"{commit}:./{name}", codes=(0, 1, 128)).returncode == 0
        )
    except (OSError, subprocess.SubprocessError):
        return False


def _measured_again(places: "Places", origin: dict[str, Any]) -> "tuple[pa.Table, list[str]]":
    """Execute a run again; with today's code where its commit is missing, since equal bits are proof too."""
    from labkit.studies.commits import CommitMissing

    try:
        return places.measured_again(origin)
    except CommitMissing as refusal:
        again = places.again(origin, here=True)
        return again.table, [f"{refusal.fact}; executed with today's code", *again.notes]


def _run_difference(runs: "pa.Table", run: str, again: "pa.Table", parameters: list[str]) -> str:
    """Return where the frozen rows of a run differ from what it measured again."""
    from labkit.records.schema import first_difference

    return first_difference(_measured_rows(runs, run, again.column_names, parameters), again)


def _measured_rows(runs: "pa.Table", run: str, names: list[str], parameters: list[str]) -> "pa.Table":
    """Return the frozen rows of a run; columns that only other runs have are left out."""
    import pyarrow.compute as pc

    rows = runs.filter(pc.equal(runs["run_id"], run)).drop_columns(["run_id", *parameters])
    present = [name for name in names if name in rows.column_names]
    others = [name for name in rows.column_names if name not in names]
    return rows.select([*present, *(name for name in others if rows[name].null_count < rows.num_rows)])


def _check_rows(
    result: Verification,
    place: Path,
    runs: "pa.Table",
    measured: "dict[str, pa.Table]",
    query: dict[str, Any],
) -> None:
    """Compute the drawn rows of the table again from what was measured again."""
    import pyarrow as pa
    import pyarrow.compute as pc

    if result.findings:
        return  # rows that differ are named already
    parts = []
    for run in pc.unique(runs["run_id"]).to_pylist():
        rows = runs.filter(pc.equal(runs["run_id"], run))
        if run in measured:
            again = measured[run]
            for name in again.column_names:
                at = rows.column_names.index(name)
                rows = rows.set_column(at, name, again[name].cast(rows[name].type))
        parts.append(rows)
    drawn = [row.at for row in result.sampled]
    table = decode((place / TABLE).read_bytes()).to_pandas()
    found = _difference(
        table.iloc[drawn].reset_index(drop=True),
        table_of(pa.concat_tables(parts), query).iloc[drawn].reset_index(drop=True),
    )
    if found:
        sentence = f"the rows of {TABLE} computed from the runs executed again differ: {found}."
        result.findings.append(Finding("rerun", TABLE, sentence))
