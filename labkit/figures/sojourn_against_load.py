"""How long tasks stay, or how full servers get, against the load factor, for each rule."""

from collections.abc import Sequence

import pandas as pd

from labkit.analysis.service_words import measure_words
from labkit.errors import InputError
from labkit.figures.labels import in_lines, label_ends, listed, note
from labkit.figures.looks import looks
from labkit.figures.service_lines import check_columns, line_with_limits, ticks_at, wide_heights
from labkit.figures.style import Drawing, describe, side_by_side, styled

NEEDED = ("policy", "load_factor", "measure", "estimate", "lower", "upper", "confidence")


@styled
def sojourn_against_load(
    limits: pd.DataFrame, *, measures: Sequence[str], unit: str, limit: float | None = None
) -> Drawing:
    """Draw measures against the load factor, one line a rule and one panel a measure.

    Parameters
    ----------
    limits : pandas.DataFrame
        Rows of `labkit.service_limits`, with the column load_factor.
    measures : sequence of str
        Which of its measures are drawn, in this order.
    unit : str
        The unit of time.
    limit : float, optional
        The stability limit, drawn where it lies within half a step of the highest load.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column or a measure is missing, or a policy has several rows at one load.
    """
    check_columns(limits, NEEDED, "the table of labkit.service_limits")
    if limits.duplicated(["policy", "load_factor", "measure"]).any():
        raise InputError("table has several rows for one policy, load and measure; keep one fleet.")
    style = looks(limits["policy"])
    loads = sorted(limits["load_factor"].unique())
    figure, panels = side_by_side(len(measures), sharey=False)
    step = (loads[-1] - loads[0]) or 0.1 * loads[0]
    right = loads[-1] + 0.06 * step
    for axes, measure in zip(panels, measures, strict=True):
        mine = limits[limits["measure"] == measure]
        if mine.empty:
            raise InputError(f"table has no measure {measure!r}; ask labkit.service_limits for it.")
        axes.ends = {}
        for policy in sorted(mine["policy"].unique()):
            rows = mine[mine["policy"] == policy].sort_values("load_factor")
            last = line_with_limits(axes, rows["load_factor"].to_numpy(), rows, style[policy])
            axes.ends[policy] = last
        wide_heights(axes, mine["estimate"].min(), mine["upper"].max())
        ticks_at(axes, loads)
        axes.set_xlim(loads[0] - 0.06 * step, right)
        axes.set_xlabel("load factor (arriving work ÷ capacity)")
        axes.set_ylabel(in_lines(measure_words(measure, unit), 46))
        axes.grid(True)
    ending = f" · no rule serves {limit:.3g} or more" if limit is not None and limit < 1 else ""
    note(figure, f"bars: {100 * limits['confidence'].iloc[0]:g} % limits{ending}")
    figure.draw_without_rendering()
    for axes in panels:
        label_ends(axes, loads[-1], axes.ends, style)
    first = measure_words(measures[0], unit)
    reached = [f"{name} {height:.3g}" for name, height in panels[0].ends.items()]
    return describe(
        figure,
        f"{' and '.join(measure_words(each, unit) for each in measures)}, against the load factor from "
        f"{loads[0]:g} to {loads[-1]:g}; at its last load each rule reaches, as {first}: {listed(reached)}.",
    )
