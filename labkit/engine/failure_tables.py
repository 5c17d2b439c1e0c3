"""The table of a schedule of failures, read and checked row by row."""

from collections.abc import Hashable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import nearest
from labkit.errors import InputError
from labkit.fleet.csv_files import read_csv
from labkit.fleet.parquet_files import frame_of, read_parquet
from labkit.fleet.tables import Source, check_labels, is_blank, table_source

COLUMNS = ("time", "server", "state")
STATES = ("down", "up")


@dataclass(frozen=True)
class Schedule:
    """A checked schedule.

    Attributes
    ----------
    times : numpy.ndarray
        float64 of shape (events,), sorted.
    ups : numpy.ndarray
        bool of shape (events,).
    code : numpy.ndarray
        int64 of shape (events,): which of `names`.
    names : list
        The servers named, each once.
    from_text : bool
        Whether the names come from a file of text, where "7" may be a whole number.
    label : str
        What the table is called in a refusal.
    """

    times: np.ndarray
    ups: np.ndarray
    code: np.ndarray
    names: list[Any]
    from_text: bool
    label: str


def read_schedule(schedule: Any) -> Schedule:
    """Read a schedule from a DataFrame, a CSV file or a parquet file.

    Raises
    ------
    InputError
        When the file is unreadable, or a row breaks the rules of `labkit.Failures`.
    """
    table, source, from_text = _table(schedule)
    check_labels(list(table.columns), source, COLUMNS, ())
    times = _times(table["time"], source)
    ups = _ups(table["state"], source)
    code, names = _servers(table["server"], source)
    _refuse_repeats(code, ups, names, source)
    for values in (times, ups, code):
        values.flags.writeable = False
    return Schedule(times, ups, code, names, from_text, source.label)


def _table(schedule: Any) -> tuple[pd.DataFrame, Source, bool]:
    if isinstance(schedule, pd.DataFrame):
        return schedule.reset_index(drop=True), table_source("schedule"), False
    if not isinstance(schedule, str | Path):
        raise InputError(
            f"schedule is {type(schedule).__name__}; give a pandas DataFrame or the path of a CSV or parquet "
            "file."
        )
    path = Path(schedule)
    if path.suffix not in (".csv", ".parquet"):
        raise InputError(f"schedule is {str(path)!r}; give the path of a file that ends in .csv or .parquet.")
    if not path.is_file():
        state = "is not a file" if path.exists() else "does not exist"
        raise InputError(f"schedule {str(path)!r} {state}; give the path of a CSV or parquet file.")
    try:
        if path.suffix == ".csv":
            columns, source = read_csv(path, ("time",))
            frame = pd.DataFrame({label: column.to_pandas() for label, column in columns.items()})
            return frame, source, True
        frame = frame_of(path, read_parquet(path), ignore_metadata=True)
    except OSError as error:
        raise InputError(f"{path} cannot be read: {error.strerror or error}.") from None
    return frame, Source(str(path), lambda row: f"{path} row {row + 1}"), False


def _times(column: pd.Series, source: Source) -> np.ndarray:
    rule = "give a finite number of at least 0"
    column = column.infer_objects()
    numbers = pd.api.types.is_numeric_dtype(column.dtype) and not pd.api.types.is_bool_dtype(column.dtype)
    if pd.api.types.is_complex_dtype(column.dtype) or (len(column) and not numbers):
        shown = "blank" if is_blank(column.iloc[0]) else repr(column.iloc[0])
        raise InputError(f"{source.label}: time is of type {column.dtype}, such as {shown}; {rule}.")
    if not len(column):
        return np.zeros(0)
    times = np.array(column.to_numpy(dtype=np.float64, na_value=np.nan))
    bad = ~((times >= 0) & np.isfinite(times))
    if bad.any():
        row = int(np.argmax(bad))
        shown = "blank" if is_blank(column.iloc[row]) else f"{times[row]}"
        raise InputError(f"{source.at(row)}: time is {shown}; {rule}.")
    if len(times) > 1 and np.diff(times).min() < 0:
        row = 1 + int(np.argmax(np.diff(times) < 0))
        raise InputError(
            f"{source.at(row)}: time is {times[row]}, before the {times[row - 1]} of the row above; "
            "sort the rows by time."
        )
    return times


def _ups(column: pd.Series, source: Source) -> np.ndarray:
    states = list(column)
    for row, state in enumerate(states):
        if not (isinstance(state, str) and state in STATES):
            shown = "blank" if is_blank(state) else repr(state)
            raise InputError(f"{source.at(row)}: state is {shown}; {nearest(state, STATES)}.")
    return np.array([state == "up" for state in states], bool)


def _servers(column: pd.Series, source: Source) -> tuple[np.ndarray, list[Any]]:
    values = column.to_numpy(dtype=object)
    for row, value in enumerate(values):
        if is_blank(value):
            raise InputError(f"{source.at(row)}: server is blank; name the server of each event.")
        if not isinstance(value, Hashable):
            raise InputError(f"{source.at(row)}: server is {value!r}; give the name of one server in a cell.")
    code, names = pd.factorize(values)
    if (code < 0).any():  # another kind of nothing, such as a date that is none
        raise InputError(
            f"{source.at(int(np.argmax(code < 0)))}: server is blank; name the server of each event."
        )
    return code.astype(np.int64), list(names)


def _refuse_repeats(code: np.ndarray, ups: np.ndarray, names: list[Any], source: Source) -> None:
    """Refuse a server that goes down while down, or comes back while up."""
    order = np.argsort(code, kind="stable")
    first = np.diff(code[order], prepend=-1) != 0
    before = np.where(first, True, np.roll(ups[order], 1))
    wrong = np.flatnonzero(before == ups[order])
    if not len(wrong):
        return
    row = int(order[wrong].min())
    what = "comes back but is up" if ups[row] else "goes down but is down already"
    raise InputError(
        f"{source.at(row)}: server {names[code[row]]!r} {what}; all servers are up at the start, so give "
        "'down' and 'up' in turn for each."
    )
