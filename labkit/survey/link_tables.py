"""The fleet with links added, from a table of advice."""

import math
from collections.abc import Iterable
from typing import Any

import numpy as np
import pandas as pd

from labkit.errors import InputError
from labkit.fleet.model import ABSENT, Fleet, check_fleet
from labkit.fleet.names import UNKNOWN, NameMap
from labkit.fleet.tables import amounts, is_blank, table_source

_SLACK = 1e-9  # share by which sums in a table may miss for rounding


def check_listed(fleet: Any) -> Fleet:
    """Return `fleet` when it is one whose choices are listed."""
    fleet = check_fleet(fleet)
    if fleet.implicit is not None:
        raise InputError(
            "fleet is complete: every set of its servers is a choice already, so there is no link to add; "
            "give a fleet with a table of choices."
        )
    return fleet


def with_link(fleet: Fleet, one: int, other: int, rows: np.ndarray, taken: np.ndarray) -> Fleet:
    """Return the fleet with one more two-server choice, whose demand comes from the given rows of choices."""
    count, most = fleet.options.shape
    options = np.full((count + 1, most), ABSENT, np.uint32)
    options[:count] = fleet.options
    options[count, :2] = one, other
    demand = np.full(count + 1, fleet.equal_demand)
    if fleet.demand is not None:
        demand[:count] = fleet.demand
    demand[rows] = np.maximum(demand[rows] - taken, 0.0)
    demand[count] = math.fsum(taken)
    low, high = float(demand.min()), float(demand.max())
    new = Fleet.__new__(Fleet)
    if low == high:
        new._set(fleet.names, fleet.capacity, options, None, high, None)
    else:
        new._set(fleet.names, fleet.capacity, options, demand, float("nan"), None)
    return new


def positions(fleet: Fleet, table: pd.DataFrame, label: str) -> tuple[np.ndarray, np.ndarray]:
    """Return the positions of the servers in two columns of names, int64."""
    names = NameMap(fleet.names, table_source("servers"))
    found = []
    for column in ("option_1", "option_2"):
        position = names.positions(table[column])
        for row in np.flatnonzero(position >= UNKNOWN):
            value = table[column].iloc[row]
            if is_blank(value):
                raise InputError(f"{label} row {row + 1}: {column} is blank; name a server.")
            words = names.unknown(value)
            raise InputError(f"{label} row {row + 1}: {column} is {words}{'' if words[-1] == '?' else '.'}")
        found.append(position.astype(np.int64))
    same = np.flatnonzero(found[0] == found[1])
    if len(same):
        name = fleet.names.take(found[0][same[:1]]).tolist()[0]
        raise InputError(
            f"{label} row {same[0] + 1}: server {name!r} is at both ends; a link joins two different servers."
        )
    return found[0], found[1]


def named(fleet: Fleet, one: int, other: int) -> str:
    """Return both names, for a sentence."""
    first, second = fleet.names.take([one, other]).tolist()
    return f"{first!r} and {second!r}"


def add_table(fleet: Fleet, links: Any) -> Fleet:
    """Return the fleet with the links of an advice table added; see `labkit.add_links`."""
    if not isinstance(links, pd.DataFrame):
        raise InputError(f"links is a {type(links).__name__}; give a table as lk.advise_links returns it.")
    for column in ("option_1", "option_2", "demand", "taken_from"):
        if column not in links:
            raise InputError(
                f"links has no column {column!r}; give a table as lk.advise_links returns it, with the "
                "columns option_1, option_2, demand and taken_from."
            )
    if len(links) == 0:
        return fleet
    first, second = positions(fleet, links, "links")
    wanted = amounts(links["demand"], table_source("links"), zero=False)
    for row, (one, other, demand, taken_from) in enumerate(
        zip(first.tolist(), second.tolist(), wanted.tolist(), links["taken_from"], strict=True)
    ):
        pair = np.sort(fleet.options[:, :2].astype(np.int64), axis=1) == sorted((one, other))
        same = np.flatnonzero(pair.all(axis=1) & (fleet.options[:, 2:] == ABSENT).all(axis=1))
        if len(same):
            raise InputError(
                f"links row {row + 1}: {named(fleet, one, other)} is a choice already, choices row "
                f"{same[0] + 1}; add each link once."
            )
        rows, taken = _taken(fleet, row, one, other, taken_from)
        if abs(math.fsum(taken) - demand) > _SLACK * demand:
            raise InputError(
                f"links row {row + 1}: taken_from sums to {math.fsum(taken):g}, but demand is {demand:g}; "
                "a link takes all its demand from other choices."
            )
        fleet = with_link(fleet, one, other, rows, taken)
    return fleet


def _taken(fleet: Fleet, row: int, one: int, other: int, given: Any) -> tuple[np.ndarray, np.ndarray]:
    """Return rows of choices and what a link takes from each."""
    where = f"links row {row + 1}: taken_from"
    pairs = [] if isinstance(given, str) or not isinstance(given, Iterable) else list(given)
    if not pairs:
        raise InputError(
            f"{where} is {given!r}; give pairs of a row of fleet.choices, from 0, and an amount."
        )
    rows, taken = [], []
    for pair in pairs:
        try:
            position, amount = (float(value) for value in pair)
        except (TypeError, ValueError):
            raise InputError(
                f"{where} holds {pair!r}; give pairs of a row of fleet.choices, from 0, and an amount."
            ) from None
        count = len(fleet.options)
        if not (position.is_integer() and 0 <= position < count) or position in rows:
            raise InputError(
                f"{where} names the choice {position:g}; name each choice once, by its position from 0 to "
                f"{count - 1} in fleet.choices."
            )
        choice = int(position)
        there = float(fleet.equal_demand if fleet.demand is None else fleet.demand[choice])
        if not 0 < amount <= there * (1 + _SLACK):
            raise InputError(
                f"{where} takes {amount:g} from choice {choice}, whose demand is {there:g}; take an amount "
                "above 0 and not above that, and add links to the fleet that they were advised for."
            )
        if not np.isin([one, other], fleet.options[choice]).any():
            raise InputError(
                f"{where} names choice {choice}, which has neither {named(fleet, one, other)} among its "
                "options; add links to the fleet that they were advised for."
            )
        rows.append(choice)
        taken.append(min(amount, there))
    return np.array(rows), np.array(taken)
