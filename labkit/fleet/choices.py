"""From the table of choices to server positions."""

from typing import Any

import numpy as np
import pandas as pd

from labkit.errors import InputError
from labkit.fleet.names import ABSENT, UNKNOWN, NameMap
from labkit.fleet.tables import CHUNK, Source, is_blank


def checked_options(columns: list[pd.Series], names: NameMap, source: Source) -> np.ndarray:
    """Return server positions, uint32 of shape (choices, most options in a choice).

    Parameters
    ----------
    columns : list of pandas.Series
        Server names; column j holds the (j + 1)-th option of each choice; a blank is no option.
    names : NameMap
        Positions of the servers.
    source : Source
        Names the table and the row in a refusal.

    Returns
    -------
    numpy.ndarray
        C-contiguous; a row's absent options come last and are ABSENT.

    Raises
    ------
    InputError
        When an option names no server, a choice has fewer than two options or the same server twice.
    """
    rows = len(columns[0])
    options = np.empty((rows, len(columns)), dtype=np.uint32)
    most = 2
    for start in range(0, rows, CHUNK):
        part = options[start : start + CHUNK]
        for place, column in enumerate(columns):
            part[:, place] = names.positions(column.iloc[start : start + CHUNK])
        _refuse_unknown(part, start, columns, names, source)
        if (part == ABSENT).any():
            # ABSENT is the largest number, so a stable sort on "absent or not" keeps the user's order.
            order = np.argsort(part == ABSENT, axis=1, kind="stable")
            part[:] = np.take_along_axis(part, order, axis=1)
        _refuse_few_or_double(part, start, columns, source)
        most = max(most, int(np.count_nonzero((part != ABSENT).any(axis=0))))
    return options if most == len(columns) else np.ascontiguousarray(options[:, :most])


def _refuse_unknown(
    part: np.ndarray, start: int, columns: list[pd.Series], names: NameMap, source: Source
) -> None:
    rows, places = np.nonzero(part == UNKNOWN)
    if len(rows):
        row, place = start + int(rows[0]), int(places[0])
        words = names.unknown(columns[place].iloc[row])
        raise InputError(
            f"{source.at(row)}: {columns[place].name} is {words}{'' if words[-1] == '?' else '.'}"
        )


def _refuse_few_or_double(part: np.ndarray, start: int, columns: list[pd.Series], source: Source) -> None:
    few = part[:, 1] == ABSENT
    if part.shape[1] == 2:
        double = part[:, 0] == part[:, 1]
    else:
        ordered = np.sort(part, axis=1)
        double = ((ordered[:, 1:] == ordered[:, :-1]) & (ordered[:, 1:] != ABSENT)).any(axis=1)
    bad = few | double
    if not bad.any():
        return
    row = int(np.argmax(bad))
    values: list[Any] = [_bare(column.iloc[start + row]) for column in columns]
    values = [value for value in values if not is_blank(value)]
    if few[row]:
        held = repr(values[0]) if values else "none"
        raise InputError(
            f"{source.at(start + row)}: the choice has {len(values)} option{'s' * (not values)} ({held}); "
            "give at least two different servers."
        )
    twice = next(value for place, value in enumerate(values) if value in values[:place])
    raise InputError(
        f"{source.at(start + row)}: server {twice!r} is an option twice; name each server once in a choice."
    )


def _bare(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value
