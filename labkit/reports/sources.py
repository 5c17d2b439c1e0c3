"""What a report is made of: executed answer notebooks, made first where missing, and what to decide."""

from collections.abc import Callable
from pathlib import Path

from labkit.errors import InputError
from labkit.records.store import Store, check_writable
from labkit.reports.body import Source
from labkit.reports.case import case_of
from labkit.reports.decision import Decision, guard_warning, headroom_decision
from labkit.reports.other_answers import other_decision
from labkit.studies.answering import write_answer
from labkit.studies.door import ANSWER
from labkit.studies.grouping import groups_of
from labkit.studies.model import Study

TEXT = "answer.txt"


def check_answered(study: Study) -> None:
    """Refuse a study whose file names no answer notebook.

    Raises
    ------
    InputError
        When there is none.
    """
    if study.answer_notebook is None:
        raise InputError(
            f"study {study.name} has no [answer], and a report shows an answer; name an answer notebook in "
            "its file, as experiments/demo.toml does, or read a run's own notebook in JupyterLab."
        )


def sources_of(
    study: Study, store: Store, output: Path, say: Callable[[str], None]
) -> tuple[list[Decision], list[Source]]:
    """Return the first pages of a report and the executed notebooks behind it.

    Parameters
    ----------
    study : Study
        It has an answer notebook, and all its runs are recorded.
    store : Store
        Where its records are.
    output : Path
        Folder of its answers.
    say : callable
        Called with a sentence for the user before a notebook is executed.

    Raises
    ------
    InputError
        When an answer fails; a broken limit on the headroom is no failure, but a warning of the decision.
    """
    assert study.answer_notebook is not None
    decisions, texts, sources = [], [], []
    for group in groups_of(study):
        about = f"{study.name} ({group.heading})" if group.heading else study.name
        place = output / group.folder
        check_writable("output", place)
        say(f"taking the answer of study {about}, made first where it is not yet")
        answer = write_answer(study, group, store, place)
        if study.answer_notebook.name == ANSWER and answer.page is not None:
            case = case_of(study, group, store)
            _check(about, "" if guard_warning(case) else answer.error)
            decisions.append(headroom_decision(case, group.heading))
        else:
            _check(about, answer.error)
            texts.append((group.heading, answer.text if (place / TEXT).is_file() else ""))
        sources.append(Source(place / f"{study.name}.ipynb", group.heading))
    return decisions or [other_decision(study, texts)], sources


def _check(about: str, error: str) -> None:
    if error:
        raise InputError(
            f"the answer of study {about} fails: {error.splitlines()[0].rstrip('.')}. Correct that, since a "
            "report shows it."
        )
