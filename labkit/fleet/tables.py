"""Checks of the two tables at the door: columns and amounts.

Amounts are checked through their extremes, so that a table of 10^7 rows needs no temporary array; the row
of a refusal is looked for only after the extremes have failed.
"""

import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import nearest
from labkit.errors import InputError

CHUNK = 1 << 16
_OPTION = re.compile(r"option_[1-9][0-9]*")


@dataclass(frozen=True)
class Source:
    """Where a table came from, for refusals: `at` turns a 0-based row into words."""

    label: str
    at: Callable[[int], str]


def table_source(label: str) -> Source:
    """Return the source of a table that is in memory; its rows are counted from 1."""
    return Source(label, lambda row: f"{label} row {row + 1}")


def check_columns(table: Any, source: Source, required: tuple[str, ...], optional: tuple[str, ...]) -> None:
    """Refuse a table that is no DataFrame, is empty, or whose columns are missing, doubled or unknown."""
    if not isinstance(table, pd.DataFrame):
        raise InputError(f"{source.label} is a {type(table).__name__}; give a pandas DataFrame.")
    check_labels(list(table.columns), source, required, optional)
    if len(table) == 0:
        raise InputError(f"{source.label} has no rows; give at least one.")


def check_labels(
    labels: list[Any], source: Source, required: tuple[str, ...], optional: tuple[str, ...], advice: str = ""
) -> None:
    """Refuse column names that are missing, doubled or unknown; `advice` ends the last refusal."""
    known = [*required, *optional]
    if "option_1" in known:
        known += [f"option_{place}" for place in range(3, 1 + option_count(labels))]
    for place, label in enumerate(labels):
        if label in labels[:place]:
            raise InputError(f"{source.label} has two columns named {label!r}; keep one.")
    for label in labels:
        if label not in known:
            hint = _missing_option(label, labels, known) or nearest(label, known)
            raise InputError(f"{source.label} has an unknown column {label!r}; {hint}{advice}.")
    for label in required:
        if label not in labels:
            raise InputError(f"{source.label} has no column {label!r}; its columns are {_listed(labels)}.")


def option_count(labels: list[Any]) -> int:
    """Return k when option_1 .. option_k are all among the labels."""
    count = 0
    while f"option_{count + 1}" in labels:
        count += 1
    return count


def _missing_option(label: Any, labels: list[Any], known: list[str]) -> str:
    if "option_1" in known and isinstance(label, str) and _OPTION.fullmatch(label):
        return f"number the options without holes: option_{option_count(labels) + 1} is missing"
    return ""


def _listed(labels: list[Any]) -> str:
    shown = ", ".join(repr(label) for label in labels[:8])
    return (shown + (", ..." if len(labels) > 8 else "")) or "none"


# Ratios and products of amounts outside these bounds would leave the range of double precision.
SMALLEST, LARGEST = 1e-150, 1e150


def amounts(column: pd.Series, source: Source, *, zero: bool) -> np.ndarray:
    """Return a column as float64, sharing its memory when it is float64 already.

    Parameters
    ----------
    column : pandas.Series
        Amounts, one a row.
    source : Source
        Names the table and the row in a refusal.
    zero : bool
        Whether 0 is allowed.

    Raises
    ------
    InputError
        For the first row that holds no finite number inside the rule.
    """
    values = _floats(column)
    if values is not None:
        least = np.min(values, where=values > 0, initial=np.inf) if zero else values.min()
        if values.min() >= 0 and least >= SMALLEST and values.max() <= LARGEST:
            return np.ascontiguousarray(values)
    rule = "a finite number of at least 0" if zero else "a finite number above 0"
    rule += f" ({SMALLEST:g} to {LARGEST:g})"
    for row in range(len(column)):
        if not _allowed(column.iloc[row], zero):
            shown = _shown(column.iloc[row])
            raise InputError(f"{source.at(row)}: {column.name} is {shown}; give {rule}.")
    raise InputError(
        f"{source.label}: column {column.name!r} has type {column.dtype}; give {rule} in each row."
    )


def _floats(column: pd.Series) -> np.ndarray | None:
    if pd.api.types.is_bool_dtype(column.dtype):
        return None
    if pd.api.types.is_numeric_dtype(column.dtype) and not pd.api.types.is_complex_dtype(column.dtype):
        if isinstance(column.dtype, np.dtype):
            return column.to_numpy().astype(np.float64, copy=False)
        return column.to_numpy(dtype=np.float64, na_value=np.nan)
    if column.dtype == object and all(_allowed(value, True) for value in column):
        return column.to_numpy(dtype=np.float64)
    return None


def _allowed(value: Any, zero: bool) -> bool:
    if isinstance(value, str | bytes | bool | np.bool_ | complex) or pd.api.types.is_scalar(value) is False:
        return False
    try:
        number = float(value)
    except (TypeError, ValueError, OverflowError):
        return False
    return (zero and number == 0) or SMALLEST <= number <= LARGEST


def _shown(value: Any) -> str:
    if is_blank(value):
        return "blank"
    if isinstance(value, np.generic):
        value = value.item()
    return repr(value)


def is_blank(value: Any) -> bool:
    """Tell whether a cell holds nothing: None, NaN, NA, empty text or white space."""
    if isinstance(value, str):
        return not value.strip()
    return value is None or value is pd.NA or (isinstance(value, float | np.floating) and value != value)
