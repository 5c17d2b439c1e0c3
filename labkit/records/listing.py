"""What a store holds, read from as few bytes as that needs: columns of origins, and evidence of failures."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from labkit.errors import StoreError
from labkit.records.copies import Listing, list_study, names_in
from labkit.records.packs import open_pack
from labkit.records.record_files import ID, foreign, open_regular, read_origin
from labkit.records.store import Store

FAILED = "failed"

_LOOKS = 5


@dataclass(frozen=True)
class Listed:
    """Columns about the runs of a study, the same length each, and what stood in the way.

    Attributes
    ----------
    columns : dict of str to list
        The asked columns of the origin as recorded, `rows`, `folder` and `name`: the path of the record is
        folder / name.
    loose : int
        Records in files of their own.
    whole : bool
        False when a damaged record or pack was left out.
    """

    columns: dict[str, list[Any]]
    loose: int
    whole: bool


def listed(
    store: Store,
    study: str,
    names: Sequence[str],
    warn: Callable[[str], None] | None = None,
    check: bool = True,
) -> Listed:
    """Return columns of the origins of all runs of a study.

    Parameters
    ----------
    store : Store
    study : str
    names : sequence of str
        Columns of `labkit.records.schema.ORIGIN`.
    warn : callable, optional
        Called with a sentence about each file that is foreign or damaged and left out; without it, such a
        file is refused.
    check : bool
        Whether to look into every text; without it, the texts from packs may not be what labkit writes.

    Raises
    ------
    StoreError
        When something is foreign or damaged, and there is nobody to warn.
    """
    told: list[str] = []

    def damaged(sentence: str) -> None:
        if warn is None:
            raise StoreError(sentence)
        if sentence not in told:
            told.append(sentence)
            warn(sentence)

    for look in range(1, _LOOKS + 1):
        listing = list_study(store.folder / study, damaged)
        try:
            columns = _columns(store, listing, list(names), damaged, check)
            break
        except FileNotFoundError as error:  # a pack was merged into another meanwhile
            if look == _LOOKS:
                raise StoreError(f"pack {error.filename} cannot be read ({error.strerror}).") from None
    whole = not told
    for name in listing.foreign:
        damaged(foreign(listing.folder / name))
    return Listed(columns, len(listing.loose), whole)


def _columns(
    store: Store, listing: Listing, names: list[str], damaged: Callable[[str], None], check: bool
) -> dict[str, list[Any]]:
    taken = [*names, "rows"]
    columns: dict[str, list[Any]] = {name: [] for name in (*taken, "folder", "name")}
    for folder, _ in listing.packed:
        try:
            pack = open_pack(folder)
            part = pack.columns([*taken, "file"], check)
        except StoreError as error:
            damaged(str(error))
            continue
        for name in taken:
            columns[name] += part[name]
        columns["name"] += part["file"]
        columns["folder"] += [folder] * len(part["file"])
    held = {name[:ID] for name in columns["name"]}
    if len(held) < len(columns["name"]):
        _keep_first(columns)
    seen = set(held)
    for name in listing.loose:
        if name[:ID] in seen:
            continue
        try:
            row = _row(store, listing.folder / name, names)
        except StoreError as error:
            damaged(str(error))
            continue
        seen.add(name[:ID])
        for each in taken:
            columns[each].append(row[each])
        columns["folder"].append(listing.folder)
        columns["name"].append(name)
    return columns


def _row(store: Store, path: Path, names: list[str]) -> dict[str, Any]:
    try:
        return read_origin(path, names)
    except FileNotFoundError:  # moved into a pack meanwhile
        table = store.read(path)
        return {**table.select(names).slice(0, 1).to_pylist()[0], "rows": table.num_rows}


def _keep_first(columns: dict[str, list[Any]]) -> None:
    """Leave out runs that a pack before has, too: a merger of packs was interrupted."""
    seen: set[str] = set()
    rows = []
    for row, name in enumerate(columns["name"]):
        if name[:ID] not in seen:
            seen.add(name[:ID])
            rows.append(row)
    for name, values in columns.items():
        columns[name] = [values[row] for row in rows]


def failed_runs(store: Store, study: str) -> list[tuple[str, str, Path]]:
    """Return run id, first line of the error, and file of the evidence of each failed run of a study."""
    folder = store.folder / study / FAILED
    found = []
    for name in sorted(names_in(folder)):
        if not name.endswith(".txt") or name.startswith("."):
            continue
        try:
            with open_regular(folder / name) as stream:
                line = stream.read(4000).decode("utf-8", "replace").partition("\n")[0][:1000].strip()
        except OSError as error:
            line = f"(cannot be read: {error.strerror})"
        found.append((name.removesuffix(".txt"), line, folder / name))
    return found
