"""Names in a log to positions of servers: those of a fleet, or numbered as they appear."""

from collections.abc import Callable, Hashable
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from labkit.errors import InputError
from labkit.fleet.csv_files import whole_names, whole_options
from labkit.fleet.model import Fleet
from labkit.fleet.names import ABSENT, NameMap
from labkit.fleet.tables import Source, is_blank, table_source

Column = Any  # pyarrow.Array | pandas.Series


class FleetServers:
    """The servers of a fleet.

    Parameters
    ----------
    fleet : Fleet
        Its names are the known ones.
    text : bool
        Whether the log holds text only, which stands for whole numbers when all servers are named by them.
    """

    def __init__(self, fleet: Fleet, text: bool) -> None:
        self.names: NameMap | None = NameMap(fleet.names, table_source("servers"))
        self.text = text
        self.whole = text and self.names.whole
        self._known: dict[str, tuple[pa.Array, np.ndarray]] = {}

    def positions(self, columns: dict[str, Column], source: Source) -> list[np.ndarray]:
        """Return uint32 positions, an array a column; ABSENT for a blank, UNKNOWN for no server."""
        _refuse_odd(columns, source)
        return [self._of_column(label, column) for label, column in columns.items()]

    def cell(self, column: Column, row: int) -> Any:
        """Return what the column holds in a row, for a refusal."""
        value = _cell(column, row)
        if not self.text:
            return value
        value = value.strip()
        return whole_options(pa.array([value], pa.string())).iloc[0] if self.whole and value else value

    def _of_column(self, label: str, column: Column) -> np.ndarray:
        assert self.names is not None
        if isinstance(column, pd.Series):
            return self.names.positions(column)
        if pa.types.is_integer(column.type):
            return self.names.positions(_series(column))
        coded = column if pa.types.is_dictionary(column.type) else column.dictionary_encode()
        table = self._of_names(label, coded.dictionary)
        codes = coded.indices
        if codes.null_count:
            codes = codes.cast(pa.int64()).fill_null(len(table) - 1)
        return table[codes.to_numpy()]

    def _of_names(self, label: str, names: pa.Array) -> np.ndarray:
        """Positions of a list of names, with ABSENT added at the end; pieces mostly share their list."""
        held = self._known.get(label)
        if held is not None and held[0].equals(names):
            return held[1]
        assert self.names is not None
        if self.text:
            trimmed = pc.utf8_trim_whitespace(names)
            column = whole_options(trimmed) if self.whole else trimmed.to_pandas()
        else:
            column = _series(names)
        table = np.append(self.names.positions(column), ABSENT)
        self._known[label] = (names, table)
        return table


class FoundServers:
    """Servers numbered as their names appear: by row, and within a row by column.

    Parameters
    ----------
    text : bool
        Whether the log holds text only, in which all names become whole numbers when every one is written
        as such in its plain form.
    """

    def __init__(self, text: bool) -> None:
        self.names: NameMap | None = None
        self.text = text
        self.found: dict[Any, int] = {}

    def positions(self, columns: dict[str, Column], source: Source) -> list[np.ndarray]:
        """Return uint32 positions, an array a column; ABSENT for a blank. Names not seen before get the next.

        Raises
        ------
        InputError
            When a name is neither text nor a whole number.
        """
        _refuse_odd(columns, source)
        coded = [_distinct(column) for column in columns.values()]
        fresh: list[tuple[int, int, Any]] = []
        named = []
        for place, (label, (codes, values)) in enumerate(zip(columns, coded, strict=True)):
            first = _first_rows(codes, len(values))
            names = [
                self._name(value, label, lambda row=row: source.at(row))  # type: ignore[misc]
                for value, row in zip(values, first.tolist(), strict=True)
            ]
            fresh += [
                (row, place, name)
                for name, row in zip(names, first.tolist(), strict=True)
                if name is not None and name not in self.found
            ]
            named.append(names)
        for _, _, name in sorted(fresh, key=lambda one: one[:2]):
            self.found.setdefault(name, len(self.found))
        positions = []
        for (codes, _), names in zip(coded, named, strict=True):
            table = [int(ABSENT) if name is None else self.found[name] for name in names]
            positions.append(np.array([*table, ABSENT], dtype=np.uint32)[codes])
        return positions

    def cell(self, column: Column, row: int) -> Any:
        """Return what the column holds in a row, for a refusal."""
        value = _cell(column, row)
        return value.strip() if self.text else value

    def index(self) -> list[Any]:
        """Return the names by position; text from a CSV becomes whole numbers where all are such."""
        names = list(self.found)
        if self.text and (numbers := whole_names(pa.array(names, pa.string()))) is not None:
            return list(numbers.to_pylist())
        return names

    def _name(self, value: Any, label: str, at: Callable[[], str]) -> Any:
        """Return the name itself, or None for a blank."""
        if is_blank(value):
            return None
        if isinstance(value, np.generic):
            value = value.item()
        if isinstance(value, str):
            return value.strip() if self.text else value
        if isinstance(value, float) and value.is_integer() and abs(value) <= 2.0**53:
            value = int(value)  # a column of whole numbers with blanks
        if isinstance(value, bool) or not isinstance(value, int):
            raise InputError(f"{at()}: {label} is {value!r}; name servers by text or whole numbers.")
        return value


def _refuse_odd(columns: dict[str, Column], source: Source) -> None:
    """Refuse cells that hold more than one value, and damaged text in parquet."""
    for label, column in columns.items():
        if isinstance(column, pa.Array):
            row = 0 if pa.types.is_nested(column.type) else -1
            try:
                column.validate(full=True)
                if pa.types.is_dictionary(column.type):
                    column.dictionary.validate(full=True)
            except pa.ArrowInvalid:
                raise InputError(
                    f"{source.label}: column {label!r} has text that is not UTF-8, or is damaged; write the "
                    "file again."
                ) from None
        elif column.dtype == object:
            row = next((row for row, value in enumerate(column) if not isinstance(value, Hashable)), -1)
        else:
            continue
        if row >= 0:
            raise InputError(
                f"{source.at(row)}: {label} is {_cell(column, row)!r}; give the name of one server in a cell."
            )


def _distinct(column: Column) -> tuple[np.ndarray, list[Any]]:
    """Return codes, -1 for nothing, and the distinct values in the order of their first rows."""
    if isinstance(column, pd.Series):
        if column.dtype == object:
            return _distinct_objects(column)
        codes, values = pd.factorize(column)
        return codes, list(values)
    coded = column if pa.types.is_dictionary(column.type) else column.dictionary_encode()
    indices = coded.indices.cast(pa.int64())
    codes, used = pd.factorize(indices.fill_null(-1).to_numpy())
    return codes, [None if place < 0 else coded.dictionary[place].as_py() for place in used.tolist()]


def _distinct_objects(column: pd.Series) -> tuple[np.ndarray, list[Any]]:
    """As for other columns, but True is not 1."""
    seen: dict[Any, int] = {}
    values = []
    codes = np.empty(len(column), dtype=np.int64)
    for row, value in enumerate(column):
        key = (isinstance(value, bool | np.bool_), None if is_blank(value) else value)
        if key not in seen:
            seen[key] = len(seen)
            values.append(value)
        codes[row] = seen[key]
    return codes, values


def _first_rows(codes: np.ndarray, count: int) -> np.ndarray:
    """Return the first row of each code."""
    first = np.zeros(count + 1, dtype=np.int64)  # the last for a code of -1
    first[codes[::-1]] = np.arange(len(codes) - 1, -1, -1)
    return first[:count]


def _series(column: pa.Array) -> pd.Series:
    """Return a column with whole numbers kept whole where there are blanks."""
    if pa.types.is_integer(column.type):
        if column.null_count:
            return column.to_pandas(types_mapper={column.type: _NULLABLE[str(column.type)]}.get)
        return pd.Series(column.to_numpy(), copy=False)
    return column.to_pandas()


_NULLABLE = {
    f"{sign}int{bits}": getattr(pd, f"{'U' if sign else ''}Int{bits}Dtype")()
    for sign in ("", "u")
    for bits in (8, 16, 32, 64)
}


def _cell(column: Column, row: int) -> Any:
    return column.iloc[row] if isinstance(column, pd.Series) else column[row].as_py()
