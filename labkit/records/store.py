"""The results store: one verified parquet file a run, never half a file, never a silent replacement.

A file is called ``<run id>-<first 32 hex digits of its SHA-256>.parquet``, in the folder of its study.
It is written beside this name, read back, and moved into place; readers recompute the digest. Arrow is
imported where a file is read or written, so that looking for a record costs nothing.
"""

import hashlib
import os
import platform
import re
import secrets
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from labkit.errors import InputError, StoreError
from labkit.records.project import STORE, check_study_name, from_root

if TYPE_CHECKING:
    import pyarrow as pa

_NAME = re.compile(r"([0-9a-f]{16})-([0-9a-f]{32})\.parquet")
_LEFTOVER = re.compile(r"\.[0-9a-f]{16}\.([0-9a-f]{8})\.(\d+)\.[0-9a-f]+\.tmp")
_DAY = 86_400.0


@dataclass(frozen=True)
class Store:
    """A folder of records, one folder a study inside it."""

    folder: Path

    def check_writable(self, study: str) -> None:
        """Refuse, before any computing, a place where no record could be written; leave nothing behind."""
        check_writable("store", self.folder / check_study_name(study))

    def write(self, study: str, run_id: str, table: "pa.Table") -> tuple[Path, bool]:
        """Write the record of a run.

        Returns
        -------
        path : Path
            The file of the record.
        new : bool
            False when the run was recorded before with the same measures, bit for bit; that file is kept.

        Raises
        ------
        StoreError
            When the folder cannot be written, a record of the run is damaged, or its measures differ.
        """
        from labkit.records.schema import first_difference, measured_part

        present = self.find(study, run_id)
        if present is not None:
            difference = first_difference(measured_part(self.read(present)), measured_part(table))
            if difference:
                raise StoreError(
                    f"run {run_id} was executed again and its measures differ from {present} ({difference}); "
                    "compare versions and sources, and remove that file only when it is known to be wrong."
                )
            return present, False
        folder = self.folder / check_study_name(study)
        try:
            folder.mkdir(parents=True, exist_ok=True)
            _sweep(folder)
            return _write_whole(folder, run_id, table), True
        except OSError as error:
            raise unwritable("store", folder, error) from None

    def find(self, study: str, run_id: str) -> Path | None:
        """Return the file that holds the record of a run, not read yet, or None."""
        found = sorted((self.folder / study).glob(f"{run_id}-*.parquet"))
        return found[0] if found else None

    def studies(self) -> list[str]:
        """Return the names of the studies that have a folder here."""
        if not self.folder.is_dir():
            return []
        return sorted(
            place.name for place in self.folder.iterdir() if place.is_dir() and place.name[0] != "."
        )

    def files(self, study: str, warn: Callable[[str], None] | None = None) -> Iterator[Path]:
        """Yield the record files of a study, one a run.

        A parquet file that is no record is refused, or left out when there is someone to `warn` of it.
        """
        seen = set()
        for path in sorted((self.folder / study).glob("[!.]*.parquet")):
            try:
                run_id = _run_id(path)
            except StoreError as error:
                if warn is None:
                    raise
                warn(str(error))
                continue
            if run_id not in seen:
                seen.add(run_id)
                yield path

    def locate(self, prefix: str, warn: Callable[[str], None] = lambda sentence: None) -> Path:
        """Return the record file of the one run whose id begins with `prefix`.

        Files with other names are not looked at. A run that stands in several studies has several files;
        `warn` is called for those that are damaged, and a whole one is returned if there is one.
        """
        prefix = prefix.lower()
        files = [
            path for study in self.studies() for path in sorted((self.folder / study).glob("[!.]*.parquet"))
        ]
        named = [path for path in files if prefix and path.name.startswith(prefix)]
        found = [path for path in named if _is_record(path)]
        for path in named:
            if path not in found:
                warn(_foreign(path))
        runs = sorted({path.name[:16] for path in found})
        if len(runs) == 1:
            return self._whole(found, warn)
        if not runs:
            count = sum(map(_is_record, files))
            raise InputError(
                f"run is {prefix!r}; none of the {count} records in {self.folder} begins so: see labkit list "
                "for their ids."
            )
        raise InputError(f"run is {prefix!r}; {', '.join(runs)} begin so: give more digits.")

    def _whole(self, paths: list[Path], warn: Callable[[str], None]) -> Path:
        for path in paths[:-1]:
            try:
                self.read(path)
                return path
            except StoreError as error:
                warn(str(error))
        return paths[-1]

    def read(self, path: Path) -> "pa.Table":
        """Return a record; refuse a torn, altered or foreign file by name."""
        from labkit.records.schema import ORIGIN

        run_id = _run_id(path)
        try:
            content = path.read_bytes()
        except OSError as error:
            raise StoreError(
                f"record {path} cannot be read ({error.strerror}); run its study again."
            ) from None
        if _digest(content) != path.stem.split("-")[1]:
            raise StoreError(
                f"record {path} is torn or altered: its content does not have the digest in its name; "
                "remove it and run its study again."
            )
        table = decode(content)
        missing = [name for name in ORIGIN.names if name not in table.column_names]
        if missing and "run_id" in table.column_names:
            raise StoreError(
                f"record {path} is of another version of labkit (it has no {missing[0]}); move it out of the "
                "store and run its study again."
            )
        if missing or set(table["run_id"].to_pylist()) != {run_id}:
            raise StoreError(f"record {path} is not the record of run {run_id}; move it out of the store.")
        return table


def check_writable(what: str, folder: Path) -> None:
    """Refuse a folder, there already or not, in which nothing could be written; leave nothing behind."""
    try:
        present = next(place for place in (folder, *folder.parents) if os.path.lexists(place))
        with tempfile.TemporaryFile(dir=present):
            pass
    except OSError as error:
        raise unwritable(what, folder, error) from None


def unwritable(what: str, folder: Path, error: OSError) -> StoreError:
    """Return the refusal of a folder that cannot be written."""
    return StoreError(f"{what} {folder} cannot be written ({error.strerror}); name a folder that can be.")


def open_store(store: str | Path | None = None) -> Store:
    """Return the store at a folder (relative ones count from the project root), or the project's own."""
    folder = from_root(store) if store else STORE
    if folder.exists() and not folder.is_dir():
        raise StoreError(f"store {folder} is a file; name a folder.")
    return Store(folder)


def _run_id(path: Path) -> str:
    name = _NAME.fullmatch(path.name)
    if name is None:
        raise StoreError(_foreign(path))
    return name[1]


def _is_record(path: Path) -> bool:
    return _NAME.fullmatch(path.name) is not None


def _foreign(path: Path) -> str:
    return f"file {path} is not a record of this store; move it elsewhere."


def decode(content: bytes) -> "pa.Table":
    """Return the table in the content of a file, read by this thread alone.

    A worker thread of Arrow's may let go of the content, a Python object, only when Python is ending already,
    and the process is then aborted: so no threads, and not ``read_table``, which uses them for reading.
    """
    import pyarrow as pa
    import pyarrow.parquet as pq

    with pq.ParquetFile(pa.BufferReader(content), pre_buffer=False) as file:
        return file.read(use_threads=False)


def _digest(content: bytes | memoryview) -> str:
    return hashlib.sha256(content).hexdigest()[:32]


def _host() -> str:
    return hashlib.sha256(platform.node().encode()).hexdigest()[:8]


def _write_whole(folder: Path, run_id: str, table: "pa.Table") -> Path:
    import pyarrow as pa
    import pyarrow.parquet as pq

    from labkit.records.schema import first_difference

    sink = pa.BufferOutputStream()
    pq.write_table(table, sink, compression="zstd")
    content = memoryview(sink.getvalue())
    digest = _digest(content)
    beside = folder / f".{run_id}.{_host()}.{os.getpid()}.{secrets.token_hex(4)}.tmp"
    try:
        with beside.open("xb") as stream:
            stream.write(content)
            stream.flush()
            os.fsync(stream.fileno())
        written = beside.read_bytes()
        if _digest(written) != digest or first_difference(decode(written), table):
            raise StoreError(f"record {beside} did not read back as written; check the disk.")
        final = folder / f"{run_id}-{digest}.parquet"
        os.replace(beside, final)
    finally:
        beside.unlink(missing_ok=True)
    _sync(folder)
    return final


def _sync(folder: Path) -> None:
    if os.name == "posix":
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def _sweep(folder: Path) -> None:
    """Remove what writers left that died half-way; a writer elsewhere is taken for dead after a day."""
    for path in folder.glob(".*.tmp"):
        name = _LEFTOVER.fullmatch(path.name)
        if name is None:
            continue
        try:
            old = time.time() - path.stat().st_mtime > _DAY
            if old or (name[1] == _host() and not _alive(int(name[2]))):
                path.unlink()
        except OSError:
            continue


def _alive(process: int) -> bool:
    if os.name != "posix":
        return True
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True
