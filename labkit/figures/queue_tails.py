"""How often a server has many tasks: the tails of the queues, all servers pooled."""

import numpy as np
import pandas as pd
from matplotlib.ticker import LogLocator, MaxNLocator, NullLocator

from labkit.figures.labels import label_lines, listed
from labkit.figures.looks import looks
from labkit.figures.service_lines import check_columns
from labkit.figures.style import TALL, Drawing, describe, sheet, styled

LEAST_SHARE = 1e-5


@styled
def queue_tails(tails: pd.DataFrame, *, title: str = "", least: float = LEAST_SHARE) -> Drawing:
    """Draw the share of time that a server has at least so many tasks, one line a rule.

    Parameters
    ----------
    tails : pandas.DataFrame
        Rows of ``outcome.tails`` of one or several rules: policy, replicate, at_least, share.
    title : str
        What was run.
    least : float
        Shares below it are not drawn: they come from a handful of moments.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column is missing.
    """
    check_columns(tails, ("policy", "replicate", "at_least", "share"), "outcome.tails")
    replicates = tails.groupby("policy")["replicate"].nunique()
    # A replicate without a row for a number never had a server with as many.
    means = tails.groupby(["policy", "at_least"])["share"].sum().div(replicates, level="policy")
    style = looks(tails["policy"])
    figure = sheet(TALL)
    axes = figure.subplots()
    ends, drawn = {}, {}
    for policy in sorted(replicates.index):
        line = means[policy]
        line = line[(line >= least) & (line.index > 0)]
        if line.empty:
            continue
        look = style[policy] | {"markersize": 4, "markevery": max(1, len(line) // 12)}
        axes.plot(line.index, line.to_numpy(), **look)
        drawn[policy] = np.column_stack([line.index.to_numpy(float), line.to_numpy()])
        ends[policy] = (float(line.index[-1]), float(line.iloc[-1]))
    axes.set_yscale("log")
    axes.yaxis.set_major_locator(LogLocator(numticks=12))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.yaxis.set_major_formatter(_one_in)
    axes.xaxis.set_major_locator(MaxNLocator(8, integer=True))
    # Room to the right of the last line for its name.
    axes.set_xlim(0, 1.25 * max((place for place, _ in ends.values()), default=1.0))
    axes.set_ylim(least, 1.5)
    axes.set_xlabel("tasks on a server, waiting and in service")
    axes.set_ylabel("share of server time with at least as many")
    axes.set_title(title)
    axes.grid(True)
    figure.draw_without_rendering()
    label_lines(axes, drawn, style)
    longest = [f"{name} {place:,.0f}" for name, (place, _) in ends.items()]
    return describe(
        figure,
        f"Share of server time with at least so many tasks on a server{f', {title}' if title else ''}; the "
        f"most tasks with a share of {least:g}: {listed(longest)}.",
    )


def _one_in(share: float, _: float) -> str:
    return "always" if share >= 1 else f"1 in {round(1 / share):,}"
