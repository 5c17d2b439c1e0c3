"""Writing packs: as a whole, compared with the records before they are in place, and removed as a whole."""

import hashlib
import os
import shutil
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from labkit.errors import StoreError
from labkit.records.leftovers import name_of_new
from labkit.records.packs import (
    DIGEST,
    FORM,
    GROUP,
    INDEX,
    NAMES,
    PACKED,
    ROWS,
    Pack,
    lines_of,
    open_pack,
    rows_of,
)
from labkit.records.record_files import decode, make_folder, sync, write_synced

if TYPE_CHECKING:
    import pyarrow as pa


def write_pack(folder: Path, records: "Sequence[tuple[str, pa.Table, int]]") -> Path:
    """Write records of one schema as a pack of a study, compare every bit of it, and return its folder.

    Parameters
    ----------
    folder : Path
        The folder of the study.
    records : sequence of (str, pyarrow.Table, int)
        Name of the original file, the record, and the number of the schema of that file. The rows of a
        record must have the same origin.

    Raises
    ------
    OSError
        When it cannot be written; nothing is left behind.
    StoreError
        When the pack did not read back as the records.
    """
    records = sorted(records, key=lambda record: record[0])
    rows = _rows(records)
    index = _index(records, hashlib.sha256(rows).hexdigest())
    digest = hashlib.sha256(index).hexdigest()[:32]
    final = folder / PACKED / digest
    aside = folder / PACKED / name_of_new("pack")
    try:
        make_folder(aside)
        files = {INDEX: index, ROWS: rows, NAMES: lines_of([name for name, _, _ in records])}
        for file, content in files.items():
            write_synced(aside / file, content)
        sync(aside)
        _compare(Pack(aside, digest), records)
        if not _is_whole(final):
            remove_pack(final)
            os.rename(aside, final)
        sync(final.parent)
    finally:
        shutil.rmtree(aside, ignore_errors=True)
    return final


def _is_whole(pack: Path) -> bool:
    try:
        there = open_pack(pack)
        there.check()
        there.check_names()
    except (FileNotFoundError, StoreError):
        return False
    return True


def remove_pack(pack: Path) -> None:
    """Remove a pack as a whole: readers see all of it or nothing."""
    aside = pack.with_name(name_of_new("old"))
    try:
        os.rename(pack, aside)
    except FileNotFoundError:
        return
    sync(aside.parent)
    shutil.rmtree(aside, ignore_errors=True)


def _rows(records: "Sequence[tuple[str, pa.Table, int]]") -> bytes:
    import pyarrow as pa
    import pyarrow.parquet as pq

    from labkit.records.schema import measured_part

    sink = pa.BufferOutputStream()
    parts = [measured_part(table) for _, table, _ in records]
    with pq.ParquetWriter(sink, parts[0].schema, compression="zstd") as writer:
        for start in range(0, len(parts), GROUP):
            group = pa.concat_tables(parts[start : start + GROUP])
            writer.write_table(group, row_group_size=group.num_rows)
    return bytes(sink.getvalue().to_pybytes())


def _index(records: "Sequence[tuple[str, pa.Table, int]]", rows_digest: str) -> bytes:
    import pyarrow as pa
    import pyarrow.parquet as pq

    from labkit.records.schema import ORIGIN

    origins = pa.concat_tables([table.select(ORIGIN.names).slice(0, 1) for _, table, _ in records])
    index = origins.combine_chunks()
    for name, values, kind in (
        ("rows", [table.num_rows for _, table, _ in records], pa.int64()),
        ("schema", [number for _, _, number in records], pa.int64()),
        ("file", [name for name, _, _ in records], pa.string()),
    ):
        index = index.append_column(name, pa.array(values, type=kind))
    sink = pa.BufferOutputStream()
    metadata = {FORM: b"1", DIGEST: rows_digest.encode()}
    pq.write_table(index.replace_schema_metadata(metadata), sink, compression="zstd")
    return bytes(sink.getvalue().to_pybytes())


def _compare(pack: Pack, records: "Sequence[tuple[str, pa.Table, int]]") -> None:
    """Refuse a pack, as the disk has it, in which a record is not what it was, to the bit."""
    import numpy as np
    import pyarrow as pa

    from labkit.records.schema import ORIGIN, exact_difference, measured_part

    def same(ours: "pa.Table", theirs: "pa.Table") -> None:
        difference = exact_difference(ours, theirs)
        if difference:
            raise _unlike(pack, difference)

    originals = pa.concat_tables([table for _, table, _ in records])
    lengths = [table.num_rows for _, table, _ in records]
    found = pack.columns(["file", "rows"])
    same(pa.table(found), pa.table({"file": [name for name, _, _ in records], "rows": lengths}))
    rows = np.repeat(np.arange(len(records)), lengths)
    same(
        pack.index.select(ORIGIN.names).replace_schema_metadata(None).take(rows),
        originals.select(ORIGIN.names),
    )
    same(decode(rows_of(pack)).replace_schema_metadata(None), measured_part(originals))
    if (pack.folder / NAMES).read_bytes() != lines_of(found["file"]):
        raise _unlike(pack, NAMES)


def _unlike(pack: Pack, what: str) -> StoreError:
    return StoreError(f"pack {pack.folder} did not read back as written ({what}); check the disk.")
