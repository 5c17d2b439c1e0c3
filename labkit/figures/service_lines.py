"""Lines of measures with limits, one look a rule, as the figures about work that leaves share them."""

from collections.abc import Iterable, Sequence

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.ticker import FixedLocator, NullLocator

from labkit.errors import InputError
from labkit.figures.style import log_ticks, plain


def check_columns(table: pd.DataFrame, columns: Iterable[str], source: str) -> None:
    """Refuse a table that lacks a column."""
    for column in columns:
        if column not in table.columns:
            raise InputError(f"table has no column {column!r}; give {source}.")


def line_with_limits(
    axes: Axes, places: Sequence[float] | np.ndarray, rows: pd.DataFrame, look: dict
) -> float:
    """Draw estimates with their limits against places; return the height of the last one."""
    height = rows["estimate"].to_numpy()
    spans = np.array([height - rows["lower"], rows["upper"] - height])
    axes.errorbar(places, height, yerr=np.maximum(spans, 0), capsize=2, **look)
    return float(height[-1])


def wide_heights(axes: Axes, low: float, high: float) -> None:
    """Use a logarithmic axis where heights span more than a factor of 8; else begin at 0."""
    if low > 0 and high > 8 * low:
        axes.set_yscale("log")
        log_ticks(axes.yaxis, *axes.get_ylim(), 9)
    else:
        axes.set_ylim(bottom=0.0)
    axes.yaxis.set_major_formatter(plain)


def ticks_at(axes: Axes, places: Iterable[float], words: Iterable[str] | None = None) -> None:
    """Put ticks at these places and nowhere else."""
    ticks = list(places)
    axes.xaxis.set_major_locator(FixedLocator(ticks))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.set_xticks(ticks, [f"{tick:g}" for tick in ticks] if words is None else list(words))
