"""The answer in words: the decision, the aligned table and the notes under it."""

import textwrap
from collections.abc import Sequence

import numpy as np
import pandas as pd

from labkit.analysis.answer import Verdict


def decision(table: pd.DataFrame, verdict: Verdict, *, baseline: str, total_capacity: float) -> str:
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
    low, high = utilisation(worst["lower"]), utilisation(worst["upper"])
    needs = (
        f"{utilisation(worst['headroom'])} above the mean utilisation of "
        f"{utilisation(worst['mean_utilisation'])} ({100 * worst['confidence']:g} % limits {low} to {high}) "
        f"at a risk of {100 * worst['risk']:g} %{where}"
    )
    opening = (
        f"{verdict.policy}, the rule in operation, needs"
        if verdict.given
        else f"Use {verdict.policy}: it needs"
    )
    sentences = [f"{opening} a headroom of {needs}."]
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
    return " ".join(sentences)


def _saving(row: pd.Series, baseline: str, total_capacity: float, subject: str = "that") -> str:
    amount, least = row["saved"], row["saved_at_least"]
    if amount <= 0:
        return f"Against {baseline} {subject} saves nothing: it needs {quantity(-amount)} work units more."
    share = 100 * amount / total_capacity
    sure = (
        f", at least {quantity(least)} with {100 * row['confidence']:g} % confidence"
        if least > 0
        else "; the limits overlap, so the saving is not certain"
    )
    return (
        f"Against {baseline} {subject} saves {quantity(amount)} work units of capacity "
        f"({share:.1f} % of the fleet's {quantity(total_capacity)}){sure}."
    )


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
        cells = [row["policy"], *([reports(row["information"])] if several else [])]
        cells += [utilisation(row["headroom"]), f"{utilisation(row['lower'])} – {utilisation(row['upper'])}"]
        cells += [f"{100 * row['of_mean']:.1f}", utilisation(row["network"]), utilisation(row["rule"])]
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
        From `decision` and `notes`.
    table : pandas.DataFrame
        The table of `answer_table`.
    runs : sequence of str
        Ids of the runs behind it.
    """
    named = ", ".join(runs) if len(runs) <= 4 else f"{', '.join(runs[:3])} and {len(runs) - 3} more"
    sources = f"runs: {named} (labkit rerun RUN repeats one to the bit)"
    return "\n".join([textwrap.fill(sentences, 110), "", text_table(table), "", about, sources])


def page_table(table: pd.DataFrame, total_capacity: float) -> pd.DataFrame:
    """Return the answer table as text for a page, one row a policy and kind of information."""
    shown = {
        "policy": table["policy"],
        "load reports": table["information"].map(reports),
        "headroom": table["headroom"].map(utilisation),
        f"{100 * table['confidence'].iloc[0]:g} % limits": [
            f"{utilisation(low)} – {utilisation(high)}"
            for low, high in zip(table["lower"], table["upper"], strict=True)
        ],
        "% of mean utilisation": (100 * table["of_mean"]).map("{:.1f}".format),
        "owed to the network": table["network"].map(utilisation),
        "owed to the rule": table["rule"].map(utilisation),
        "capacity to provision": table["capacity_needed"].map(quantity),
        "÷ capacity today": (table["capacity_needed"] / total_capacity).map("{:.3f}".format),
        "saved": table["saved"].map(quantity),
        "saved at least": table["saved_at_least"].map(quantity),
    }
    return pd.DataFrame(shown).set_index(["policy", "load reports"])


def horizon(measures: pd.DataFrame, policy: str) -> str:
    """Return how the median gap of a policy moved towards the end, and what that means for the headroom.

    Parameters
    ----------
    measures : pandas.DataFrame
        policy, information, tasks, gap at several checkpoints.
    policy : str
        The policy that is described.
    """
    rows = measures[measures["policy"] == policy]
    medians = rows.groupby(["information", "tasks"])["gap"].median()
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
            f"With load reports {reports(information)} the median gap of {policy} {moved} "
            f"between {start:,} and {end:,} tasks."
        )
    return " ".join(sentences)


def reports(information: str) -> str:
    """Return what a kind of information means in field words."""
    if information == "fresh":
        return "always fresh"
    every = information.removeprefix("snapshot(every=").removesuffix(")")
    return f"every {int(every):,} tasks" if every.isdigit() else information


def utilisation(value: float) -> str:
    """Return a utilisation with enough digits to compare rules: four decimals below 10, four digits above."""
    if not np.isfinite(value):
        return "–"
    return f"{value:.4f}" if abs(value) < 10 else f"{value:,.1f}"


def quantity(value: float) -> str:
    """Return an amount of work units with thousands separated."""
    if not np.isfinite(value):
        return "–"
    return f"{value:,.0f}" if abs(value) >= 100 or value == round(value) else f"{value:,.2f}"
