"""Forecasts beside simulations, fleet by fleet."""

import pandas as pd

from labkit.errors import InputError
from labkit.figures.labels import in_lines, listed, note
from labkit.figures.style import BLUE, FAINT, INK, PALE, Drawing, describe, plain, sheet, styled

NEEDED = ("fleet", "forecast", "forecast_error", "simulated", "simulated_error")


@styled
def forecast_against_simulation(table: pd.DataFrame) -> Drawing:
    """Draw the ratio of forecast to simulated mean gap, with the error of both.

    Parameters
    ----------
    table : pandas.DataFrame
        One row a fleet: fleet (its name), forecast, forecast_error (half-width at 95 %), simulated,
        simulated_error (standard error), in utilisation.

    Returns
    -------
    matplotlib.figure.Figure

    Raises
    ------
    InputError
        When a column is missing.
    """
    for column in NEEDED:
        if column not in table.columns:
            raise InputError(f"table has no column {column!r}; it needs {', '.join(NEEDED)}.")
    figure = sheet(1.3 + 0.42 * len(table))
    axes = figure.subplots()
    for place, row in enumerate(table.iloc[::-1].to_dict("records")):
        real = row["simulated"]
        axes.barh(
            place, 2 * 1.96 * row["simulated_error"] / real, left=1 - 1.96 * row["simulated_error"] / real,
            height=0.5, color=PALE,
        )  # fmt: skip
        axes.errorbar(
            [row["forecast"] / real], [place], xerr=[row["forecast_error"] / real], color=BLUE,
            linestyle="none", marker="o", markersize=7, capsize=3, elinewidth=1.4,
        )  # fmt: skip
        axes.annotate(
            f"{row['forecast']:.3g} against {real:.3g}", (1.01, place), va="center", color=INK,
            xycoords=("axes fraction", "data"), annotation_clip=False,
        )  # fmt: skip
    axes.axvline(1.0, color=FAINT, linewidth=1.0)
    axes.set_yticks(range(len(table)), [in_lines(str(name)) for name in table["fleet"].iloc[::-1]])
    axes.tick_params(axis="y", length=0)
    ratio = table["forecast"] / table["simulated"]
    reach = max([0.12, *(abs(ratio - 1) + 0.1)])
    axes.set_xlim(1 - reach, 1 + reach)
    axes.xaxis.set_major_formatter(plain)
    axes.grid(True, axis="x")
    axes.set_xlabel("mean gap: forecast ÷ simulated")
    note(
        figure,
        "dots: forecast, with what it may be wrong by · grey: what the simulation may be wrong by, at 95 % · "
        "right: both gaps, in utilisation (load ÷ capacity)",
    )
    ratios = [f"{name} {value:.2f}" for name, value in zip(table["fleet"], ratio, strict=True)]
    return describe(
        figure, f"Forecast mean gap divided by the simulated one, fleet by fleet: {listed(ratios)}."
    )
