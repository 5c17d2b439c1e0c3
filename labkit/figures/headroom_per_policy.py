"""What each rule needs, side by side."""

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from labkit.analysis.wording import reports, utilisation
from labkit.checks import check_member, nearest
from labkit.errors import InputError
from labkit.figures.labels import in_lines, listed, note
from labkit.figures.looks import looks
from labkit.figures.style import FAINT, INK, PAPER, Drawing, describe, plain, sheet, styled
from labkit.policies.naming import shown_name


@styled
def headroom_per_policy(table: pd.DataFrame, *, baseline: str = "", above: str = "mean") -> Drawing:
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
    step = 0.28 * len(kinds) + 0.28
    figure = sheet(1.5 + step * len(order))
    axes = figure.subplots()
    for place, policy in enumerate(order):
        mine = rows[rows["policy"] == policy].set_index("information")
        shown = [kind for kind in kinds if kind in mine.index]
        for at, kind in enumerate(shown):
            y = place + 0.34 * ((len(shown) - 1) / 2 - at)
            base = rows[(rows["policy"] == baseline) & (rows["information"] == kind)]
            _dot(axes, y, mine.loc[kind], style[policy], filled=kind == kinds[0])
            _values(axes, y, mine.loc[kind], base, baseline if policy != baseline else "")
    axes.set_yticks(range(len(order)), [in_lines(shown_name(name)) for name in order])
    axes.tick_params(axis="y", length=0)
    axes.set_ylim(-0.6, len(order) - 0.4)
    axes.set_xlim(0, rows["upper"].max() * 1.04)
    axes.xaxis.set_major_formatter(plain)
    axes.grid(True, axis="x")
    first = rows.iloc[0]
    axes.set_xlabel(
        f"{'excess' if excess else 'headroom'} at {100 * first['risk']:g} % risk, "
        f"utilisation (load ÷ capacity) above the {above}"
    )
    words = f"bars: {100 * first['confidence']:g} % limits"
    if len(kinds) > 1:
        words += " · " + " · ".join(
            f"{'filled' if at == 0 else 'open'}: load reports {reports(kind)}"
            for at, kind in enumerate(kinds)
        )
    note(figure, words)
    if excess:
        _optimum(axes, rows)
    else:
        _network(axes, rows)
    worst = rows.groupby("policy")["headroom"].max()
    needs = [f"{name} {utilisation(worst[name])}" for name in order[::-1]]
    late = "" if len(kinds) == 1 else ", the most of its load reports"
    return describe(
        figure,
        f"{'Excess' if excess else 'Headroom'} that each rule needs above the {above} at "
        f"{100 * first['risk']:g} % risk{late}: {listed(needs)}.",
    )


def _dot(axes: Axes, y: float, row: pd.Series, look: dict, filled: bool) -> None:
    axes.errorbar(
        [row["headroom"]],
        [y],
        xerr=[[row["headroom"] - row["lower"]], [row["upper"] - row["headroom"]]],
        color=look["color"],
        marker=look["marker"],
        markerfacecolor=look["color"] if filled else PAPER,
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
        color=INK,
        annotation_clip=False,
    )


def _optimum(axes: Axes, rows: pd.DataFrame) -> None:
    axes.annotate(
        f"0 is the optimum, {utilisation(rows['network'].mean())} above the mean, the least on average",
        (0.0, 1.0),
        xycoords=("data", "axes fraction"),
        xytext=(0, 2),
        textcoords="offset points",
        color=INK,
        annotation_clip=False,
    )
