"""The frame of a run notebook: `begin_run` before any computing, `Run.record` at the end."""

import json
import sys
import time
from collections.abc import Mapping, MutableMapping
from datetime import UTC, datetime
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from labkit.checks import nearest
from labkit.errors import InputError
from labkit.records.declared import Notebook, is_path, read_notebook
from labkit.records.identity import Identity, canonical, identify
from labkit.records.project import ANSWERS, check_study_name, find_notebook, from_root, path_text
from labkit.records.session import check_session, executed_cells, injected_names
from labkit.records.store import Store, open_store

if TYPE_CHECKING:
    import pyarrow as pa


class Run:
    """A run of a notebook that has passed its checks.

    Attributes
    ----------
    id : str
        16 hex digits; equal for equal code, parameters, entropy and computing sources.
    seed : numpy.random.SeedSequence
        Give it as ``rng=`` to everything random.
    parameters : dict
        Each declared parameter with its checked value.
    study : str
        The study that the record belongs to.
    """

    def __init__(
        self,
        notebook: Notebook,
        parameters: dict[str, Any],
        identity: Identity,
        store: Store,
        namespace: Mapping[str, Any],
    ) -> None:
        self.id = identity.run_id
        self.seed: np.random.SeedSequence = identity.seed
        self.parameters = parameters
        self.study = str(parameters.get("study", "by-hand"))
        self.recorded: Path | None = None
        self._notebook = notebook
        self._identity = identity
        self._store = store
        self._namespace = namespace
        self._started = datetime.now(UTC)
        self._clock = time.perf_counter()

    def path(self, name: str) -> Path:
        """Return the absolute path that a path parameter means, the same whatever the working directory."""
        if name not in self.parameters or not is_path(name):
            paths = [each for each in self.parameters if is_path(each)]
            raise InputError(f"path {name!r} is no path parameter of this notebook; {nearest(name, paths)}.")
        return from_root(self.parameters[name])

    @property
    def output(self) -> Path:
        """Folder for what the notebook writes besides its record, from its parameter `output`."""
        given = self.parameters.get("output", "")
        return from_root(given) if given else ANSWERS / self.study

    def record(self, measures: Any) -> Path:
        """Write the measures as the record of this run and return its file.

        Parameters
        ----------
        measures : pandas.DataFrame
            One row a policy, replicate and checkpoint, as in ``Outcome.measures``; labels may be its index.

        Raises
        ------
        InputError
            When the table does not fit the schema, or the session did not execute the saved notebook.
        StoreError
            When the store cannot be written, or the run was recorded before with other measures.
        """
        from labkit.records.provenance import provenance
        from labkit.records.schema import measured_table, with_origin

        measured = measured_table(measures)
        executed = executed_cells(self._namespace)
        if executed:
            check_session(read_notebook(self._notebook.path), executed)
        elapsed = time.perf_counter() - self._clock
        written = {
            name: path_text(self.path(name)) if is_path(name) and value else value
            for name, value in self._identity.parameters.items()
        }
        origin = {
            **provenance(),
            "study": self.study,
            "run_id": self.id,
            "entropy": str(self._identity.entropy),
            "spawn_key": json.dumps([self._identity.key]),
            "notebook": self._notebook.name,
            "notebook_digest": self._notebook.digest,
            "parameters": canonical(written),
            "inputs": canonical(self._identity.inputs),
            "rules": canonical(_own_rules(measured)),
            "started": self._started.isoformat(timespec="milliseconds"),
            "elapsed": elapsed,
        }
        self.recorded, self._new = self._store.write(self.study, self.id, with_origin(measured, origin))
        return self.recorded

    def _facts(self) -> dict[str, str]:
        facts = {"run": self.id, "study": self.study, "notebook": self._notebook.name}
        if self.recorded is None:
            facts["record"] = "not written yet"
        else:
            kept = "" if self._new else " (recorded before with the same measures; that record is kept)"
            facts["record"] = path_text(self.recorded) + kept
        return facts

    def __repr__(self) -> str:
        return "\n".join(f"{name:<9}{value}" for name, value in self._facts().items())

    def _repr_html_(self) -> str:
        rows = "".join(
            f"<tr><th>{name}</th><td>{escape(value)}</td></tr>" for name, value in self._facts().items()
        )
        return f"<table style='text-align: left'>{rows}</table>"


def _own_rules(measured: "pa.Table") -> dict[str, str]:
    """Return the source of each rule in a table that a user wrote in this session."""
    home = sys.modules.get("labkit.policies.own_rule")  # not loaded: no rule was written
    if home is None or "policy" not in measured.column_names:
        return {}
    sources = {name: home.recorded_source(name) for name in measured["policy"].unique().to_pylist()}
    return {name: source for name, source in sources.items() if source is not None}


def begin_run(notebook: str, namespace: MutableMapping[str, Any]) -> Run:
    """Check a run notebook's parameters and its store, and work out its identity, before any computing.

    Parameters
    ----------
    notebook : str
        The name of the calling notebook in notebooks/, or its path (.ipynb, from the project root).
    namespace : dict
        ``globals()`` of the notebook, after its parameters cell. Values are put back in their declared type:
        a whole number given for a float as a float, a text given for a list as a list.

    Returns
    -------
    Run
        Its `seed`, `path` and `record` carry the notebook.

    Raises
    ------
    InputError
        When a name was injected that the notebook does not declare, a value is of the wrong type, a path does
        not exist, or the store cannot be written. Nothing is written.

    Examples
    --------
    A notebook gives its ``globals()``; a dictionary with some of its parameters does here:

    >>> import tempfile
    >>> import labkit as lk
    >>> with tempfile.TemporaryDirectory() as store:
    ...     values = {"tasks": 400, "replicates": 3, "study": "tiny", "store": store}
    ...     run = lk.begin_run("headroom", values)
    ...     outcome = lk.place(lk.ring(4), "least-loaded", tasks=400, replicates=3, rng=run.seed)
    ...     file = run.record(outcome.measures)
    ...     file.parent.name, file.name.startswith(run.id)
    ('tiny', True)
    >>> values["precision_of"]  # what was not given has the notebook's default
    'gap'
    >>> lk.begin_run("headroom", {"tasks": "many"})
    Traceback (most recent call last):
        ...
    labkit.errors.InputError: tasks is 'many'; give a whole number (int).
    """
    saved = read_notebook(find_notebook(notebook))
    saved.check_names(injected_names(executed_cells(namespace) or []))
    values = saved.checked({name: namespace[name] for name in saved.parameters if name in namespace})
    study = check_study_name(values.get("study", "by-hand"))
    store = open_store(values.get("store"))
    store.check_writable(study)
    identity = identify(saved, values)
    namespace.update(values)
    return Run(saved, values, identity, store, namespace)
