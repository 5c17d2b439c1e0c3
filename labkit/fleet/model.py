"""The fleet: servers and the choices among them."""

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from labkit.cards.shown import Shown
from labkit.errors import InputError
from labkit.fleet.choices import checked_options
from labkit.fleet.digest import fleet_digest
from labkit.fleet.names import ABSENT, UNKNOWN, NameMap, checked_names
from labkit.fleet.tables import Source, amounts, check_columns, option_count, table_source

if TYPE_CHECKING:
    import networkx

__all__ = ["ABSENT", "CompleteLaw", "Fleet", "check_fleet", "positions_of"]


@dataclass(frozen=True)
class CompleteLaw:
    """A choice is any set of servers, all equally likely; no table holds them.

    Attributes
    ----------
    servers : int
        Number of servers.
    options : int
        Servers in a choice.
    distinct : bool
        Whether the options of a choice differ; if not, each is drawn from all servers on its own.
    """

    servers: int
    options: int
    distinct: bool


class Fleet(Shown):
    """Servers, and the choices that arriving work has among them.

    Parameters
    ----------
    servers : pandas.DataFrame
        One row a server: `server`, its name (text or whole number, each once), and optionally `capacity`
        (above 0, in units of work; 1.0 when there is no such column).
    choices : pandas.DataFrame
        One row a choice: `option_1`, `option_2` and, if need be, `option_3` ..., names of different
        servers (a blank is no option), and optionally `demand` (at least 0, relative arrival rate; 1.0 when
        there is no such column). Several rows may hold the same servers.

    Attributes
    ----------
    size : int
        Number of servers, also `len(fleet)`.
    names : pandas.Index
        Server names in table order.
    capacity : numpy.ndarray or None
        float64 of shape (servers,), read-only; None when every capacity is 1.
    options : numpy.ndarray
        uint32 of shape (choices, most options in a choice), C-contiguous, read-only: positions of servers;
        absent options come last in a row and are `ABSENT`.
    demand : numpy.ndarray or None
        float64 of shape (choices,), read-only; None when all demands are equal to `equal_demand`.
    equal_demand : float
        The demand of each choice when all are equal, else NaN.
    servers, choices : pandas.DataFrame
        The checked tables, with capacities (units of work) and demands filled in; new ones at each access.
    digest : str
        SHA-256 in hex of all that makes the fleet.
    total_capacity : float
        Sum of the capacities.
    implicit : CompleteLaw or None
        The law of choices that are never listed (`labkit.complete`); then `options` and `demand` are None.

    Raises
    ------
    InputError
        When a table is refused; the sentence names the table, the row (counted from 1), the value and the
        rule.

    Notes
    -----
    Columns that already have a fitting type are shared with the given tables, not copied; pandas'
    copy-on-write keeps the fleet as it is when those tables are changed afterwards.

    Examples
    --------
    >>> import pandas as pd
    >>> import labkit as lk
    >>> servers = pd.DataFrame({"server": ["north", "east", "south"], "capacity": [2.0, 1.0, 1.0]})
    >>> choices = pd.DataFrame({"option_1": ["north", "east"], "option_2": ["east", "south"]})
    >>> fleet = lk.Fleet(servers, choices)
    >>> fleet
    Fleet(3 servers, 2 choices of 2 options, capacity 1 to 2, demand 1 each)
    >>> fleet.servers["capacity"].tolist(), fleet.choices["demand"].tolist()
    ([2.0, 1.0, 1.0], [1.0, 1.0])
    >>> fleet.digest == lk.Fleet(servers, choices).digest
    True
    """

    size: int
    names: pd.Index
    capacity: np.ndarray | None
    options: Any
    demand: np.ndarray | None
    equal_demand: float
    total_capacity: float
    implicit: CompleteLaw | None
    _shared: tuple[Any, ...]

    def __init__(self, servers: pd.DataFrame, choices: pd.DataFrame) -> None:
        self._read_tables(servers, choices, table_source("servers"), table_source("choices"))

    @classmethod
    def _from_tables(
        cls, servers: pd.DataFrame, choices: pd.DataFrame, server_source: Source, choice_source: Source
    ) -> "Fleet":
        """Build a fleet from tables whose rows a refusal names in their own way."""
        fleet = cls.__new__(cls)
        fleet._read_tables(servers, choices, server_source, choice_source)
        return fleet

    @classmethod
    def _from_positions(cls, size: int, options: np.ndarray) -> "Fleet":
        """Build a fleet of servers 0 .. size - 1 from correct positions, with unit capacities and demands."""
        fleet = cls.__new__(cls)
        fleet._set(pd.RangeIndex(size, name="server"), None, options, None, 1.0, None)
        return fleet

    @classmethod
    def _from_law(cls, law: CompleteLaw) -> "Fleet":
        """Build a fleet of unit servers whose choices are never listed."""
        fleet = cls.__new__(cls)
        fleet._set(pd.RangeIndex(law.servers, name="server"), None, None, None, 1.0, law)
        return fleet

    def _read_tables(
        self, servers: pd.DataFrame, choices: pd.DataFrame, server_source: Source, choice_source: Source
    ) -> None:
        check_columns(servers, server_source, ("server",), ("capacity",))
        check_columns(choices, choice_source, ("option_1", "option_2"), ("demand",))
        names = checked_names(servers["server"], server_source)
        capacity = demand = None
        each = 1.0
        if "capacity" in servers:
            capacity = amounts(servers["capacity"], server_source, zero=False)
            if capacity.min() == capacity.max() == 1.0:
                capacity = None
        if "demand" in choices:
            demand, each = _demands(choices["demand"], choice_source)
        columns = [choices[f"option_{place + 1}"] for place in range(option_count(list(choices.columns)))]
        options = checked_options(columns, NameMap(names, server_source), choice_source)
        self._set(names, capacity, options, demand, each, None)
        # Held so that pandas sees the shared columns and copies the caller's table when it is written to.
        self._shared = (
            servers["capacity"] if capacity is not None else None,
            choices["demand"] if demand is not None else None,
        )

    def _set(
        self,
        names: pd.Index,
        capacity: np.ndarray | None,
        options: np.ndarray | None,
        demand: np.ndarray | None,
        equal_demand: float,
        implicit: CompleteLaw | None,
    ) -> None:
        self.names, self.size = names, len(names)
        self.capacity, self.options, self.demand = _frozen(capacity), _frozen(options), _frozen(demand)
        self.equal_demand, self.implicit = equal_demand, implicit
        self.total_capacity = float(len(names)) if capacity is None else float(capacity.sum())
        self._shared = ()

    def __getstate__(self) -> dict[str, Any]:
        return {**self.__dict__, "_shared": ()}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)
        for values in (self.capacity, self.options, self.demand):
            _frozen(values)

    def __len__(self) -> int:
        return self.size

    def __repr__(self) -> str:
        capacity = "1 each" if self.capacity is None else _span(self.capacity)
        if self.implicit is not None:
            law = self.implicit
            options = f"{law.options} {'distinct ' * law.distinct}option{'s' * (law.options != 1)}"
            draw = "" if law.distinct else " with replacement"
            return f"Fleet({self.size} servers, any {options}{draw} equally likely, capacity 1 each)"
        count, most = self.options.shape
        fewest = most - int(np.count_nonzero((self.options == ABSENT).any(axis=0))) if most > 2 else most
        spread = f"{most}" if fewest == most else f"{fewest} to {most}"
        demand = f"{self.equal_demand:g} each" if self.demand is None else _span(self.demand)
        return (
            f"Fleet({self.size} servers, {count} choice{'s' * (count != 1)} of {spread} options, "
            f"capacity {capacity}, demand {demand})"
        )

    @property
    def servers(self) -> pd.DataFrame:
        """The checked servers: `server`, `capacity` (float64). A new table at each access."""
        capacity = np.ones(self.size) if self.capacity is None else self.capacity
        return pd.DataFrame({"server": self.names, "capacity": capacity})

    @property
    def choices(self) -> pd.DataFrame:
        """The checked choices: `option_1` ..., `demand` (float64). A new table at each access.

        Raises
        ------
        InputError
            When the choices are never listed (`labkit.complete`).
        """
        if self.implicit is not None:
            raise InputError(
                "fleet is complete: its choices follow a law and are not listed; use len(fleet)."
            )
        count, most = self.options.shape
        columns: dict[str, Any] = {}
        for place in range(most):
            chosen = self.options[:, place]
            absent = chosen == ABSENT
            if absent.any():
                named = self.names.take(np.where(absent, 0, chosen).astype(np.int64))
                nullable = "Int64" if pd.api.types.is_integer_dtype(self.names.dtype) else self.names.dtype
                missing = None if named.dtype == object else pd.NA
                columns[f"option_{place + 1}"] = pd.Series(named, dtype=nullable).mask(absent, missing)
            else:
                columns[f"option_{place + 1}"] = self.names.take(chosen.astype(np.int64))
        columns["demand"] = np.full(count, self.equal_demand) if self.demand is None else self.demand
        return pd.DataFrame(columns)

    @cached_property
    def digest(self) -> str:
        """SHA-256 in hex of names, capacities, options and demands in table order.

        The same for a fleet from CSV, parquet or tables in memory; another one as soon as a name, its kind
        (text or whole number), an amount or the order of rows or options differs.
        """
        return fleet_digest(self)

    def to_networkx(self) -> "networkx.Graph":
        """Return the choice graph as a networkx graph.

        Returns
        -------
        networkx.Graph or networkx.MultiGraph
            Nodes are server names with `capacity`, edges are choices with `demand`; a MultiGraph when several
            choices hold the same two servers.

        Raises
        ------
        InputError
            When a choice has three or more options, or a complete fleet is too large to list.

        Examples
        --------
        >>> import labkit as lk
        >>> graph = lk.ring(4).to_networkx()
        >>> sorted(graph.edges)
        [(0, 1), (0, 3), (1, 2), (2, 3)]
        >>> graph.nodes[0]["capacity"], graph.edges[0, 1]["demand"]
        (1.0, 1.0)
        """
        from labkit.fleet.graphs import graph_of

        return graph_of(self)


def check_fleet(fleet: Any) -> Fleet:
    """Return `fleet` when it is one."""
    if not isinstance(fleet, Fleet):
        raise InputError(
            f"fleet is {type(fleet).__name__}; give a labkit Fleet, such as lk.read_fleet(folder)."
        )
    return fleet


def positions_of(fleet: Fleet, names: list[Any], argument: str) -> np.ndarray:
    """Return the positions of servers by name, int64 of shape (names,); refuse a name that is no server's."""
    known = NameMap(fleet.names, table_source("servers"))
    found = known.positions(pd.Series(names, dtype=object))
    for place in np.flatnonzero(found >= UNKNOWN):
        words = known.unknown(names[place])
        raise InputError(f"{argument} holds {words}{'' if words[-1] == '?' else '.'}")
    return found.astype(np.int64)


def _demands(column: pd.Series, source: Source) -> tuple[np.ndarray | None, float]:
    demand = amounts(column, source, zero=True)
    low, high = float(demand.min()), float(demand.max())
    if high == 0:
        raise InputError(f"{source.label}: every demand is 0; give at least one choice a demand above 0.")
    return (None, high) if low == high else (demand, float("nan"))


def _frozen(values: np.ndarray | None) -> np.ndarray | None:
    if values is not None:
        values.setflags(write=False)
    return values


def _span(values: np.ndarray) -> str:
    low, high = float(values.min()), float(values.max())
    return f"{low:g} each" if low == high else f"{low:g} to {high:g}"
