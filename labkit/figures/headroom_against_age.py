"""What late reports cost: the headroom of each rule against the age of what it sees."""

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.ticker import FixedLocator, NullLocator

from labkit.analysis.wording import report_age
from labkit.checks import check_whole
from labkit.errors import InputError
from labkit.figures.labels import label_ends, listed, note
from labkit.figures.looks import looks
from labkit.figures.style import COLUMNS, Drawing, describe, log_ticks, plain, side_by_side, styled

NEEDED = ("policy", "information", "headroom", "lower", "upper", "risk", "confidence")


@styled
def headroom_against_age(table: pd.DataFrame, *, servers: int) -> Drawing:
    """Draw the headroom against the time between reports, one line a rule, one panel a number of dispatchers.

    Parameters
    ----------
    table : pandas.DataFrame
        Rows of `labkit.headroom` at one checkpoint, with the column information.
    servers : int
        Servers of the fleet: reports are counted in tasks a server.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column is missing, or a policy has several rows for one kind of information.
    """
    servers = check_whole("servers", servers)
    for column in NEEDED:
        if column not in table.columns:
            raise InputError(f"table has no column {column!r}; give the table of labkit.headroom.")
    if table.duplicated(["policy", "information"]).any():
        raise InputError("table has several rows for one policy and information; keep one checkpoint.")
    ages = [report_age(information) for information in table["information"]]
    rows = table.assign(age=[every / servers for every, _ in ages], dispatchers=[each for _, each in ages])
    # With fresh loads it does not matter how many there are.
    kinds = sorted(rows.loc[rows["age"] > 0, "dispatchers"].unique()) or [0]
    style = looks(rows["policy"])
    figure, panels = side_by_side(len(kinds), sharey=True)
    late = np.sort(rows.loc[rows["age"] > 0, "age"].unique())
    # Fresh loads have a place of their own, left of the shortest age on the logarithmic axis.
    fresh = (late[0] if late.size else 1.0) / 4.0
    wide = rows["headroom"].max() > 8 * max(rows["headroom"].min(), 1e-12)
    for axes, kind in zip(panels, kinds, strict=True):
        mine = rows[(rows["dispatchers"] == kind) | (rows["age"] == 0)]
        ends = {}
        names = sorted(mine["policy"].unique())
        for at, policy in enumerate(names):
            # Side by side, since rules that need alike would hide each other.
            aside = 1.06 ** (at - (len(names) - 1) / 2)
            group = mine[mine["policy"] == policy].sort_values("age")
            ends[policy] = _line(axes, group, style[policy], fresh, aside)
        _axes(axes, fresh, late, wide)
        axes.ends = ends
        several = f"{kind:,} dispatchers, each knows its own"
        axes.set_title(several if kind else "all see the last report")
    first = rows.iloc[0]
    percent = f"{100 * first['risk']:g} %"
    for axes in panels[::COLUMNS]:
        axes.set_ylabel(f"headroom at {percent} risk (load ÷ capacity)")
    note(figure, f"bars: {100 * first['confidence']:g} % limits · marks are moved sideways to show all")
    figure.draw_without_rendering()
    for axes in panels:
        label_ends(axes, (late[-1] if late.size else fresh) * 1.25, axes.ends, style)
    oldest = rows.loc[rows["age"] == rows["age"].max()].groupby("policy")["headroom"].max()
    needs = [f"{name} {value:.3g}" for name, value in oldest.items()]
    return describe(
        figure,
        f"Headroom of each rule at {percent} risk against the tasks a server from one report of the loads to "
        f"the next; with the oldest reports {listed(needs)}.",
    )


def _line(axes: Axes, rows: pd.DataFrame, look: dict, fresh: float, aside: float) -> float:
    place = np.where(rows["age"] > 0, rows["age"], fresh) * aside
    height = rows["headroom"].to_numpy()
    spans = np.array([height - rows["lower"], rows["upper"] - height])
    axes.errorbar(place, height, yerr=spans, capsize=2, **look)
    return float(height[-1])


def _axes(axes: Axes, fresh: float, late: np.ndarray, wide: bool) -> None:
    axes.set_xscale("log")
    ticks = [fresh, *late]
    axes.xaxis.set_major_locator(FixedLocator(ticks))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.set_xticks(ticks, ["fresh", *(f"{age:.3g}" for age in late)])
    axes.set_xlim(fresh * 0.7, (late[-1] if late.size else fresh) * 1.3)
    if wide:
        axes.set_yscale("log")
        log_ticks(axes.yaxis, *axes.get_ylim(), 9)
    else:
        axes.set_ylim(bottom=0.0)
    axes.yaxis.set_major_formatter(plain)
    axes.set_xlabel("tasks a server from one report to the next")
    axes.grid(True)
