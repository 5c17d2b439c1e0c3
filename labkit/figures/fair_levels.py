"""The fair profile as a staircase: how much of the capacity must be how full."""

import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.ticker import PercentFormatter

from labkit.analysis.wording import utilisation
from labkit.errors import InputError
from labkit.figures.style import COLOURS, FAINT, plain, styled


@styled
def fair_levels(profile: pd.DataFrame) -> Figure:
    """Draw fair utilisation against the share of the capacity that is at least so full.

    Parameters
    ----------
    profile : pandas.DataFrame
        ``survey.profile``: capacity, fair_utilisation and bottleneck, one row a server.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column is missing.
    """
    for column in ("capacity", "fair_utilisation", "bottleneck"):
        if column not in profile.columns:
            raise InputError(f"profile has no column {column!r}; give the table survey.profile.")
    rows = profile.sort_values("fair_utilisation", ascending=False, kind="stable")
    level = rows["fair_utilisation"].to_numpy()
    share = np.concatenate([[0.0], rows["capacity"].cumsum() / rows["capacity"].sum()])
    mean = float(np.average(level, weights=rows["capacity"]))
    top = float(share[int(profile["bottleneck"].sum())])
    figure = Figure(figsize=(7.2, 3.6), layout="constrained")
    axes = figure.subplots()
    axes.stairs(level, share, color=COLOURS[0], linewidth=1.8)
    axes.fill_between(share, np.append(level, level[-1]), step="post", color=COLOURS[4], alpha=0.25)
    axes.axhline(mean, color=FAINT, linewidth=1.2, linestyle=(0, (4, 2)))
    axes.annotate(
        f"mean {utilisation(mean)}", (1.0, mean), xytext=(0, 3), textcoords="offset points", ha="right"
    )
    axes.plot([0, top], [level[0], level[0]], color=COLOURS[1], linewidth=3.2, solid_capstyle="butt")
    axes.annotate(
        f"optimum {utilisation(level[0])}: bottleneck of {int(profile['bottleneck'].sum()):,} servers",
        (0.0, level[0]),
        xytext=(0, 4),
        textcoords="offset points",
        color=COLOURS[1],
    )
    axes.set_xlim(0, 1)
    axes.set_ylim(0, level[0] * 1.14)
    axes.xaxis.set_major_formatter(PercentFormatter(1.0))
    axes.yaxis.set_major_formatter(plain)
    axes.set_xlabel("share of the total capacity, fullest first")
    axes.set_ylabel("fair utilisation (load ÷ capacity)")
    axes.grid(True, axis="y")
    return figure
