"""What a study's records are about, for an answer notebook: one fleet, one number of tasks, known seeds."""

import json
from collections.abc import Iterable, MutableMapping
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from labkit.analysis.wording import quantity, reports
from labkit.engine.information import Fresh, Snapshot
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.fleet.readers import read_fleet
from labkit.placing import place
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
        One row a run: run_id, information, entropy, spawn_key, git_hash, dirty, diff_digest, versions,
        started, elapsed.
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

    Returns
    -------
    pathlib.Path
        The parameter `output` where it is given, else a folder in results/answers; it need not be there yet.

    Raises
    ------
    InputError
        When a name was injected that the notebook does not declare, or a value is of the wrong type.

    Examples
    --------
    A notebook gives its ``globals()``; a dictionary with some of its parameters does here:

    >>> import labkit as lk
    >>> lk.begin_answer("headroom_answer", {"study": "tiny"}).parts[-3:]
    ('results', 'answers', 'tiny')
    >>> lk.begin_answer("headroom_answer", {"study": "tiny", "risk": "high"})
    Traceback (most recent call last):
        ...
    labkit.errors.InputError: risk is 'high'; give a number (float).
    """
    saved = read_notebook(find_notebook(notebook))
    saved.check_names(injected_names(executed_cells(namespace) or []))
    values = saved.checked({name: namespace[name] for name in saved.parameters if name in namespace})
    # An answer may be made from a frozen table instead of a study.
    study = check_study_name(values["study"] or values.get("frozen", ""))
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
    origin = ["entropy", "spawn_key", "git_hash", "dirty", "diff_digest", "versions", "started", "elapsed"]
    runs = records.drop_duplicates("run_id", ignore_index=True)
    parameters = [json.loads(text) for text in runs["parameters"]]
    for name in SHARED:
        found = list(dict.fromkeys(str(each.get(name)) for each in parameters))
        if len(found) > 1 or found == ["None"]:
            raise InputError(
                f"the runs have {name} {' and '.join(found)}; all runs of one answer need the same {name}: "
                "name such runs."
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
        runs[["run_id", "information", *origin]],
    )


def facts(subject: Subject, table: pd.DataFrame, *, study: str, baseline: str) -> str:
    """Return what an answer is about as a list in Markdown: the fleet, the runs, what is compared.

    Parameters
    ----------
    subject : Subject
    table : pandas.DataFrame
        The answer table.
    study, baseline : str
        As in the answer notebook.
    """
    fleet, row = subject.fleet, table.iloc[0]
    name = Path(subject.place).name or subject.place
    rules = ", ".join(f"`{policy}`" for policy in sorted(table["policy"].unique()))
    kinds = ", ".join(reports(kind) for kind in sorted(table["information"].unique()))
    lines = {
        "Study": f"`{study}`",
        "Fleet": f"`{name}`: {len(fleet):,} servers of {quantity(fleet.total_capacity)} work units in total, "
        f"{len(fleet.options):,} choices",
        "Work": f"{subject.tasks:,} tasks placed on the empty fleet, {subject.replicates:,} replicates",
        "Placement rules": f"{rules}; savings are counted from `{baseline}`",
        "Load reports": kinds,
        "Accepted risk": f"{100 * row['risk']:g} %, limits at {100 * row['confidence']:g} % confidence",
    }
    return "\n".join(f"- **{what}**: {value}" for what, value in lines.items())


def sources(subject: Subject) -> pd.DataFrame:
    """Return where each run comes from as text, one row a run."""
    rows = [
        {
            "run": run["run_id"],
            "load reports": reports(run["information"]),
            "commit": _commit(run),
            "started (UTC)": str(run["started"])[:19].replace("T", " "),
            "seconds": f"{run['elapsed']:,.1f}",
            "entropy": run["entropy"],
            "spawn key": run["spawn_key"],
        }
        for _, run in subject.runs.iterrows()
    ]
    return pd.DataFrame(rows).set_index("run")


def _commit(run: pd.Series) -> str:
    commit = run["git_hash"][:12] or "no commit"
    changes = run["diff_digest"][:12] or "unknown"
    return f"{commit} + changes {changes}" if run["dirty"] else commit


def versions(subject: Subject) -> str:
    """Return what the runs were computed with, as one sentence for each set of versions."""
    sentences = []
    for text, runs in subject.runs.groupby("versions", sort=False)["run_id"]:
        used = json.loads(str(text))
        machine = " ".join(filter(None, (used.pop("platform", ""), used.pop("machine", ""))))
        first = [name for name in ("labkit", "python") if name in used]
        named = [f"{name} {used[name]}" for name in (*first, *sorted(set(used) - set(first)))]
        whose = "" if len(runs) == len(subject.runs) else f" of {', '.join(runs)}"
        sentences.append(f"Versions{whose}: {', '.join(named)}{f'; on {machine}' if machine else ''}.")
    return " ".join(sentences)


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
    mine = records[(records["policy"] == policy) & (records["replicate"] == 0)]
    mine = mine[mine.get("information", pd.Series("fresh", mine.index)) == information]
    run = subject.runs.set_index("run_id", drop=False).loc[mine["run_id"].iloc[0]]
    every = information.removeprefix("snapshot(every=").removesuffix(")")
    seed = np.random.SeedSequence(int(run["entropy"]), spawn_key=tuple(json.loads(run["spawn_key"])))
    outcome = place(
        subject.fleet,
        policy,
        tasks=subject.tasks,
        rng=seed,
        information=Snapshot(every=int(every)) if every.isdigit() else Fresh(),
    )
    row = mine[(mine["run_id"] == run["run_id"]) & (mine["tasks"] == subject.tasks)]
    if row["max_utilisation"].tolist() != outcome.measures["max_utilisation"].tolist():
        raise InputError(
            f"run {run['run_id']} cannot be repeated from {subject.place}: its tables or the rules have "
            "changed since; run the study again."
        )
    capacity = 1.0 if subject.fleet.capacity is None else subject.fleet.capacity
    return outcome.loads[0] / capacity
