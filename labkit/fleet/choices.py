"""From the table of choices to server positions."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd

from labkit.errors import InputError
from labkit.fleet.names import ABSENT, UNKNOWN, NameMap
from labkit.fleet.tables import CHUNK, Source, is_blank

Cell = Callable[[int, int], Any]


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
        settle(part, _cells(columns, start), names, _from(source, start))
        most = max(most, int(np.count_nonzero((part != ABSENT).any(axis=0))))
    return options if most == len(columns) else np.ascontiguousarray(options[:, :most])


def settle(part: np.ndarray, cell: Cell, names: NameMap | None, source: Source, least: int = 2) -> None:
    """Check the options of some rows and bring those that are absent to the end of their row, in place.

    Parameters
    ----------
    part : numpy.ndarray
        Positions of servers, ABSENT or UNKNOWN, uint32 of shape (rows, most options).
    cell : callable
        ``cell(row, place)`` is what the table holds there, for refusals.
    names : NameMap or None
        The servers, for the refusal of a name that is none of theirs; None when any name is a server.
    source : Source
        Names the table and the row in a refusal.
    least : int
        The fewest options of a row.

    Raises
    ------
    InputError
        When an option names no server, a row has too few options or the same server twice.
    """
    if names is not None:
        _refuse_unknown(part, cell, names, source)
    absent = part == ABSENT
    if absent.any():
        # ABSENT is the largest number, so a stable sort on "absent or not" keeps the user's order.
        holes = np.flatnonzero((absent[:, :-1] & ~absent[:, 1:]).any(axis=1))
        order = np.argsort(absent[holes], axis=1, kind="stable")
        part[holes] = np.take_along_axis(part[holes], order, axis=1)
    _refuse_few_or_double(part, cell, source, least)


def _cells(columns: list[pd.Series], start: int) -> Cell:
    return lambda row, place: columns[place].iloc[start + row]


def _from(source: Source, start: int) -> Source:
    return Source(source.label, lambda row: source.at(start + row))


def _refuse_unknown(part: np.ndarray, cell: Cell, names: NameMap, source: Source) -> None:
    unknown = part == UNKNOWN
    if unknown.any():
        row, place = (int(found[0]) for found in np.nonzero(unknown))
        words = names.unknown(cell(row, place))
        raise InputError(f"{source.at(row)}: option_{place + 1} is {words}{'' if words[-1] == '?' else '.'}")


def _refuse_few_or_double(part: np.ndarray, cell: Cell, source: Source, least: int) -> None:
    few = part[:, least - 1] == ABSENT
    if part.shape[1] == 2:
        double = (part[:, 0] == part[:, 1]) & (part[:, 0] != ABSENT)
    else:
        ordered = np.sort(part, axis=1)
        double = ((ordered[:, 1:] == ordered[:, :-1]) & (ordered[:, 1:] != ABSENT)).any(axis=1)
    bad = few | double
    if not bad.any():
        return
    row = int(np.argmax(bad))
    values: list[Any] = [_bare(cell(row, place)) for place in range(part.shape[1])]
    values = [value for value in values if not is_blank(value)]
    if few[row]:
        held = repr(values[0]) if values else "none"
        rule = "at least two different servers" if least > 1 else "at least one server"
        raise InputError(
            f"{source.at(row)}: the choice has {len(values)} option{'s' * (not values)} ({held}); "
            f"give {rule}."
        )
    twice = next(value for place, value in enumerate(values) if value in values[:place])
    raise InputError(
        f"{source.at(row)}: server {twice!r} is an option twice; name each server once in a choice."
    )


def _bare(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value
