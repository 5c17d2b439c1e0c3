"""The first page of a report: what to do, how sure that is, and what would change it."""

from collections.abc import Callable
from dataclasses import dataclass

from labkit.analysis.answer import check_max_headroom
from labkit.analysis.comparison import compare
from labkit.analysis.wording import decision_sentences, percent, quantity, reports, utilisation, writer
from labkit.errors import HeadroomExceeded
from labkit.reports.case import Case
from labkit.reports.changes import RISK_HEADERS, other_risks, what_would_change

HEADING = "Recommendation"
CAUTION = (
    "These are results of models. Codes, safety rules and licensed practice that apply where the fleet "
    "stands come first; a responsible engineer decides."
)


@dataclass(frozen=True)
class Decision:
    """What stands on the first page.

    Attributes
    ----------
    heading : str
        What it is called.
    about : str
        Which of several answers it is; empty when it is the only one.
    recommendation : tuple of str
        Sentences; the first two say all.
    warning : str
        What must be seen before anything else; empty: nothing.
    glance : tuple of (str, str, str)
        A few numbers: what, how much, and a remark.
    said : tuple of (str, str)
        What an answer without a recommendation says: which of several it is, and a sentence.
    uncertainty : tuple of str
        Sentences, one a paragraph.
    changes : tuple of (str, str)
        What would change it: a heading and a sentence or two.
    risk_headers, risks : tuples
        The table of other risks; no rows: none.
    """

    heading: str
    recommendation: tuple[str, ...]
    about: str = ""
    warning: str = ""
    glance: tuple[tuple[str, str, str], ...] = ()
    said: tuple[tuple[str, str], ...] = ()
    uncertainty: tuple[str, ...] = ()
    changes: tuple[tuple[str, str], ...] = ()
    risk_headers: tuple[str, ...] = RISK_HEADERS
    risks: tuple[tuple[str, ...], ...] = ()


def headroom_decision(case: Case, about: str = "") -> Decision:
    """Return the first page of a headroom answer, all of it from its records and the survey of its fleet.

    Parameters
    ----------
    case : Case
    about : str
        Which of several answers it is.
    """
    sentences = decision_sentences(
        case.table, case.verdict, baseline=case.asked["baseline"], total_capacity=case.capacity
    )
    if len(sentences) == 1:
        sentences.append(_capacity_sentence(case))
    confidence = f"{100 * case.verdict.worst['confidence']:g} % limits"
    return Decision(
        HEADING,
        tuple(sentences[:2]),
        about=about,
        warning=guard_warning(case),
        glance=tuple(_glance(case)),
        uncertainty=(*_uncertainty(case), *sentences[2:]),
        changes=tuple(what_would_change(case)),
        risk_headers=tuple(confidence if name == "limits" else name for name in RISK_HEADERS),
        risks=tuple(other_risks(case)),
    )


def guard_warning(case: Case) -> str:
    """Return what is wrong when the headroom needed breaks the limit of the study; else nothing."""
    try:
        check_max_headroom(case.verdict, case.asked["max_headroom"])
    except HeadroomExceeded as error:
        return f"The limit of this study does not hold: {error}"
    return ""


def _glance(case: Case) -> list[tuple[str, str, str]]:
    worst = case.verdict.worst
    write = _writer(case)
    kinds = case.table["information"].nunique()
    degree = "the worse of 2" if kinds == 2 else f"the worst of {kinds}"
    settings = f"{degree} report settings" if kinds > 1 else "the only report setting run"
    needed = float(worst["capacity_needed"])
    return [
        ("Rule", str(case.verdict.policy), f"load reports {reports(worst['information'])}, {settings}"),
        (
            "Headroom",
            write(worst["headroom"]),
            f"{100 * worst['confidence']:g} % limits {write(worst['lower'])} to {write(worst['upper'])}; "
            f"{percent(100 * worst['of_mean'])} % of the mean utilisation {utilisation(case.mean)}",
        ),
        ("Accepted risk", f"{100 * worst['risk']:g} %", "that the fullest server goes beyond it, at the end"),
        (
            "Capacity to provision",
            quantity(needed),
            f"work units; today {quantity(case.capacity)}, {_spare(case)}",
        ),
    ]


def _spare(case: Case) -> str:
    spare = case.capacity - float(case.verdict.worst["capacity_needed"])
    if abs(spare) <= 1e-9 * case.capacity:
        return "just enough"
    share = percent(100 * abs(spare) / case.capacity)
    return f"{quantity(abs(spare))} ({share} %) {'to spare' if spare > 0 else 'too few'}"


def _capacity_sentence(case: Case) -> str:
    needed = quantity(float(case.verdict.worst["capacity_needed"]))
    return (
        f"In today's proportions that takes a capacity of {needed} work units; the fleet has "
        f"{quantity(case.capacity)}, {_spare(case)}."
    )


def _uncertainty(case: Case) -> list[str]:
    worst, verdict = case.verdict.worst, case.verdict
    write = _writer(case)
    low, high = ((case.mean + float(worst[name])) * case.capacity for name in ("lower", "upper"))
    found = [
        f"With {100 * worst['confidence']:g} % confidence the headroom lies between {write(worst['lower'])} "
        f"and {write(worst['upper'])}, the capacity between {quantity(low)} and {quantity(high)} work units. "
        f"The limits are two of the {worst['replicates']:,} observed gaps, chosen by rank, and assume no law "
        "of the gap."
    ]
    others = set(case.table["policy"]) - {verdict.policy}
    if others and verdict.policy == verdict.best and not verdict.close:
        found.append("No other rule has limits that overlap with its own in every report setting.")
    paired = _paired(case)
    if paired:
        found.append(paired)
    found.append(
        "The limits hold the chance of the replicates only. Doubt about demands and capacities, daily peaks "
        "and work in pieces of unequal size are not in them."
    )
    return found


def _paired(case: Case) -> str:
    """Return in how many replicates, on the same arrivals, the rule ended lower than the baseline."""
    verdict, baseline = case.verdict, case.asked["baseline"]
    kind = verdict.worst["information"]
    if verdict.policy == baseline:
        return ""
    ends = case.records[case.records["tasks"] == case.subject.tasks]
    ends = ends.assign(information=ends.get("information", "fresh"))
    ends = ends[(ends["information"] == kind) & ends["policy"].isin([verdict.policy, baseline])]
    columns = ["policy", "information", "replicate", "tasks", "gap"]
    seed = int(case.subject.runs["entropy"].iloc[0])
    [row] = compare(ends[columns], baseline=baseline, confidence=case.asked["confidence"], rng=seed).to_dict(
        "records"
    )
    lower = round(row["share_lower"] * row["replicates"])
    share = f"{lower:,} of {row['replicates']:,} replicates"
    return f"On the same arrivals it ended lower than {baseline} in {share}."


def _writer(case: Case) -> Callable[[float], str]:
    worst = case.verdict.worst
    return writer(worst["headroom"], worst["upper"], worst["mean_utilisation"])
