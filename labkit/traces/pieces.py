"""Any log as pieces of columns, read anew as often as asked and never held as a whole."""

import csv
import re
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import date
from itertools import islice
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from labkit.errors import InputError
from labkit.fleet.csv_files import NUMBER, header_of, line_of, lines_of, no_number, records, why_unreadable
from labkit.fleet.parquet_files import damaged
from labkit.fleet.parquet_footer import chunks_of
from labkit.fleet.tables import CHUNK, Source, check_labels, table_source
from labkit.text import printable

REQUIRED, OPTIONAL = ("time", "option_1", "option_2"), ("size", "duration", "placed")
AMOUNTS = ("size", "duration")
Piece = dict[str, "pa.Array | pd.Series"]
_BYTES = 1 << 20
_LOOK = 1 << 26  # bytes of texts that are written out together
_INDEX = re.compile(r"__index_level_[0-9]+__")  # how pandas stores an index without a name
_TEXT = pa.dictionary(pa.int32(), pa.string())


@dataclass(frozen=True)
class Pieces:
    """A checked set of columns, and a way to read them from the first row as often as wanted.

    Attributes
    ----------
    source : Source
        Names a row, counted from 0, in a refusal.
    labels : list of str
        The columns of the log.
    stamped : bool
        Whether times are timestamps rather than numbers.
    text : bool
        Whether names are text that may stand for whole numbers, as in CSV.
    read : callable
        Returns, for some of the labels, a new iterator over pieces: a dict of equally long columns, in the
        order of the rows.
    """

    source: Source
    labels: list[Any]
    stamped: bool
    text: bool
    read: Callable[[list[Any]], Iterator[Piece]]


def open_pieces(trace: Any) -> Pieces:
    """Open a DataFrame, a CSV file or a parquet file whose columns are those of a trace.

    Raises
    ------
    InputError
        When it is none of these, is empty, unreadable or cut, or its columns are missing or unknown.
    """
    if isinstance(trace, pd.DataFrame):
        return _open_frame(trace)
    if not isinstance(trace, str | Path):
        raise InputError(
            f"trace is {type(trace).__name__}; give a pandas DataFrame or the path of a CSV or parquet file."
        )
    path = Path(trace)
    suffix = path.suffix.lower()
    if suffix not in (".csv", ".parquet"):
        raise InputError(f"trace {str(path)!r} does not end in .csv or .parquet; give such a file.")
    if not path.is_file():
        state = "is not a file" if path.exists() else "does not exist"
        raise InputError(f"trace {str(path)!r} {state}; give the path of a CSV or parquet file.")
    try:
        return _open_csv(path) if suffix == ".csv" else _open_parquet(path)
    except OSError as error:
        raise _unreadable(path, error) from None


def _check(labels: list[Any], source: Source) -> None:
    check_labels(labels, source, REQUIRED, OPTIONAL, ", or drop it from the trace")


def _unreadable(path: Path, error: OSError) -> InputError:
    return InputError(f"{path} cannot be read: {error.strerror or 'its content is damaged'}.")


def _open_frame(frame: pd.DataFrame) -> Pieces:
    source = table_source("trace")
    named = [name for name in frame.index.names if name is not None]
    _check([*named, *frame.columns], source)
    if len(frame) == 0:
        raise InputError("trace has no rows; give at least one.")
    table = frame.reset_index() if named else frame
    time = table["time"]
    # A datetime is a date, too.
    stamped = isinstance(time.iloc[0], date) if time.dtype == object else _stamps(time.dtype)

    def read(columns: list[Any]) -> Iterator[Piece]:
        for start in range(0, len(table), CHUNK):
            yield {label: table[label].iloc[start : start + CHUNK] for label in columns}

    return Pieces(source, list(table.columns), stamped, False, read)


def _stamps(kind: Any) -> bool:
    if isinstance(kind, pd.ArrowDtype):
        return bool(pa.types.is_timestamp(kind.pyarrow_dtype) or pa.types.is_date(kind.pyarrow_dtype))
    return pd.api.types.is_datetime64_any_dtype(kind)


def _open_parquet(path: Path) -> Pieces:
    source = Source(str(path), lambda row: f"{path} row {row + 1}")
    if path.stat().st_size == 0:
        raise InputError(f"{path} is empty; give a table of at least one row.")
    with _whole(path), pq.ParquetFile(path) as file:
        schema, about = file.schema_arrow, file.metadata
        labels = [label for label in schema.names if not _INDEX.fullmatch(label)]
    _check(labels, source)
    if about.num_rows == 0:
        raise InputError(f"{path} has no rows; give at least one.")
    kinds = {label: schema.field(label).type for label in labels}
    for label, kind in kinds.items():
        _check_kind(path, label, kind)
    texts = [label for label, kind in kinds.items() if _is_text(kind)]
    plain = _written_out(path, texts)
    # Text is left as parquet keeps it: a number a row and one list of the names.
    coded = [label for label in texts if label not in plain]

    def read(columns: list[Any]) -> Iterator[Piece]:
        # Without pre_buffer=False Arrow keeps what it has read to the end of the file.
        options: dict[str, Any] = {"buffer_size": _BYTES, "pre_buffer": False}
        longest = max((plain[label] for label in columns if label in plain), default=0)
        rows = max(1, min(CHUNK, _LOOK // max(1, longest)))
        with _whole(path), pq.ParquetFile(path, read_dictionary=coded, **options) as file:
            batches = file.iter_batches(rows, columns=columns, use_threads=False)
            for batch in batches if rows == CHUNK else _joined(batches):
                if batch.num_rows:
                    yield {label: batch.column(label) for label in columns}

    stamped = bool(pa.types.is_timestamp(kinds["time"]) or pa.types.is_date(kinds["time"]))
    return Pieces(source, labels, stamped, False, read)


def _written_out(path: Path, texts: list[str]) -> dict[str, int]:
    """Return columns whose texts Arrow can only write out, each with the bytes that one text may have."""
    found, sizes = set(), dict.fromkeys(texts, 0)
    try:
        with path.open("rb") as stream:
            chunks = chunks_of(stream)
    except ValueError:
        raise damaged(path) from None
    for chunk in chunks:
        if chunk.column in sizes:
            sizes[chunk.column] = max(sizes[chunk.column], chunk.size)
            if any(each.startswith("DELTA_") for each in chunk.encodings):
                found.add(chunk.column)
    return {label: sizes[label] for label in texts if label in found}


def _joined(batches: Iterable[pa.RecordBatch]) -> Iterator[pa.RecordBatch]:
    """Join batches of a few rows as far as they are short."""
    held: list[pa.RecordBatch] = []
    rows = size = 0
    for batch in batches:
        held.append(batch)
        rows, size = rows + batch.num_rows, size + batch.nbytes
        if rows >= CHUNK or size >= _LOOK:
            yield pa.concat_batches(held)
            held, rows, size = [], 0, 0
    if held:
        yield pa.concat_batches(held)


def _check_kind(path: Path, label: str, kind: pa.DataType) -> None:
    """Refuse a column whose cells may be of any length: a small file may stand for more than any memory.

    Cells of a fixed few bytes pass, and names as text, of which each is held once; whether a cell holds what
    it should is found when it is read.
    """
    small = pa.types.is_primitive(kind) or pa.types.is_decimal(kind) or pa.types.is_null(kind)
    if small or (label not in ("time", *AMOUNTS) and _is_text(kind)):
        return
    rules = {
        "time": "give numbers, or timestamps such as pandas.to_datetime makes",
        "size": "give a finite number of at least 0 in each row",
        "duration": "give a finite number of at least 0, or a timedelta, in each row",
    }
    rule = rules.get(label, "give the name of one server in a cell, a text or a whole number")
    raise InputError(f"{path}: {label} has type {_name_of(kind)}; {rule}.")


def _is_text(kind: pa.DataType) -> bool:
    value = kind.value_type if pa.types.is_dictionary(kind) else kind
    return bool(
        pa.types.is_string(value) or pa.types.is_large_string(value) or pa.types.is_string_view(value)
    )


def _name_of(kind: pa.DataType) -> str:
    """Return a short name of a type: that of a nested one tells of all that is in it."""
    if _is_text(kind):
        return "text"
    name = printable(str(kind))
    return name if len(name) <= 60 else f"{name[:60]}..."


@contextmanager
def _whole(path: Path) -> Iterator[None]:
    """Turn what Arrow says of a damaged parquet file into one sentence."""
    try:
        yield
    except MemoryError:  # of Arrow, too, which calls it an error of its own
        raise
    except (pa.ArrowException, OSError, UnicodeDecodeError) as error:
        if isinstance(error, OSError) and error.strerror:
            raise _unreadable(path, error) from None
        raise damaged(path) from None


def _open_csv(path: Path) -> Pieces:
    source = Source(str(path), lambda row: f"{path} line {line_of(path, row)}")
    labels = header_of(path)
    _check(labels, source)
    header_lines, first = _first_row(path, len(labels))
    if first is None:
        raise InputError(f"{path} has no rows; give at least one.")
    if not _ends_a_line(path):
        raise InputError(
            f"{path} may be cut in the middle of its last line, which has no line break; add a line break if "
            "the line is whole."
        )
    time = _kind_of_time(first[labels.index("time")].strip(), source.at(0))
    kinds = {
        label: time if label == "time" else pa.float64() if label in AMOUNTS else _TEXT for label in labels
    }

    def read(columns: list[Any]) -> Iterator[Piece]:
        try:
            with pa.OSFile(str(path)) as file:
                yield from _csv_pieces(file, kinds, columns, header_lines)
        except pa.ArrowInvalid as error:
            raise InputError(_why(path, kinds, str(error))) from None
        except OSError as error:
            raise _unreadable(path, error) from None

    return Pieces(source, list(labels), pa.types.is_timestamp(time), True, read)


def _csv_pieces(
    file: Any, kinds: dict[str, pa.DataType], columns: list[str], header_lines: int
) -> Iterator[Piece]:
    reader = pacsv.open_csv(
        file,
        read_options=pacsv.ReadOptions(
            column_names=list(kinds), skip_rows=header_lines, block_size=_BYTES, use_threads=False
        ),
        parse_options=pacsv.ParseOptions(newlines_in_values=True),
        convert_options=pacsv.ConvertOptions(
            column_types=kinds,
            include_columns=columns,
            null_values=[""],
            strings_can_be_null=False,
            timestamp_parsers=[pacsv.ISO8601],
        ),
    )
    with reader:
        for batch in reader:
            if batch.num_rows:
                yield dict(zip(columns, batch.columns, strict=True))


def _ends_a_line(path: Path) -> bool:
    with path.open("rb") as file:
        file.seek(-1, 2)
        return file.read(1) in (b"\n", b"\r")


def _first_row(path: Path, width: int) -> tuple[int, list[str] | None]:
    """Return the number of lines down to the end of the header, and the cells of the row below it."""
    try:
        rows = list(islice(records(path), 2))
        if len(rows) == 2 and len(rows[1][1]) != width:
            raise InputError(why_unreadable(path, width, ""))
        with path.open(encoding="utf-8-sig", newline="") as lines:
            reader = csv.reader(lines_of(lines))
            next(cells for cells in reader if cells)
            return reader.line_num, rows[1][1] if len(rows) == 2 else None
    except (UnicodeDecodeError, csv.Error):
        raise InputError(why_unreadable(path, width, "")) from None


def _kind_of_time(cell: str, place: str) -> pa.DataType:
    """Return the type of the column of times, from its first cell."""
    if NUMBER.fullmatch(cell):
        return pa.float64()
    for kind in (pa.timestamp("ns"), pa.timestamp("ns", "UTC")):
        if _holds(cell, kind):
            return kind
    raise InputError(
        f"{place}: time is {repr(cell) if cell else 'blank'}; give a number, or a date and time written "
        "as in 2031-05-02T08:30:00."
    )


def _holds(cell: str, kind: pa.DataType) -> bool:
    try:
        pa.array([cell]).cast(kind)
    except pa.ArrowInvalid:
        return False
    return True


def _why(path: Path, kinds: dict[str, pa.DataType], reason: str) -> str:
    """Return the refusal of the first line that Arrow cannot read."""
    try:
        for line, cells in islice(records(path), 1, None):
            if len(cells) != len(kinds):
                break
            fault = _fault(f"{path} line {line}", zip(kinds.items(), cells, strict=True))
            if fault:
                return fault
    except (UnicodeDecodeError, csv.Error):
        pass
    return why_unreadable(path, len(kinds), reason)


def _fault(place: str, row: Iterable[tuple[tuple[str, pa.DataType], str]]) -> str | None:
    for (label, kind), cell in row:
        text = cell.strip()
        if kind == pa.float64() and not NUMBER.fullmatch(text):
            if label == "time" and text and _holds(text, pa.timestamp("ns")):
                return f"{place}: time is {text!r}, and the first row's is a number; keep to one of the two."
            return no_number(place, label, text)
        if pa.types.is_timestamp(kind) and not _holds(text, kind):
            zone = "with" if kind.tz else "without"
            return (
                f"{place}: time is {repr(text) if text else 'blank'}, and the first row's is a date and time "
                f"{zone} a zone; write all in that way, from the year 1678 to 2261."
            )
    return None
