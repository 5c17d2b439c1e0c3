"""The capacity that each rule needs to hold a risk down, as dots with limits."""

from collections.abc import Sequence
from typing import Any

import pandas as pd
from matplotlib.ticker import MaxNLocator

from labkit.errors import InputError
from labkit.figures.labels import in_lines, listed, note
from labkit.figures.looks import looks
from labkit.figures.style import INK, PAPER, Drawing, describe, plain, sheet, styled
from labkit.policies.naming import shown_name


@styled
def capacity_per_policy(provisions: Sequence[Any], *, unit: str = "") -> Drawing:
    """Draw the factor on all capacities that each rule needs, the least needed on top.

    Parameters
    ----------
    provisions : sequence of Provision
        From `labkit.serve_headroom` or `labkit.replay_headroom`, one a rule, of one criterion.
    unit : str
        The unit of time, for a criterion that ends in a time.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When there is none, or their criteria or risks differ.
    """
    if not provisions:
        raise InputError("provisions is empty; give at least one.")
    table = pd.concat([each.table for each in provisions], ignore_index=True)
    if len(table[["criterion", "risk", "confidence"]].drop_duplicates()) > 1:
        raise InputError("provisions are for different criteria or risks; give those of one question.")
    table = table.sort_values("scale", ascending=False, ignore_index=True)
    style = looks(table["policy"])
    figure = sheet(1.3 + 0.5 * len(table))
    axes = figure.subplots()
    for at, row in table.iterrows():
        look = style[row["policy"]] | {"linestyle": "none"}
        spans = [[row["scale"] - row["lower"]], [row["upper"] - row["scale"]]]
        axes.errorbar([row["scale"]], [at], xerr=spans, capsize=3, elinewidth=1.4, markersize=7, **look)
        axes.annotate(
            f"{row['scale']:.3f}", (row["upper"], at), xytext=(9, 0), textcoords="offset points", va="center",
            bbox={"facecolor": PAPER, "edgecolor": "none", "pad": 1.5},
        )  # fmt: skip
    axes.axvline(1.0, color=INK, linewidth=1.0)
    low, high = min(1.0, table["lower"].min()), max(1.0, table["upper"].max())
    axes.set_xlim(low - 0.08 * (high - low + 0.05), high + 0.14 * (high - low + 0.05))
    axes.set_ylim(-0.6, len(table) - 0.3)
    axes.set_yticks(range(len(table)), [in_lines(shown_name(name)) for name in table["policy"]])
    axes.tick_params(axis="y", length=0)
    axes.xaxis.set_major_locator(MaxNLocator(8, steps=[1, 2, 2.5, 5, 10]))
    axes.xaxis.set_major_formatter(plain)
    first = table.iloc[0]
    words = f"{first['criterion']} {unit}" if first["criterion"][-1:].isdigit() else first["criterion"]
    axes.set_xlabel("capacity of every server ÷ today's (line: today)")
    percent = f"{100 * first['risk']:g} %"
    note(figure, f"{words} at a risk of {percent} · bars: {100 * first['confidence']:g} % limits")
    axes.grid(True, axis="x")
    rules = [f"{row['policy']} {row['scale']:.3f}" for _, row in table.iloc[::-1].iterrows()]
    return describe(
        figure,
        f"The capacity that each rule needs, as a factor on today's, for {words} at a risk of {percent}: "
        f"{listed(rules)}.",
    )
