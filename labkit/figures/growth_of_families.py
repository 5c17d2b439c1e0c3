"""How a measure grows with size on several networks, one panel a rule."""

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes

from labkit.analysis.growth_by_family import FamilyFit
from labkit.checks import check_number
from labkit.errors import InputError
from labkit.figures.labels import label_ends, listed, note
from labkit.figures.looks import DASHES, looks_of_networks
from labkit.figures.style import PAPER, TALL, Drawing, counted, describe, log_ticks, plain, sheet, styled
from labkit.policies.naming import shown_name
from labkit.stationary.long_run import STATIONARY

_POINTS = 60


@styled
def growth_of_families(
    fits: Sequence[FamilyFit], *, reach: float = 4.0, measure: str = "mean excess, tasks"
) -> Drawing:
    """Draw means, fitted growth and its band against the number of servers, both on logarithmic axes.

    Parameters
    ----------
    fits : sequence of FamilyFit
        From `labkit.analysis.growth_by_family.fit_families`.
    reach : float
        How many times beyond its largest size each line is drawn, dashed, from 1 to 16.
    measure : str
        Words at the vertical axis, with the unit.

    Returns
    -------
    matplotlib.figure.Figure
        One panel a policy; networks have the same colour and marker in all. Open markers: measured at a
        horizon, where loads are not stationary.

    Raises
    ------
    InputError
        When there is nothing to draw, or `reach` lies outside.
    """
    if not 1 <= check_number("reach", reach) <= 16:
        raise InputError(f"reach is {reach}; give a number from 1 to 16.")
    if not fits:
        raise InputError("fits is empty; give at least one fit.")
    policies = list(dict.fromkeys(each.policy for each in fits))
    style = looks_of_networks(each.family for each in fits)
    columns = min(2, len(policies))
    rows = -(-len(policies) // columns)
    figure = sheet((TALL - 0.6) * rows + 0.6)
    panels = figure.subplots(rows, columns, sharex=True, sharey=True, squeeze=False)
    largest = max(each.fit.sizes["x"].max() for each in fits)
    smallest = min(each.fit.sizes["x"].min() for each in fits)
    labels = []
    for axes, policy in zip(panels.flat, policies, strict=False):
        ends = {}
        for each in fits:
            if each.policy == policy:
                ends[each.family] = _line(axes, each, reach, style[each.family])
        axes.set_title(shown_name(policy))
        labels.append((axes, ends))
    for axes in panels.flat[len(policies) :]:
        axes.set_visible(False)
    heights = np.concatenate([each.fit.sizes["mean"].to_numpy() for each in fits])
    _scales(panels, smallest, largest * reach, float(heights[heights > 0].min(initial=np.inf)))
    for axes in panels[:, 0]:
        axes.set_ylabel(measure)
    for column in range(columns):
        lowest = [axes for axes in panels[:, column] if axes.get_visible()][-1]
        lowest.set_xlabel("servers")
        lowest.xaxis.set_tick_params(labelbottom=True)
    percent = f"{100 * fits[0].fit.confidence:g} %"
    note(
        figure,
        f"points: means, ±1.96 standard errors · band: {percent} at each size, choice of law included · "
        f"dashed: beyond the sizes measured{_open_markers(fits)}",
    )
    figure.draw_without_rendering()
    for axes, ends in labels:
        label_ends(axes, largest * reach, ends, style)
    return describe(
        figure,
        f"{measure} against servers, from {smallest:,.6g} to {largest:,.6g} and foretold to "
        f"{largest * reach:,.6g}, on {listed(dict.fromkeys(each.family for each in fits))}, under "
        f"{listed(policies)}.",
    )


def _line(axes: Axes, each: FamilyFit, reach: float, look: dict) -> float:
    """Draw one network and return the height at its end."""
    sizes = each.fit.sizes
    low, high = sizes["x"].iloc[0], sizes["x"].iloc[-1]
    points = np.geomspace(low, high * reach, _POINTS)
    points = np.unique(np.append(points, high))
    said = each.fit.predict(points)
    colour = look["color"]
    axes.fill_between(points, said["lower"], said["upper"], color=colour, alpha=0.16, linewidth=0)
    measured = points <= high
    axes.plot(points[measured], said["estimate"][measured], color=colour, linewidth=1.4)
    axes.plot(
        points[~measured], said["estimate"][~measured], color=colour, linewidth=1.2, linestyle=DASHES[1]
    )
    axes.errorbar(
        sizes["x"], sizes["mean"], yerr=1.96 * sizes["standard_error"], color=colour, marker=look["marker"],
        markersize=4.5, markerfacecolor=colour if each.moment == STATIONARY else PAPER,
        linestyle="none", capsize=2, linewidth=1, zorder=5,
    )  # fmt: skip
    return float(said["estimate"].iloc[-1])


def _open_markers(fits: Sequence[FamilyFit]) -> str:
    moments = sorted({each.moment for each in fits} - {STATIONARY})
    return f" · open markers: {' or '.join(moments)}, not stationary" if moments else ""


def _scales(panels: np.ndarray, smallest: float, farthest: float, lowest: float) -> None:
    axes = panels.flat[0]
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_xlim(smallest / 1.15, farthest)
    # A band may reach far down, even below zero.
    axes.set_ylim(lowest / 2, axes.get_ylim()[1])
    for each in panels.flat:
        log_ticks(each.xaxis, smallest / 1.15, farthest, 6)
        each.xaxis.set_major_formatter(counted)
        log_ticks(each.yaxis, lowest / 2, float(axes.get_ylim()[1]), 9)
        each.yaxis.set_major_formatter(plain)
        each.grid(True)
