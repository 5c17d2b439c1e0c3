"""A trace: rows of a log as blocks of arrays, in constant memory whatever its length."""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import NamedTuple

import numpy as np
import pandas as pd

from labkit.checks import check_whole
from labkit.errors import InputError
from labkit.fleet.choices import settle
from labkit.fleet.model import Fleet, check_fleet
from labkit.fleet.names import ABSENT, UNKNOWN
from labkit.fleet.tables import Source, option_count
from labkit.traces.columns import Clock, read_amounts
from labkit.traces.pieces import Piece, Pieces, open_pieces
from labkit.traces.servers import FleetServers, FoundServers


class Block(NamedTuple):
    """Consecutive rows of a trace; each array is C-contiguous and may be written to.

    Attributes
    ----------
    first : int
        Number of the first row in the trace, counted from 0.
    time : numpy.ndarray
        float64 of shape (rows,), never falling, also from block to block.
    options : numpy.ndarray
        uint32 of shape (rows, width): positions of servers, different in a row and at least one; those that
        are absent come last in a row and are `labkit.fleet.names.ABSENT`.
    size : numpy.ndarray or None
        float64 of shape (rows,), at least 0.
    duration : numpy.ndarray or None
        float64 of shape (rows,), at least 0, in the unit of the times.
    placed : numpy.ndarray or None
        uint32 of shape (rows,): positions of servers.
    """

    first: int
    time: np.ndarray
    options: np.ndarray
    size: np.ndarray | None
    duration: np.ndarray | None
    placed: np.ndarray | None


@dataclass(frozen=True)
class Trace:
    """A log whose columns are checked; its rows are checked whenever they are read.

    Attributes
    ----------
    label : str
        The path, or "trace" for a table in memory.
    width : int
        Number of option columns.
    has_size, has_duration, has_placed : bool
        Whether the log has that column.
    unit : str
        "s" when times were timestamps, which became seconds since the first row; "" for numbers, in
        whatever unit they are.
    """

    label: str
    width: int
    has_size: bool
    has_duration: bool
    has_placed: bool
    unit: str
    _pieces: Pieces
    _servers: FleetServers | FoundServers

    def blocks(self, rows: int = 65_536) -> Iterator[Block]:
        """Yield all rows in the order of the log, at most `rows` in a block, anew at each call.

        Parameters
        ----------
        rows : int
            The most rows of a block. Blocks may be shorter, as the file is divided.

        Yields
        ------
        Block
            At least one row each.

        Raises
        ------
        InputError
            When a row breaks the rules of `open_trace`; the sentence names the line of a CSV file, counted
            from 1, or the row, counted from 1.
        """
        return self._blocks(check_whole("rows", rows))

    def at(self, row: int) -> str:
        """Return words for a row, counted from 0: the line of a CSV file, else the row counted from 1."""
        return self._pieces.source.at(row)

    def last_time(self) -> float:
        """Return the time of the last row, from a pass over the times alone.

        Raises
        ------
        InputError
            When a time breaks the rules of `open_trace`.
        """
        clock, first = Clock(bool(self.unit)), 0
        for piece in self._pieces.read(["time"]):
            times = clock.read(piece["time"], self._from(first))
            first += len(times)
        return float(times[-1])

    def _from(self, first: int) -> Source:
        return Source(self.label, lambda row: self.at(first + row))

    def _blocks(self, rows: int) -> Iterator[Block]:
        clock, first = Clock(bool(self.unit)), 0
        for piece in self._pieces.read(self._pieces.labels):
            whole = self._block(piece, first, clock)
            for start in range(0, len(whole.time), rows):
                yield _part(whole, slice(start, start + rows))
            first += len(whole.time)

    def _block(self, piece: Piece, first: int, clock: Clock) -> Block:
        here = self._from(first)
        time = clock.read(piece["time"], here)
        labels = [f"option_{place + 1}" for place in range(self.width)]
        named = {label: piece[label] for label in (*labels, "placed") if label in piece}
        found = self._servers.positions(named, here)
        options = np.ascontiguousarray(np.column_stack(found[: self.width]))

        def cell(row: int, place: int) -> object:
            return self._servers.cell(piece[labels[place]], row)

        settle(options, cell, self._servers.names, here, least=1)
        placed = None
        if self.has_placed:
            placed = np.array(found[-1])
            self._refuse_placed(placed, piece, here)
        size, duration = (
            read_amounts(piece[label], label, here, stamped=clock.stamped) if label in piece else None
            for label in ("size", "duration")
        )
        return Block(first, time, options, size, duration, placed)

    def _refuse_placed(self, placed: np.ndarray, piece: Piece, source: Source) -> None:
        bad = placed >= UNKNOWN
        if not bad.any():
            return
        row = int(np.argmax(bad))
        if placed[row] == ABSENT or self._servers.names is None:
            raise InputError(
                f"{source.at(row)}: placed is blank; name the server that took the task, or drop the column."
            )
        words = self._servers.names.unknown(self._servers.cell(piece["placed"], row))
        raise InputError(f"{source.at(row)}: placed is {words}{'' if words[-1] == '?' else '.'}")


def _part(block: Block, rows: slice) -> Block:
    size, duration, placed = (
        None if values is None else values[rows] for values in (block.size, block.duration, block.placed)
    )
    return Block(block.first + rows.start, block.time[rows], block.options[rows], size, duration, placed)


def open_trace(trace: str | Path | pd.DataFrame, fleet: Fleet) -> Trace:
    r"""Open a log of arrivals at a fleet and check its columns.

    Parameters
    ----------
    trace : str, pathlib.Path or pandas.DataFrame
        A table, or the path of a CSV or parquet file, with a row a task in order of time: `time`, then
        `option_1`, `option_2` and, if need be, `option_3` ..., names of servers of the fleet (a blank is no
        option; a row has at least one), and optionally `size` (at least 0; 1 when there is no such column),
        `duration` (at least 0) and `placed` (the server that took the task). Times are finite numbers in any
        unit, less than 2^53 from 0, or timestamps; not both.
    fleet : Fleet
        The servers.

    Returns
    -------
    Trace
        Its `blocks` reads the rows.

    Raises
    ------
    InputError
        When there is no such file or it is empty, unreadable or cut; when a column is missing or unknown.

    Notes
    -----
    Timestamps (of any resolution in parquet and pandas; ISO 8601 text in CSV, with a zone everywhere or
    nowhere) become seconds since the first row: the difference is exact, in whole nanoseconds, and then
    divided by 10^9. Durations are then seconds, or timedeltas.

    Names in CSV are text, as in `labkit.read_fleet`; they stand for whole numbers when all servers of the
    fleet are named by whole numbers. A file is read in pieces: memory does not grow with its length. A
    CSV file must end in a line break, since otherwise its last line may be cut.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> from labkit.traces.reading import open_trace
    >>> log = pd.DataFrame({"time": [0.5, 0.5, 2], "option_1": [0, 1, 3], "option_2": [1, 2, 0]})
    >>> trace = open_trace(log, lk.ring(4))
    >>> [block.options.tolist() for block in trace.blocks(rows=2)]
    [[[0, 1], [1, 2]], [[3, 0]]]
    """
    fleet = check_fleet(fleet)
    pieces = open_pieces(trace)
    return trace_of(pieces, FleetServers(fleet, pieces.text))


def trace_of(pieces: Pieces, servers: FleetServers | FoundServers) -> Trace:
    """Return the trace of an opened log, with its names looked up among some servers."""
    has = {label: label in pieces.labels for label in ("size", "duration", "placed")}
    return Trace(
        pieces.source.label,
        option_count(pieces.labels),
        has["size"],
        has["duration"],
        has["placed"],
        "s" if pieces.stamped else "",
        pieces,
        servers,
    )
