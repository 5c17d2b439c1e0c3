"""What a study's records are about, for an answer notebook: one fleet, one number of tasks, known seeds."""

import json
from collections.abc import Iterable, MutableMapping
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from labkit.engine.information import Fresh, Snapshot
from labkit.engine.placement import place
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.fleet.readers import read_fleet
from labkit.policies.naming import parse_policy
from labkit.records.declared import read_notebook
from labkit.records.project import ANSWERS, check_study_name, find_notebook, from_root
from labkit.records.session import executed_cells, injected_names

# Equal in all runs that one answer is made from.
SHARED = ("fleet", "tasks", "replicates")


@dataclass(frozen=True)
class Subject:
    """What the runs of a study have in common.

    Attributes
    ----------
    fleet : Fleet
        Read from where the runs read it.
    place : str
        Folder of the fleet as the records name it.
    tasks, replicates : int
        What each run placed and how often.
    runs : pandas.DataFrame
        One row a run: run_id, information, entropy, spawn_key, git_hash, dirty, diff_digest, started,
        elapsed.
    """

    fleet: Fleet
    place: str
    tasks: int
    replicates: int
    runs: pd.DataFrame


def begin_answer(notebook: str, namespace: MutableMapping[str, Any]) -> Path:
    """Check the parameters of an answer notebook before any work; return the folder for what it writes.

    Parameters
    ----------
    notebook : str
        The name of the calling notebook in notebooks/, or its path.
    namespace : dict
        ``globals()`` of the notebook, after its parameters cell. Values are put back in their declared type.

    Raises
    ------
    InputError
        When a name was injected that the notebook does not declare, or a value is of the wrong type.
    """
    saved = read_notebook(find_notebook(notebook))
    saved.check_names(injected_names(executed_cells(namespace) or []))
    values = saved.checked({name: namespace[name] for name in saved.parameters if name in namespace})
    study = check_study_name(values["study"])
    namespace.update(values)
    return from_root(values["output"]) if values.get("output") else ANSWERS / study


def subject_of(records: pd.DataFrame) -> Subject:
    """Return what the records of a study are about.

    Parameters
    ----------
    records : pandas.DataFrame
        Rows of `labkit.read_study_records`, from runs of the headroom notebook.

    Raises
    ------
    InputError
        When the runs differ in fleet, tasks or replicates, or lack one of them.
    """
    origin = ["run_id", "entropy", "spawn_key", "git_hash", "dirty", "diff_digest", "started", "elapsed"]
    runs = records.drop_duplicates("run_id", ignore_index=True)
    parameters = [json.loads(text) for text in runs["parameters"]]
    for name in SHARED:
        found = list(dict.fromkeys(str(each.get(name)) for each in parameters))
        if len(found) > 1 or found == ["None"]:
            raise InputError(
                f"the runs have {name} {' and '.join(found)}; one answer needs one {name}, "
                "so name runs that share it."
            )
    if runs["inputs"].nunique() > 1:
        raise InputError(
            f"the runs read different tables from {parameters[0]['fleet']}; run the study again."
        )
    if "information" not in runs:
        runs["information"] = "fresh"
    return Subject(
        read_fleet(from_root(parameters[0]["fleet"])),
        str(parameters[0]["fleet"]),
        int(parameters[0]["tasks"]),
        int(parameters[0]["replicates"]),
        runs[["run_id", "information", *origin[1:]]],
    )


def drawable(policies: Iterable[str]) -> str | None:
    """Return the first policy that can be placed again from its name; rules written in a notebook cannot."""
    for policy in policies:
        with suppress(InputError):
            parse_policy(policy)
            return policy
    return None


def final_utilisation(subject: Subject, records: pd.DataFrame, policy: str, information: str) -> np.ndarray:
    """Place one replicate again from its recorded seed and return how full each server is at the end.

    Parameters
    ----------
    subject : Subject
    records : pandas.DataFrame
        The records that `subject` was made from.
    policy, information : str
        As in the records.

    Returns
    -------
    numpy.ndarray, shape (servers,)
        Load ÷ capacity in table order, of replicate 0.

    Raises
    ------
    InputError
        When the new placement is not the recorded one to the bit: the fleet's tables were changed since.
    """
    run = subject.runs[subject.runs["information"] == information].iloc[0]
    every = information.removeprefix("snapshot(every=").removesuffix(")")
    seed = np.random.SeedSequence(int(run["entropy"]), spawn_key=tuple(json.loads(run["spawn_key"])))
    outcome = place(
        subject.fleet,
        policy,
        tasks=subject.tasks,
        rng=seed,
        information=Snapshot(every=int(every)) if every.isdigit() else Fresh(),
    )
    row = records[
        (records["run_id"] == run["run_id"])
        & (records["policy"] == policy)
        & (records["replicate"] == 0)
        & (records["tasks"] == subject.tasks)
    ]
    if row["max_utilisation"].tolist() != outcome.measures["max_utilisation"].tolist():
        raise InputError(
            f"run {run['run_id']} cannot be repeated from {subject.place}: its tables or the rules have "
            "changed since; run the study again."
        )
    capacity = 1.0 if subject.fleet.capacity is None else subject.fleet.capacity
    return outcome.loads[0] / capacity
