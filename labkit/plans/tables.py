"""Tables of a plan as CSV: names quoted, floats that round-trip to the bit."""

import csv
import hashlib
import io

import numpy as np
import pandas as pd

from labkit.text import FORMULA

SERVERS = "servers.csv"  # the one table with text in it
_WHOLE = {
    "number", "decision", "choice", "server", "set", "level", "first_half", "second_half", "first", "second",
    "push", "part", "vertex", "far",
}  # fmt: skip
_BLANKS = {"report", "parent"}


def csv_bytes(name: str, table: pd.DataFrame) -> bytes:
    """Return a table as CSV: UTF-8, lines ended by one line feed.

    In the table of servers all text is quoted, since a name may hold anything. A name that begins like a
    formula, or with an apostrophe, gets an apostrophe before it, which readers take off again. Floats are
    written in the fewest digits that give the same float again. A blank is an empty field.
    """
    text = io.StringIO(newline="")
    if name == SERVERS:
        names = [_guarded(each) if isinstance(each, str) else each for each in table["name"]]
        table = table.assign(name=pd.Series(names, table.index, dtype=object))
        table.to_csv(text, index=False, lineterminator="\n", quoting=csv.QUOTE_NONNUMERIC)
    else:
        table.to_csv(text, index=False, lineterminator="\n")
    # A name may hold half of a surrogate pair, which strict UTF-8 refuses.
    return text.getvalue().encode("utf-8", "surrogatepass")


def read_csv_bytes(name: str, content: bytes) -> pd.DataFrame:
    """Return the table that `csv_bytes` wrote: floats bit for bit, names with their kind."""
    text = content.decode("utf-8", "surrogatepass")
    head, *rows = csv.reader(io.StringIO(text, newline=""))
    columns = zip(*rows, strict=True) if rows else [()] * len(head)
    found = dict(zip(head, columns, strict=True))
    if name != SERVERS:
        return pd.DataFrame({column: _numbers(column, texts) for column, texts in found.items()})
    kinds = found["kind"]
    names = [
        int(text) if kind == "number" else text.removeprefix("'")
        for text, kind in zip(found["name"], kinds, strict=True)
    ]
    words = {"name": pd.Series(names, dtype=object), "kind": pd.Series(kinds, dtype=object)}
    return pd.DataFrame(
        {
            column: words[column] if column in words else _numbers(column, texts)
            for column, texts in found.items()
        }
    )


def _guarded(name: str) -> str:
    return f"'{name}" if name.startswith(("'", *FORMULA)) else name


def sha256(content: bytes) -> str:
    """Return the SHA-256 in hex."""
    return hashlib.sha256(content).hexdigest()


def _numbers(column: str, texts: tuple[str, ...]) -> pd.Series:
    if column == "coin":
        return pd.Series(np.array([int(text) for text in texts], np.uint64))
    if column == "own":
        return pd.Series(texts, dtype=object)
    if column in _BLANKS or column.startswith("option_"):
        return pd.Series([_whole(text) if text else pd.NA for text in texts], dtype="Int64")
    if column in _WHOLE:
        return pd.Series([_whole(text) for text in texts], dtype=np.int64)
    return pd.Series([float(text) if text else np.nan for text in texts], dtype=np.float64)


def _whole(text: str) -> int:
    value = int(text)
    if not -(2**63) <= value < 2**63:
        raise ValueError(f"{text[:40]} lies beyond 64 bits")
    return value
