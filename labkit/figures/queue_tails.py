"""How often a server has many tasks: the tails of the queues, all servers pooled."""

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import LogLocator, MaxNLocator, NullLocator

from labkit.figures.service_lines import check_columns
from labkit.figures.style import looks, styled
from labkit.policies.naming import shown_name

LEAST_SHARE = 1e-5


@styled
def queue_tails(tails: pd.DataFrame, *, title: str = "", least: float = LEAST_SHARE) -> Figure:
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
    figure = Figure(figsize=(6.4, 4.4), layout="constrained")
    axes = figure.subplots()
    ends = {}
    for policy in sorted(replicates.index):
        line = means[policy]
        line = line[(line >= least) & (line.index > 0)]
        if line.empty:
            continue
        look = style[policy] | {"markersize": 4, "markevery": max(1, len(line) // 12)}
        axes.plot(line.index, line.to_numpy(), linewidth=1.5, **look)
        ends[policy] = (float(line.index[-1]), float(line.iloc[-1]))
    axes.set_yscale("log")
    axes.yaxis.set_major_locator(LogLocator(numticks=12))
    axes.yaxis.set_minor_locator(NullLocator())
    axes.yaxis.set_major_formatter(_one_in)
    axes.xaxis.set_major_locator(MaxNLocator(8, integer=True))
    axes.set_xlim(0, 1.02 * max((place for place, _ in ends.values()), default=1.0))
    axes.set_ylim(least, 1.5)
    axes.set_xlabel("tasks on a server, waiting and in service")
    axes.set_ylabel("share of server time with at least as many")
    axes.set_title(title)
    axes.grid(True)
    figure.draw_without_rendering()
    _label_beside(axes, means, ends, style, least)
    return figure


def _one_in(share: float, _: float) -> str:
    return "always" if share >= 1 else f"1 in {round(1 / share):,}"


def _label_beside(axes: Axes, means: pd.Series, ends: dict, style: dict, least: float) -> None:
    """Write each rule beside its line, at a height of its own, where lines lie furthest apart."""
    names = sorted(ends, key=lambda name: ends[name][0])
    heights = np.geomspace(least * 3, least * 3 * 2.2 ** max(len(names) - 1, 0), len(names))
    for name, height in zip(names, heights[::-1], strict=True):
        line = means[name]
        line = line[(line >= least) & (line.index > 0)]
        at = float(np.interp(np.log(height), np.log(line.to_numpy()[::-1]), line.index.to_numpy(float)[::-1]))
        # Above and to the right of a falling line there is room.
        axes.annotate(
            shown_name(name), (at, height), xytext=(5, 2), textcoords="offset points",
            color=style[name]["color"], annotation_clip=False,
        )  # fmt: skip
