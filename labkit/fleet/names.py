"""Server names to positions: exact, in row chunks, and without one Python object a server where possible."""

import difflib
from typing import Any

import numpy as np
import pandas as pd

from labkit.errors import InputError
from labkit.fleet.tables import CHUNK, Source, is_blank

ABSENT = np.uint32(0xFFFFFFFF)
UNKNOWN = np.uint32(0xFFFFFFFE)
MOST_SERVERS = int(UNKNOWN)
SPREAD = 4  # direct lookup while the range of integer names is at most this many times their number
LONGEST_NAME = 1_000  # characters
HASHED = 200_000  # from here on text is found by a 64-bit hash and then compared
_LARGEST = 2**63 - 1


def checked_names(column: pd.Series, source: Source) -> pd.Index:
    """Return the server names in table order, sharing the column's memory where its type allows.

    Whole numbers stay whole numbers and text stays text; a column may hold both.

    Raises
    ------
    InputError
        When a name is blank, neither text nor a whole number within 64 bits, or not unique.
    """
    values = _plain(column)
    rule = "name servers by text or whole numbers"
    # A float column is an integer column with a blank, or a mistake: name the row that shows which.
    if pd.api.types.is_float_dtype(values.dtype) or values.hasnans:
        for row, value in enumerate(column):
            if is_blank(value):
                raise InputError(f"{source.at(row)}: server is blank; {rule}.")
            if not _is_name(value):
                raise InputError(f"{source.at(row)}: server is {_bare(value)!r}; {rule}.")
    if pd.api.types.is_integer_dtype(values.dtype):
        names = _within_64_bits(values, source)
    elif isinstance(values.dtype, pd.StringDtype):
        names = pd.Index(values, dtype=values.dtype)
        _refuse_blank_text(names, source)
    elif values.dtype == object:
        names = _from_objects(values, source)
    else:
        raise InputError(f"{source.at(0)}: server is {_bare(column.iloc[0])!r}; {rule}.")
    if len(names) > MOST_SERVERS:
        raise InputError(
            f"{source.label} has {len(names)} rows; a fleet holds at most {MOST_SERVERS} servers."
        )
    return names.rename("server")


def _plain(column: pd.Series) -> pd.Series:
    """Bring nullable, Arrow and categorical columns to NumPy integers, text or objects; share the rest."""
    dtype = column.dtype
    if isinstance(dtype, pd.CategoricalDtype):
        return _plain(column.astype(dtype.categories.dtype if not column.hasnans else object))
    if pd.api.types.is_bool_dtype(dtype):
        return column
    if pd.api.types.is_integer_dtype(dtype) and not isinstance(dtype, np.dtype):
        return column.astype(np.int64) if not column.hasnans else column
    if isinstance(dtype, pd.ArrowDtype) and pd.api.types.is_string_dtype(dtype):
        return column.astype("str")
    return column


def _is_name(value: Any) -> bool:
    if isinstance(value, bool | np.bool_):
        return False
    return isinstance(value, str | int | np.integer)


def _bare(value: Any) -> Any:
    return value.item() if isinstance(value, np.generic) else value


def _within_64_bits(values: pd.Series, source: Source) -> pd.Index:
    if values.dtype != np.uint64:
        return pd.Index(values, dtype=values.dtype)
    row = int(values.argmax())
    if values.iloc[row] > _LARGEST:
        raise InputError(f"{source.at(row)}: server is {values.iloc[row]}; whole numbers end at {_LARGEST}.")
    return pd.Index(values.astype(np.int64), dtype=np.int64)


def _from_objects(values: pd.Series, source: Source) -> pd.Index:
    kinds: set[type] = set()
    for start in range(0, len(values), CHUNK):
        kinds.update(map(type, values.iloc[start : start + CHUNK]))
    whole = {kind for kind in kinds if issubclass(kind, int | np.integer) and kind is not bool}
    text = {kind for kind in kinds if issubclass(kind, str)}
    if kinds - whole - text:
        row = next(row for row, value in enumerate(values) if not _is_name(value))
        value = _bare(values.iloc[row])
        raise InputError(f"{source.at(row)}: server is {value!r}; name servers by text or whole numbers.")
    if whole:
        for row, value in enumerate(values):
            if not isinstance(value, str) and not -_LARGEST - 1 <= value <= _LARGEST:
                raise InputError(f"{source.at(row)}: server is {value}; whole numbers end at {_LARGEST}.")
    if not text:
        return pd.Index(values.astype(np.int64), dtype=np.int64)
    names = pd.Index(values, dtype=object)
    _refuse_blank_text(names, source)
    return names


def _refuse_blank_text(names: pd.Index, source: Source) -> None:
    for start in range(0, len(names), CHUNK):
        for row, value in enumerate(names[start : start + CHUNK], start):
            if is_blank(value):
                raise InputError(f"{source.at(row)}: server is blank; name servers by text or whole numbers.")
            if isinstance(value, str) and len(value) > LONGEST_NAME:
                raise InputError(
                    f"{source.at(row)}: server is {value[:40]!r}… of {len(value):,} characters; give a name "
                    f"of at most {LONGEST_NAME:,}."
                )


class NameMap:
    """Positions of server names.

    Consecutive integer names need no memory, integer names in a small range 4 bytes a number of the range,
    other integers and long lists of text one hash table of 64-bit numbers.

    Parameters
    ----------
    names : pandas.Index
        Checked names in table order.
    source : Source
        Names the table and the row when a name is doubled.

    Raises
    ------
    InputError
        When two servers have the same name.
    """

    def __init__(self, names: pd.Index, source: Source) -> None:
        self.names = names
        self.whole = bool(pd.api.types.is_integer_dtype(names.dtype))
        self.low = self.high = 0
        self.table: np.ndarray | None = None
        self.numbers: pd.Index | None = None
        self.objects: pd.Index | None = None
        unique = self._prepare_whole() if self.whole else self._prepare_text()
        if not unique:
            self._refuse_double(source)

    def _prepare_whole(self) -> bool:
        values = self.names.to_numpy()
        self.low, self.high = int(values.min()), int(values.max())
        span = self.high - self.low + 1
        if isinstance(self.names, pd.RangeIndex) and self.names.step == 1:
            return True
        if span > SPREAD * len(values):
            self.numbers = pd.Index(values.astype(np.int64, copy=False), copy=False)
            return bool(self.numbers.is_unique)
        table = np.full(span, UNKNOWN, dtype=np.uint32)
        for start in range(0, len(values), CHUNK):
            chunk = values[start : start + CHUNK].astype(np.int64) - self.low
            table[chunk] = np.arange(start, start + len(chunk), dtype=np.uint32)
        # Each name has written its own slot once, unless two names shared one.
        if np.count_nonzero(table != UNKNOWN) < len(values):
            return False
        self.table = table
        return True

    def _prepare_text(self) -> bool:
        if len(self.names) >= HASHED:
            hashes = np.empty(len(self.names), dtype=np.uint64)
            for start in range(0, len(self.names), CHUNK):
                chunk = self.names[start : start + CHUNK].to_numpy(dtype=object)
                hashes[start : start + CHUNK] = pd.util.hash_array(chunk, categorize=False)
            numbers = pd.Index(hashes, copy=False)
            if numbers.is_unique:
                self.numbers = numbers
                return True
        self.objects = pd.Index(self.names, dtype=object)
        return bool(self.objects.is_unique)

    def _refuse_double(self, source: Source) -> None:
        row = int(np.argmax(self.names.duplicated()))
        name = _bare(self.names[row])
        first = next(place for place, other in enumerate(self.names) if other == name)
        raise InputError(
            f"{source.at(row)}: server {name!r} was named before, at {source.at(first)}; name each once."
        )

    def positions(self, column: pd.Series) -> np.ndarray:
        """Return uint32 positions of one chunk of a column; ABSENT for a blank, UNKNOWN for no server."""
        dtype = column.dtype
        if isinstance(dtype, pd.CategoricalDtype):
            column = column.astype(object)
        elif pd.api.types.is_bool_dtype(dtype):
            return np.full(len(column), UNKNOWN, dtype=np.uint32)
        elif pd.api.types.is_integer_dtype(dtype):
            return self._of_integers(column)
        elif pd.api.types.is_float_dtype(dtype):
            return self._of_floats(column.to_numpy(dtype=np.float64, na_value=np.nan))
        return self._of_objects(column)

    def _of_integers(self, column: pd.Series) -> np.ndarray:
        blank = column.isna().to_numpy()
        values = (
            column.to_numpy() if isinstance(column.dtype, np.dtype) else column.to_numpy(np.int64, na_value=0)
        )
        found = self._of_whole(values)
        found[blank] = ABSENT
        return found

    def _of_floats(self, values: np.ndarray) -> np.ndarray:
        blank = np.isnan(values)
        # Beyond 2^53 a float no longer tells neighbouring whole numbers apart.
        whole = (np.abs(values) <= 2.0**53) & (values == np.floor(values))
        found = self._of_whole(np.where(whole, values, 0).astype(np.int64))
        found[~whole] = UNKNOWN
        found[blank] = ABSENT
        return found

    def _of_whole(self, values: np.ndarray) -> np.ndarray:
        """Positions of whole numbers."""
        if values.dtype == np.uint64:
            big = values > np.uint64(_LARGEST)
            found = self._of_whole(np.where(big, 0, values).astype(np.int64))
            found[big] = UNKNOWN
            return found
        if not self.whole:
            return self._of_objects(pd.Series(values, dtype=object))
        if self.numbers is not None:
            return _narrow(self.numbers.get_indexer(pd.Index(values.astype(np.int64, copy=False))))
        inside = (values >= self.low) & (values <= self.high)
        offset = np.where(inside, values, self.low).astype(np.int64) - self.low
        found = offset.astype(np.uint32) if self.table is None else self.table[offset]
        found[~inside] = UNKNOWN
        return found

    def _of_objects(self, column: pd.Series) -> np.ndarray:
        values = np.asarray(column, dtype=object)
        flags = _flags(values) if column.dtype == object else None
        found = self._of_mixed(values) if self.whole else self._of_text(column, values)
        for row in np.flatnonzero(found == UNKNOWN):
            if is_blank(values[row]):
                found[row] = ABSENT
        if flags is not None:
            found[flags] = UNKNOWN
        return found

    def _of_mixed(self, values: np.ndarray) -> np.ndarray:
        """Positions among whole-number names of objects that may be numbers, text or blanks."""
        found = np.full(len(values), UNKNOWN, dtype=np.uint32)
        rows = [row for row, value in enumerate(values) if _whole_object(value)]
        numbers = np.fromiter((int(values[row]) for row in rows), dtype=np.int64, count=len(rows))
        found[rows] = self._of_whole(numbers)
        return found

    def _of_text(self, column: pd.Series, values: np.ndarray) -> np.ndarray:
        if self.objects is not None:
            return _narrow(self.objects.get_indexer(pd.Index(values, dtype=object)))
        assert self.numbers is not None
        found = _narrow(self.numbers.get_indexer(pd.Index(pd.util.hash_array(values, categorize=False))))
        hit = np.flatnonzero(found != UNKNOWN)
        same = self.names.take(found[hit].astype(np.int64)).to_numpy(dtype=object) == values[hit]
        found[hit[~same]] = UNKNOWN
        return found

    def unknown(self, value: Any) -> str:
        """Return the words of a refusal for a name that no server has."""
        value = _bare(value)
        words = f"{value!r}, which names no server"
        if isinstance(value, bool) or not isinstance(value, str | int):
            return f"{words}; name a server by the text or whole number in the servers table"
        other = str(value) if not isinstance(value, str) else _number(value)
        if other is not None and self.positions(pd.Series([other], dtype=object))[0] < UNKNOWN:
            return f"{words}; there is a server {other!r}: text and whole numbers are different names"
        if isinstance(value, str) and len(self.names) <= 10_000:
            close = difflib.get_close_matches(
                value, [name for name in self.names if isinstance(name, str)], n=1
            )
            if close:
                return f"{words}; did you mean {close[0]!r}?"
        return f"{words}; add it to the servers table or correct it"


def _narrow(positions: np.ndarray) -> np.ndarray:
    """Turn signed positions with -1 for unknown into uint32."""
    found = positions.astype(np.uint32)
    found[positions < 0] = UNKNOWN
    return found


def _flags(values: np.ndarray) -> np.ndarray | None:
    """Mark True and False, which would pass for 1 and 0."""
    if not {bool, np.bool_} & set(map(type, values)):
        return None
    return np.array([isinstance(value, bool | np.bool_) for value in values])


def _whole_object(value: Any) -> bool:
    if isinstance(value, int | np.integer) and not isinstance(value, bool):
        return -_LARGEST - 1 <= int(value) <= _LARGEST
    return (
        isinstance(value, float | np.floating) and abs(float(value)) <= 2.0**53 and float(value).is_integer()
    )


def _number(text: str) -> int | None:
    try:
        return int(text)
    except ValueError:
        return None
