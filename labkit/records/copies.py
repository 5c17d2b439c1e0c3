"""Where the copies of a run's record are: files of their own in the folder of a study, and packs.

A run has more than one copy when processes recorded it at the same time, or while records are moved into
packs. All readers take the same one: that in a pack, and among equals the one whose name sorts first.
"""

import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path

from labkit.errors import StoreError
from labkit.records.packs import PACKED, is_pack, misnamed, packed_name, packed_names, packs_of
from labkit.records.record_files import ID, is_record

# A folder of packs may change between listing it and looking into it, by a compaction each time.
_LOOKS = 5


@dataclass
class Listing:
    """The records of a study by name, and what stands beside them.

    Attributes
    ----------
    loose : list of str
        Names of records in files of their own, sorted.
    packed : list of (Path, list of str)
        Packs and the names in them.
    foreign : list of str
        Names of parquet files that are no records, and of what is no pack where packs are.
    """

    folder: Path
    loose: list[str] = field(default_factory=list)
    packed: list[tuple[Path, list[str]]] = field(default_factory=list)
    foreign: list[str] = field(default_factory=list)

    def chosen(self) -> dict[str, tuple[Path, str]]:
        """Return for each run, in the order of ids, the folder and name of the copy that readers take."""
        found = {name[:ID]: (self.folder, name) for name in reversed(self.loose)}
        for pack, names in reversed(self.packed):
            found.update((name[:ID], (pack, name)) for name in names)
        return dict(sorted(found.items()))


def names_in(folder: Path) -> list[str]:
    """Return all names in a folder; none when it is not there, or is a file."""
    try:
        return os.listdir(folder)
    except (FileNotFoundError, NotADirectoryError):
        return []
    except OSError as error:
        raise StoreError(
            f"folder {folder} cannot be read ({error.strerror}); see to it that it can be."
        ) from None


def list_study(folder: Path, warn: Callable[[str], None] | None = None) -> Listing:
    """Return the records of a study; refuse a damaged pack, or leave it out when there is one to `warn`."""
    names = sorted(name for name in names_in(folder) if name.endswith(".parquet") and name[0] != ".")
    listing = Listing(folder)
    for name in names:
        (listing.loose if is_record(name) else listing.foreign).append(name)
    for look in range(1, _LOOKS + 1):
        listing.packed = []
        try:
            for pack in packs_of(folder):
                try:
                    listing.packed.append((pack, packed_names(pack)))
                except StoreError as error:
                    if warn is None:
                        raise
                    warn(str(error))
            break
        except FileNotFoundError as error:
            if look == _LOOKS:
                raise StoreError(f"pack {error.filename} cannot be read ({error.strerror}).") from None
    for name in strange_in(folder):
        sentence = misnamed(folder / name)
        if sentence is None:
            listing.foreign.append(name)
        elif warn is None:
            raise StoreError(sentence)
        else:
            warn(sentence)
    return listing


def strange_in(folder: Path) -> list[str]:
    """Return the names, from the folder of a study, of what is no pack where packs are."""
    from labkit.records.frozen import LITTER  # which reads records

    packed = folder / PACKED
    if os.path.lexists(packed) and not packed.is_dir():
        return [PACKED]
    names = (name for name in names_in(packed) if name[0] != "." and name not in LITTER)
    return sorted(f"{PACKED}/{name}" for name in names if not is_pack(packed / name))


def copies_of(folder: Path, run_id: str, names: Iterable[str] | None = None) -> list[Path]:
    """Return the copies of the record of a run, not read yet, the one that readers take first.

    Parameters
    ----------
    folder : Path
        The folder of the study.
    run_id : str
    names : iterable of str, optional
        The names in the folder, when they are known.

    Raises
    ------
    StoreError
        When no copy is found, and a pack is so damaged that it might hold one.
    """
    names = names_in(folder) if names is None else names
    start = f"{run_id}-"
    loose = sorted(name for name in names if name.startswith(start) and is_record(name))
    packed, refused = _packed_copies(folder, run_id)
    found = [*packed, *(folder / name for name in loose)]
    if not found and refused is not None:
        raise refused
    return found


def _packed_copies(folder: Path, run_id: str) -> tuple[list[Path], StoreError | None]:
    refused = None
    for _ in range(_LOOKS):
        found, gone = [], False
        for pack in packs_of(folder):
            try:
                name = packed_name(pack, run_id)
            except FileNotFoundError:
                gone = True
                continue
            except StoreError as error:
                refused = error
                continue
            if name is not None:
                found.append(pack / name)
        if found or not gone:
            return found, refused
    return [], refused


def study_folder(path: Path) -> Path:
    """Return the folder of the study to which the path of a record belongs."""
    return path.parents[2] if is_pack(path.parent) else path.parent
