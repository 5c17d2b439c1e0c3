"""Recorded runs measured again where their code is: in this checkout, or in a work tree of their commit."""

import json
import tempfile
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.errors import InputError
from labkit.records.declared import Notebook, read_notebook
from labkit.records.identity import Identity, content_digest, identify
from labkit.records.project import find_notebook, from_root
from labkit.records.store import Store, decode
from labkit.sources import PACKAGES, versions
from labkit.studies.commits import Commits
from labkit.studies.execution import execute
from labkit.studies.place import HERE, Place
from labkit.studies.warmth import COLD, is_warm, set_warm

if TYPE_CHECKING:
    import pyarrow as pa


class ExecutionFailed(RuntimeError):
    """Code that broke while a run was measured again; `place` and `notes` as in `Again`."""

    def __init__(self, sentence: str, place: Place, notes: list[str]) -> None:
        super().__init__(sentence)
        self.place = place
        self.notes = notes


@dataclass(frozen=True)
class Again:
    """A run that was measured again: its labels and measures, where that was, and what is to be known."""

    table: "pa.Table"
    place: Place
    notes: list[str] = field(default_factory=list)


class Places(Commits):
    """Places where recorded runs are measured again; a work tree serves all runs of its commit.

    Use it in a ``with`` statement: its work trees are removed at the end, after an interruption as well.
    """

    def measured_again(self, origin: Mapping[str, Any]) -> tuple["pa.Table", list[str]]:
        """Execute a recorded run again, and return what it measured and what should be known about it.

        It is executed here when today's code gives the run the id that it has in the record, with the same
        packages or the same lock; otherwise at the recorded commit, in a work tree of its own. A run recorded
        with changes that are in no commit is executed here, with a note.

        Parameters
        ----------
        origin : dict
            Where the run comes from, as `labkit.records.schema.row_of_origin` returns it.

        Returns
        -------
        table : pyarrow.Table
            Labels and measures, as `labkit.records.schema.measured_part` returns them.
        notes : list of str
            One sentence, without a full stop, for each thing that is not as it was: code, versions.

        Raises
        ------
        InputError
            When the commit cannot be had, the files that the run read have changed, its notebook is gone or
            takes other parameters, or the notebook refuses a value.
        ExecutionFailed
            When the notebook's code breaks or leaves no record.
        """
        again = self.again(origin)
        return again.table, again.notes

    def again(self, origin: Mapping[str, Any], here: bool = False) -> Again:
        """Do the same and tell the place as well; `here` forces today's code."""
        place, notes = (HERE, []) if here else self._choose(origin)
        notebook = read_notebook(find_notebook(origin["notebook"], place.root))
        if notebook.digest != origin["notebook_digest"]:
            notes.append(f"the code of notebook {notebook.name} has changed since the record was made")
        missing = sorted({"study", "store"} - set(notebook.parameters))
        if missing:
            raise InputError(
                f"notebook {notebook.name} declares no parameter {missing[0]}, so its record cannot be kept "
                "apart; add it to the parameters cell."
            )
        # A name becomes a line of code in the notebook: only its own may.
        notebook.check_names(origin["parameters"])
        parameters = {**origin["parameters"], **_input_files(origin, place)}
        if place == HERE:
            identify(notebook, notebook.checked(parameters))
            notes += _changes(origin["versions"], versions())
            if not is_warm():
                self._say(COLD)
        return self._measure(origin, notebook, parameters, place, notes)

    def _choose(self, origin: Mapping[str, Any]) -> tuple[Place, list[str]]:
        today = _identity_here(origin)
        committed = bool(origin["git_hash"]) and not origin["dirty"]
        if today is not None and today.run_id == origin["run_id"]:
            packages = _changes(origin["versions"], versions(), PACKAGES)
            if packages and committed and self.has_other_lock(origin["git_hash"]):
                return self.of(origin["git_hash"]), []
            return HERE, []
        if committed:
            return self.of(origin["git_hash"]), []
        if not origin["git_hash"]:
            return HERE, ["the record names no commit; executed with today's code"]
        return HERE, [
            f"the record was made from commit {origin['git_hash'][:10]} with changes, and such sources "
            "cannot be had again; executed with today's code"
        ]

    def _measure(
        self,
        origin: Mapping[str, Any],
        notebook: Notebook,
        parameters: dict[str, Any],
        place: Place,
        notes: list[str],
    ) -> Again:
        from labkit.records.schema import measured_part

        with tempfile.TemporaryDirectory(prefix="labkit-") as scratch:
            store = Store(Path(scratch) / "store")
            handed = {
                "study": origin["study"],
                "store": str(store.folder),
                "output": str(Path(scratch) / "output"),
            }
            known = {name: value for name, value in handed.items() if name in notebook.parameters}
            done = execute(notebook.path, parameters | known, Path(scratch) / "executed.ipynb", place)
            if done.refused:
                raise InputError(done.error)
            found = None if done.error else next(store.files(origin["study"]), None)
            if found is None:
                raise ExecutionFailed(done.error or "the notebook left no record", place, notes)
            table = decode(found.read_bytes())
        if place == HERE:
            set_warm()
            return Again(measured_part(table), place, notes)
        if found.name[:16] != origin["run_id"]:
            notes.append(
                f"at commit {place.commit[:10]} this is run {found.name[:16]}, so something else than the "
                "record says went into it"
            )
        if "versions" in table.column_names:
            notes += _changes(origin["versions"], json.loads(table["versions"][0].as_py()))
        return Again(measured_part(table), place, notes)


def _identity_here(origin: Mapping[str, Any]) -> Identity | None:
    """Return what the run would be with today's files, or None when they refuse it."""
    try:
        notebook = read_notebook(find_notebook(origin["notebook"]))
        return identify(notebook, notebook.checked(origin["parameters"]))
    except InputError:
        return None


def _input_files(origin: Mapping[str, Any], place: Place) -> dict[str, str]:
    """Return a path for each input, at the place or, when it is in no commit, here; refuse other contents."""
    paths = {}
    for name, digest in origin["inputs"].items():
        text = origin["parameters"][name]
        candidates = [text] if place == HERE else [text, str(from_root(text))]
        for candidate in candidates:
            file = from_root(candidate, place.root)
            if file.exists() and content_digest(file) == digest:
                paths[name] = candidate
                break
        else:
            raise InputError(
                f"{name} of run {origin['run_id']} is {str(from_root(text))!r}, whose files are not those of "
                "the record; restore them to rerun it."
            )
    return paths


def _changes(
    then: Mapping[str, str],
    now: Mapping[str, str],
    names: Iterable[str] = ("labkit", "python", *PACKAGES),
) -> list[str]:
    return [
        f"{name} was {then[name] or 'missing'} and is {now[name] or 'missing'}"
        for name in names
        if name in then and name in now and then[name] != now[name]
    ]
