"""A study without a file: the headroom question put to a folder with a fleet's two tables."""

import re
from pathlib import Path
from typing import Any

from labkit.analysis.headroom import replicates_needed
from labkit.errors import InputError
from labkit.fleet.readers import read_fleet
from labkit.records.declared import read_notebook
from labkit.records.project import find_notebook
from labkit.studies.model import Study, make_study

RUN, ANSWER = "headroom", "headroom_answer"


def study_of_fleet(
    folder: Path,
    *,
    name: str | None = None,
    risk: float | None = None,
    replicates: int | None = None,
    entropy: int | None = None,
    report_every: list[int] | None = None,
    **parameters: Any,
) -> Study:
    """Return the headroom study of a fleet folder; what is not given comes from the fleet or the notebooks.

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
        Further parameters of the run notebook; None counts as not given. `tasks` is by default the total
        demand in whole tasks, or ten a server where the total demand is below one a server.

    Raises
    ------
    InputError
        When a table or value is refused. Nothing is written.
    """
    fleet = read_fleet(folder)
    defaults = read_notebook(find_notebook(RUN)).parameters
    answers = read_notebook(find_notebook(ANSWER)).parameters
    given = {key: value for key, value in parameters.items() if value is not None}
    if "tasks" not in given:
        demand = float(fleet.choices["demand"].sum())
        given["tasks"] = round(demand) if demand >= len(fleet) else 10 * len(fleet)
    answer: dict[str, Any] = {"notebook": ANSWER}
    if risk is not None:
        answer["risk"] = risk
    baseline = answers.get("baseline")
    policies = given.get("policies")
    if baseline and policies and baseline.default not in policies:
        answer["baseline"] = policies[0]
    if replicates is None:
        needed = replicates_needed(answers["risk"].default if risk is None else risk)
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
    if name is None:
        name = re.sub(r"[^A-Za-z0-9_.-]+", "-", place.name).strip("-._") or "fleet"
        if len(name) > 64:
            raise InputError(f"folder {place.name!r} is too long a name for a study; give --name NAME.")
    return make_study(name, content, folder=place.parent)
