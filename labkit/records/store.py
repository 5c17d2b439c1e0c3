"""The results store: one verified record a run, never half of one, never a silent replacement.

A record begins as a file of its own in the folder of its study (record_files.py); compaction moves records
into packs (packs.py, compaction.py). Several processes may write and read at the same time without a lock.
"""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar

from labkit.errors import InputError, StoreError
from labkit.records.copies import Listing, copies_of, list_study, names_in, study_folder
from labkit.records.leftovers import sweep
from labkit.records.packs import PACKED, is_pack, open_pack
from labkit.records.project import STORE, check_study_name, from_root
from labkit.records.record_files import (
    ID,
    check_writable,
    decode,
    foreign,
    read_content,
    read_file,
    unwritable,
    write_file,
)

if TYPE_CHECKING:
    import pyarrow as pa

__all__ = ["Store", "check_writable", "decode", "open_store", "unwritable"]

_Result = TypeVar("_Result")

# A record may be moved into a pack, and this pack into another, while it is looked for.
_LOOKS = 5


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
            False when the run was recorded before, or by another process meanwhile, with the same measures,
            bit for bit; that record is kept.

        Raises
        ------
        StoreUnwritable
            When the folder cannot be written.
        StoreError
            When a record of the run is damaged, or its measures differ.
        """
        folder = self.folder / check_study_name(study)
        names = names_in(folder)
        present = copies_of(folder, run_id, names)
        if present:
            check_same(run_id, present[0], self.read(present[0]), table)
            return present[0], False
        try:
            sweep(folder, names)
            path = write_file(folder, run_id, table)
        except OSError as error:
            raise unwritable("store", folder, error) from None
        kept = settle_run(folder, run_id)
        return (path, True) if kept is None or kept == path else (kept, False)

    def settle(self, study: str) -> list[Path]:
        """Remove what processes that died left in the folder of a study; return what was removed.

        These are unfinished files, and second files of runs that were recorded by two processes at once.

        Raises
        ------
        StoreError
            When two records of a run have different measures. Both are kept.
        """
        folder = self.folder / check_study_name(study)
        removed = sweep(folder, names_in(folder)) + sweep(folder / PACKED, names_in(folder / PACKED))
        for run_id in doubled(list_study(folder, warn=lambda sentence: None)):
            before = copies_of(folder, run_id)
            settle_run(folder, run_id)
            removed += [path for path in before if not is_pack(path.parent) and not path.exists()]
        return removed

    def find(self, study: str, run_id: str) -> Path | None:
        """Return where the record of a run is, not read yet, or None; `runs` is quicker for many runs."""
        found = copies_of(self.folder / study, run_id)
        return found[0] if found else None

    def runs(self, study: str, warn: Callable[[str], None] | None = None) -> dict[str, Path]:
        """Return where the record of each run of a study is, none read yet, in the order of their ids.

        A damaged pack is refused, or left out when there is someone to `warn` of it.
        """
        chosen = list_study(self.folder / study, warn).chosen()
        return {run_id: folder / name for run_id, (folder, name) in chosen.items()}

    def studies(self) -> list[str]:
        """Return the names of the studies that have a folder here."""
        if not self.folder.is_dir():
            return []
        return sorted(
            place.name for place in self.folder.iterdir() if place.is_dir() and place.name[0] != "."
        )

    def files(self, study: str, warn: Callable[[str], None] | None = None) -> Iterator[Path]:
        """Yield where the records of a study are, one a run.

        A parquet file that is no record is refused, or left out when there is someone to `warn` of it.
        """
        listing = list_study(self.folder / study, warn)
        for name in listing.foreign:
            if warn is None:
                raise StoreError(foreign(listing.folder / name))
            warn(foreign(listing.folder / name))
        for folder, name in listing.chosen().values():
            yield folder / name

    def locate(self, prefix: str, warn: Callable[[str], None] = lambda sentence: None) -> Path:
        """Return where the record of the one run is whose id begins with `prefix`.

        Files with other names are not looked at. A run that stands in several studies has several records;
        `warn` is called for those that are damaged, and a whole one is returned if there is one.
        """
        prefix = prefix.lower()
        found: list[Path] = []
        count = 0
        for study in self.studies():
            listing = list_study(self.folder / study, warn)
            for name in listing.foreign:
                if prefix and name.startswith(prefix):
                    warn(foreign(listing.folder / name))
            chosen = listing.chosen()
            count += len(chosen)
            found += [folder / name for folder, name in chosen.values() if prefix and name.startswith(prefix)]
        runs = sorted({path.name[:ID] for path in found})
        if len(runs) == 1:
            return self._whole(found, warn)
        if not runs:
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
        """Return a record with the columns of today's schema; refuse a torn, altered or foreign one by name.

        A record that has been moved into a pack since its path was found is read there.
        """
        return self.tables([path])[0]

    def tables(self, paths: Sequence[Path]) -> "list[pa.Table]":
        """Return many records, as `read` returns each: all of a pack are read together."""
        found: dict[Path, pa.Table] = {}
        together: dict[Path, list[Path]] = {}
        for path in paths:
            if is_pack(path.parent):
                together.setdefault(path.parent, []).append(path)
        for pack, members in together.items():
            try:
                names = sorted({path.name for path in members})
                found.update(zip([pack / name for name in names], open_pack(pack).read(names), strict=True))
            except FileNotFoundError:
                continue  # merged into another: each is looked for
        return [found[path] if path in found else _following(path, _read_once) for path in paths]

    def verify(self, path: Path) -> None:
        """Refuse a record whose content is not as it was written; nothing is decoded.

        A pack is verified once, with all its records.
        """
        _following(path, _verify_once)


def open_store(store: str | Path | None = None) -> Store:
    """Return the store at a folder (relative ones count from the project root), or the project's own."""
    folder = from_root(store) if store else STORE
    if folder.exists() and not folder.is_dir():
        raise StoreError(f"store {folder} is a file; name a folder.")
    return Store(folder)


def doubled(listing: Listing) -> list[str]:
    """Return the runs with several records of different content, beyond what packs hold twice."""
    seen: dict[str, str] = {name[:ID]: name for _, names in listing.packed for name in names}
    found = []
    for name in listing.loose:
        if seen.setdefault(name[:ID], name) != name:
            found.append(name[:ID])
    return sorted(set(found))


def _following(path: Path, act: Callable[[Path], _Result]) -> _Result:
    """Do something with a record; when it is gone from there, with the copy that readers take by then."""
    reason = ""
    for _ in range(_LOOKS):
        try:
            return act(path)
        except FileNotFoundError as error:
            reason = error.strerror or "gone"
        copies = copies_of(study_folder(path), path.name[:ID])
        if not copies:
            break
        path = copies[0]
    raise StoreError(f"record {path} cannot be read ({reason}); run its study again.")


def _read_once(path: Path) -> "pa.Table":
    if is_pack(path.parent):
        return open_pack(path.parent).read([path.name])[0]
    return read_file(path)[0]


def _verify_once(path: Path) -> None:
    if is_pack(path.parent):
        open_pack(path.parent).verify(path.name)
    else:
        read_content(path)


def settle_run(folder: Path, run_id: str) -> Path | None:
    """Keep one file of a run that two processes recorded at once, the same whichever of them does it."""
    copies = copies_of(folder, run_id)
    if len(copies) < 2:
        return copies[0] if copies else None
    kept = _following(copies[0], _read_once)
    for copy in copies[1:]:
        try:
            table = _read_once(copy)
        except FileNotFoundError:
            continue
        check_same(run_id, copies[0], kept, table)
        if not is_pack(copy.parent):
            copy.unlink(missing_ok=True)
    return next(iter(copies_of(folder, run_id)), None)


def check_same(run_id: str, path: Path, present: "pa.Table", table: "pa.Table") -> None:
    """Raise the alarm when a run has other measures than those of its record at `path`."""
    from labkit.records.schema import first_difference, measured_part

    difference = first_difference(measured_part(present), measured_part(table))
    if difference:
        raise StoreError(
            f"run {run_id} was executed again and its measures differ from {path} ({difference}); "
            "compare versions and sources, and remove that file only when it is known to be wrong."
        )
