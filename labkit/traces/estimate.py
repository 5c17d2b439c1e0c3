"""The fleet that a log shows: its servers, its choices, and how much work each choice brought."""

import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from labkit.checks import check_member, check_positive
from labkit.errors import InputError
from labkit.fleet.model import Fleet
from labkit.fleet.names import ABSENT
from labkit.fleet.tables import table_source
from labkit.traces.pieces import open_pieces
from labkit.traces.reading import Block, trace_of
from labkit.traces.servers import FoundServers

DEMANDS = ("tasks", "size", "work")


def fleet_from_trace(
    trace: str | Path | pd.DataFrame,
    *,
    demand: str = "tasks",
    capacity: float | Mapping[Any, float] | pd.Series | None = None,
) -> Fleet:
    """Make a fleet of the servers and the choices that a log of arrivals shows.

    Parameters
    ----------
    trace : str, pathlib.Path or pandas.DataFrame
        A table, or the path of a CSV or parquet file, with the columns `time`, `option_1`, `option_2` ...,
        and optionally `size`, `duration` and `placed`; a row a task, in order of time.
    demand : {"tasks", "size", "work"}
        What the demand of a choice is: its number of tasks, the sum of their sizes, or the sum of size ×
        duration. A size that is not there is 1.
    capacity : float, mapping or pandas.Series, optional
        The capacity of each server: one number for all, or numbers by server name; 1 by default.

    Returns
    -------
    Fleet
        Servers are in the order of their names when all are whole numbers, else in the order in which they
        first appear, including servers that appear only in `placed`. A choice is a set of servers in
        whatever order they stand; choices, and the options in each, are in the order first seen.

    Raises
    ------
    InputError
        When a row is refused, no row has two options, or the capacity of a server is missing.

    Warns
    -----
    UserWarning
        When tasks with a single option are left out of the demand, which is about choices. Their servers are
        part of the fleet.

    Notes
    -----
    The log is read once, in pieces. Demands are summed in the order of the rows: the same log makes the same
    fleet to the bit, in whichever format it is.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> log = pd.DataFrame({
    ...     "time": [0.5, 0.7, 2.0],
    ...     "option_1": ["north", "east", "south"],
    ...     "option_2": ["east", "north", "east"],
    ... })
    >>> fleet = lk.fleet_from_trace(log, capacity=10)
    >>> fleet
    Fleet(3 servers, 2 choices of 2 options, capacity 10 each, demand 1 to 2)
    """
    demand = check_member("demand", demand, DEMANDS)
    pieces = open_pieces(trace)
    if demand == "work" and "duration" not in pieces.labels:
        raise InputError(
            f"demand is 'work' and {pieces.source.label} has no column 'duration'; add it, or give "
            "demand='tasks' or 'size'."
        )
    servers = FoundServers(pieces.text)
    sums = _Sums()
    for block in trace_of(pieces, servers).blocks():
        sums.add(block, _weights(block, demand))
    if not sums.options:
        raise InputError(f"{pieces.source.label} has no row of two options or more; there is no choice.")
    if sums.single:
        warnings.warn(
            f"{pieces.source.label}: {sums.single} of {sums.rows} tasks have a single option and are left "
            "out of the demand.",
            stacklevel=2,
        )
    return _fleet(servers.index(), sums, capacity)


def _weights(block: Block, demand: str) -> np.ndarray:
    weights = np.ones(len(block.time))
    if demand != "tasks" and block.size is not None:
        weights *= block.size
    if demand == "work" and block.duration is not None:
        weights *= block.duration
    return weights


class _Sums:
    """Weights summed by set of servers."""

    def __init__(self) -> None:
        self.rows = self.single = 0
        self.place: dict[tuple[int, ...], int] = {}
        self.options: list[np.ndarray] = []
        self.total = np.zeros(1024)

    def add(self, block: Block, weights: np.ndarray) -> None:
        """Add the rows of a block, one after the other."""
        several = block.options[:, 1] != ABSENT
        self.rows += len(several)
        self.single += int(np.count_nonzero(~several))
        options, weights = block.options[several], weights[several]
        if len(options) == 0:
            return
        ordered = np.sort(options, axis=1)
        codes, firsts = _distinct_rows(ordered)
        known, place = len(self.place), self.place
        keys = map(tuple, ordered[firsts].tolist())
        places = np.array([place.setdefault(key, len(place)) for key in keys], dtype=np.int64)
        self.options.append(options[firsts[places >= known]])
        while len(place) > len(self.total):
            self.total = np.append(self.total, np.zeros_like(self.total))
        # Adds one row after the other, so that the sums do not depend on where blocks begin.
        np.add.at(self.total, places[codes], weights)


def _distinct_rows(ordered: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return a code a row, equal for equal rows and counted as they appear, and each code's first row."""
    codes = ordered[:, 0].astype(np.int64)
    for place in range(1, ordered.shape[1]):
        codes = pd.factorize(codes.astype(np.uint64) << np.uint64(32) | ordered[:, place])[0]
    firsts = np.empty(int(codes.max()) + 1, dtype=np.int64)
    firsts[codes[::-1]] = np.arange(len(codes) - 1, -1, -1)
    return codes, firsts


def _fleet(names: list[Any], sums: _Sums, capacity: Any) -> Fleet:
    label = np.array([*names, None], dtype=object)
    options = np.concatenate(sums.options)
    options = options[:, (options != ABSENT).any(axis=0)]
    whole = all(isinstance(name, int) for name in names)
    columns: dict[str, Any] = {}
    for place in range(options.shape[1]):
        position = options[:, place].astype(np.int64)
        position[position == int(ABSENT)] = len(names)
        values = label[position]
        columns[f"option_{place + 1}"] = pd.Series(values, dtype="Int64" if whole else object)
    columns["demand"] = sums.total[: len(options)]
    ordered = sorted(names) if whole else names
    servers = pd.DataFrame({"server": pd.Series(ordered, dtype=np.int64 if whole else object)})
    if capacity is not None:
        servers["capacity"] = _capacities(capacity, ordered)
    return Fleet._from_tables(
        servers, pd.DataFrame(columns), table_source("servers"), table_source("choices")
    )


def _capacities(capacity: Any, names: list[Any]) -> list[float]:
    if not isinstance(capacity, Mapping | pd.Series):
        return [check_positive("capacity", capacity)] * len(names)
    if isinstance(capacity, pd.Series) and not capacity.index.is_unique:
        twice = capacity.index[capacity.index.duplicated()][0]
        raise InputError(f"capacity has two numbers for server {twice!r}; keep one.")
    given = dict(capacity.items())
    for name in names:
        if name not in given:
            raise InputError(f"capacity has no number for server {name!r} of the trace; add it.")
    known = set(names)
    for name in given:
        if name not in known:
            raise InputError(f"capacity names {name!r}, which is no server of the trace; leave it out.")
    return [check_positive(f"capacity of server {name!r}", given[name]) for name in names]
