"""Executing a recorded run again and comparing every measure bit for bit."""

import tempfile
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

from labkit.errors import InputError
from labkit.records.declared import read_notebook
from labkit.records.identity import content_digest, identify
from labkit.records.project import find_notebook, from_root
from labkit.records.schema import first_difference, measured_part, row_of_origin
from labkit.records.store import Store
from labkit.studies.execution import execute
from labkit.studies.warmth import COLD, is_warm, set_warm


@dataclass
class Comparison:
    """A record against its re-execution; `difference` is empty when every bit is equal."""

    run_id: str
    rows: int = 0
    columns: list[str] = field(default_factory=list)
    difference: str = ""
    notes: list[str] = field(default_factory=list)


def rerun(store: Store, path: Path, say: Callable[[str], None] = lambda sentence: None) -> Comparison:
    """Execute the run of a record again, in a temporary store, and compare.

    Parameters
    ----------
    store : Store
        The store of the record; it is not changed.
    path : Path
        The file of the record.
    say : callable
        Called with a sentence for the user before anything is executed.

    Raises
    ------
    InputError
        When the files that the run read have changed, or its notebook is gone or takes other parameters.
    """
    table = store.read(path)
    origin = row_of_origin(table)
    result = Comparison(origin["run_id"])
    notebook = read_notebook(find_notebook(origin["notebook"]))
    if notebook.digest != origin["notebook_digest"]:
        result.notes.append(f"the code of notebook {notebook.name} has changed since the record was made")
    for name, digest in origin["inputs"].items():
        place = from_root(origin["parameters"][name])
        if not place.exists() or content_digest(place) != digest:
            raise InputError(
                f"{name} of run {result.run_id} is {str(place)!r}, whose files are not those of the record; "
                "restore them to rerun it."
            )
    identity = identify(notebook, notebook.checked(origin["parameters"]))
    if identity.library != origin["versions"]["labkit"]:
        result.notes.append(f"labkit was {origin['versions']['labkit']} and is {identity.library}")
    if not is_warm():
        say(COLD)
    with tempfile.TemporaryDirectory(prefix="labkit-") as scratch:
        again = Store(Path(scratch) / "store")
        handed = {"study": origin["study"], "store": str(again.folder)}
        done = execute(notebook.path, origin["parameters"] | handed, Path(scratch) / "executed.ipynb")
        found = again.find(origin["study"], identity.run_id)
        if done.refused:
            raise InputError(done.error)
        if done.error or found is None:
            result.difference = f"the execution failed: {done.error or 'the notebook left no record'}"
            return result
        set_warm()
        ours, theirs = measured_part(table), measured_part(again.read(found))
    result.rows, result.columns = ours.num_rows, ours.column_names
    result.difference = first_difference(ours, theirs)
    return result
