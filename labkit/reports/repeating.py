"""How to make a report again, run by run, and what stands in the way of that."""

import shlex

from labkit.records.project import STORE
from labkit.records.store import Store
from labkit.reports.origin import Origin

LABKIT = ".venv/bin/labkit"


def steps_to_repeat(
    asked: str, origin: Origin, store: Store, *, output: str = "", to: str = ""
) -> list[tuple[str, str]]:
    """Return the commands that make everything again, each with what it does.

    Parameters
    ----------
    asked : str
        The study as the user named it.
    origin : Origin
    store : Store
    output, to : str
        Where the answers are and the page goes; empty: where they are by default.
    """
    records = [] if store.folder == STORE else ["--store", str(store.folder)]
    where = [*records, *(["--output", output] if output else [])]
    steps = []
    if len(origin.commits) == 1:
        checkout = _line("git", "checkout", origin.commits[0])
        steps.append((checkout, "the sources at which the runs were recorded"))
    others = len(origin.run_ids) - 1
    more = f"; the same for each of the {others:,} others" if others > 1 else "; the same for the other"
    rerun = "executes the run again, at its own commit, and compares every measure to the bit"
    again = "makes this page again: the same bytes but for its moment"
    return [
        *steps,
        ("make setup", "the versions of requirements.lock, in .venv"),
        (_line(LABKIT, "run", asked, *where), "executes what is not recorded, then writes the answer"),
        (_line(LABKIT, "rerun", origin.run_ids[0], *records), f"{rerun}{more if others else ''}"),
        (_line(LABKIT, "report", asked, "--replace", *where, *(["--to", to] if to else [])), again),
    ]


def notes_to_repeat(origin: Origin) -> list[str]:
    """Return what stands in the way of repeating."""
    notes = []
    if origin.changed:
        notes.append(
            "Some runs were recorded with changes that no commit holds, so a checkout alone does not give "
            "their code: commit, run the study again and make the report again before it is relied on."
        )
    if len(origin.commits) > 1:
        notes.append(
            f"The runs were recorded at {len(origin.commits)} commits; labkit rerun executes each at its own."
        )
    return notes


def _line(*words: str) -> str:
    return shlex.join(words)
