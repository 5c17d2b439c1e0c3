"""One CSV file to columns of text and amounts; a refusal names the file's line."""

import csv
import re
from collections.abc import Iterator
from pathlib import Path
from typing import TextIO

import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pacsv

from labkit.errors import InputError
from labkit.fleet.tables import Source
from labkit.memory import check_memory

_WHOLE = r"^(0|-?[1-9][0-9]*)$"
NUMBER = re.compile(
    r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)([eE][+-]?[0-9]+)?|[+-]?(inf|infinity|nan)", re.IGNORECASE
)
# Bytes of memory for each byte of a file, with the copies that are made on the way.
_COPIES = 6
# Characters of a line; Arrow takes no longer one either.
_LONGEST_LINE = 1 << 20
_SEPARATORS = {";": "semicolons", "\t": "tabs", "|": "bars"}


def read_csv(path: Path, numbers: tuple[str, ...]) -> tuple[dict[str, pa.ChunkedArray], Source]:
    """Read a file to columns: float64 for those named in `numbers`, trimmed text for the others.

    Raises
    ------
    InputError
        When the file is empty, not UTF-8, has rows of unequal length or something that is no number.
    """
    source = Source(str(path), lambda row: f"{path} line {line_of(path, row)}")
    size = path.stat().st_size
    what = f"{path}: its {size:,} bytes"
    check_memory(what, _COPIES * size, "keep only the rows and columns that belong there")
    header = header_of(path)
    try:
        table = pacsv.read_csv(
            path,
            read_options=pacsv.ReadOptions(
                column_names=[f"{place}" for place in range(len(header))], skip_rows=0
            ),
            parse_options=pacsv.ParseOptions(newlines_in_values=True),
            convert_options=pacsv.ConvertOptions(
                column_types={f"{place}": pa.string() for place in range(len(header))},
                strings_can_be_null=False,
            ),
        ).slice(1)
    except pa.ArrowInvalid as error:
        raise InputError(why_unreadable(path, len(header), str(error))) from None
    columns = {}
    for place, label in enumerate(header):
        text = pc.utf8_trim_whitespace(table.column(place))
        columns[label] = _numbers(text, label, source) if label in numbers else text
    return columns, source


def whole_names(text: pa.ChunkedArray) -> pa.ChunkedArray | None:
    """Return names as 64-bit whole numbers when every one is written as such in its plain form."""
    if not pc.all(pc.match_substring_regex(text, _WHOLE), min_count=0).as_py():
        return None
    try:
        return text.cast(pa.int64())
    except pa.ArrowInvalid:
        return None


def whole_options(text: pa.ChunkedArray) -> pd.Series:
    """Return options as whole numbers; a blank is missing, and text in another form stays text."""
    named = pc.if_else(pc.equal(text, ""), pa.scalar(None, pa.string()), text)
    numbers = whole_names(named)
    if numbers is not None:
        return numbers.to_pandas(
            types_mapper={pa.int64(): pd.Int64Dtype()}.get if numbers.null_count else None
        )
    plain = re.compile(_WHOLE)
    return pd.Series(
        [int(name) if name and len(name) < 100 and plain.match(name) else name for name in named.to_pylist()],
        dtype=object,
    )


def header_of(path: Path) -> list[str]:
    """Return the trimmed column names; refuse an empty file, other separators, missing or doubled names."""
    try:
        header = [label.strip() for label in next((cells for _, cells in records(path)), [])]
    except UnicodeDecodeError:
        raise InputError(f"{path} is not UTF-8 text; save it as CSV in UTF-8.") from None
    except csv.Error:
        raise InputError(f"{path} has no readable header; look for an unclosed quotation mark.") from None
    if not header:
        raise InputError(f"{path} is empty; give a header and at least one row.")
    for sign, word in _SEPARATORS.items():
        if len(header) == 1 and sign in header[0]:
            raise InputError(f"{path} separates its columns by {word}; use commas.")
    for place, label in enumerate(header):
        if not label:
            raise InputError(f"{path}: column {place + 1} has no name in the header; name it or take it out.")
        if label in header[:place]:
            raise InputError(f"{path} has two columns named {label!r}; keep one.")
    return header


def _numbers(text: pa.ChunkedArray, label: str, source: Source) -> pa.ChunkedArray:
    try:
        return text.cast(pa.float64())
    except pa.ArrowInvalid:
        for row, value in enumerate(text.to_pylist()):
            if not NUMBER.fullmatch(value):
                raise InputError(no_number(source.at(row), label, value)) from None
        raise InputError(f"{source.label}: column {label!r} is not made of numbers; correct it.") from None


def no_number(place: str, label: str, value: str) -> str:
    """Return the refusal of a trimmed cell that holds no number."""
    return (
        f"{place}: {label} is {repr(value) if value else 'blank'}, which is not a number; "
        "write digits with a decimal point and no thousands separators."
    )


def records(path: Path) -> Iterator[tuple[int, list[str]]]:
    """Yield the first line, counted from 1, and the cells of each row that is not empty."""
    with path.open(encoding="utf-8-sig", newline="") as lines:
        reader = csv.reader(lines_of(lines))
        start = 1
        for cells in reader:
            if cells:
                yield start, cells
            start = reader.line_num + 1


def lines_of(stream: TextIO) -> Iterator[str]:
    """Yield the lines of a file; refuse, as the module csv does, one that is longer than any row."""
    while line := stream.readline(_LONGEST_LINE):
        if len(line) == _LONGEST_LINE and line[-1] not in "\r\n":
            raise csv.Error("line too long")
        yield line


def line_of(path: Path, row: int) -> int:
    """Return the line, counted from 1, on which a row starts; rows are counted from 0 below the header."""
    for place, (line, _) in enumerate(records(path)):
        if place == row + 1:
            return line
    return row + 2


def why_unreadable(path: Path, width: int, reason: str) -> str:
    """Return the refusal of a file that Arrow cannot read: the first line whose shape is wrong."""
    line = 1
    try:
        for line, cells in records(path):
            if len(cells) != width:
                count = f"{len(cells)} cell{'s' * (len(cells) != 1)}"
                return f"{path} line {line} has {count} and the header {width}; give the same number in each."
    except UnicodeDecodeError:
        return f"{path} is not UTF-8 text after line {line}; save it as CSV in UTF-8."
    except csv.Error:
        return f"{path} cannot be read after line {line}; look for an unclosed quotation mark."
    return f"{path} cannot be read as CSV ({' '.join(reason.split())[:80]}); save it as CSV in UTF-8."
