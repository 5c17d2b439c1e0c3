"""Walking a store: every file that is not as it should be, and what to do about it. Nothing is changed."""

import os
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

from labkit.errors import InputError, StoreError
from labkit.records.compaction import is_compacting
from labkit.records.copies import names_in
from labkit.records.frozen import LITTER
from labkit.records.leftovers import is_abandoned, is_leftover
from labkit.records.listing import FAILED
from labkit.records.packs import INDEX, NAMES, PACKED, ROWS, Pack, is_pack, misnamed, open_pack, packs_of
from labkit.records.project import check_study_name
from labkit.records.record_files import ID, foreign, is_record, read_file
from labkit.records.schema import SCHEMA, first_difference, measured_part
from labkit.records.store import Store

# A merging compaction replaces packs by others while they are looked at.
_LOOKS = 5
_QUIET = LITTER | {".gitignore", ".gitkeep"}
_EVIDENCE = re.compile(r"[0-9a-f]{16}\b.*")


@dataclass(frozen=True)
class Fault:
    """Something in a store that is not as it should be.

    Attributes
    ----------
    kind : str
        damaged, schema, doubled, differing, foreign, leftover or stale.
    path : Path
    sentence : str
        What is wrong and what to do.
    """

    kind: str
    path: Path
    sentence: str


@dataclass
class Checked:
    """What was looked at, and what was found."""

    runs: int = 0
    files: int = 0
    packs: int = 0
    older: int = 0
    faults: list[Fault] = field(default_factory=list)


def check_store(store: Store, study: str | None = None) -> Checked:
    """Check every file of a store, or of one study in it, and change nothing.

    Parameters
    ----------
    store : Store
    study : str, optional

    Returns
    -------
    Checked
        With the number of records of an older schema: these are no fault, readers understand them.

    Raises
    ------
    InputError
        When the store or the study is not there.
    """
    if not store.folder.is_dir():
        raise InputError(
            f"store is {str(store.folder)!r}; there is no such folder: give that of the records."
        )
    if study is not None and study not in store.studies():
        raise InputError(f"study is {study!r}; {store.folder} has no folder of that name: see labkit list.")
    done = Checked()
    if study is None:
        for name in sorted(names_in(store.folder)):
            path = store.folder / name
            if name in _QUIET or (path.is_dir() and _is_study_name(name)):
                continue
            sentence = foreign(path)
            if path.is_dir() and name[0] != ".":
                sentence = f"folder {path} has a name that no study can have; rename it or move it elsewhere."
            else:
                done.files += 1
            done.faults.append(Fault("foreign", path, sentence))
    for each in store.studies() if study is None else [study]:
        _Study(store.folder / each, done).check()
    return done


def _is_study_name(name: str) -> bool:
    try:
        check_study_name(name)
    except InputError:
        return False
    return True


@dataclass
class _Study:
    folder: Path
    done: Checked
    copies: dict[str, list[Path]] = field(default_factory=dict)
    doubled: list[tuple[Path, Path]] = field(default_factory=list)

    def check(self) -> None:
        for path in self._entries(self.folder):
            if path.name == FAILED and path.is_dir():
                continue
            if path.name == PACKED and path.is_dir():
                self._check_packs(path)
            elif is_record(path.name):
                self.done.files += 1
                self._check_record(path)
            else:
                self._foreign(path)
        self.done.runs += len(self.copies)
        for copies in self.copies.values():
            if len(copies) > 1:
                self._compare(copies)
        self._name_doubled()
        for path in self._entries(self.folder / FAILED):
            self._check_evidence(path)

    def _fault(self, kind: str, path: Path, sentence: str) -> None:
        """Remember a fault, unless a compaction has removed the file meanwhile."""
        if os.path.lexists(_on_disk(path)):
            self.done.faults.append(Fault(kind, path, sentence))

    def _entries(self, folder: Path) -> Iterator[Path]:
        """Yield what is in a folder; name what was left there, and pass over what is being written."""
        for name in sorted(names_in(folder)):
            path = folder / name
            if name in _QUIET:
                continue
            if not is_leftover(name):
                yield path
            elif is_abandoned(path):
                self.done.files += 1
                self._fault(
                    "leftover",
                    path,
                    f"{path} was left by a process that died while writing; remove it, or the next labkit "
                    "run or labkit compact of this study does.",
                )

    def _foreign(self, path: Path) -> None:
        if os.path.lexists(path):
            self.done.files += 1
            self._fault("foreign", path, foreign(path))

    def _check_record(self, path: Path) -> None:
        try:
            _, number = read_file(path)
        except FileNotFoundError:
            # moved meanwhile, or a link to nothing
            self._fault("foreign", path, foreign(path))
            return
        except StoreError as error:
            kind = "schema" if "of schema" in str(error) else "damaged"
            self._fault("foreign" if str(error) == foreign(path) else kind, path, str(error))
            return
        self.done.older += number < SCHEMA
        self.copies.setdefault(path.name[:ID], []).append(path)

    def _check_packs(self, folder: Path) -> None:
        places = list(self._entries(folder))
        seen: set[Path] = set()
        for _ in range(_LOOKS):
            seen.update(places)
            for place in places:
                if is_pack(place) and place.is_dir():
                    self._check_pack(place)
                else:
                    self._misplaced(place)
            # a pack that is gone was merged into one that was not there before
            places = [place for place in packs_of(self.folder) if place not in seen]
            if not places:
                break
        packs = sum(is_pack(place) and place.is_dir() for place in seen)
        self.done.packs += packs
        self.done.files += 3 * packs

    def _misplaced(self, path: Path) -> None:
        sentence = misnamed(path)
        if sentence is None:
            self._foreign(path)
        else:
            self._fault("foreign", path, sentence)

    def _check_pack(self, place: Path) -> None:
        try:
            # opened afresh: what was read before says nothing about the disk
            pack = Pack(place, place.name)
            names, numbers = pack.names, pack.columns(["schema"])["schema"]
            pack.check()
        except FileNotFoundError as error:
            if place.is_dir():
                self._fault("damaged", place, _without(place, Path(str(error.filename)).name))
            return
        except StoreError as error:
            self._fault("damaged", place, str(error))
            return
        try:
            pack.check_names()
        except FileNotFoundError:
            return  # merged into another pack meanwhile
        except StoreError as error:
            self._fault("damaged", place, str(error))
        self.done.older += sum(number < SCHEMA for number in numbers)
        for name in names:
            self.copies.setdefault(name[:ID], []).append(place / name)
        for path in self._entries(place):
            if path.name not in (INDEX, ROWS, NAMES):
                self._foreign(path)

    def _compare(self, copies: list[Path]) -> None:
        """Name the further copies of a run, and whether they measured the same."""
        found = []
        for path in copies:
            try:
                found.append((path, measured_part(_read(path))))
            except (FileNotFoundError, StoreError):
                continue  # moved or changed meanwhile
        for path, measured in found[1:]:
            first, present = found[0]
            difference = first_difference(present, measured)
            if difference:
                self._fault(
                    "differing",
                    path,
                    f"record {path} has other measures than {first} of the same run ({difference}); find "
                    "out which one is wrong and remove that one.",
                )
            else:
                self.doubled.append((path, first))

    def _name_doubled(self) -> None:
        """Name what is doubled at a second look: a compaction removes what it has put into a pack."""
        if not self.doubled or is_compacting(self.folder):
            return
        for path, first in self.doubled:
            if os.path.lexists(_on_disk(first)):
                self._fault(
                    "doubled",
                    path,
                    f"record {path} is of a run that {first} holds with the same measures; labkit compact "
                    f"{self.folder.name} removes what is too many.",
                )

    def _check_evidence(self, path: Path) -> None:
        self.done.files += 1
        if _EVIDENCE.fullmatch(path.name) is None:
            self._fault("foreign", path, foreign(path))
        elif path.name[:ID] in self.copies:
            sentence = (
                f"{path} is evidence of a failure of run {path.name[:ID]}, which is recorded by now; "
                "remove it."
            )
            self._fault("stale", path, sentence)


def _on_disk(path: Path) -> Path:
    """Return what must be there for a record or a file of a pack to be there."""
    return path.parent if is_pack(path.parent) and is_record(path.name) else path


def _without(pack: Path, file: str) -> str:
    return (
        f"pack {pack} is torn: its file {file} is missing; put a copy of it back, or remove the folder and "
        "run its study again."
    )


def _read(path: Path):  # type: ignore[no-untyped-def]
    return open_pack(path.parent).read([path.name])[0] if is_pack(path.parent) else read_file(path)[0]
