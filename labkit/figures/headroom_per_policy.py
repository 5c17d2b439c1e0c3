"""What each rule needs, side by side."""

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from labkit.analysis.wording import reports, utilisation
from labkit.checks import check_member, nearest
from labkit.errors import InputError
from labkit.figures.style import FAINT, INK, looks, plain, styled
from labkit.policies.naming import shown_name


@styled
def headroom_per_policy(table: pd.DataFrame, *, baseline: str = "", above: str = "mean") -> Figure:
    """Draw the headroom of each policy as a dot with its limits, least first.

    Parameters
    ----------
    table : pandas.DataFrame
        Rows of `labkit.headroom` at one checkpoint, or of the answer table: policy, headroom, lower, upper,
        risk, confidence and, if there, information and network.
    baseline : str
        The policy that differences are written against; empty writes none.
    above : str
        "mean" draws all of the headroom; "optimum" the excess, the part of it that is owed to the rule (needs
        the column network).

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column is missing, the baseline is not in the table, or a policy has several rows.
    """
    excess = check_member("above", above, ("mean", "optimum")) == "optimum"
    needed = ("policy", "headroom", "lower", "upper", "risk", "confidence", *(("network",) if excess else ()))
    for column in needed:
        if column not in table.columns:
            raise InputError(f"table has no column {column!r}; give the table of labkit.headroom.")
    rows = table.assign(information=table.get("information", "fresh"))
    if excess:
        rows[["headroom", "lower", "upper"]] = rows[["headroom", "lower", "upper"]].sub(
            rows["network"], axis=0
        )
    if rows.duplicated(["policy", "information"]).any():
        raise InputError("table has several rows for one policy and information; keep one checkpoint.")
    if baseline and baseline not in set(rows["policy"]):
        raise InputError(
            f"baseline is {baseline!r}, which is not in table; {nearest(baseline, rows['policy'])}."
        )
    kinds = sorted(rows["information"].unique())
    order = rows.groupby("policy")["headroom"].max().sort_values(ascending=False).index
    style = looks(rows["policy"])
    step = 0.36 * len(kinds) + 0.34
    figure = Figure(figsize=(8.6, 1.4 + step * len(order)), layout="constrained")
    axes = figure.subplots()
    for place, policy in enumerate(order):
        mine = rows[rows["policy"] == policy].set_index("information")
        shown = [kind for kind in kinds if kind in mine.index]
        for at, kind in enumerate(shown):
            y = place + 0.34 * ((len(shown) - 1) / 2 - at)
            base = rows[(rows["policy"] == baseline) & (rows["information"] == kind)]
            _dot(axes, y, mine.loc[kind], style[policy], filled=kind == kinds[0])
            _values(axes, y, mine.loc[kind], base, baseline if policy != baseline else "")
    axes.set_yticks(range(len(order)), [shown_name(name) for name in order])
    axes.tick_params(axis="y", length=0)
    axes.set_ylim(-0.6, len(order) - 0.4)
    axes.set_xlim(0, rows["upper"].max() * 1.04)
    axes.xaxis.set_major_formatter(plain)
    axes.grid(True, axis="x")
    first = rows.iloc[0]
    axes.set_xlabel(
        f"{'excess' if excess else 'headroom'} at {100 * first['risk']:g} % risk, "
        f"utilisation (load ÷ capacity) above the {above}; "
        f"bars: {100 * first['confidence']:g} % limits"
    )
    if excess:
        _optimum(axes, rows)
    else:
        _network(axes, rows)
    if len(kinds) > 1:
        marks = [
            Line2D([], [], color=INK, marker="o", linestyle="", markerfacecolor=INK if at == 0 else "white")
            for at in range(len(kinds))
        ]
        words = [f"load reports {reports(kind)}" for kind in kinds]
        figure.legend(marks, words, loc="outside upper right", ncols=min(3, len(kinds)))
    return figure


def _dot(axes: Axes, y: float, row: pd.Series, look: dict, filled: bool) -> None:
    axes.errorbar(
        [row["headroom"]],
        [y],
        xerr=[[row["headroom"] - row["lower"]], [row["upper"] - row["headroom"]]],
        color=look["color"],
        marker=look["marker"],
        markerfacecolor=look["color"] if filled else "white",
        markersize=7,
        capsize=3,
        linewidth=1.4,
    )


def _values(axes: Axes, y: float, row: pd.Series, base: pd.DataFrame, baseline: str) -> None:
    words = utilisation(row["headroom"])
    if baseline and len(base):
        difference = row["headroom"] - base["headroom"].iloc[0]
        sign = "−" if difference < 0 else "+"
        words += f"   {sign}{utilisation(abs(difference))} against {baseline}"
    axes.annotate(words, (1.01, y), xycoords=("axes fraction", "data"), va="center", annotation_clip=False)


def _network(axes: Axes, rows: pd.DataFrame) -> None:
    part = rows.get("network", pd.Series(dtype=float))
    if not len(part) or not np.isfinite(part).all() or part.mean() <= 1e-6 * rows["upper"].max():
        return
    axes.axvline(part.mean(), color=FAINT, linewidth=1.2, linestyle=(0, (4, 2)), zorder=1)
    axes.annotate(
        f"owed to the network whatever the rule: {utilisation(part.mean())}",
        (part.mean(), 1.0),
        xycoords=("data", "axes fraction"),
        xytext=(3, 2),
        textcoords="offset points",
        color="#555555",
        annotation_clip=False,
    )


def _optimum(axes: Axes, rows: pd.DataFrame) -> None:
    axes.annotate(
        f"0 is the optimum, {utilisation(rows['network'].mean())} above the mean, the least on average",
        (0.0, 1.0),
        xycoords=("data", "axes fraction"),
        xytext=(0, 2),
        textcoords="offset points",
        color="#555555",
        annotation_clip=False,
    )
