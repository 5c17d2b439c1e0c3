"""Packs: many records in a folder of three files, written as a whole and never changed.

``<study>/packed/<first 32 hex digits of the SHA-256 of runs.parquet>/`` holds

- ``runs.parquet``, the index: one row a run, with its origin, the number of its rows, the number of the
  schema of its original file, and the name of that file; in the metadata the SHA-256 of the next file;
- ``rows.parquet``: what the runs measured, run after run, in groups of `GROUP` runs;
- ``names.txt``: the names in the index, so that a run is found without reading it. What it says is never
  trusted: a reader looks the name up in the index.

A packed record has the path ``<pack>/<name of its original file>``, although no such file is there: the name
tells run and content as before.
"""

import functools
import hashlib
import os
import re
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from functools import cached_property
from io import FileIO
from pathlib import Path
from typing import TYPE_CHECKING, Any

from labkit.errors import StoreError
from labkit.records.leftovers import name_of_new
from labkit.records.record_files import (
    ID,
    NAME,
    WIDTH,
    check_kinds,
    check_origins,
    decode,
    digest_of,
    open_regular,
    read_regular,
    write_synced,
)

if TYPE_CHECKING:
    import pyarrow as pa

PACKED = "packed"
INDEX, ROWS, NAMES = "runs.parquet", "rows.parquet", "names.txt"
# Runs of a pack and of a group of its rows: a reader checks a whole pack and decodes whole groups.
MOST, GROUP = 4096, 256

_FOLDER = re.compile(r"[0-9a-f]{32}")
DIGEST, FORM = b"labkit.rows", b"labkit.pack"


def is_pack(path: Path) -> bool:
    """Tell whether a path is that of a pack, there or not."""
    return path.parent.name == PACKED and _FOLDER.fullmatch(path.name) is not None


def packs_of(folder: Path) -> list[Path]:
    """Return the folders of the packs of a study."""
    try:
        names = os.listdir(folder / PACKED)
    except (FileNotFoundError, NotADirectoryError):
        return []
    except OSError as error:
        raise StoreError(
            f"folder {folder / PACKED} cannot be read ({error.strerror}); see to it that it can be."
        ) from None
    return [folder / PACKED / name for name in sorted(names) if _FOLDER.fullmatch(name)]


def misnamed(path: Path) -> str | None:
    """Return the sentence about a renamed pack, or None when it is none, or a copy of one that is there."""
    try:
        digest = digest_of(read_regular(path / INDEX))
    except OSError:
        return None
    if os.path.lexists(path.with_name(digest)):
        return None
    return (
        f"folder {path} is a pack under another name, and its runs are not seen; give it its name {digest} "
        "back."
    )


def packed_name(pack: Path, run_id: str) -> str | None:
    """Return the name of the record of a run in a pack, or None.

    Raises
    ------
    FileNotFoundError
        When the pack is gone.
    StoreError
        When the pack is damaged so that it cannot be told.
    """
    try:
        with open_regular(pack / NAMES) as stream:
            lines, rest = divmod(os.fstat(stream.fileno()).st_size, WIDTH + 1)
            low, high = 0, lines
            while low < high:
                middle = (low + high) // 2
                stream.seek(middle * (WIDTH + 1))
                if stream.read(ID) < run_id.encode():
                    low = middle + 1
                else:
                    high = middle
            stream.seek(low * (WIDTH + 1))
            name = stream.read(WIDTH).decode("ascii", "replace")
        if lines and not rest and (low == lines or NAME.fullmatch(name)):
            return name if name.startswith(run_id) else None
    except OSError:
        pass
    return next((name for name in open_pack(pack).names if name.startswith(run_id)), None)


def packed_names(pack: Path) -> list[str]:
    """Return the names of all records in a pack, sorted; refusals as in `packed_name`."""
    try:
        names = read_regular(pack / NAMES).decode("ascii", "replace").split("\n")
        if names.pop() == "" and names and all(map(NAME.fullmatch, names)):
            return names
    except OSError:
        pass
    return open_pack(pack).names


def open_pack(folder: Path) -> "Pack":
    """Return a pack whose index is as it was written; each is opened once while its files stay the same.

    Raises
    ------
    FileNotFoundError
        When the pack is gone: its records may be in another one.
    StoreError
        When a file of it is missing, or the index is damaged.
    """
    return _opened(folder, tuple(_state(folder, file) for file in (INDEX, ROWS)))


def _state(folder: Path, file: str) -> tuple[int, ...]:
    try:
        found = os.stat(folder / file)
    except FileNotFoundError:
        if not folder.is_dir():
            raise
        raise damaged(folder, f"its file {file} is missing") from None
    except OSError as error:
        raise _unreadable(folder, file, error) from None
    return found.st_mtime_ns, found.st_size, found.st_ino


@functools.lru_cache(maxsize=32)
def _opened(folder: Path, state: tuple[tuple[int, ...], ...]) -> "Pack":
    return Pack(folder, folder.name)


@functools.lru_cache(maxsize=4)
def rows_of(pack: "Pack") -> bytes:
    """Return the content of `ROWS`, which has the digest that the index names."""
    content = _read(pack.folder, ROWS)
    if hashlib.sha256(content).hexdigest() != pack.rows_digest:
        raise damaged(pack.folder, f"{ROWS} does not have the digest that {INDEX} names")
    return content


def _read(folder: Path, file: str) -> bytes:
    with _opening(folder, file) as stream:
        return stream.read()


@contextmanager
def _opening(folder: Path, file: str) -> Iterator[FileIO]:
    try:
        with open_regular(folder / file) as stream:
            yield stream
    except FileNotFoundError:
        raise
    except OSError as error:
        raise _unreadable(folder, file, error) from None


def _unreadable(folder: Path, file: str, error: OSError) -> StoreError:
    return damaged(folder, f"{file} cannot be read ({error.strerror})")


@contextmanager
def _told(folder: Path, file: str) -> Iterator[None]:
    """Say in one sentence what Arrow cannot read: a file may have its digest and be no file of a pack."""
    try:
        yield
    except (StoreError, OSError):
        raise
    except Exception as error:
        about = (str(error).splitlines() or [type(error).__name__])[0]
        raise damaged(folder, f"{file} is no file of a pack ({about})") from None


def damaged(folder: Path, what: str) -> StoreError:
    """Return the refusal of a pack."""
    return StoreError(
        f"pack {folder} is torn or altered: {what}; put a copy of it back, or remove the folder and run its "
        "study again."
    )


def _values(column: "pa.ChunkedArray") -> list[Any]:
    """Return the values of a column; many columns of an index have one value, which is made once."""
    distinct = column.unique()
    return [distinct[0].as_py()] * len(column) if len(distinct) == 1 else list(column.to_pylist())


class Pack:
    """A pack whose index has the digest in the name of its folder."""

    def __init__(self, folder: Path, digest: str) -> None:
        import pyarrow as pa
        import pyarrow.parquet as pq

        self.folder = folder
        self._index = _read(folder, INDEX)
        if hashlib.sha256(self._index).hexdigest()[:32] != digest:
            raise damaged(folder, f"{INDEX} does not have the digest in the folder's name")
        with _told(folder, INDEX):
            about = pq.read_metadata(pa.BufferReader(self._index))
            schema = about.schema.to_arrow_schema()
        metadata: Mapping[bytes, bytes] = schema.metadata or {}
        if metadata.get(FORM, b"1") != b"1":
            raise StoreError(f"pack {folder} is of a later version of labkit; read it with that version.")
        if DIGEST not in metadata or not about.num_rows or not schema.equals(_columns()):
            raise damaged(folder, f"{INDEX} has not the columns of a pack, or no runs")
        self.rows_digest = metadata[DIGEST].decode("ascii", "replace")

    def columns(self, names: Sequence[str], check: bool = True) -> dict[str, list[Any]]:
        """Return columns of the index: those of `ORIGIN`, `rows`, `schema` and `file`.

        Without `check`, a text may not be what labkit writes: who decodes it then checks it.
        """
        with _told(self.folder, INDEX):
            table = decode(self._index, columns=list(names))
            found = {name: _values(table[name]) for name in names}
        if check:
            check_origins(table, f"pack {self.folder}")
        if any(table[name].null_count for name in names):
            raise damaged(self.folder, f"{INDEX} lacks values")
        return found

    @cached_property
    def names(self) -> list[str]:
        """The names of the records, sorted."""
        return self.columns(["file"])["file"]

    @cached_property
    def _at(self) -> dict[str, int]:
        return {name: row for row, name in enumerate(self.names)}

    @cached_property
    def index(self) -> "pa.Table":
        """The index, its texts not checked."""
        with _told(self.folder, INDEX):
            return decode(self._index)

    @cached_property
    def ends(self) -> list[int]:
        """The number of rows up to and with each run."""
        import numpy as np

        ends: list[int] = np.cumsum(self.columns(["rows"])["rows"]).tolist()
        return ends

    @property
    def size(self) -> int:
        """The bytes of the rows."""
        return (self.folder / ROWS).stat().st_size

    @cached_property
    def schema(self) -> "pa.Schema":
        """The columns of the rows."""
        import pyarrow.parquet as pq

        with _opening(self.folder, ROWS) as stream, _told(self.folder, ROWS):
            return pq.read_schema(stream)

    def verify(self, name: str) -> None:
        """Refuse a record that is not here, or rows without the digest in the index: once for a pack."""
        if name not in self._at or not self._verified:
            raise self._absent(name)

    @cached_property
    def _verified(self) -> bool:
        with _opening(self.folder, ROWS) as stream:
            if hashlib.file_digest(stream, "sha256").hexdigest() != self.rows_digest:
                raise damaged(self.folder, f"{ROWS} does not have the digest that {INDEX} names")
        return True

    def _absent(self, name: str) -> StoreError:
        return StoreError(
            f"pack {self.folder} has no record {name}; if its {NAMES} has, labkit compact "
            f"{self.folder.parents[1].name} writes that anew."
        )

    def read(self, names: Sequence[str]) -> "list[pa.Table]":
        """Return records by name, as `labkit.records.record_files.read_file` returned them."""
        import numpy as np
        import pyarrow as pa

        from labkit.records.schema import ORIGIN

        absent = [name for name in names if name not in self._at]
        if absent:
            raise self._absent(absent[0])
        rows = [self._at[name] for name in names]
        groups = sorted({row // GROUP for row in rows})
        with _told(self.folder, ROWS):
            measured = decode(rows_of(self), groups=groups).replace_schema_metadata(None)
        check_kinds(measured.schema, f"pack {self.folder}")
        # Where a group starts in what was read, less where it starts in the file.
        moved, total = {}, 0
        for group in groups:
            moved[group] = total - self._first(group * GROUP)
            total += self.ends[min((group + 1) * GROUP, len(self.ends)) - 1] - self._first(group * GROUP)
        parts: list[pa.Table] = []
        for row in rows:
            first = self._first(row) + moved[row // GROUP]
            length = self.ends[row] - self._first(row)
            if first < 0 or length < 1 or first + length > measured.num_rows or total != measured.num_rows:
                raise damaged(self.folder, f"{ROWS} has not the rows that {INDEX} names")
            parts.append(measured.slice(first, length))
        # One table for all, cut up again: a column made for each run would take longer than all the rest.
        lengths = [part.num_rows for part in parts]
        origins = self.index.select(ORIGIN.names).take(rows)
        check_origins(origins, f"pack {self.folder}")
        origins = origins.take(np.repeat(np.arange(len(rows)), lengths))
        together = pa.concat_tables(parts).combine_chunks()
        for at, name in enumerate(ORIGIN.names):
            together = together.add_column(at, ORIGIN.field(name), origins[name])
        ends = np.cumsum(lengths).tolist()
        return [together.slice(end - length, length) for end, length in zip(ends, lengths, strict=True)]

    def _first(self, row: int) -> int:
        return self.ends[row - 1] if row else 0

    def check(self) -> None:
        """Refuse a pack in which anything but `NAMES` is not as it was written."""
        import pyarrow.parquet as pq

        if self._verified:
            with _opening(self.folder, ROWS) as stream, _told(self.folder, ROWS):
                about = pq.read_metadata(stream)
                rows, schema = about.num_rows, about.schema.to_arrow_schema()
            check_kinds(schema, f"pack {self.folder}")
            if rows != self.ends[-1]:
                raise damaged(self.folder, f"{ROWS} has not the rows that {INDEX} names")
        if any(NAME.fullmatch(name) is None for name in self.names):
            raise damaged(self.folder, f"{INDEX} names files that are no records")
        if [name[:ID] for name in self.names] != self.columns(["run_id"])["run_id"]:
            raise damaged(self.folder, f"{INDEX} has other runs than its names")
        check_origins(self.index, f"pack {self.folder}")

    def check_names(self) -> None:
        """Refuse names that are not those of the index; everything else may be well."""
        if not self._names_hold():
            raise self._unlike_names()

    def _unlike_names(self) -> StoreError:
        about = f"pack {self.folder} reads well, but its {NAMES} is missing or is not what {INDEX} says; "
        if (self.folder / NAMES).is_dir():
            return StoreError(f"{about}it is a folder: move it elsewhere, and labkit compact writes it anew.")
        return StoreError(f"{about}labkit compact writes it anew.")

    def mend_names(self) -> None:
        """Write the names anew when they are not those of the index."""
        if not self._names_hold():
            beside = self.folder.with_name(name_of_new("names"))
            try:
                write_synced(beside, lines_of(self.names))
                os.replace(beside, self.folder / NAMES)
            except IsADirectoryError:
                raise self._unlike_names() from None
            finally:
                beside.unlink(missing_ok=True)

    def _names_hold(self) -> bool:
        try:
            return read_regular(self.folder / NAMES) == lines_of(self.names)
        except FileNotFoundError:
            if not self.folder.is_dir():
                raise  # the pack is gone, not its names
            return False
        except OSError:
            return False


def lines_of(names: Sequence[str]) -> bytes:
    """Return what `NAMES` holds."""
    return "".join(f"{name}\n" for name in names).encode()


@functools.cache
def _columns() -> "pa.Schema":
    """Return the columns of an index."""
    import pyarrow as pa

    from labkit.records.schema import ORIGIN

    schema = ORIGIN
    for name, kind in (("rows", pa.int64()), ("schema", pa.int64()), ("file", pa.string())):
        schema = schema.append(pa.field(name, kind))
    return schema
