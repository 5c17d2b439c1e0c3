"""When work comes: tasks in each part of the day, each day and in the mean."""

import numpy as np
from matplotlib.ticker import MaxNLocator

from labkit.figures.labels import note
from labkit.figures.style import (
    BLUE,
    FAINT,
    LOW,
    PALE,
    Drawing,
    amount,
    counted,
    describe,
    plain,
    sheet,
    styled,
)
from labkit.traces.facts import TraceFacts

# More days than these are drawn as the range they span.
MOST_LINES = 30
# Of a day in more parts than these, neighbours are drawn as one.
MOST_PARTS = 144


@styled
def profile_of_day(facts: TraceFacts, *, day: float, unit: str) -> Drawing:
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
    together = -(-facts.parts // MOST_PARTS)
    if together > 1:
        groups = np.arange(facts.parts) // together
        table = table.T.groupby(groups).sum(min_count=1).T.where(table.notna().T.groupby(groups).all().T)
    whole = table.dropna()
    edges = day * np.append(np.arange(0, facts.parts, together), facts.parts) / facts.parts
    figure = sheet(LOW)
    axes = figure.subplots()
    if len(table) <= MOST_LINES:
        for _, row in table.iterrows():
            axes.stairs(row.to_numpy(float), edges, color=FAINT, linewidth=0.6, alpha=0.5, baseline=None)
    else:
        # Most days, so that one odd day does not decide how all look.
        low, middle_low, middle_high, high = (
            table.quantile(level).to_numpy(float) for level in (0.0, 0.1, 0.9, 1.0)
        )
        axes.stairs(high, edges, baseline=low, fill=True, color=PALE)
        axes.stairs(middle_high, edges, baseline=middle_low, fill=True, color=FAINT, alpha=0.5)
    mean = (whole if len(whole) else table).mean().to_numpy(float)
    axes.stairs(mean, edges, color=BLUE, linewidth=2.2, baseline=None)
    axes.set_ylim(0, 1.12 * float(np.nanmax(table.to_numpy(float))))
    axes.set_xlim(0, day)
    axes.xaxis.set_major_locator(MaxNLocator(12, steps=[1, 2, 3, 6, 10]))
    axes.xaxis.set_major_formatter(plain)
    axes.set_xlabel(f"time since the first row of the log, in days of {day:g} {unit}")
    axes.yaxis.set_major_formatter(counted)
    axes.yaxis.set_major_locator(MaxNLocator(6, integer=True))
    width = day * together / facts.parts
    axes.set_ylabel(f"tasks within {amount(width, unit)}")
    each = "thin: each day" if len(table) <= MOST_LINES else "grey: 8 of 10 days · pale: all days"
    days = f"mean of {len(whole):,} whole days" if len(whole) else "what there is of one day"
    note(figure, f"thick: {days} · {each}")
    axes.grid(True)
    busiest, calmest = int(np.nanargmax(mean)), int(np.nanargmin(mean))
    return describe(
        figure,
        f"Tasks within {amount(width, unit)} of a day of {day:g} {unit}, {len(table):,} days: in the mean "
        f"most, {mean[busiest]:.3g}, from {edges[busiest]:.4g} {unit} after its start on, and fewest, "
        f"{mean[calmest]:.3g}, from {edges[calmest]:.4g} on.",
    )
