"""Moving the records of a study from files of their own into packs, safe to interrupt anywhere.

A pack is written aside, read back and compared with every record in it before it is renamed into place; only
then are the original files removed. So a record is always in one place at least; what an interrupted
compaction left in two, the next one finishes. A pack keeps all bits of its records, their names and the
number of the schema of each; records of an older schema are held as today's has them, which loses nothing:
what was added is a constant, and the number says that it was.
"""

import os
import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from labkit.errors import InputError, StoreError
from labkit.records.copies import list_study, names_in
from labkit.records.leftovers import sweep
from labkit.records.pack_writing import remove_pack, write_pack
from labkit.records.packs import MOST, PACKED, open_pack, packs_of
from labkit.records.project import check_study_name
from labkit.records.record_files import ID, foreign, read_file, sync, unwritable
from labkit.records.store import Store, check_same, check_writable, doubled, settle_run

if TYPE_CHECKING:
    import pyarrow as pa

# Bytes of the files that go into one pack: a reader checks all of it.
LARGEST = 2**25


@dataclass
class Compaction:
    """What was done for a study: runs moved into packs, packs written and merged, and what was left, why."""

    study: str
    runs: int = 0
    packs: int = 0
    merged: int = 0
    left: list[str] = field(default_factory=list)


def compact(store: Store, study: str, tick: Callable[[int], None] = lambda runs: None) -> Compaction:
    """Move the records of a study into packs, and merge small packs.

    Parameters
    ----------
    store : Store
    study : str
    tick : callable
        Called with the number of runs moved so far.

    Raises
    ------
    InputError
        When the store has no such study, or another process compacts it.
    StoreUnwritable
        When it cannot be written. All records are where they were, or in packs.
    """
    folder = store.folder / check_study_name(study)
    if not folder.is_dir():
        raise InputError(f"study is {study!r}; {store.folder} has no folder of that name: see labkit list.")
    check_writable("store", folder)
    work = _Work(folder, Compaction(study), tick)
    try:
        with _alone(folder, study):
            if os.path.lexists(folder / PACKED) and not (folder / PACKED).is_dir():
                work.leave(foreign(folder / PACKED))
                return work.done
            sweep(folder, names_in(folder))
            sweep(folder / PACKED, names_in(folder / PACKED))
            work.mend()
            work.settle()
            work.drop_packed()
            work.pack()
    except OSError as error:
        raise unwritable("store", folder, error) from None
    return work.done


@contextmanager
def _alone(folder: Path, study: str) -> Iterator[None]:
    """Hold the folder of a study for one compaction, where the system can; two are safe, only slower."""
    try:
        import fcntl
    except ImportError:
        yield
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        for attempt in (1, 2):
            try:
                fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
                break
            except BlockingIOError:
                if attempt == 2:
                    raise StoreError(
                        f"study {study} is being compacted by another process; wait until that is done."
                    ) from None
                time.sleep(0.05)  # it may be a check that asks whether this is so
            except OSError:
                break  # a file system without locks
        yield
    finally:
        os.close(handle)


def is_compacting(folder: Path) -> bool:
    """Tell whether a process compacts the study in a folder now; False where the system cannot tell."""
    try:
        import fcntl

        handle = os.open(folder, os.O_RDONLY)
    except (ImportError, OSError):
        return False
    try:
        fcntl.flock(handle, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        return True
    except OSError:
        return False
    finally:
        os.close(handle)
    return False


@dataclass
class _Source:
    """A record on its way into a pack, and the file that may be removed when it is there."""

    name: str
    table: "pa.Table"
    number: int
    size: float
    loose: Path | None = None


@dataclass
class _Work:
    folder: Path
    done: Compaction
    tick: Callable[[int], None]
    bins: dict[str, list[_Source]] = field(default_factory=dict)
    sizes: dict[str, float] = field(default_factory=dict)
    written: set[Path] = field(default_factory=set)

    def leave(self, sentence: str) -> None:
        """Remember what was not touched."""
        if sentence not in self.done.left:
            self.done.left.append(sentence)

    def mend(self) -> None:
        """Write names of packs anew where they are not those of the index: what follows goes by them."""
        for folder in packs_of(self.folder):
            try:
                open_pack(folder).mend_names()
            except (StoreError, FileNotFoundError) as error:
                self._leave_pack(folder, error)

    def _leave_pack(self, folder: Path, error: Exception) -> None:
        if folder.is_dir() or isinstance(error, StoreError):
            self.leave(str(error))

    def settle(self) -> None:
        """Keep one file of each run that two processes recorded at once."""
        for run_id in doubled(list_study(self.folder, warn=self.leave)):
            try:
                settle_run(self.folder, run_id)
            except StoreError as error:
                self.leave(str(error))

    def drop_packed(self) -> None:
        """Remove files of runs that a pack holds with the same measures."""
        listing = list_study(self.folder, warn=self.leave)
        packed = {name[:ID]: pack / name for pack, names in listing.packed for name in names}
        for name in listing.loose:
            if name[:ID] in packed and self._is_held(packed[name[:ID]], self.folder / name):
                (self.folder / name).unlink(missing_ok=True)

    def _is_held(self, kept: Path, path: Path) -> bool:
        try:
            present = open_pack(kept.parent).read([kept.name])[0]
            check_same(kept.name[:ID], kept, present, read_file(path)[0])
        except FileNotFoundError:
            return False
        except StoreError as error:
            self.leave(str(error))
            return False
        return True

    def pack(self) -> None:
        """Write packs of the records in files of their own and of those in small or overlapping packs."""
        merging = self._open_packs()
        begun: set[str] = set()
        for source in self._loose():
            key = _key(source.table)
            if key not in begun:
                begun.add(key)
                self._take(key, merging.get(key, []))
            self._put(key, source)
        for key, packs in merging.items():
            if key not in begun and (len(packs) > 1 or packs[0].overlaps):
                begun.add(key)
                self._take(key, packs)
        for key in list(self.bins):
            self._flush(key)
        for pack in (pack for key in begun for pack in merging.get(key, [])):
            if pack.folder not in self.written and not pack.needed:
                remove_pack(pack.folder)
                self.done.merged += 1

    def _open_packs(self) -> "dict[str, list[_Small]]":
        """Return the packs to be merged where there is something to merge them with, by columns."""
        found: dict[str, list[_Small]] = {}
        held: dict[str, Path] = {}
        listed = []
        for folder in packs_of(self.folder):
            try:
                pack = open_pack(folder)
                pack.check()
                listed.append(pack)
            except (StoreError, FileNotFoundError) as error:
                self._leave_pack(folder, error)
        for pack in sorted(listed, key=lambda pack: (-len(pack.names), pack.folder)):
            runs = {name[:ID]: pack.folder / name for name in pack.names}
            overlaps = not held.keys().isdisjoint(runs)
            if overlaps or (len(runs) <= MOST // 2 and pack.size <= LARGEST // 2):
                small = _Small(pack.folder, overlaps, {run: held[run] for run in runs if run in held})
                found.setdefault(pack.schema.remove_metadata().to_string(), []).append(small)
            held.update((run, path) for run, path in runs.items() if run not in held)
        return found

    def _take(self, key: str, packs: "list[_Small]") -> None:
        for small in packs:
            try:
                pack = open_pack(small.folder)
                numbers = pack.columns(["schema"])["schema"]
                tables = pack.read(pack.names)
            except StoreError as error:
                self.leave(str(error))
                small.needed = True
                continue
            size = pack.size / len(tables)
            for name, table, number in zip(pack.names, tables, numbers, strict=True):
                kept = small.elsewhere.get(name[:ID])
                try:
                    if kept is not None:
                        check_same(name[:ID], kept, open_pack(kept.parent).read([kept.name])[0], table)
                        continue
                except StoreError as error:
                    self.leave(str(error))
                    small.needed = True
                    continue
                self._put(key, _Source(name, table, number, size))

    def _loose(self) -> Iterator[_Source]:
        from labkit.records.schema import has_one_origin

        listing = list_study(self.folder, warn=self.leave)
        packed = {name[:ID] for _, names in listing.packed for name in names}
        for name in listing.foreign:
            self.leave(foreign(self.folder / name))
        runs = Counter(name[:ID] for name in listing.loose)
        for name in listing.loose:
            if name[:ID] in packed or runs[name[:ID]] > 1:
                continue  # could not be settled, and was named
            path = self.folder / name
            try:
                table, number = read_file(path)
                size = path.stat().st_size
            except FileNotFoundError:
                continue
            except StoreError as error:
                self.leave(str(error))
                continue
            if has_one_origin(table):
                yield _Source(name, table, number, size, path)
            else:
                self.leave(f"record {path} has not one origin for all of its rows; it stays as it is.")

    def _put(self, key: str, source: _Source) -> None:
        waiting = self.bins.setdefault(key, [])
        waiting.append(source)
        self.sizes[key] = self.sizes.get(key, 0.0) + source.size
        if len(waiting) == MOST or self.sizes[key] >= LARGEST:
            self._flush(key)

    def _flush(self, key: str) -> None:
        """Write a pack of what waits, then remove the files that it replaces."""
        waiting = self.bins.pop(key, [])
        self.sizes[key] = 0.0
        if len(waiting) < 2 and all(source.loose is not None for source in waiting):
            return  # a lone file is as good as a pack of one
        self.written.add(
            write_pack(self.folder, [(source.name, source.table, source.number) for source in waiting])
        )
        moved = [source.loose for source in waiting if source.loose is not None]
        for path in moved:
            path.unlink(missing_ok=True)
        sync(self.folder)
        self.done.packs += 1
        self.done.runs += len(moved)
        self.tick(self.done.runs)


@dataclass
class _Small:
    """A pack to be merged: which of its runs other packs hold, and whether it must stay nevertheless."""

    folder: Path
    overlaps: bool
    elsewhere: dict[str, Path]
    needed: bool = False


def _key(table: "pa.Table") -> str:
    from labkit.records.schema import measured_part

    return str(measured_part(table).schema.remove_metadata().to_string())
