"""Freezing a study's records as a table that one can cite: what it takes, what it refuses, what it writes."""

import json
import subprocess
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.errors import InputError
from labkit.records.frozen import (
    RUNS,
    TABLE,
    Frozen,
    check_files,
    check_new_name,
    encode,
    write_frozen,
)
from labkit.records.frozen_index import index_of, index_text, write_index
from labkit.records.identity import content_files
from labkit.records.project import ANSWERS, FROZEN, ROOT, from_root, path_text
from labkit.records.provenance import git, source_state
from labkit.records.store import Store, check_writable, decode
from labkit.sources import versions
from labkit.studies.answering import MADE_FROM, write_answer
from labkit.studies.grouping import groups_of
from labkit.studies.model import Study, find_study, read_study
from labkit.studies.recorded import recorded_tables

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

# What is taken of an answer, besides its figures.
ANSWER_FILES = ("answer.csv", "answer.txt")
FIGURES = (".png", ".svg")


def freeze(
    study: str,
    name: str,
    store: Store,
    *,
    measures: Sequence[str] | None = None,
    allow_changes: bool = False,
    output: Path = ANSWERS,
    folder: Path = FROZEN,
    root: Path = ROOT,
    say: Callable[[str], None] = lambda sentence: None,
) -> Frozen:
    """Freeze the records of a study as a table, with all that is needed to cite and verify it.

    Parameters
    ----------
    study : str
        A study of experiments/, or the path of a TOML file; all its runs must be recorded.
    name : str
        The name of the table; never one that is there.
    store : Store
        Where the records are.
    measures : sequence of str, optional
        Columns of numbers; default gap and excess, or all when the records have neither.
    allow_changes : bool
        Freeze although not everything is committed; the table then says so.
    output : Path
        The folder of answers, one folder a study in it. An answer not made yet is made.
    folder : Path
        The folder of frozen tables.
    root : Path
        The checkout that has to be committed.
    say : callable
        Called with a sentence for the user before anything that takes time.

    Raises
    ------
    InputError
        When the name is taken or ill-formed, a run is not recorded, something is not committed, the study's
        answer fails, or the records cannot be summarised. Nothing is written.
    StoreError
        When a record is damaged or a folder cannot be written.
    """
    check_new_name(name, folder)
    check_writable("folder", folder)
    check_writable("index", index_of(folder).parent)
    index_text(folder)
    asked = read_study(study)
    tables = recorded_tables(asked, study, store)
    origins = [_origin(table) for table in tables]
    state = source_state(root)
    changes = _changes(find_study(study), asked, origins, state, root)
    if changes and not allow_changes:
        recorded = any(each["dirty"] for each in origins)
        raise InputError(
            f"table {name} cannot be frozen: {'; '.join(changes)}. Commit all changes"
            f"{' and run the study again' if recorded else ''}, or give --allow-changes: the table then says "
            "so itself."
        )
    runs, parameters = evidence(tables, origins)
    content = encode(runs)
    query = _query(asked, decode(content).to_pandas(), parameters, measures)
    table = table_of(decode(content), query)
    facts = {
        "name": name,
        "title": asked.title,
        "question": asked.question,
        "study": asked.name,
        "frozen": datetime.now(UTC).isoformat(timespec="seconds"),
        "git_hash": state["git_hash"],
        "dirty": bool(changes),
        "note": f"No commit holds all that this table rests on: {'; '.join(changes)}." if changes else "",
        "query": query,
        "runs": origins,
        "rows": len(table),
        "versions": versions(),
    }
    files = {RUNS: content, TABLE: encode(_arrow(table))}
    files |= _texts(facts, table, files[TABLE], root)
    files |= _answers(asked, store, output / asked.name, say)
    place = write_frozen(folder, files, facts)
    write_index(folder)
    return Frozen(place, check_files(place)[0])


def evidence(tables: "list[pa.Table]", origins: list[dict[str, Any]]) -> "tuple[pa.Table, list[str]]":
    """Return the measured rows of records as one table, and which of its columns are parameters.

    Each row has the id of its run, and the parameters in which the runs differ.
    """
    import pyarrow as pa

    from labkit.records.schema import measured_part
    from labkit.studies.reading import differing_parameters

    differing = differing_parameters(origins, tables[0].column_names)
    parts = []
    for at, (table, origin) in enumerate(zip(tables, origins, strict=True)):
        rows = table.num_rows
        measured = measured_part(table)
        columns: dict[str, Any] = {"run_id": pa.array([origin["run_id"]] * rows, type=pa.string())}
        columns |= {name: measured[name] for name in measured.column_names}
        columns |= {name: pa.array([values[at]] * rows) for name, values in differing.items()}
        parts.append(pa.table(columns))
    return pa.concat_tables(parts, promote_options="permissive"), list(differing)


def table_of(runs: "pa.Table", query: dict[str, Any]) -> "pd.DataFrame":
    """Return the table that a query of a manifest makes of the rows of runs.parquet."""
    from labkit.analysis.summary import summarise

    return summarise(
        runs.to_pandas(),
        labels=query["labels"],
        measures=query["measures"],
        risk=query["risk"],
        confidence=query["confidence"],
    )


def _arrow(table: "pd.DataFrame") -> "pa.Table":
    import pyarrow as pa

    return pa.Table.from_pandas(table, preserve_index=False)


def _origin(table: "pa.Table") -> dict[str, Any]:
    from labkit.records.schema import row_of_origin

    return {**row_of_origin(table), "rows": table.num_rows}


def _changes(
    file: Path, study: Study, origins: list[dict[str, Any]], state: dict[str, Any], root: Path
) -> list[str]:
    """Return what no commit holds, one part of a sentence each."""
    found = []
    if not state["git_hash"]:
        found.append("the sources here are at no commit")
    elif state["dirty"]:
        found.append(f"the work tree differs from commit {state['git_hash'][:10]}")
    files = {"study": file, "notebook": study.notebook.path}
    if study.answer_notebook is not None:
        files["answer notebook"] = study.answer_notebook.path
    found += [
        f"the {what} {path_text(path)} is not committed"
        for what, path in files.items()
        if not _git_says(root, "ls-files", "--error-unmatch", "--", str(path.resolve()))
    ]
    read = {(name, str(each["parameters"][name])) for each in origins for name in each["inputs"]}
    found += [
        f"{name} {text} is not committed"
        for name, text in sorted(read)
        if not _git_says(
            root, "ls-files", "--error-unmatch", "--", *map(str, content_files(from_root(text, root)))
        )
    ]
    runs = len(origins)
    dirty = [each["run_id"] for each in origins if each["dirty"] and each["git_hash"]]
    if dirty:
        found.append(f"{len(dirty)} of {runs} runs were recorded with changes, the first being {dirty[0]}")
    bare = [each["run_id"] for each in origins if not each["git_hash"]]
    if bare:
        found.append(f"{len(bare)} of {runs} runs were recorded at no commit, the first being {bare[0]}")
    commits = dict.fromkeys(each["git_hash"] for each in origins if each["git_hash"])
    found += [
        f"commit {commit[:10]}, at which runs were recorded, is not in this repository"
        for commit in commits
        if not _git_says(root, "cat-file", "-e", f"{commit}^{{commit}}")
    ]
    return found


def _git_says(root: Path, *words: str) -> bool:
    try:
        return git(root, *words, codes=(0, 1, 128)).returncode == 0
    except (OSError, subprocess.SubprocessError):
        return False


def _query(
    study: Study, runs: "pd.DataFrame", parameters: list[str], measures: Sequence[str] | None
) -> dict[str, Any]:
    from labkit.analysis.summary import MOMENT, labels_of, measures_of

    labels = labels_of(runs, parameters)
    taken = list(measures) if measures is not None else measures_of(runs, labels, parameters)
    risk, confidence = None, 0.95
    if study.answer_notebook is not None and "gap" in taken:
        asked = study.answer_notebook.checked(study.answer_parameters or {})
        risk, confidence = asked.get("risk"), asked.get("confidence", confidence)
    return {
        "study": study.name,
        "moment": MOMENT,
        "labels": labels,
        "parameters": parameters,
        "measures": taken,
        "risk": risk,
        "confidence": confidence,
    }


def _texts(facts: dict[str, Any], table: "pd.DataFrame", content: bytes, root: Path) -> dict[str, bytes]:
    from labkit.analysis.rounded_tables import csv_text, latex_text, markdown_text
    from labkit.studies.citing import citation, legend, statement

    below = " ".join(filter(None, [legend(facts["query"]), facts["note"]]))
    measures = facts["query"]["measures"]
    texts = {
        "table.csv": csv_text(table, measures),
        "table.md": markdown_text(table, measures, below),
        "table.tex": latex_text(table, measures, below),
        "CITATION.bib": citation(facts, content, root),
        "statement.txt": statement(facts),
    }
    return {name: text.encode("utf-8") for name, text in texts.items()}


def _answers(study: Study, store: Store, output: Path, say: Callable[[str], None]) -> dict[str, bytes]:
    """Return the tables, texts and figures of a study's answers; make those that are not made yet."""
    files: dict[str, bytes] = {}
    for group in groups_of(study) if study.answer_notebook is not None else []:
        about = f"{study.name} ({group.heading})" if group.heading else study.name
        say(f"taking the answer of study {about}, made first where it is not yet")
        place = output / group.folder
        check_writable("output", place)
        answer = write_answer(study, group, store, place)
        if answer.error:
            raise InputError(
                f"the answer of study {about} fails: {answer.error.splitlines()[0].rstrip('.')}. Correct "
                "that, since a frozen table holds its figures."
            )
        made = json.loads((place / MADE_FROM).read_bytes())["files"]
        prefix = f"{group.folder}-" if group.folder else ""
        for name in sorted(made):
            if name in ANSWER_FILES or name.endswith(FIGURES):
                files[prefix + name] = (place / name).read_bytes()
    return files
