"""The start of a run: how the number of tasks grows from an empty fleet until it only fluctuates."""

from collections.abc import Mapping

import numpy as np
import pandas as pd

from labkit.analysis.service_words import tasks_over_time
from labkit.figures.labels import label_ends, listed
from labkit.figures.looks import looks
from labkit.figures.style import INK, LOW, Drawing, describe, grouped, plain, sheet, styled


@styled
def from_empty(pilots: Mapping[str, pd.DataFrame], *, warmup: float, unit: str, smooth: int = 5) -> Drawing:
    """Draw the mean number of tasks in the fleet against time, one line a rule, and where measuring begins.

    Parameters
    ----------
    pilots : dict of str to pandas.DataFrame
        Rule → ``outcome.by_interval`` of a run from the empty fleet, without warm-up.
    warmup : float
        Where measuring begins, in units of time.
    unit : str
        The unit of time.
    smooth : int
        Intervals to a point of the line.

    Returns
    -------
    matplotlib.figure.Figure
    """
    style = looks(pilots)
    figure = sheet(LOW)
    axes = figure.subplots()
    ends, last = {}, 0.0
    for name in sorted(pilots):
        series, times = tasks_over_time(pilots[name])
        count = max(1, len(times) // smooth)
        heights = [part.mean() for part in np.array_split(series.mean(axis=0), count)]
        places = [part.mean() for part in np.array_split(times, count)]
        look = style[name] | {"marker": ""}
        axes.plot(places, heights, linewidth=1.3, **look)
        ends[name], last = float(np.mean(heights[-max(1, count // 10) :])), max(last, float(places[-1]))
    axes.set_ylim(bottom=0.0)
    axes.set_xlim(0.0, last)
    axes.axvline(warmup, color=INK, linewidth=1.0)
    axes.annotate(
        f"measured from {warmup:,.4g} {unit} on" if warmup else "all is measured",
        (warmup, 0.02), xycoords=("data", "axes fraction"), xytext=(5, 0), textcoords="offset points",
    )  # fmt: skip
    axes.yaxis.set_major_formatter(plain)
    axes.xaxis.set_major_formatter(grouped)
    axes.set_xlabel(f"time since the fleet was empty, {unit}")
    axes.set_ylabel("tasks in the fleet, mean of replicates")
    axes.grid(True)
    figure.draw_without_rendering()
    label_ends(axes, last, ends, style)
    levels = [f"{name} {each:.3g}" for name, each in ends.items()]
    return describe(
        figure,
        f"Tasks in the fleet from the empty start to {last:,.6g} {unit}, measured from "
        f"{warmup:,.6g} {unit} on; at the end {listed(levels)}.",
    )
