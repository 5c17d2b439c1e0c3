"""Columns of a log to arrays of numbers: times, sizes and durations."""

from datetime import date
from numbers import Real
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa

from labkit.checks import LARGEST_WHOLE
from labkit.errors import InputError
from labkit.fleet.tables import Source, amounts, is_blank

NANOSECONDS = 1e9
_NUMBERS = "give finite numbers"
_STAMPS = "give dates and times from the year 1678 to 2261"


class Clock:
    """Times of one pass through a log, which never go backwards.

    Parameters
    ----------
    stamped : bool
        Whether times are timestamps: they are counted in whole nanoseconds from the first row and then
        divided to seconds.
    """

    def __init__(self, stamped: bool) -> None:
        self.stamped = stamped
        self.origin: np.int64 | None = None
        self.last: Any = None

    def read(self, column: Any, source: Source) -> np.ndarray:
        """Return the times of the next rows, float64.

        Raises
        ------
        InputError
            When a time is missing, not finite, of another kind than the first, or before the one above it.
        """
        column = _arrow(column, source, self.stamped)
        values = self._instants(column, source) if self.stamped else self._numbers(column, source)
        self._refuse_backwards(values, source)
        self.last = values[-1]
        if not self.stamped:
            return values
        if self.origin is None:
            self.origin = values[0]
        # As unsigned numbers, since two instants may lie further apart than the largest signed one.
        return (values.view(np.uint64) - self.origin.view(np.uint64)).astype(np.float64) / NANOSECONDS

    def _numbers(self, column: pa.Array, source: Source) -> np.ndarray:
        kind = column.type
        kinds = (pa.types.is_integer, pa.types.is_floating, pa.types.is_decimal, pa.types.is_null)
        if not any(fits(kind) for fits in kinds):
            raise InputError(f"{source.at(0)}: time is {_shown(column, 0)}{self._rule(kind)}.")
        values = np.array(column.cast(pa.float64(), safe=False).to_numpy(zero_copy_only=False))
        bad = ~(np.abs(values) < LARGEST_WHOLE)
        if bad.any():
            row = int(np.argmax(bad))
            if np.isfinite(values[row]):
                raise InputError(
                    f"{source.at(row)}: time is {_shown(column, row)}, beyond 2^53, where floats lose whole "
                    "numbers; count from the first row, or save times as timestamps."
                )
            raise InputError(f"{source.at(row)}: time is {_shown(column, row)}; {_NUMBERS}.")
        return values

    def _rule(self, kind: pa.DataType) -> str:
        if pa.types.is_timestamp(kind) or pa.types.is_date(kind):
            return ", and the first row's is a number; keep to one of the two"
        return "; give numbers, or timestamps such as pandas.to_datetime makes"

    def _instants(self, column: pa.Array, source: Source) -> np.ndarray:
        if not (pa.types.is_timestamp(column.type) or pa.types.is_date(column.type)):
            words = "and the first row's is a timestamp; keep to one of the two"
            raise InputError(f"{source.at(0)}: time is {_shown(column, 0)}, {words}.")
        if column.null_count:
            row = int(np.argmax(column.is_null().to_numpy(zero_copy_only=False)))
            raise InputError(f"{source.at(row)}: time is blank; {_STAMPS}.")
        try:
            return column.cast(pa.timestamp("ns")).cast(pa.int64()).to_numpy()
        except pa.ArrowInvalid:
            row = next(row for row in range(len(column)) if not _within(column[row : row + 1]))
            raise InputError(f"{source.at(row)}: time is {_shown(column, row)}; {_STAMPS}.") from None

    def _refuse_backwards(self, values: np.ndarray, source: Source) -> None:
        if self.last is not None and values[0] < self.last:
            row, before = 0, self.last
        else:
            down = values[1:] < values[:-1]
            if not down.any():
                return
            row = int(np.argmax(down)) + 1
            before = values[row - 1]
        now, before = (
            (f"{pd.Timestamp(int(time)).isoformat()}" if self.stamped else f"{float(time):.17g}")
            for time in (values[row], before)
        )
        raise InputError(
            f"{source.at(row)}: time is {now}, before the {before} of the row above; sort the trace by time."
        )


def _within(one: pa.Array) -> bool:
    try:
        one.cast(pa.timestamp("ns"))
    except pa.ArrowInvalid:
        return False
    return True


def _arrow(column: Any, source: Source, stamped: bool) -> pa.Array:
    if isinstance(column, pa.Array):
        return column
    kind = None
    if column.dtype == object:
        # Checked one by one, since Arrow takes a number for a timestamp.
        row = next((row for row, value in enumerate(column) if not _fits(value, stamped)), -1)
        if row >= 0:
            words = "a timestamp" if stamped else "a number below 2^53"
            raise InputError(
                f"{source.at(row)}: time is {column.iloc[row]!r}, which is not {words}; keep to one kind of "
                "time, numbers or timestamps."
            )
        kind = None if stamped else pa.float64()
        column = pd.Series(pd.to_datetime(column, utc=True)) if stamped else column
    try:
        array = pa.Array.from_pandas(column, type=kind)
    except (pa.ArrowException, TypeError, ValueError):
        raise InputError(
            f"{source.label}: column 'time' has type {column.dtype}; give numbers or timestamps."
        ) from None
    return array.combine_chunks() if isinstance(array, pa.ChunkedArray) else array


def _fits(value: Any, stamped: bool) -> bool:
    if is_blank(value):
        return True
    if stamped:
        return isinstance(value, date | np.datetime64)
    return isinstance(value, Real) and not isinstance(value, bool) and abs(float(value)) <= LARGEST_WHOLE


def read_amounts(column: Any, label: str, source: Source, *, stamped: bool) -> np.ndarray:
    """Return sizes or durations, float64 of at least 0 and memory of its own; timedeltas become seconds.

    Raises
    ------
    InputError
        For the first row that holds no such number.
    """
    if isinstance(column, pa.Array):
        spans = pa.types.is_duration(column.type)
        column = pd.Series(column.to_numpy(zero_copy_only=False), name=label)
    else:
        spans = pd.api.types.is_timedelta64_dtype(column.dtype)
    if spans:
        if not stamped or label != "duration":
            why = "times are numbers" if label == "duration" else "a size is an amount of work"
            raise InputError(f"{source.at(0)}: {label} is a span of time, and {why}; give it as a number.")
        column = pd.Series(column.dt.as_unit("ns").to_numpy().view(np.int64) / NANOSECONDS, name=label).mask(
            column.isna().to_numpy()
        )
    return np.array(amounts(column, source, zero=True))


def _shown(column: pa.Array, row: int) -> str:
    value = column[row].as_py() if not pa.types.is_timestamp(column.type) else str(column[row])
    return "blank" if is_blank(value) else repr(value)
