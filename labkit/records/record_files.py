"""One record in one file: its name, how it is written as a whole, and how it is read and trusted.

A file is called ``<run id>-<first 32 hex digits of its SHA-256>.parquet``. It is written beside this name,
read back, and moved into place; readers recompute the digest. Arrow is imported where a file is read or
written, so that looking for a record costs nothing.
"""

import errno
import hashlib
import json
import os
import re
import stat
import tempfile
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from io import FileIO
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.errors import StoreError, StoreUnwritable
from labkit.records.leftovers import name_of_new

if TYPE_CHECKING:
    import pyarrow as pa

NAME = re.compile(r"([0-9a-f]{16})-([0-9a-f]{32})\.parquet")
# Characters of a run's id, and of the name of a record file.
ID, WIDTH = 16, 57

# Written on trial before any computing: a file without content fits on a full disk, too.
_TRIAL = 65_536
# Columns of the origin that readers decode, and what they get.
_DECODED = {
    "versions": dict,
    "parameters": dict,
    "inputs": dict,
    "rules": dict,
    "spawn_key": list,
    "entropy": int,
}
_FULL = {errno.ENOSPC, getattr(errno, "EDQUOT", errno.ENOSPC)}


def is_record(name: str) -> bool:
    """Tell whether a file name is that of a record."""
    return NAME.fullmatch(name) is not None


def foreign(path: Path) -> str:
    """Return the sentence about a file that is not a record."""
    return f"file {path} is not a record of this store; move it elsewhere."


def torn(path: Path) -> StoreError:
    """Return the refusal of a record that is not as it was written."""
    return StoreError(
        f"record {path} is torn or altered: its content does not have the digest in its name; "
        "remove it and run its study again."
    )


def digest_of(content: bytes | memoryview) -> str:
    """Return the digits of a content's SHA-256 that stand in names."""
    return hashlib.sha256(content).hexdigest()[:32]


def open_regular(path: Path) -> FileIO:
    """Open a file for reading, without a buffer; nothing but a file, for others may be waited for for ever.

    Raises
    ------
    OSError
        When it is a folder, a pipe or the like, too.
    """
    flags = os.O_RDONLY | getattr(os, "O_NONBLOCK", 0) | getattr(os, "O_BINARY", 0)
    handle = os.open(path, flags)
    if not stat.S_ISREG(os.fstat(handle).st_mode):
        os.close(handle)
        raise OSError(errno.EINVAL, "it is not a file with content", str(path))
    return os.fdopen(handle, "rb", buffering=0)


def read_regular(path: Path) -> bytes:
    """Return the content of a file; refusals as those of `open_regular`."""
    with open_regular(path) as stream:
        return stream.read()


def read_content(path: Path) -> bytes:
    """Return the content of a record file; refuse a torn, altered or foreign file by name.

    Raises
    ------
    FileNotFoundError
        When there is no such file: the record may have been moved into a pack.
    """
    name = NAME.fullmatch(path.name)
    if name is None:
        raise StoreError(foreign(path))
    try:
        content = read_regular(path)
    except FileNotFoundError:
        raise
    except OSError as error:
        if not path.is_file():
            raise StoreError(foreign(path)) from None
        raise StoreError(f"record {path} cannot be read ({error.strerror}); run its study again.") from None
    if digest_of(content) != name[2]:
        raise torn(path)
    return content


def read_file(path: Path) -> "tuple[pa.Table, int]":
    """Return the record in a file with the columns of today's schema, and the number of its own schema."""
    from labkit.records.schema import migrated

    content = read_content(path)
    with _told(path):
        table = decode(content)
    table, number = migrated(table, path, path.name[:ID])
    check_origins(table, f"record {path}")
    check_kinds(table.schema, f"record {path}")
    return table, number


def check_origins(table: "pa.Table", what: str) -> None:
    """Refuse columns of origins that labkit cannot have written, whatever digest they have.

    Parameters
    ----------
    table : pyarrow.Table
        Of any columns; only those of `labkit.records.schema.ORIGIN` are looked at.
    what : str
        The subject of the refusal.
    """
    from labkit.records.schema import ORIGIN

    for name in ORIGIN.names:
        if name in table.column_names and not _is_of_origin(name, table[name]):
            raise StoreError(
                f"{what} is not a record of labkit (its column {name} has other values); move it out of the "
                "store."
            )


def check_kinds(schema: "pa.Schema", what: str) -> None:
    """Refuse columns that hold neither numbers nor texts."""
    import pyarrow as pa

    known = (pa.types.is_boolean, pa.types.is_integer, pa.types.is_floating, pa.types.is_string)
    for field in schema:
        if not any(is_kind(field.type) for is_kind in known):
            raise StoreError(
                f"{what} is not a record of labkit (its column {field.name} holds {field.type}); move it out "
                "of the store."
            )


def _is_of_origin(name: str, column: "pa.ChunkedArray") -> bool:
    from labkit.records.schema import ORIGIN

    if column.type != ORIGIN.field(name).type or column.null_count:
        return False
    if name not in _DECODED:
        return True
    try:
        texts = column.unique().to_pylist()
        if name == "entropy":
            return all(int(text) >= 0 for text in texts)
        values = json.loads(f"[{','.join(texts)}]")
        return len(values) == len(texts) and all(isinstance(value, _DECODED[name]) for value in values)
    except (ValueError, RecursionError):
        return False


def read_origin(path: Path, names: Sequence[str]) -> dict[str, Any]:
    """Return columns of the origin of the record in a file, as recorded, and the number of its `rows`."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    from labkit.records.schema import check_run, check_schema

    content = read_content(path)
    with _told(path), pq.ParquetFile(pa.BufferReader(content), pre_buffer=False) as file:
        number = check_schema(file.schema_arrow, path)
        present = [name for name in names if number or name != "rules"]
        table = file.read(columns=list({*present, "run_id"}), use_threads=False)
    check_run(table, path, path.name[:ID])
    check_origins(table, f"record {path}")
    row = {name: table[name][0].as_py() for name in present}
    return {"rules": "{}", **row, "rows": table.num_rows}


@contextmanager
def _told(path: Path) -> Iterator[None]:
    """Say what Arrow cannot read, in whatever way it says so, in one sentence."""
    try:
        yield
    except StoreError:
        raise
    except Exception as error:
        about = (str(error).splitlines() or [type(error).__name__])[0]
        raise StoreError(f"record {path} is no parquet file ({about}); move it out of the store.") from None


def decode(
    content: bytes, columns: Sequence[str] | None = None, groups: Iterable[int] | None = None
) -> "pa.Table":
    """Return the table in the content of a parquet file, read by this thread alone.

    A worker thread of Arrow's may let go of the content, a Python object, only when Python is ending already,
    and the process is then aborted: so no threads, and not ``read_table``, which uses them for reading.

    Parameters
    ----------
    content : bytes
    columns : sequence of str, optional
        Only these columns.
    groups : iterable of int, optional
        Only these row groups.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    with pq.ParquetFile(pa.BufferReader(content), pre_buffer=False) as file:
        if groups is None:
            return file.read(columns=columns, use_threads=False)
        return file.read_row_groups(list(groups), columns=columns, use_threads=False)


def write_file(folder: Path, run_id: str, table: "pa.Table") -> Path:
    """Write the record of a run into a folder as a whole and return its file.

    Raises
    ------
    OSError
        When it cannot be written; nothing is left behind.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    from labkit.records.schema import first_difference, numbered

    sink = pa.BufferOutputStream()
    pq.write_table(numbered(table), sink, compression="zstd")
    content = memoryview(sink.getvalue())
    digest = digest_of(content)
    final = folder / f"{run_id}-{digest}.parquet"
    for attempt in (1, 2):
        beside = folder / name_of_new(run_id)
        try:
            make_folder(folder)
            write_synced(beside, content)
            written = beside.read_bytes()
            if digest_of(written) != digest or first_difference(decode(written), table):
                raise StoreError(f"record {beside} did not read back as written; check the disk.")
            os.replace(beside, final)
            break
        except FileNotFoundError:
            # A writer on another machine, by whose clock it was a day old, took it for a dead one's.
            if attempt == 2:
                raise
        finally:
            beside.unlink(missing_ok=True)
    sync(folder)
    return final


def make_folder(folder: Path) -> None:
    """Make a folder and those above it, to stay there when the power goes."""
    new = [place for place in (folder, *folder.parents) if not place.exists()]
    folder.mkdir(parents=True, exist_ok=True)
    for place in new:
        sync(place.parent)


def write_synced(path: Path, content: bytes | memoryview) -> None:
    """Write a new file and wait until the disk has it."""
    with path.open("xb") as stream:
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())


def sync(folder: Path) -> None:
    """Wait until the disk has the names in a folder."""
    if os.name == "posix":
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def check_writable(what: str, folder: Path) -> None:
    """Refuse a folder, there already or not, in which nothing could be written; leave nothing behind.

    Raises
    ------
    StoreUnwritable
        When a block of 64 KB on trial cannot be written there and reach the disk.
    """
    try:
        present = next(place for place in (folder, *folder.parents) if os.path.lexists(place))
        with tempfile.TemporaryFile(dir=present, buffering=0) as stream:
            left = memoryview(os.urandom(_TRIAL))
            while left:
                left = left[stream.write(left) :]
            os.fsync(stream.fileno())
    except OSError as error:
        raise unwritable(what, folder, error) from None


def unwritable(what: str, folder: Path, error: OSError) -> StoreUnwritable:
    """Return the refusal of a folder that cannot be written."""
    remedy = (
        "free space there or name another folder" if error.errno in _FULL else "name a folder that can be"
    )
    return StoreUnwritable(f"{what} {folder} cannot be written ({error.strerror}); {remedy}.")
