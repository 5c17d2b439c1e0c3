"""Tables that parquet can hold and no reader expects: odd types, values and shapes."""

import random
from datetime import date, datetime, time, timedelta
from decimal import Decimal

import pyarrow as pa
import pyarrow.parquet as pq

_WHOLE = (0, 1, -1, 2, 3, 7, 2**31, 2**53, 2**53 + 1, 2**63 - 1, -(2**63))
_FLOATS = (0.0, -0.0, 1.0, 1.5, 2.0, -1.0, float("nan"), float("inf"), 5e-324, 1e308, 2.0**53, 2.0**60)
_TEXTS = ("a", "b", "c", "0", "1", "", " ", "down", "up", "=1+1", "a\0b", "\u202e", "x" * 2000, "half-last")
_STAMPS = (datetime(2031, 5, 2, 8, 30), datetime(1, 1, 1), datetime(9999, 12, 31), datetime(1970, 1, 1))

_KINDS = [
    *((kind, _WHOLE) for kind in (pa.int64(),)),
    *((kind, (0, 1, 2, 3, 100)) for kind in (pa.int8(), pa.uint8(), pa.int16(), pa.uint32(), pa.int32())),
    (pa.uint64(), (0, 1, 2**64 - 1, 2**63)),
    (pa.float64(), _FLOATS),
    (pa.float32(), (0.0, 1.0, float("nan"), float("inf"))),
    (pa.float16(), (0.0, 1.0)),
    *((kind, _TEXTS) for kind in (pa.string(), pa.string(), pa.string(), pa.large_string())),
    (pa.string_view(), _TEXTS),
    (pa.dictionary(pa.int8(), pa.string()), _TEXTS),
    (pa.dictionary(pa.int32(), pa.int64()), (0, 1, 2)),
    *((kind, (b"a", b"\xff", b"", b"b")) for kind in (pa.binary(), pa.large_binary())),
    (pa.binary(2), (b"ab", b"\xff\xff")),
    (pa.bool_(), (True, False)),
    (pa.null(), (None,)),
    (pa.date32(), (date(2031, 5, 2), date(1, 1, 1), date(9999, 12, 31))),
    (pa.date64(), (date(2031, 5, 2), date(1970, 1, 1))),
    *((pa.timestamp(unit), _STAMPS) for unit in ("s", "ms", "us")),
    (pa.timestamp("ns"), (datetime(2031, 5, 2), datetime(1970, 1, 1))),
    (pa.timestamp("us", "UTC"), _STAMPS),
    (pa.timestamp("us", "Europe/Berlin"), _STAMPS[:1]),
    (pa.timestamp("us", "+23:59"), _STAMPS[:1]),
    (pa.time64("us"), (time(1), time(23, 59))),
    (pa.duration("ns"), (timedelta(0), timedelta(days=-1))),
    (pa.duration("s"), (timedelta(seconds=5), timedelta(days=9_999_999))),
    (pa.decimal128(38, 2), (Decimal("1.00"), Decimal("-9.99"), Decimal(10) ** 35)),
    (pa.list_(pa.int64()), ([], [1], [1, 2, 3], None)),
    (pa.list_(pa.string()), ([], ["a"], ["a", "b"])),
    (pa.struct([("a", pa.int64())]), ({"a": 1}, {"a": None})),
    (pa.map_(pa.string(), pa.int64()), ([("a", 1)], [])),
]


def odd_column(draw: random.Random, rows: int) -> pa.Array:
    """Return a column of a drawn type and drawn values, some of them missing."""
    kind, values = draw.choice(_KINDS)
    blanks = draw.choice((0, 0, 0, 0.3))
    return pa.array([None if draw.random() < blanks else draw.choice(values) for _ in range(rows)], kind)


def odd_table(draw: random.Random, whole: pa.Table) -> pa.Table:
    """Return a table with some columns of a whole one exchanged, renamed, doubled or left out."""
    rows = draw.choice((0, 1, whole.num_rows, whole.num_rows))
    table = whole.slice(0, rows)
    names, columns = list(table.column_names), list(table.columns)
    for _ in range(draw.choice((1, 1, 2, 3))):
        if not names:
            break
        at = draw.randrange(len(names))
        change = draw.choice(("type",) * 8 + ("name", "drop", "double", "add"))
        if change == "type":
            columns[at] = odd_column(draw, rows)
        elif change == "name":
            names[at] = draw.choice((*names, "", "option_9", "__index_level_0__", "a\nb", "=x", "x" * 5000))
        elif change == "drop":
            del names[at], columns[at]
        else:
            names.append(names[at] if change == "double" else "other")
            columns.append(odd_column(draw, rows))
    return pa.Table.from_arrays(
        [pa.chunked_array([one]) if isinstance(one, pa.Array) else one for one in columns], names
    )


def odd_parquet(draw: random.Random, whole: pa.Table) -> bytes:
    """Return an odd table as the content of a parquet file."""
    for _ in range(20):
        table = odd_table(draw, whole)
        if draw.random() < 0.1:
            noise = draw.choice(
                (b"", b"{}", b"[]", b'{"columns":1}', b'{"index_columns":["x"],"columns":[]}', b"\xff")
            )
            table = table.replace_schema_metadata({b"pandas": noise})
        sink = pa.BufferOutputStream()
        try:
            options = {
                "compression": draw.choice(("none", "zstd", "snappy")),
                "store_schema": draw.random() < 0.8,
            }
            pq.write_table(table, sink, use_dictionary=draw.random() < 0.7, **options)
        except (pa.ArrowException, ValueError, TypeError, OverflowError):
            continue  # parquet cannot hold that
        return sink.getvalue().to_pybytes()
    return b""
