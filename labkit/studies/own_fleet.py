"""A study without a file: the headroom question put to a folder with a fleet's two tables."""

import json
import re
from pathlib import Path
from typing import Any

from labkit.analysis.headroom import replicates_needed
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.fleet.readers import read_fleet
from labkit.records.declared import read_notebook
from labkit.records.listing import listed
from labkit.records.project import EXPERIMENTS, find_notebook
from labkit.records.store import Store
from labkit.studies.door import ANSWER, RUN, check_risk, policy_names
from labkit.studies.model import Study, make_study

# How full the servers are on average, and how many tasks a server has, when nobody says how many tasks.
FILLED, TASKS_A_SERVER = 0.8, 100
MOST_BY_DEFAULT = 10**8


def study_of_fleet(
    folder: Path,
    *,
    name: str | None = None,
    risk: float | None = None,
    replicates: int | None = None,
    entropy: int | None = None,
    report_every: list[int] | None = None,
    **parameters: Any,
) -> tuple[Study, str]:
    """Make the headroom study of a fleet folder; what is not given comes from the fleet or the notebooks.

    Parameters
    ----------
    folder : Path
        The folder of the two tables.
    name : str, optional
        The name of the study; default the folder's.
    risk : float, optional
        Default as in the answer notebook.
    replicates : int, optional
        Default as in the run notebook, or more where the risk needs it.
    entropy : int, optional
        Default as in the run notebook.
    report_every : list of int, optional
        Kinds of information to compare; default as in the run notebook.
    **parameters
        Further parameters of the run notebook; None counts as not given. For `tasks` see `default_tasks`.

    Returns
    -------
    study : Study
    note : str
        What was chosen for the user, and why; empty when nothing was.

    Raises
    ------
    InputError
        When a table or value is refused. Nothing is written.
    """
    fleet = read_fleet(folder)
    defaults = read_notebook(find_notebook(RUN)).parameters
    answers = read_notebook(find_notebook(ANSWER)).parameters
    given = {key: value for key, value in parameters.items() if value is not None}
    note = ""
    if "tasks" not in given:
        given["tasks"], why = default_tasks(fleet)
        note = f"tasks is {given['tasks']:,}: {why} (--tasks N for another number)"
    if "policies" in given:
        given["policies"] = policy_names(given["policies"])
    answer: dict[str, Any] = {"notebook": ANSWER}
    if risk is not None:
        answer["risk"] = risk
    baseline = answers.get("baseline")
    policies = given.get("policies")
    if baseline and policies and baseline.default not in policies:
        answer["baseline"] = policies[0]
    if replicates is None:
        needed = replicates_needed(check_risk(answers["risk"].default if risk is None else risk))
        replicates = max(defaults["replicates"].default, needed)
    place = folder.resolve()
    content: dict[str, Any] = {
        "title": f"Headroom of {place.name}",
        "notebook": RUN,
        "replicates": replicates,
        "entropy": defaults["entropy"].default if entropy is None else entropy,
        "parameters": {**given, "fleet": place.as_posix()},
        "answer": answer,
    }
    if report_every is not None:
        content["grid"] = {"report_every": report_every}
    return make_study(name_of_folder(folder) if name is None else name, content, folder=place.parent), note


def check_own_records(study: str, fleet: str, store: Store) -> None:
    """Refuse the name of a study without a file that is in use: by a study's file, or for another fleet.

    Their records and answers would be mixed.

    Parameters
    ----------
    study : str
    fleet : str
        The fleet, as a record's parameters name it.
    store : Store

    Raises
    ------
    InputError
        When it is in use.
    """
    other_name = "give another with --name NAME."
    if (EXPERIMENTS / f"{study}.toml").is_file():
        raise InputError(f"study is {study!r}, as one of experiments/ is called; {other_name}")
    if study not in store.studies():
        return
    recorded = listed(store, study, ["parameters"], warn=lambda _: None).columns["parameters"]
    others = sorted({str(json.loads(text).get("fleet")) for text in set(recorded)} - {fleet})
    if others:
        raise InputError(f"study is {study!r}, which has records of another fleet, {others[0]}; {other_name}")


def name_of_folder(folder: Path) -> str:
    """Return the name of a folder as the name of a study."""
    own = folder.resolve().name
    name = re.sub(r"[^A-Za-z0-9_.-]+", "-", own).strip("-._") or "fleet"
    if len(name) > 64:
        raise InputError(f"folder {own!r} is too long a name for a study; give --name NAME.")
    return name


def default_tasks(fleet: Fleet) -> tuple[int, str]:
    """Return how many tasks to place on a fleet when the user does not say, and why so many.

    A capacity counts tasks, so tasks that fill 80 % of the total capacity are what a fleet in use holds.
    Capacities that are all 1, or in total hold less than a task a server, are no amounts of work: then it is
    100 tasks a server. Demands are relative and say nothing about the number.
    """
    a_server = TASKS_A_SERVER * len(fleet)
    total = fleet.total_capacity
    if fleet.capacity is None:
        return a_server, f"{TASKS_A_SERVER} a server, as the servers have no capacities"
    if FILLED * total < len(fleet):
        return (
            a_server,
            f"{TASKS_A_SERVER} a server, as the total capacity of {total:,.6g} is no amount of work",
        )
    if FILLED * total > MOST_BY_DEFAULT:
        raise InputError(
            f"servers have a total capacity of {total:,.6g} tasks, too many to place by default; state "
            "capacities in larger work units, or give --tasks N."
        )
    return round(FILLED * total), f"{FILLED:.0%} of the total capacity of {total:,.6g} work units".replace(
        "%", " %"
    )
