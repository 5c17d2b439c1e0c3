"""Forecasts beside simulations, fleet by fleet."""

import pandas as pd
from matplotlib.figure import Figure

from labkit.errors import InputError
from labkit.figures.style import COLOURS, FAINT, INK, plain, styled

NEEDED = ("fleet", "forecast", "forecast_error", "simulated", "simulated_error")


@styled
def forecast_against_simulation(table: pd.DataFrame) -> Figure:
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
    figure = Figure(figsize=(7.6, 1.3 + 0.42 * len(table)), layout="constrained")
    axes = figure.subplots()
    for place, row in enumerate(table.iloc[::-1].to_dict("records")):
        real = row["simulated"]
        axes.barh(
            place, 2 * 1.96 * row["simulated_error"] / real, left=1 - 1.96 * row["simulated_error"] / real,
            height=0.5, color="#DDDDDD",
        )  # fmt: skip
        axes.errorbar(
            [row["forecast"] / real], [place], xerr=[row["forecast_error"] / real], color=COLOURS[0],
            marker="o", capsize=3, linewidth=1.4,
        )  # fmt: skip
        axes.annotate(
            f"{row['forecast']:.3g} against {real:.3g}", (1.01, place), va="center", color=INK,
            xycoords=("axes fraction", "data"), annotation_clip=False,
        )  # fmt: skip
    axes.axvline(1.0, color=FAINT, linewidth=1.0)
    axes.set_yticks(range(len(table)), table["fleet"].iloc[::-1])
    axes.tick_params(axis="y", length=0)
    reach = max(0.12, *(abs(table["forecast"] / table["simulated"] - 1) + 0.1))
    axes.set_xlim(1 - reach, 1 + reach)
    axes.xaxis.set_major_formatter(plain)
    axes.grid(True, axis="x")
    axes.set_xlabel("mean gap: forecast ÷ simulated; bars: what either may be wrong by, at 95 %")
    return figure
