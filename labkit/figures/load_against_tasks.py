"""How far the fullest server lies above the mean, or above the optimum, while tasks arrive."""

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from labkit.analysis.headroom import headroom
from labkit.analysis.wording import reports
from labkit.checks import check_member
from labkit.figures.labels import label_ends, listed, note
from labkit.figures.looks import looks
from labkit.figures.style import COLUMNS, Drawing, counted, describe, log_ticks, plain, side_by_side, styled

BAND = (0.05, 0.95)
MEASURE_ABOVE = {"mean": "gap", "optimum": "excess"}


@styled
def load_against_tasks(
    measures: pd.DataFrame, *, risk: float, confidence: float = 0.95, above: str = "mean"
) -> Drawing:
    """Draw the gap against the number of tasks, one line a policy and one panel a kind of information.

    The line is the median over replicates, the band holds the middle 90 % of them, and the marker above is
    the headroom at the accepted risk with its limits at the last checkpoint.

    Parameters
    ----------
    measures : pandas.DataFrame
        Rows of ``outcome.measures`` or of records: policy, replicate, tasks, gap or excess and, if
        there, information.
    risk, confidence : float
        As in `labkit.headroom`.
    above : str
        "mean" draws the gap; "optimum" the excess, for fleets on which no rule can keep the gap from growing.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When the table, the risk or the confidence is refused.
    """
    of = MEASURE_ABOVE[check_member("above", above, MEASURE_ABOVE)]
    columns = ["policy", "replicate", "tasks", of]
    table = measures.reindex(columns=columns).assign(information=measures.get("information", "fresh"))
    last = table[table["tasks"] == table["tasks"].max()]
    needed = headroom(last, risk=risk, confidence=confidence, of=of).set_index(["policy", "information"])
    kinds = sorted(table["information"].unique())
    style = looks(table["policy"])
    figure, panels = side_by_side(len(kinds), sharey=True)
    bands = table.groupby(["information", "policy", "tasks"])[of].quantile(np.array([*BAND, 0.5])).unstack()
    wide = bands.to_numpy().max() > 5 * bands[0.5].to_numpy().min() and bands.to_numpy().min() > 0
    for axes, kind in zip(panels, kinds, strict=True):
        ends = {}
        for policy in sorted(table.loc[table["information"] == kind, "policy"].unique()):
            rows = bands.loc[(kind, policy)]
            _line(axes, rows, needed.loc[(policy, kind)], style[policy])
            ends[policy] = needed.loc[(policy, kind), "headroom"]
        moments = bands.loc[kind].index.get_level_values("tasks")
        _axes(axes, moments, wide, float(bands.to_numpy().min()))
        axes.set_title(f"load reports {reports(kind)}" if len(kinds) > 1 else "")
        axes.ends = ends
    for axes in panels[::COLUMNS]:
        axes.set_ylabel(f"{of}: highest load ÷ capacity − {above}")
    percent = f"{100 * risk:g} %"
    note(
        figure,
        f"line: median · band: middle 90 % of replicates · end marker: {of} at {percent} risk, "
        f"{100 * confidence:g} % limits",
    )
    figure.draw_without_rendering()
    for axes in panels:
        label_ends(axes, float(table["tasks"].max()) * 1.05, axes.ends, style)
    medians = bands[0.5].xs(table["tasks"].max(), level="tasks").groupby("policy").max()
    reached = [f"{name} {value:.3g}" for name, value in medians.items()]
    late = "" if len(kinds) == 1 else ", the most of its load reports"
    return describe(
        figure,
        f"The {of} of each rule in utilisation against the tasks placed, up to {table['tasks'].max():,}; the "
        f"median at the end{late}: {listed(reached)}.",
    )


def _line(axes: Axes, rows: pd.DataFrame, needed: pd.Series, look: dict) -> None:
    tasks = rows.index.to_numpy(np.float64)
    axes.fill_between(tasks, rows[BAND[0]], rows[BAND[1]], color=look["color"], alpha=0.16, linewidth=0)
    axes.plot(tasks, rows[0.5], color=look["color"], linestyle=look["linestyle"])
    limits = [[needed["headroom"] - needed["lower"]], [needed["upper"] - needed["headroom"]]]
    axes.errorbar(
        [tasks[-1] * 1.05],
        [needed["headroom"]],
        yerr=limits,
        color=look["color"],
        marker=look["marker"],
        capsize=3,
        linewidth=1.2,
        clip_on=False,
    )


def _axes(axes: Axes, tasks: pd.Index, wide: bool, lowest: float) -> None:
    axes.set_xscale("log")
    if wide:
        axes.set_yscale("log")
        log_ticks(axes.yaxis, *axes.get_ylim(), 8)
    else:
        axes.set_ylim(bottom=min(0.0, lowest * 1.05))
        axes.yaxis.set_major_locator(MaxNLocator(6))
    axes.yaxis.set_major_formatter(plain)
    axes.set_xlim(float(tasks.min()) * 0.95, float(tasks.max()) * 1.12)
    log_ticks(axes.xaxis, float(tasks.min()) * 0.95, float(tasks.max()) * 1.12, 5)
    axes.xaxis.set_major_formatter(counted)
    axes.set_xlabel("tasks placed")
    axes.grid(True)
