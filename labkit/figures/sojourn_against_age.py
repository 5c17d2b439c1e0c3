"""Herding: what old reports of the loads do to a rule that trusts them, on one network or several."""

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from labkit.analysis.herding import worse_from
from labkit.figures.labels import label_ends, listed, note
from labkit.figures.looks import looks_of_networks
from labkit.figures.service_lines import check_columns, line_with_limits, ticks_at, wide_heights
from labkit.figures.style import FAINT, INK, TALL, Drawing, describe, sheet, styled

NEEDED = ("network", "policy", "age", "estimate", "lower", "upper")


@styled
def sojourn_against_age(
    table: pd.DataFrame, *, of: str = "mean sojourn", blind: str = "one-choice", confidence: float = 0.95
) -> Drawing:
    """Draw a measure, relative to the rule that looks at no loads, against the age of the reports.

    Parameters
    ----------
    table : pandas.DataFrame
        As `labkit.analysis.herding.against_blind` returns it; ages in mean service times.
    of : str
        The measure in words.
    blind : str
        The rule at height 1.
    confidence : float
        Of the limits in the table.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column is missing.
    """
    check_columns(table, NEEDED, "the table of against_blind")
    networks = list(dict.fromkeys(table["network"]))
    rules = table["policy"].nunique()
    style = looks_of_networks(table["network"] if rules == 1 else table["network"] + ", " + table["policy"])
    figure = sheet(TALL)
    axes = figure.subplots()
    ages = np.sort(table["age"].unique())
    ends = {}
    for (network, policy), rows in table.groupby(["network", "policy"], sort=False):
        name = str(network) if rules == 1 else f"{network}, {policy}"
        rows = rows.sort_values("age")
        aside = 1.03 ** (networks.index(network) - (len(networks) - 1) / 2)
        ends[name] = line_with_limits(axes, rows["age"].to_numpy() * aside, rows, style[name])
    axes.set_xscale("log")
    wide_heights(axes, table["estimate"].min(), table["upper"].max())
    ticks_at(axes, ages, [f"{age:.3g}" for age in ages])
    axes.set_xlim(ages[0] / 1.15, ages[-1] * 1.15)
    axes.axhline(1.0, color=INK, linewidth=1.0)
    axes.annotate(
        f"above: worse than {blind}, which looks at no loads",
        (ages[0] / 1.12, 1.0), xytext=(0, 4), textcoords="offset points", va="bottom",
    )  # fmt: skip
    _crossings(axes, worse_from(table))
    axes.set_xlabel("time from one report of the loads to the next, in mean service times")
    axes.set_ylabel(f"{of} ÷ that of {blind}")
    axes.grid(True)
    note(figure, f"bars: {100 * confidence:g} % limits of the paired difference · marks are moved sideways")
    figure.draw_without_rendering()
    label_ends(axes, ages[-1] * 1.05, ends, style)
    reached = [f"{name} {height:.3g}" for name, height in ends.items()]
    return describe(
        figure,
        f"{of} divided by that of {blind}, against the age of the load reports in mean service times; at the "
        f"oldest, {ages[-1]:.3g}: {listed(reached)}.",
    )


def _crossings(axes: Axes, found: pd.DataFrame) -> None:
    low = axes.get_ylim()[0]
    for age in found["age"].dropna():
        axes.plot([age, age], [low, 1.0], color=FAINT, linewidth=0.9, linestyle=(0, (2, 2)))
