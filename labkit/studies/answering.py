"""The answer to a study: its answer notebook executed on its runs, and one page made from it."""

import csv
import hashlib
import json
import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from threading import Thread
from typing import Any

from labkit.records import leftovers
from labkit.records.store import Store, unwritable
from labkit.studies.execution import Execution, execute
from labkit.studies.grouping import Group
from labkit.studies.model import Study
from labkit.studies.page import write_page
from labkit.studies.warmth import sources_digest
from labkit.text import align

# Tells from what the answer beside it was made, so that it is not made twice.
MADE_FROM = "made_from.json"


@dataclass(frozen=True)
class Answer:
    """Where the answer is; `error` says why there is none, or what guard it fails."""

    text: str
    page: Path | None
    error: str = ""
    refused: bool = False


def write_answer(study: Study, group: Group, store: Store, output: Path) -> Answer:
    """Execute the answer notebook of a study on the runs of a group, unless its answer is there already.

    Everything is made in a folder aside and moved into `output` when complete. When the notebook refuses a
    value nothing is kept; when it fails otherwise, a guard on the headroom included, what it made is kept.

    Parameters
    ----------
    study : Study
        A study with an answer notebook.
    group : Group
        Points of it that are all recorded.
    store : Store
        Where the records are.
    output : Path
        The folder for the page, the executed notebook and what the notebook writes.

    Raises
    ------
    StoreError
        When `output` cannot be written.
    """
    origin = _origin(study, group, store)
    page = output / f"{study.name}.html"
    if is_made(output, origin):
        return Answer(_answer_text(output), page)
    return publish(
        study.name, origin, study.question, output, lambda aside: _execute(study, group, store, aside)
    )


def publish(
    name: str,
    origin: dict[str, Any],
    question: str,
    output: Path,
    make: Callable[[Path], tuple[Path, Execution]],
) -> Answer:
    """Make a page from an executed notebook in a folder aside; move all of it into `output` when complete.

    Parameters
    ----------
    name : str
        File name of the page without extension.
    origin : dict
        From what it is made, with the `title`; written beside the page.
    question : str
        Stands under the title.
    output : Path
    make : callable
        Executes the notebook in the given folder; returns the executed notebook and how it went.

    Raises
    ------
    StoreError
        When `output` cannot be written.
    """
    page = output / f"{name}.html"
    try:
        output.parent.mkdir(parents=True, exist_ok=True)
        leftovers.sweep(output.parent, os.listdir(output.parent))
        aside = output.parent / leftovers.name_of_new("page")
        aside.mkdir()
    except OSError as error:
        raise unwritable("output", output, error) from None
    try:
        executed, result = make(aside)
        if result.refused or not executed.exists():
            return Answer("", None, result.error, result.refused)
        write_page(executed, executed.with_suffix(".html"), origin["title"], question)
        if not result.error:
            files = {made.name: file_digest(made) for made in sorted(aside.iterdir())}
            (aside / MADE_FROM).write_text(json.dumps({**origin, "files": files}, indent=1), encoding="utf-8")
        text = _answer_text(aside)
        output.mkdir(exist_ok=True)
        (output / MADE_FROM).unlink(missing_ok=True)
        for made in sorted(aside.iterdir(), key=lambda made: made.name == MADE_FROM):
            os.replace(made, output / made.name)
        return Answer(text, page, result.error)
    except OSError as error:
        raise unwritable("output", output, error) from None
    finally:
        shutil.rmtree(aside, ignore_errors=True)


def _execute(study: Study, group: Group, store: Store, aside: Path) -> tuple[Path, Execution]:
    assert study.answer_notebook is not None
    executed = aside / f"{study.name}.ipynb"
    handed = {
        "study": study.name,
        "store": str(store.folder),
        "output": str(aside),
        "runs": [point.run_id for point in group.points],
    }
    result = execute_for_page(study.answer_notebook.path, (study.answer_parameters or {}) | handed, executed)
    return executed, result


def execute_for_page(notebook: Path, parameters: dict[str, Any], executed: Path) -> Execution:
    """Execute a notebook, and load meanwhile what is needed to make a page of it."""
    converter = Thread(target=_load_converter, daemon=True)
    converter.start()
    result = execute(notebook, parameters, executed)
    converter.join()
    return result


def _load_converter() -> None:
    from labkit.studies.light import import_jsonschema

    import_jsonschema()
    import nbconvert.exporters  # noqa: F401  (a second of imports, taken while the kernel works)


def _origin(study: Study, group: Group, store: Store) -> dict[str, Any]:
    assert study.answer_notebook is not None
    records = [store.find(study.name, point.run_id) for point in group.points]
    return {
        "study": study.name,
        "title": f"{study.title}: {group.heading}" if group.heading else study.title,
        "question": study.question,
        "notebook": study.answer_notebook.name,
        "notebook_file": file_digest(study.answer_notebook.path),
        "parameters": study.answer_parameters,
        "records": [record.name for record in records if record is not None],
        "labkit_sources": sources_digest(),
    }


def is_made(output: Path, origin: dict[str, Any]) -> bool:
    """Tell whether `output` holds a page made from just this."""
    try:
        made = json.loads((output / MADE_FROM).read_bytes())
        files = made.pop("files")
        return made == origin and all(file_digest(output / name) == digest for name, digest in files.items())
    except (OSError, ValueError, KeyError, AttributeError):
        return False


def file_digest(path: Path) -> str:
    """Return the SHA-256 of a file."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _answer_text(folder: Path) -> str:
    """Return what to print: answer.txt as it is, else answer.csv with its columns aligned."""
    text = folder / "answer.txt"
    if text.is_file():
        return text.read_text(encoding="utf-8").rstrip()
    table = folder / "answer.csv"
    if not table.is_file():
        return ""
    with table.open(encoding="utf-8", newline="") as stream:
        return align([[_short(cell) for cell in row] for row in csv.reader(stream)])


def _short(cell: str) -> str:
    try:
        int(cell)
    except ValueError:
        try:
            return f"{float(cell):.4g}"
        except ValueError:
            return cell
    return cell
