"""How full the fullest server was, block of time by block of time, under each rule and as it was."""

import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator

from labkit.figures.service_lines import check_columns
from labkit.figures.style import INK, grouped, label_ends, looks, plain, styled

NEEDED = ("policy", "replicate", "interval", "start", "end", "max_utilisation")


@styled
def highest_by_block(by_interval: pd.DataFrame, *, unit: str, block: float) -> Figure:
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
    began = float(means["start"].min())
    means[["start", "end"]] -= began
    style = looks(by_interval["policy"])
    figure = Figure(figsize=(8.4, 4.2), layout="constrained")
    axes = figure.subplots()
    ends = {}
    for policy in sorted(by_interval["policy"].unique()):
        rows = means.loc[policy]
        middle = (rows["start"] + rows["end"]) / 2
        axes.plot(middle, rows["max_utilisation"], linewidth=1.4, **style[policy] | {"markersize": 5})
        ends[policy] = float(rows["max_utilisation"].iloc[-1])
    high = float(means["end"].max())
    axes.set_xlim(0.0, high)
    axes.set_ylim(0.0, 1.1 * max(1.0, float(means["max_utilisation"].max())))
    axes.axhline(1.0, color=INK, linewidth=1.0)
    edges = np.unique(means["start"].to_numpy().round(9))
    axes.xaxis.set_major_locator(FixedLocator(edges[:: -(-len(edges) // 12)].tolist()))
    axes.xaxis.set_major_formatter(grouped)
    axes.yaxis.set_major_formatter(plain)
    axes.set_xlabel(f"time since {began:,.6g}, where measuring begins, {unit}")
    axes.set_ylabel(f"highest load ÷ capacity in {block:g} {unit} (1: full)")
    axes.grid(True)
    figure.draw_without_rendering()
    label_ends(axes, high, ends, style)
    return figure
