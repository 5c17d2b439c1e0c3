"""Servers lost: the new optimum, the new bottleneck, and the work that has no place left."""

import math
from collections.abc import Iterable
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np
import pandas as pd

from labkit.compiled import kept
from labkit.errors import InputError
from labkit.fleet.model import CompleteLaw, Fleet, check_fleet, positions_of
from labkit.sharing.waiting import Waiting
from labkit.survey.demand import choices_of_law
from labkit.survey.fair import FairProfile, fair_profile, sum_blocks
from labkit.survey.first_split import share_by_capacity, thread_entries
from labkit.survey.optimum import AGREEMENT
from labkit.survey.outage_rows import FAILED, TOP_BLOCK, lose_rows
from labkit.survey.split import Split

MOST_PAIRS = 5_000_000
MOST_NAMES = 20_000_000
_NAMES = 2_000_000  # that one compiled call hands over


def outages(
    fleet: Fleet, *, servers: Iterable[Any] | None = None, pairs: bool = False, bottlenecks: bool = True
) -> pd.DataFrame:
    """Return what the loss of each server, or of each pair of servers, does to the optimum.

    Work that had a lost server among its options goes to the options that are left; one that is left alone
    takes it all. Demand whose options are all lost is not placed and counts nowhere but in `unplaced`.

    Parameters
    ----------
    fleet : Fleet
        The whole fleet.
    servers : iterable of server names, optional
        Lose only these; default all.
    pairs : bool
        Lose every two of them together, n(n − 1)/2 rows, instead of every single one.
    bottlenecks : bool
        Name the servers of each bottleneck. They are many where a fleet is balanced, up to all that are left.

    Returns
    -------
    pandas.DataFrame
        One row an outage, in table order of servers:

        - server (and second, with `pairs`): what is lost.
        - optimum: the lowest highest utilisation that any split of the demand still placed can reach, when it
          is placed once; 0 when nothing can be placed.
        - extra_headroom: by how much that is above the optimum of the whole fleet; below 0 only where demand
          is lost.
        - mean: (demand still placed) / (capacity that is left).
        - unplaced: demand whose options are all lost.
        - bottleneck_servers: how many servers the bottleneck has.
        - bottleneck: their names in table order, a tuple; the largest set of servers that attains the
          optimum. Left out with ``bottlenecks=False``.

    Raises
    ------
    InputError
        When an argument is of the wrong kind, there are more than 5,000,000 pairs, the bottlenecks would hold
        more than 20,000,000 names (those equal to the bottleneck of the whole fleet count once), or demands
        and capacities are so far apart that the optimum of the whole fleet cannot be proved to 1e-9.

    Notes
    -----
    Each row is exact: a split and a set of servers that prove each other are found, starting from the fair
    split of the whole fleet (`labkit.survey`) and moving only the work that the outage displaces. Where
    amounts are so many orders apart that double precision cannot prove a row to 1e-9, its optimum is NaN and
    its bottleneck empty.

    Examples
    --------
    >>> import labkit as lk
    >>> lk.outages(lk.ring(5), bottlenecks=False).head(2)
       server  optimum  extra_headroom  mean  unplaced  bottleneck_servers
    0       0     1.25            0.25  1.25       0.0                   4
    1       1     1.25            0.25  1.25       0.0                   4
    """
    check_fleet(fleet)
    for name, value in (("pairs", pairs), ("bottlenecks", bottlenecks)):
        if not isinstance(value, bool | np.bool_):
            raise InputError(f"{name} is {value!r}; give True or False.")
    lost = np.arange(fleet.size) if servers is None else _positions(fleet, servers)
    if pairs and lost.size < 2:
        raise InputError(f"pairs is True and servers holds {lost.size}; name at least two servers to lose.")
    count = math.comb(lost.size, 2)
    if pairs and count > MOST_PAIRS:
        raise InputError(
            f"pairs is True and {lost.size:,} servers make {count:,} pairs, above the {MOST_PAIRS:,} "
            "allowed; lose single servers, or name fewer."
        )
    if pairs:
        first, second = (lost[side].astype(np.int32) for side in np.triu_indices(lost.size, 1))
    else:
        first, second = lost.astype(np.int32), np.full(lost.size, -1, np.int32)
    columns: dict[str, Any] = {"server": fleet.names.take(first)}
    if pairs:
        columns["second"] = fleet.names.take(second)
    if fleet.implicit is not None:
        columns |= _by_law(fleet, fleet.implicit, first, second, bool(bottlenecks))
    else:
        columns |= _by_rows(fleet, first, second, bool(bottlenecks))
    return pd.DataFrame(columns)


def _positions(fleet: Fleet, servers: Iterable[Any]) -> np.ndarray:
    """Return the positions of the servers named, in table order."""
    if isinstance(servers, pd.DataFrame):
        raise InputError("servers is a table; give names, such as fleet.servers['server'].")
    names = (
        [servers] if isinstance(servers, str | bytes) or not isinstance(servers, Iterable) else list(servers)
    )
    if not names:
        raise InputError("servers is empty; name at least one server, or leave it out for all.")
    found = positions_of(fleet, names, "servers")
    if np.unique(found).size < found.size:
        values, counts = np.unique(found, return_counts=True)
        twice = fleet.names[values[np.argmax(counts > 1)]]
        raise InputError(f"servers names {twice!r} twice; name each server once.")
    return np.sort(found)


def _by_law(
    fleet: Fleet, law: CompleteLaw, first: np.ndarray, second: np.ndarray, bottlenecks: bool
) -> dict[str, Any]:
    """Return the columns of a complete fleet: all servers are alike, and so are all rows."""
    lost = 2 if second.size and second[0] >= 0 else 1
    left = fleet.size - lost
    if bottlenecks and first.size * left > MOST_NAMES:
        raise _too_many_names(first.size * left)
    total = choices_of_law(law)
    unplaced = math.comb(lost, law.options) if law.distinct else lost**law.options
    optimum = Fraction(total - unplaced, left) if left else Fraction(0)
    columns: dict[str, Any] = {
        "optimum": _as_float(optimum),
        "extra_headroom": _as_float(optimum - Fraction(total, fleet.size)),
        "mean": _as_float(optimum),
        "unplaced": _as_float(Fraction(unplaced)),
        "bottleneck_servers": left,
    }
    columns = {name: np.full(first.size, value) for name, value in columns.items()}
    if bottlenecks:
        names = fleet.names.tolist()
        last = np.maximum(first, second)
        columns["bottleneck"] = _column(
            tuple(names[:one] + names[one + 1 : other] + names[other + 1 :])
            for one, other in zip(first.tolist(), last.tolist(), strict=True)
        )
    return columns


def _as_float(number: Fraction) -> float:
    try:
        return float(number)
    except OverflowError:
        return math.inf if number > 0 else -math.inf


def _by_rows(fleet: Fleet, first: np.ndarray, second: np.ndarray, bottlenecks: bool) -> dict[str, Any]:
    """Return the columns of a fleet with a table of choices, row by row."""
    profile = fair_profile(fleet)
    split = replace(profile.split, carried=profile.split.carried.copy(), load=profile.split.load.copy())
    rows = first.size
    optimum, unplaced, unplaced_lost = np.empty((3, rows))
    size, kind, ends = np.empty(rows, np.int64), np.empty(rows, np.int8), np.zeros(rows, np.int64)
    listed = np.empty(max(_NAMES, fleet.size) if bottlenecks else 0, np.int32)
    base = _base(split, profile)
    names = _Names(fleet, profile.bottleneck)
    start = 0
    with Waiting("losses worked out", rows, "case") as waiting:
        while start < rows:
            stop = kept(lose_rows)(
                first, second, start, *base, optimum, unplaced, unplaced_lost, size, kind, ends, listed,
                bottlenecks,
            )  # fmt: skip
            if start == 0:
                _check_proved(split, profile.optimum)
            failed = np.flatnonzero(kind[start:stop] == FAILED) + start
            for row in range(start, stop) if bottlenecks else failed:
                if kind[row] == FAILED:
                    optimum[row], members = _from_zero(split, first[row], second[row])
                    size[row] = members.size
                    if bottlenecks:
                        names.add(members)
                elif kind[row] == TOP_BLOCK:
                    names.add_known()
                else:
                    names.add(listed[ends[row - 1] if row > start else 0 : ends[row]])
            waiting.add(stop - start)
            start = stop
    placed = _less(split.demand, unplaced, unplaced_lost)
    left = _less(split.capacity, split.capacity[first], np.where(second >= 0, split.capacity[second], 0.0))
    columns: dict[str, Any] = {
        "optimum": optimum,
        "extra_headroom": optimum - profile.optimum,
        "mean": np.divide(placed, left, out=np.zeros(rows), where=optimum != 0.0),
        "unplaced": unplaced + unplaced_lost,
        "bottleneck_servers": size,
    }
    return columns | ({"bottleneck": _column(names.of_row)} if bottlenecks else {})


def _check_proved(split: Split, optimum: float) -> None:
    if not abs(np.max(split.load / split.capacity) / optimum - 1.0) <= AGREEMENT:
        raise InputError(
            f"fleet has demands and capacities so far apart that its optimum, about {optimum:.4g}, cannot be "
            f"proved to {AGREEMENT:g}; leave out what is negligible."
        )


def _base(split: Split, profile: FairProfile) -> tuple[np.ndarray, ...]:
    """Return what every outage starts from: the fair split, its profile, and the servers by block."""
    by_block = np.argsort(profile.block, kind="stable").astype(np.int32)
    block_start = np.searchsorted(profile.block[by_block], np.arange(profile.level.size + 1))
    return (
        split.servers, split.head, split.following, split.carried, split.load, split.demand, split.capacity,
        profile.block, profile.level, by_block, block_start,
    )  # fmt: skip


class _Names:
    """The bottleneck of each row as a tuple of names; rows with that of the whole fleet share one."""

    def __init__(self, fleet: Fleet, whole: np.ndarray) -> None:
        self.of_row: list[tuple] = []
        self.count = 0
        self._label = fleet.names.to_numpy()
        self._whole = whole
        self._known: tuple | None = None

    def add(self, members: np.ndarray) -> None:
        self.count += members.size
        if self.count > MOST_NAMES:
            raise _too_many_names(self.count)
        self.of_row.append(tuple(self._label[members].tolist()))

    def add_known(self) -> None:
        if self._known is not None:
            self.of_row.append(self._known)
        else:
            self.add(self._whole)
            self._known = self.of_row[-1]


def _too_many_names(count: int) -> InputError:
    return InputError(
        f"bottlenecks is True, and they hold {count:,} names or more, above the {MOST_NAMES:,} that fit in a "
        "table; pass bottlenecks=False for their sizes alone."
    )


def _column(tuples: Iterable[tuple]) -> pd.Series:
    return pd.Series(list(tuples), dtype=object)


def _less(values: np.ndarray, *parts: np.ndarray) -> np.ndarray:
    """Return the sum of all values less some parts of it, without the rounding of the sum."""
    total = math.fsum(values)
    high, low = np.array(total), np.array(math.fsum([*values, -total]))
    for part in parts:
        after = high - part
        low = low + ((high - after) - part)
        high = after
    return high + low


def _from_zero(split: Split, one: int, other: int) -> tuple[float, np.ndarray]:
    """Return optimum and bottleneck of the fleet that is left, NaN and nobody when they cannot be proved."""
    servers = np.where((split.servers == one) | ((split.servers == other) & (other >= 0)), -1, split.servers)
    servers = np.take_along_axis(servers, np.argsort(servers < 0, axis=1, kind="stable"), axis=1)
    left = Split(
        servers,
        head=np.empty_like(split.head),
        following=np.full_like(split.following, -1),
        carried=np.empty_like(split.carried),
        load=np.empty_like(split.load),
        demand=split.demand,
        capacity=split.capacity,
        block=np.empty_like(split.block),
        order=np.empty_like(split.order),
    )
    kept(thread_entries)(servers, left.head, left.following)
    kept(share_by_capacity)(servers, left.demand, left.capacity, left.carried, left.load)
    left.make_fair(only_top=True)
    work, room = np.zeros(1), np.zeros(1)
    kept(sum_blocks)(servers, left.carried, left.demand, left.capacity, left.block, work, room)
    optimum = float(work[0] / room[0])
    if abs(np.max(left.load / left.capacity) / optimum - 1.0) > AGREEMENT:
        return math.nan, np.empty(0, np.int32)
    return optimum, np.flatnonzero(left.block == 0)
