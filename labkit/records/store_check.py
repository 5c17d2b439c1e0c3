"""Walking a store: every file that is not as it should be, and what to do about it. Nothing is changed."""

import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

from labkit.errors import InputError, StoreError
from labkit.records.copies import names_in
from labkit.records.frozen import LITTER
from labkit.records.leftovers import is_abandoned, is_leftover
from labkit.records.listing import FAILED
from labkit.records.packs import INDEX, NAMES, PACKED, ROWS, Pack, is_pack, open_pack
from labkit.records.record_files import ID, foreign, is_record, read_file
from labkit.records.schema import SCHEMA, first_difference, measured_part
from labkit.records.store import Store

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
    if study is not None and study not in store.studies():
        raise InputError(f"study is {study!r}; {store.folder} has no folder of that name: see labkit list.")
    done = Checked()
    if study is None:
        for name in sorted(names_in(store.folder)):
            path = store.folder / name
            if name in _QUIET or (path.is_dir() and name[0] != "."):
                continue
            done.files += 1
            done.faults.append(Fault("foreign", path, foreign(path)))
    for each in store.studies() if study is None else [study]:
        _Study(store.folder / each, done).check()
    return done


@dataclass
class _Study:
    folder: Path
    done: Checked
    copies: dict[str, list[Path]] = field(default_factory=dict)

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
        for path in self._entries(self.folder / FAILED):
            self._check_evidence(path)

    def _fault(self, kind: str, path: Path, sentence: str) -> None:
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
        self.done.files += 1
        self._fault("foreign", path, foreign(path))

    def _check_record(self, path: Path) -> None:
        try:
            _, number = read_file(path)
        except FileNotFoundError:
            return  # moved meanwhile
        except StoreError as error:
            self._fault("schema" if "of schema" in str(error) else "damaged", path, str(error))
            return
        self.done.older += number < SCHEMA
        self.copies.setdefault(path.name[:ID], []).append(path)

    def _check_packs(self, folder: Path) -> None:
        for place in self._entries(folder):
            if not is_pack(place) or not place.is_dir():
                self._foreign(place)
                continue
            self.done.packs += 1
            self.done.files += 3
            try:
                # opened afresh: what was read before says nothing about the disk
                pack = Pack(place, place.name)
            except FileNotFoundError as error:
                if place.is_dir():
                    missing = Path(str(error.filename)).name
                    self._fault("damaged", place, _without(place, missing))
                continue
            except StoreError as error:
                self._fault("damaged", place, str(error))
                continue
            try:
                pack.check()
            except FileNotFoundError as error:
                self._fault("damaged", place, _without(place, Path(str(error.filename)).name))
                continue
            except StoreError as error:
                self._fault("damaged", place, str(error))
                if "reads well" not in str(error):
                    continue
            numbers = pack.columns(["schema"])["schema"]
            self.done.older += sum(number < SCHEMA for number in numbers)
            for name in pack.names:
                self.copies.setdefault(name[:ID], []).append(place / name)
            for path in self._entries(place):
                if path.name not in (INDEX, ROWS, NAMES):
                    self._foreign(path)

    def _compare(self, copies: list[Path]) -> None:
        """Name the further copies of a run, and whether they measured the same."""
        try:
            kept, *others = [(path, measured_part(_read(path))) for path in copies]
        except FileNotFoundError:
            return  # moved meanwhile
        for path, measured in others:
            difference = first_difference(kept[1], measured)
            if difference:
                self._fault(
                    "differing",
                    path,
                    f"record {path} has other measures than {kept[0]} of the same run ({difference}); find "
                    "out which one is wrong and remove that one.",
                )
            else:
                self._fault(
                    "doubled",
                    path,
                    f"record {path} is of a run that {kept[0]} holds with the same measures; labkit compact "
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


def _without(pack: Path, file: str) -> str:
    return (
        f"pack {pack} is torn: its file {file} is missing; put a copy of it back, or remove the folder and "
        "run its study again."
    )


def _read(path: Path):  # type: ignore[no-untyped-def]
    return open_pack(path.parent).read([path.name])[0] if is_pack(path.parent) else read_file(path)[0]
