"""One parquet file to a table, as far as memory allows.

A file of a few kilobytes may stand for billions of rows, or for one long text in each of a million. Its
footer tells rows and bytes; where it cannot tell how long the texts are, these are looked at in pieces, in
which each different text is held once.
"""

import io
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq

from labkit.errors import InputError
from labkit.fleet.parquet_footer import LENGTHS_FIRST, Chunk, chunks_of
from labkit.memory import check_memory, memory

# A table as Arrow has it, as pandas has it, and what is made of it.
_COPIES = 3
_VALUE, _TEXT = 8, 16  # bytes a value, and a text besides its own
_LOOK = 1 << 26  # bytes of text that are looked at together
_ADVICE = "keep only the rows and columns that belong there"


def read_parquet(path: Path) -> pa.Table:
    """Return the table in a parquet file.

    Raises
    ------
    InputError
        When the file is damaged, has a column twice, or holds more than this machine has memory.
    OSError
        When it cannot be read.
    """
    check_size(path)
    try:
        with pq.ParquetFile(path) as file:
            table = file.read()
        table.validate(full=True)
    except MemoryError:
        raise
    except Exception as error:  # Arrow's own kinds, those of Python, and those of codecs
        if isinstance(error, OSError) and error.strerror:
            raise
        raise damaged(path) from None
    for place, label in enumerate(table.column_names):
        if label in table.column_names[:place]:
            raise InputError(f"{path} has two columns named {label!r}; keep one.")
    return table


def frame_of(path: Path, table: pa.Table, **options: Any) -> pd.DataFrame:
    """Return a table as pandas has it; refuse what it cannot take, such as metadata that were altered."""
    try:
        return table.to_pandas(**options)
    except MemoryError:
        raise
    except Exception:
        raise damaged(path) from None


def damaged(path: Path) -> InputError:
    """Return the refusal of a file that cannot be decoded."""
    return InputError(f"{path} is not a whole parquet file; write it again.")


def check_size(path: Path, content: bytes | None = None) -> None:
    """Refuse a file, or its content, whose table would not fit into memory; nothing is unpacked for that.

    Raises
    ------
    InputError
        Also when it has no whole footer.
    OSError
        When it cannot be read.
    """
    present = memory()
    try:
        with path.open("rb") if content is None else io.BytesIO(content) as stream:
            chunks = chunks_of(stream)
    except ValueError:
        raise damaged(path) from None
    if present is None:
        return
    # A text in a dictionary stands there once, however often it comes.
    coded = [each for each in chunks if each.is_text and each.encodings - {LENGTHS_FIRST}]
    needed = sum(each.values * (_TEXT if each.is_text else _VALUE) + each.size for each in chunks)
    what = f"{path}: its table of {sum(each.values for each in chunks):,} cells"
    check_memory(what, _COPIES * needed, _ADVICE)
    if _COPIES * (needed + sum(each.values * each.size for each in coded)) <= present:
        return
    for label in dict.fromkeys(each.column for each in coded):
        source = path if content is None else pa.BufferReader(content)
        enough = present // _COPIES + 1 - needed
        needed += _text_bytes(path, source, [each for each in coded if each.column == label], enough)
        check_memory(f"{what}, with the texts of column {label!r},", _COPIES * needed, _ADVICE)


def _text_bytes(path: Path, source: Any, chunks: list[Chunk], enough: int) -> int:
    """Return the bytes of the texts in a column, until they are enough; few are written out at a time."""
    label, total = chunks[0].column, 0
    rows, coded = 1 << 16, [label]
    if any("DELTA_BYTE_ARRAY" in each.encodings for each in chunks):
        coded = []
        # Each text is written out, and may be as long as all of its column.
        rows = max(1, min(rows, _LOOK // max(1, *(each.size for each in chunks))))
    try:
        with pq.ParquetFile(source, read_dictionary=coded, pre_buffer=False) as file:
            for batch in file.iter_batches(rows, columns=[label], use_threads=False):
                held = batch.column(0)
                if not pa.types.is_dictionary(held.type):
                    total += held.nbytes
                    if total >= enough:
                        break
                    continue
                counts = pc.value_counts(held.indices)
                lengths = pc.binary_length(held.dictionary).take(counts.field("values"))
                each = pc.multiply(pc.cast(lengths, pa.int64()), counts.field("counts"))
                total += pc.sum(each).as_py() or 0
                if total >= enough:
                    break
    except MemoryError:
        raise
    except Exception:  # as in read_parquet
        raise damaged(path) from None
    return total
