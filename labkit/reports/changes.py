"""What would change a recommendation: read from the records and the survey of the fleet, never supposed."""

from collections.abc import Callable

import numpy as np

from labkit.analysis.answer import judge
from labkit.analysis.balance import balance_in_words, in_words
from labkit.analysis.headroom import replicates_needed
from labkit.analysis.wording import horizon, quantity, report_age, reports, writer
from labkit.errors import InputError
from labkit.policies.naming import moves_placed_work, shown_name
from labkit.reports.case import Case
from labkit.survey.outages import outages

# Losses worked out for the decision page, those of the servers with the highest fair load.
MOST_LOSSES = 200

# Other risks that are asked of the same records, as multiples of the accepted one.
TIMES = (10, 5, 2, 1, 0.5, 0.2, 0.1)
LARGEST_RISK = 0.5

RISK_HEADERS = ("accepted risk", "headroom", "limits", "capacity to provision", "rule that needs least")


def what_would_change(case: Case) -> list[tuple[str, str]]:
    """Return what would change the recommendation, each as a heading and a sentence or two."""
    parts: dict[str, Callable[[Case], str]] = {
        "Later load reports": late_reports,
        "Loss of a server": loss_of_a_server,
        "More work": more_work,
        "Another network": another_network,
        "More replicates": more_replicates,
    }
    found = {heading: words(case) for heading, words in parts.items()}
    return [(heading, text) for heading, text in found.items() if text]


def late_reports(case: Case) -> str:
    """Return what the age of load reports does to the rule, as far as the study varied it."""
    mine = case.table[case.table["policy"] == case.verdict.policy]
    kinds = sorted(mine["information"].unique(), key=_age)
    if len(kinds) == 1:
        return (
            f"All runs saw loads that were reported {_when(kinds[0])}. What other ages of the reports would "
            "cost is not in this study; report_every in its grid would tell."
        )
    rows = mine.set_index("information")
    write = writer(float(mine["headroom"].max()))
    needs = ", ".join(
        f"{write(rows.loc[kind, 'headroom'])} with loads reported {_when(kind)}" for kind in kinds
    )
    placing = case.table[~case.table["policy"].map(moves_placed_work)]
    leasts = placing.loc[placing.groupby("information")["headroom"].idxmin()].set_index("information")
    others = [kind for kind in kinds if leasts.loc[kind, "policy"] != case.verdict.policy]
    if not others:
        return f"{case.verdict.policy} needs {needs}; in each of these settings no other rule needs less."
    better = ", ".join(f"{leasts.loc[kind, 'policy']} with loads {_when(kind)}" for kind in others)
    return f"{case.verdict.policy} needs {needs}. Less is needed by {better}."


def loss_of_a_server(case: Case) -> str:
    """Return what the loss of one server does to the best that any rule could reach, against the plan."""
    fleet = case.subject.fleet
    if len(fleet) < 2:
        return "The fleet has one server; its loss leaves nothing."
    fullest = case.best.profile.sort_values("fair_load", ascending=False, kind="stable")
    names = fullest["server"].head(MOST_LOSSES)
    try:
        lost = outages(fleet, servers=names, bottlenecks=False)
    except InputError as refusal:
        return f"Losses could not be worked out: {refusal}"
    scale = case.mean / case.best.mean
    optimum = lost["optimum"].to_numpy() * scale
    known = np.isfinite(optimum)
    if not known.any():
        return "Losses could not be worked out: demands and capacities are too many orders apart."
    at = int(np.argmax(np.where(known, optimum, -np.inf)))
    planned = case.mean + float(case.verdict.worst["headroom"])
    beyond = int((optimum[known] > planned * (1 + 1e-9)).sum())
    write = writer(planned)
    which = "servers" if len(names) == len(fleet) else f"{len(names):,} servers with the highest fair load"
    text = (
        f"No loss is in these runs. If {lost['server'].iloc[at]} were lost and the same work went to what is "
        f"left, no rule could keep the fullest server below a utilisation of {write(optimum[at])}, the worst "
        f"of the losses of single {which}; {write(planned)} is planned for the fullest now."
    )
    count = int(known.sum())
    if beyond:
        text += f" {beyond:,} of {count:,} such losses go beyond that plan, whatever the rule."
    else:
        text += f" None of {count:,} such losses goes beyond that plan in the mean; chance comes on top."
    stranded = int((lost["unplaced"] > 0).sum())
    if stranded:
        text += f" {stranded:,} leave some demand without any place."
    return text


def more_work(case: Case) -> str:
    """Return how the gap moved with the work placed, and that the answer is for this much work."""
    gaps = case.records.assign(information=case.records.get("information", "fresh"))
    kind = case.verdict.worst["information"]
    of = "gap" if case.best.balanceable else "excess"
    moved = horizon(gaps[gaps["information"] == kind], case.verdict.policy, of)
    return (
        f"The headroom is that of {case.subject.tasks:,} tasks on this fleet, placed from empty; with more "
        f"work it is another. {moved}"
    ).strip()


def another_network(case: Case) -> str:
    """Return what of the headroom is owed to the network, and where."""
    owed = float(case.verdict.worst["network"])
    write = writer(float(case.verdict.worst["headroom"]))
    if case.best.balanceable or not owed > 0:
        return balance_in_words(case.best, case.mean * case.capacity)
    least = float(case.best.optimum) * case.mean / case.best.mean
    return (
        f"{write(owed)} of the headroom is owed to the network: {in_words(case.best.bottleneck)} will on "
        f"average be at least {write(least)} full whatever the rule. A link or capacity there changes that; "
        "no rule can."
    )


def more_replicates(case: Case) -> str:
    """Return what more replicates would do for the limits and the ranking."""
    worst, verdict = case.verdict.worst, case.verdict
    needed = replicates_needed(float(worst["risk"]), float(worst["confidence"]))
    text = (
        f"{worst['replicates']:,} were run; limits at this risk need at least {needed:,}. Four times as many "
        "would about halve the distance between the limits"
    )
    others = [name for name in (verdict.best, *verdict.close) if name != verdict.policy]
    if verdict.close and others and verdict.policy in (verdict.best, *verdict.close):
        text += f", and may rank {verdict.policy} and {' and '.join(others)}, which these cannot tell apart"
    return f"{text}."


def other_risks(case: Case) -> list[tuple[str, ...]]:
    """Return what other accepted risks would ask for, one row each, as far as the replicates can tell.

    Returns
    -------
    list of tuple of str
        The cells of `RISK_HEADERS`, from the largest risk to the smallest.
    """
    risk, confidence = float(case.asked["risk"]), float(case.asked["confidence"])
    replicates = int(case.table["replicates"].min())
    rows: list[tuple[str, ...]] = []
    for each in (risk * times for times in TIMES):
        if each > max(risk, LARGEST_RISK) or replicates < replicates_needed(each, confidence):
            continue
        table = case.table if each == risk else case.at_risk(each)
        verdict = judge(table, case.verdict.policy)
        worst = verdict.worst
        write = writer(float(worst["headroom"]), float(worst["upper"]), float(worst["mean_utilisation"]))
        rows.append(
            (
                f"{100 * each:g} %",
                write(worst["headroom"]),
                f"{write(worst['lower'])} – {write(worst['upper'])}",
                quantity(worst["capacity_needed"]),
                " or ".join(shown_name(name) for name in (verdict.best, *verdict.close)),
            )
        )
    return rows


def _when(information: str) -> str:
    words = reports(information)
    return "afresh for each task" if words == "always fresh" else words


def _age(information: str) -> tuple[float, int, str]:
    try:
        every, dispatchers = report_age(information)
    except InputError:
        return np.inf, 0, information
    return every, dispatchers, information
