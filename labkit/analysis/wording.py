"""The answer in words: the decision, the aligned table and the notes under it."""

import math
import re
import textwrap
from collections.abc import Callable, Sequence

import numpy as np
import pandas as pd

from labkit.analysis.answer import Verdict
from labkit.errors import InputError
from labkit.policies.naming import shown_name

_INFORMATION = re.compile(r"(?:snapshot\(|dispatchers\(count=(?P<count>\d+), )every=(?P<every>\d+)\)")
# A utilisation that needs more decimals than this is written with a power of ten.
_DECIMALS = 6
# Differences below this share of what was subtracted are rounding.
_ROUNDING = 1e-12


def decision(table: pd.DataFrame, verdict: Verdict, *, baseline: str, total_capacity: float) -> str:
    """Return the decision in words: the sentences of `decision_sentences` as one text."""
    return " ".join(decision_sentences(table, verdict, baseline=baseline, total_capacity=total_capacity))


def decision_sentences(
    table: pd.DataFrame, verdict: Verdict, *, baseline: str, total_capacity: float
) -> list[str]:
    """Return the decision: what the rule needs and what it saves, then what to be careful about.

    Parameters
    ----------
    table : pandas.DataFrame
        The table of `answer_table`.
    verdict : Verdict
        What `judge` found.
    baseline : str
        The policy that savings are counted from.
    total_capacity : float
        Capacity of the whole fleet in work units.
    """
    worst = verdict.worst
    kinds = table["information"].nunique()
    degree = "worse" if kinds == 2 else "worst"
    where = f" in the {degree} of its report settings ({reports(worst['information'])})" if kinds > 1 else ""
    write = _row_writer(worst)
    needs = (
        f"{write(worst['headroom'])} above the mean utilisation of {utilisation(worst['mean_utilisation'])} "
        f"({100 * worst['confidence']:g} % limits {write(worst['lower'])} to {write(worst['upper'])}) "
        f"at a risk of {100 * worst['risk']:g} %{where}"
    )
    opening = (
        f"{verdict.policy}, the rule in operation, needs"
        if verdict.given
        else f"Use {verdict.policy}: it needs"
    )
    sentences = [f"{opening} a headroom of {needs}{_shortage(worst, total_capacity)}."]
    if verdict.policy != baseline:
        sentences.append(_saving(worst, baseline, total_capacity))
    elif verdict.given and verdict.best != baseline:
        rows = table[(table["policy"] == verdict.best) & (table["information"] == worst["information"])]
        sentences.append(_saving(rows.iloc[0], baseline, total_capacity, subject=verdict.best))
    if verdict.given and verdict.policy != verdict.best and verdict.policy not in verdict.close:
        sentences.append(f"The best rule here is {verdict.best}.")
    elif verdict.close and verdict.policy in (verdict.best, *verdict.close):
        others = [name for name in (verdict.best, *verdict.close) if name != verdict.policy]
        sentences.append(
            f"Its limits overlap with those of {' and '.join(others)}: "
            f"{worst['replicates']:,} replicates cannot rank them at this risk."
        )
    return sentences


def _shortage(row: pd.Series, total_capacity: float) -> str:
    """Return a clause where today's fleet is too small for the rule's need, or even for the work alone."""
    needed, work = row["capacity_needed"], row["mean_utilisation"] * total_capacity
    missing = needed - total_capacity
    if missing <= _ROUNDING * needed:
        return ""
    share = percent(100 * missing / total_capacity)
    clause = (
        f", and so {quantity(needed)} work units of capacity, {quantity(missing)} ({share} %) more than "
        f"today's {quantity(total_capacity)}"
    )
    if work > total_capacity * (1 + _ROUNDING):
        clause += f", which do not hold even the work alone, {quantity(work)}"
    return clause


def _saving(row: pd.Series, baseline: str, total_capacity: float, subject: str = "that") -> str:
    amount, least = row["saved"], row["saved_at_least"]
    if abs(amount) <= _ROUNDING * row["capacity_needed"]:
        return f"Against {baseline} {subject} saves nothing: both need the same."
    if amount < 0:
        return f"Against {baseline} {subject} saves nothing: it needs {quantity(-amount)} work units more."
    total = quantity(total_capacity)
    share = (
        f"{percent(100 * amount / total_capacity)} % of the fleet's {total}"
        if amount <= total_capacity
        else f"{amount / total_capacity:,.3g} times the fleet's {total}"
    )
    sure = (
        f", at least {quantity(least)} with {100 * row['confidence']:g} % confidence"
        if least > 0
        else "; the limits overlap, so the saving is not certain"
    )
    return f"Against {baseline} {subject} saves {quantity(amount)} work units of capacity ({share}){sure}."


def text_table(table: pd.DataFrame) -> str:
    """Return the answer table as aligned text of at most 120 columns."""
    confidence = 100 * table["confidence"].iloc[0]
    several = table["information"].nunique() > 1 or table["information"].iloc[0] != "fresh"
    heads = [
        "policy",
        *(["load reports"] if several else []),
        "headroom",
        f"{confidence:g} % limits",
        "% of mean",
    ]
    heads += ["network", "rule", "capacity", "saved", "at least"]
    lines = []
    for _, row in table.iterrows():
        cells = [shown_name(row["policy"]), *([reports(row["information"])] if several else [])]
        write = _row_writer(row)
        cells += [write(row["headroom"]), f"{write(row['lower'])} – {write(row['upper'])}"]
        cells += [percent(100 * row["of_mean"]), write(row["network"]), write(row["rule"])]
        cells += [quantity(row[name]) for name in ("capacity_needed", "saved", "saved_at_least")]
        lines.append(cells)
    widths = [max(len(line[at]) for line in [heads, *lines]) for at in range(len(heads))]
    left = 2 if several else 1

    def aligned(cells: list[str]) -> str:
        padded = [
            cell.ljust(width) if at < left else cell.rjust(width)
            for at, (cell, width) in enumerate(zip(cells, widths, strict=True))
        ]
        return "  ".join(padded).rstrip()

    return "\n".join([aligned(heads), aligned(["-" * width for width in widths]), *map(aligned, lines)])


def notes(table: pd.DataFrame, *, baseline: str, servers: int, total_capacity: float) -> str:
    """Return what the columns mean and what was simulated, one statement a line."""
    row = table.iloc[0]
    lines = [
        "headroom: utilisation (load ÷ capacity) of the fullest server above the mean, "
        f"exceeded with a probability of at most {100 * row['risk']:g} %",
        "network: the part owed to the network whatever the rule (optimum − mean); rule: the rest",
        f"capacity: (mean utilisation + headroom) × total capacity, in work units; saved: against {baseline}",
        f"{row['tasks']:,} tasks placed on {servers:,} servers of {quantity(total_capacity)} work units "
        f"in total, {row['replicates']:,} replicates",
    ]
    return "\n".join(lines)


def answer_text(sentences: str, table: pd.DataFrame, about: str, runs: Sequence[str]) -> str:
    """Return what the command line prints: the decision, the table, the notes, the runs.

    Parameters
    ----------
    sentences, about : str
        From `decision` and `notes`; a blank line in the first parts paragraphs.
    table : pandas.DataFrame
        The table of `answer_table`.
    runs : sequence of str
        Ids of the runs behind it.
    """
    named = ", ".join(runs) if len(runs) <= 4 else f"{', '.join(runs[:3])} and {len(runs) - 3} more"
    sources = f"runs: {named} (labkit rerun RUN repeats one to the bit)"
    filled = "\n\n".join(textwrap.fill(part, 110) for part in sentences.split("\n\n"))
    return "\n".join([filled, "", text_table(table), "", about, sources])


def page_table(table: pd.DataFrame, total_capacity: float) -> pd.DataFrame:
    """Return the answer table as text for a page, one row a policy and kind of information."""
    confidence = f"{100 * table['confidence'].iloc[0]:g} % limits"
    rows = []
    for _, row in table.iterrows():
        write = _row_writer(row)
        rows.append(
            {
                "rule": shown_name(row["policy"]),
                "load reports": reports(row["information"]),
                "headroom": write(row["headroom"]),
                confidence: f"{write(row['lower'])}\u00a0–\u00a0{write(row['upper'])}",
                "% of mean utilisation": percent(100 * row["of_mean"]),
                "owed to the network": write(row["network"]),
                "owed to the rule": write(row["rule"]),
                "capacity to provision": quantity(row["capacity_needed"]),
                "÷ capacity today": _ratio(row["capacity_needed"] / total_capacity),
                "saved": quantity(row["saved"]),
                "saved at least": quantity(row["saved_at_least"]),
            }
        )
    return pd.DataFrame(rows).set_index(["rule", "load reports"])


def paired_table(paired: pd.DataFrame) -> pd.DataFrame:
    """Return the table of `labkit.compare` as text for a page, one row a policy and kind of information."""
    band = f"{100 * paired['confidence'].iloc[0]:g} % band" if len(paired) else "band"
    rows = []
    for _, row in paired.iterrows():
        write = writer(abs(row["difference"]), abs(row["upper"]), abs(row["lower"]))
        lower = round(row["share_lower"] * row["replicates"])
        rows.append(
            {
                "rule": shown_name(row["policy"]),
                "load reports": reports(row["information"]),
                f"gap less that of {row['baseline']}": write(row["difference"]),
                band: f"{write(row['lower'])}\u00a0to\u00a0{write(row['upper'])}",
                "ended lower in": f"{lower:,} of {row['replicates']:,} replicates",
            }
        )
    return pd.DataFrame(rows).set_index(["rule", "load reports"]) if rows else pd.DataFrame()


def guard(verdict: Verdict, max_headroom: float | None) -> str:
    """Return what a guard that was not broken says; see `check_max_headroom`."""
    if max_headroom is None:
        return "No `max_headroom` was set for this answer."
    upper = writer(verdict.highest["headroom"])(verdict.highest["upper"])
    return (
        f"The guard holds: the upper limit of the headroom that {verdict.policy} needs, {upper}, is not "
        f"above the `max_headroom` of {max_headroom:g}."
    )


def horizon(measures: pd.DataFrame, policy: str, of: str = "gap") -> str:
    """Return how the median gap, or excess, of a policy moved towards the end.

    Parameters
    ----------
    measures : pandas.DataFrame
        policy, information, tasks, and gap or excess, at several checkpoints.
    policy : str
        The policy that is described.
    of : str
        "gap" or "excess".
    """
    rows = measures[measures["policy"] == policy]
    medians = rows.groupby(["information", "tasks"])[of].median()
    sentences = []
    for information in medians.index.unique("information"):
        path = medians[information]
        end = int(path.index[-1])
        before = path[path.index <= end / 2]
        if before.empty:
            continue
        start, low, high = int(before.index[-1]), float(before.iloc[-1]), float(path.iloc[-1])
        if low <= 0:
            continue
        change = 100 * (high / low - 1)
        moved = f"grew by {change:.0f} %" if change >= 0 else f"fell by {-change:.0f} %"
        sentences.append(
            f"With load reports {reports(information)} the median {of} of {policy} {moved} "
            f"between {start:,} and {end:,} tasks."
        )
    return " ".join(sentences)


def reports(information: str) -> str:
    """Return what a kind of information means in field words."""
    try:
        every, dispatchers = report_age(information)
    except InputError:
        return information
    if every == 0:
        return "always fresh"
    shared = f", {dispatchers:,} dispatchers" if dispatchers else ""
    return f"every {every:,} tasks{shared}"


def report_age(information: str) -> tuple[int, int]:
    """Return the tasks from one report to the next, 0 for fresh loads, and the number of dispatchers or 0.

    Parameters
    ----------
    information : str
        The name of an information model, as tables have it.

    Raises
    ------
    InputError
        When it is none.
    """
    if information == "fresh":
        return 0, 0
    found = _INFORMATION.fullmatch(information)
    if found is None:
        raise InputError(f"information is {information!r}; give the name of an information model.")
    return int(found["every"]), int(found["count"] or 0)


def writer(*sizes: float) -> Callable[[float], str]:
    """Return a function that writes utilisations with the decimals that the first positive size calls for.

    That size gets at least three significant digits: four decimals where it lies between 0.01 and 1, fewer
    above, more below, and below 0.0001 one power of ten for all numbers. So numbers that belong together,
    such as a headroom and its limits, are rounded alike.

    Parameters
    ----------
    *sizes : float
        Utilisations; those that are not positive and finite do not count.
    """
    size = next((each for each in sizes if np.isfinite(each) and each > 0), 0.1)
    power = math.floor(math.log10(size) + _ROUNDING)
    decimals = max(0, 3 - power) if power >= 0 else max(4, 2 - power)
    unit, ending = (1.0, "") if decimals <= _DECIMALS else (10.0**power, f"e{power:03d}")
    if ending:
        decimals = 2

    def write(value: float) -> str:
        if not np.isfinite(value):
            return "–"
        return f"{value / unit:z,.{decimals}f}{ending}"

    return write


def _row_writer(row: pd.Series) -> Callable[[float], str]:
    return writer(row["headroom"], row["upper"], row["mean_utilisation"])


def utilisation(value: float) -> str:
    """Return a utilisation with the decimals that its own size calls for, at least three digits."""
    return writer(abs(value))(value)


def _ratio(value: float) -> str:
    return f"{value:,.3f}" if value >= 0.1 else f"{value:.3g}"


def percent(value: float) -> str:
    """Return a percentage: one decimal, or three digits where that would be too few."""
    if not np.isfinite(value):
        return "–"
    return f"{value:,.1f}" if abs(value) >= 1 or value == 0 else f"{value:.3g}"


def quantity(value: float) -> str:
    """Return an amount of work units with thousands separated and at least three digits."""
    if not np.isfinite(value):
        return "–"
    size, whole = abs(float(value)), value == round(value)
    if size >= 1e15 or 0 < size < 1e-4:
        return f"{value:.3g}"
    if whole or round(size, 1) >= 1000:  # as it will be written: 999.96 is 1,000
        return f"{value:,.0f}"
    if round(size, 2) >= 100:
        return f"{value:.1f}"
    return f"{value:.{max(2, 2 - math.floor(math.log10(size)))}f}"
