"""When work comes: tasks in each part of the day, each day and in the mean."""

import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from labkit.figures.style import COLOURS, FAINT, plain, styled
from labkit.traces.facts import TraceFacts

# More days than these are drawn as the range they span.
MOST_LINES = 60


@styled
def profile_of_day(facts: TraceFacts, *, day: float, unit: str) -> Figure:
    """Draw the number of tasks in each part of a day: every day as a thin line, their mean as a thick one.

    Parameters
    ----------
    facts : TraceFacts
        Days are counted from the first row.
    day : float
        Length of a day.
    unit : str
        The unit of time.

    Returns
    -------
    matplotlib.figure.Figure
    """
    table = facts.arrivals.pivot(index="day", columns="part", values="tasks")
    table = table.reindex(columns=range(facts.parts))
    whole = table.dropna()
    edges = np.linspace(0.0, day, facts.parts + 1)
    figure = Figure(figsize=(7.6, 3.4), layout="constrained")
    axes = figure.subplots()
    if len(table) <= MOST_LINES:
        for _, row in table.iterrows():
            axes.stairs(row.to_numpy(float), edges, color=FAINT, linewidth=0.7, alpha=0.7, baseline=None)
    else:
        axes.fill_between(edges[:-1], table.min(), table.max(), step="post", color=FAINT, alpha=0.3)
    mean = (whole if len(whole) else table).mean().to_numpy(float)
    axes.stairs(mean, edges, color=COLOURS[0], linewidth=2.4, baseline=None)
    axes.set_ylim(0, 1.12 * float(np.nanmax(table.to_numpy(float))))
    axes.set_xlim(0, day)
    axes.xaxis.set_major_locator(MaxNLocator(12, steps=[1, 2, 3, 6, 10]))
    axes.xaxis.set_major_formatter(plain)
    axes.set_xlabel(f"time since the first row of the log, in days of {day:g} {unit}")
    axes.set_ylabel(f"tasks in each of {facts.parts} parts of a day")
    each = "thin: each day" if len(table) <= MOST_LINES else "band: all days"
    days = f"mean of {len(whole):,} whole days" if len(whole) else "what there is of one day"
    axes.set_title(f"thick: {days} · {each}", fontsize=9, fontweight="normal")
    axes.grid(True)
    return figure
