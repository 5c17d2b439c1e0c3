"""The fair profile as a staircase: how much of the capacity must be how full."""

import numpy as np
import pandas as pd

from labkit.analysis.wording import utilisation
from labkit.errors import InputError
from labkit.figures.style import (
    BLUE,
    FAINT,
    INK,
    LOW,
    VERMILLION,
    Drawing,
    describe,
    for_words,
    percents,
    plain,
    sheet,
    styled,
)


@styled
def fair_levels(profile: pd.DataFrame) -> Drawing:
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
    figure = sheet(LOW)
    axes = figure.subplots()
    axes.stairs(level, share, color=BLUE, linewidth=1.8)
    axes.fill_between(share, np.append(level, level[-1]), step="post", color=BLUE, alpha=0.15)
    axes.axhline(mean, color=FAINT, linewidth=1.2, linestyle=(0, (4, 2)))
    even = level[0] <= mean * (1 + 1e-9)
    if not even:
        axes.annotate(
            f"mean {utilisation(mean)}", (1.0, mean), xytext=(5, 0), textcoords="offset points",
            va="center", color=INK, annotation_clip=False,
        )  # fmt: skip
        axes.plot([0, top], [level[0], level[0]], color=VERMILLION, linewidth=3.2, solid_capstyle="butt")
    several = int(profile["bottleneck"].sum())
    words = (
        f"optimum {utilisation(level[0])}, the mean: all servers can be equally full"
        if even
        else f"optimum {utilisation(level[0])}: bottleneck of {several:,} server{'s' * (several != 1)}"
    )
    axes.annotate(
        words, (0.0, level[0]), xytext=(2, 5), textcoords="offset points",
        color=for_words(BLUE if even else VERMILLION),
    )  # fmt: skip
    axes.set_xlim(0, 1)
    axes.set_ylim(0, level[0] * 1.14 or 1.0)
    axes.xaxis.set_major_formatter(percents)
    axes.yaxis.set_major_formatter(plain)
    axes.set_xlabel("share of the total capacity, fullest first")
    axes.set_ylabel("fair utilisation (load ÷ capacity)")
    axes.grid(True, axis="y")
    levels = (
        f"all servers at {utilisation(level[0])}"
        if even
        else f"{several:,} at {utilisation(level[0])}, the least full at {utilisation(level[-1])}, "
        f"in the mean {utilisation(mean)}"
    )
    return describe(
        figure, f"Fair utilisation of {len(rows):,} servers against the share of the capacity: {levels}."
    )
