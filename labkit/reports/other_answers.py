"""The first page of a study whose answer is no recommendation: what it answers, and what it leaves open."""

from labkit.records.project import NOTEBOOKS
from labkit.reports.decision import Decision
from labkit.studies.door import GROWTH
from labkit.studies.model import Study

HEADING = "What this study answers"

GROWTH_WORDS = (
    "It tells how the fullest server rises with the size of the fleet, on several networks and under several "
    "rules, and how far that can be foretold.",
    "It recommends no headroom for a given fleet; a study with the answer notebook headroom_answer does.",
)
NOT_IN_IT = "No number here is surer than the records behind it; each part below says what it leaves out."


def other_decision(study: Study, texts: list[tuple[str, str]]) -> Decision:
    """Return the first page of a study that has no headroom answer.

    Parameters
    ----------
    study : Study
        A study with an answer notebook.
    texts : list of (str, str)
        For each of its answers, which it is and the text that its answer notebook wrote; empty: none.
    """
    notebook = study.answer_notebook
    assert notebook is not None
    answers = notebook.path.parent == NOTEBOOKS and notebook.name == GROWTH
    said, cautions = [], []
    for about, text in texts:
        found, more = split_answer(text)
        said += [(about, sentence) for sentence in found]
        cautions += more
    return Decision(
        HEADING,
        GROWTH_WORDS if answers else _own(notebook.name),
        said=tuple(said),
        uncertainty=tuple(cautions or [NOT_IN_IT]),
    )


def split_answer(text: str) -> tuple[list[str], list[str]]:
    """Return what an answer's text says first, and the remarks at its end, without the tables between."""
    parts = [part for part in text.strip().split("\n\n") if part.strip()]
    if not parts:
        return [], []
    return _lines(parts[0]), _lines(parts[-1]) if len(parts) > 2 else []


def _lines(part: str) -> list[str]:
    """Return sentences that stand a line each; lines that were only filled are joined."""
    lines = [line.strip() for line in part.splitlines()]
    whole = all(line.endswith((".", "!", "?")) for line in lines)
    return lines if whole else [" ".join(lines)]


def _own(name: str) -> tuple[str, str]:
    return (
        f"It answers what its own notebook {name} sets out to answer; what that notebook shows follows.",
        "labkit itself draws no conclusion from it.",
    )
