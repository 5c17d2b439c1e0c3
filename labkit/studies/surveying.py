"""The survey of a fleet folder: the survey notebook executed, its run recorded, and a page made of it."""

import json
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from labkit.fleet.readers import read_fleet
from labkit.records.declared import read_notebook
from labkit.records.identity import identify
from labkit.records.project import check_study_name, find_notebook
from labkit.records.store import Store, check_writable
from labkit.studies.answering import Answer, execute_for_page, file_digest, is_made, publish
from labkit.studies.door import SURVEY, check_values
from labkit.studies.execution import Execution
from labkit.studies.own_fleet import check_own_records, name_of_folder
from labkit.studies.warmth import COLD, is_warm, sources_digest

# What the notebook writes for programs to read.
DATA, TEXT = "survey.json", "answer.txt"
QUESTION = "What is the best that any placement rule could do on this fleet, and what stands in the way?"


@dataclass(frozen=True)
class Surveyed:
    """The survey of a folder: the run, its record, what to print, and where the page is."""

    run_id: str
    study: str
    answer: Answer
    record: Path | None = None
    text: str = ""
    data: dict[str, Any] = field(default_factory=dict)


def survey_folder(
    folder: Path,
    store: Store,
    output: Path,
    *,
    name: str | None = None,
    say: Callable[[str], None] = lambda sentence: None,
    **parameters: Any,
) -> Surveyed:
    """Survey a fleet folder, unless the same survey is recorded and its page there already.

    Parameters
    ----------
    folder : Path
        The folder of the two tables.
    store : Store
        Where the record goes.
    output : Path
        Folder in which the survey gets a folder of its own.
    name : str, optional
        The name of the fleet; default the folder's. The study is called by it, with "-survey" behind.
    say : callable
        Called with a sentence for the user before anything is executed.
    **parameters
        Parameters of the survey notebook; None counts as not given.

    Raises
    ------
    InputError
        When a table or value is refused. Nothing is written then.
    StoreError
        When the store or `output` cannot be written.
    """
    notebook = read_notebook(find_notebook(SURVEY))
    given = {key: value for key, value in parameters.items() if value is not None}
    check_values(notebook, given)
    read_fleet(folder)
    fleet = name_of_folder(folder) if name is None else name
    study = f"{check_study_name(fleet)}-survey"
    store.check_writable(study)
    place = output / study
    check_writable("output", place)
    asked = {**given, "fleet": folder.resolve().as_posix(), "study": study, "store": str(store.folder)}
    identity = identify(notebook, notebook.checked(asked))
    run_id = identity.run_id
    check_own_records(study, identity.parameters["fleet"], store)
    origin = {
        "study": study,
        "title": f"Survey of {fleet}",
        "run": run_id,
        "notebook": notebook.name,
        "notebook_file": file_digest(notebook.path),
        "labkit_sources": sources_digest(),
    }

    def make(aside: Path) -> tuple[Path, Execution]:
        executed = aside / f"{study}.ipynb"
        return executed, execute_for_page(notebook.path, {**asked, "output": str(aside)}, executed)

    if store.find(study, run_id) is not None and is_made(place, origin):
        answer = Answer("", place / f"{study}.html")
    else:
        if not is_warm():
            say(COLD)
        answer = publish(study, origin, QUESTION, place, make)
    if answer.error:
        return Surveyed(run_id, study, answer)
    return Surveyed(
        run_id,
        study,
        answer,
        store.find(study, run_id),
        (place / TEXT).read_text(encoding="utf-8").rstrip(),
        json.loads((place / DATA).read_text(encoding="utf-8")),
    )
