"""How full the fullest server was, block of time by block of time, under each rule and as it was."""

import numpy as np
import pandas as pd
from matplotlib.ticker import FixedLocator

from labkit.figures.labels import label_ends, listed, note
from labkit.figures.looks import looks
from labkit.figures.service_lines import check_columns
from labkit.figures.style import INK, TALL, Drawing, amount, describe, grouped, plain, sheet, styled

NEEDED = ("policy", "replicate", "interval", "start", "end", "max_utilisation")
# Of more blocks than these, neighbours are drawn as one point.
MOST_POINTS = 60


@styled
def highest_by_block(by_interval: pd.DataFrame, *, unit: str, block: float) -> Drawing:
    """Draw the highest utilisation of any server within each block of time, one line a rule.

    Parameters
    ----------
    by_interval : pandas.DataFrame
        Rows of ``outcome.by_interval`` of several rules; of replicates, the mean is drawn.
    unit : str
        The unit of time.
    block : float
        Length of a block.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column is missing.
    """
    check_columns(by_interval, NEEDED, "outcome.by_interval")
    means = by_interval.groupby(["policy", "interval"])[["start", "end", "max_utilisation"]].mean()
    together = -(-int(means.groupby("policy").size().max()) // MOST_POINTS)
    began = float(means["start"].min())
    means[["start", "end"]] -= began
    style = looks(by_interval["policy"])
    figure = sheet(TALL)
    axes = figure.subplots()
    ends = {}
    for policy in sorted(by_interval["policy"].unique()):
        rows = means.loc[policy]
        shown = _gathered(rows, together)
        axes.plot((shown["start"] + shown["end"]) / 2, shown["max_utilisation"], **style[policy])
        ends[policy] = float(shown["max_utilisation"].iloc[-1])
    high = float(means["end"].max())
    axes.set_xlim(0.0, high)
    axes.set_ylim(0.0, 1.1 * max(1.0, float(means["max_utilisation"].max())))
    axes.axhline(1.0, color=INK, linewidth=1.0)
    edges = np.unique(means["start"].to_numpy().round(9))
    axes.xaxis.set_major_locator(FixedLocator(edges[:: -(-len(edges) // 12)].tolist()))
    axes.xaxis.set_major_formatter(grouped)
    axes.yaxis.set_major_formatter(plain)
    axes.set_xlabel(f"time since {began:,.6g}, where measuring begins, {unit}")
    axes.set_ylabel(f"highest load ÷ capacity within {amount(block, unit)} (1: full)")
    axes.grid(True)
    if together > 1:
        note(figure, f"each point: the highest of {together:,} blocks of {amount(block, unit)}")
    figure.draw_without_rendering()
    label_ends(axes, high, ends, style)
    tops = means["max_utilisation"].groupby("policy").max()
    return describe(
        figure,
        f"Highest load ÷ capacity of any server within {amount(block, unit)}, over {high:,.6g} {unit}; the "
        f"highest of all: {listed(f'{name} {top:.3g}' for name, top in tops.items())}.",
    )


def _gathered(rows: pd.DataFrame, together: int) -> pd.DataFrame:
    """Return the highest of so many neighbouring blocks as one row."""
    group = np.arange(len(rows)) // together
    how = {"start": "min", "end": "max", "max_utilisation": "max"}
    return rows.groupby(group).agg(how) if together > 1 else rows
