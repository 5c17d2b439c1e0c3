"""How a measure grows with size, as far as the laws can say."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from labkit.analysis.growth import GrowthFit
from labkit.checks import check_number
from labkit.errors import InputError
from labkit.figures.labels import label_ends, note
from labkit.figures.looks import DASHES
from labkit.figures.style import (
    BLUE,
    FAINT,
    GREEN,
    INDIGO,
    INK,
    PALE,
    TALL,
    VERMILLION,
    Drawing,
    counted,
    describe,
    log_ticks,
    plain,
    sheet,
    styled,
)

# Laws below this weight are not drawn.
LEAST_WEIGHT = 0.05
_POINTS = 80
_UNITS = dict.fromkeys(("gap", "excess", "max_utilisation"), ", utilisation (load ÷ capacity)")
_LAW_COLOURS = (VERMILLION, GREEN, INDIGO)


@styled
def growth_curve(fit: GrowthFit, *, reach: float = 4.0, measure: str | None = None) -> Drawing:
    """Draw the means at each size, the weighted average of the laws, and its bands.

    The dark band holds at each size by itself, the pale one at all drawn sizes at once. Right of the largest
    size the line is dashed and the ground is grey: nothing was measured there. Thin lines are the laws with
    a weight of at least 5 %, three at most.

    Parameters
    ----------
    fit : GrowthFit
        From `labkit.fit_growth`.
    reach : float
        How many times beyond the largest size is drawn, from 1 to 16.
    measure : str, optional
        Words at the vertical axis, with the unit. Default: the name of the column.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When `fit` is something else, or `reach` lies outside.
    """
    if not isinstance(fit, GrowthFit):
        raise InputError(f"fit is {type(fit).__name__}; give what labkit.fit_growth returns.")
    if not 1 <= check_number("reach", reach) <= 16:
        raise InputError(f"reach is {reach!r}; give a number from 1 to 16.")
    sizes = fit.sizes
    smallest, largest = float(sizes["x"].iloc[0]), float(sizes["x"].iloc[-1])
    # Rounding must not carry the last point beyond what may be asked.
    points = np.clip(np.geomspace(smallest, largest * reach, _POINTS), smallest, largest * reach)
    points = np.unique(np.append(points, largest))
    alone, at_once = fit.predict(points), fit.predict(points, simultaneous=True)
    figure = sheet(TALL)
    axes = figure.subplots()
    main = BLUE
    axes.fill_between(points, at_once["lower"], at_once["upper"], color=main, alpha=0.13, linewidth=0)
    axes.fill_between(points, alone["lower"], alone["upper"], color=main, alpha=0.25, linewidth=0)
    measured = points <= largest
    axes.plot(points[measured], alone["estimate"][measured], color=main)
    axes.plot(points[~measured], alone["estimate"][~measured], color=main, linestyle=DASHES[1])
    looks = {"average": {"color": main}}
    ends = {"average": float(alone["estimate"].iloc[-1])}
    for (law, formula, weight), curve in _heavy(fit, points).items():
        name = f"{law}, weight {100 * weight:.0f} %:\n{formula}"
        colour = _LAW_COLOURS[(len(ends) - 1) % len(_LAW_COLOURS)]
        looks[name] = {"color": colour}
        ends[name] = float(curve[-1])
        axes.plot(points, curve, color=colour, linewidth=0.9, linestyle=DASHES[len(ends)])
    axes.errorbar(
        sizes["x"], sizes["mean"], yerr=1.96 * sizes["standard_error"], color=INK, marker="o", markersize=4,
        linestyle="none", capsize=2, linewidth=1.1, zorder=5,
    )  # fmt: skip
    _axes(axes, fit.x, (float(alone["lower"].min()), float(alone["upper"].max())), smallest, largest, reach)
    words = measure or f"mean {fit.y}{_UNITS.get(fit.y, '')}"
    axes.set_ylabel(words)
    percent = f"{100 * fit.confidence:g} %"
    note(
        figure,
        f"points: means, ±1.96 standard errors · band: {percent}, choice of law included; pale: at all sizes "
        "at once",
    )
    figure.draw_without_rendering()
    label_ends(axes, largest * reach, ends, looks)
    last = alone.iloc[-1]
    return describe(
        figure,
        f"{words} against {fit.x}, measured from {smallest:,.6g} to {largest:,.6g}; at "
        f"{largest * reach:,.6g} the laws say {last['estimate']:.3g}, between {last['lower']:.3g} "
        f"and {last['upper']:.3g}.",
    )


def _heavy(fit: GrowthFit, points: np.ndarray) -> dict[tuple[str, str, float], np.ndarray]:
    rows = fit.by_law(points)
    rows = rows[rows["weight"] >= LEAST_WEIGHT]
    curves = {
        (str(law), str(formula), float(group["weight"].iloc[0])): group["estimate"].to_numpy()
        for (law, formula), group in rows.groupby(["law", "formula"], sort=False)
    }
    return dict(list(curves.items())[: len(_LAW_COLOURS)])


def _axes(
    axes: Axes, name: str, heights: tuple[float, float], smallest: float, largest: float, reach: float
) -> None:
    axes.set_xscale("log")
    axes.set_xlim(smallest / 1.1, largest * reach)
    log_ticks(axes.xaxis, smallest / 1.1, largest * reach, 8)
    axes.xaxis.set_major_formatter(counted)
    low, high = heights
    if low > 0:
        axes.set_yscale("log")
        # The pale band may reach far down, even below zero.
        axes.set_ylim(low / 1.5, high * 1.5)
        log_ticks(axes.yaxis, low / 1.5, high * 1.5, 8)
    else:
        axes.yaxis.set_major_locator(MaxNLocator(6))
    axes.yaxis.set_major_formatter(plain)
    if reach > 1:
        axes.axvspan(largest, largest * reach, color=PALE, alpha=0.45, linewidth=0, zorder=0)
        axes.annotate(
            "extrapolated", (largest, 0.02), xycoords=("data", "axes fraction"), xytext=(4, 0),
            textcoords="offset points", color=FAINT, va="bottom",
        )  # fmt: skip
    axes.set_xlabel(name)
    axes.grid(True)
