"""Fleets from a folder of two files."""

from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa

from labkit.errors import InputError
from labkit.files import check_inside
from labkit.fleet.csv_files import read_csv, whole_names, whole_options
from labkit.fleet.model import Fleet
from labkit.fleet.parquet_files import frame_of, read_parquet
from labkit.fleet.tables import Source

Columns = dict[str, Any]


def read_fleet(folder: str | Path) -> Fleet:
    r"""Read a fleet from servers.csv or servers.parquet and choices.csv or choices.parquet in a folder.

    Parameters
    ----------
    folder : str or pathlib.Path
        The folder. The columns are those of `labkit.Fleet`. CSV is UTF-8 text with commas and a header;
        white space around a header or a value does not count, an empty option is no option.

    Returns
    -------
    Fleet
        Servers and choices in the order of the rows.

    Raises
    ------
    InputError
        When a file is missing, doubled or unreadable, or a row breaks the rules of `labkit.Fleet`; the
        sentence names the file and, for CSV, the line.

    Notes
    -----
    Names in CSV are text, so that "007" stays "007"; they become whole numbers only when every server is
    written as one in its plain form (no leading zeros, no plus sign, within 64 bits). Parquet keeps its
    types.

    Examples
    --------
    >>> import tempfile
    >>> from pathlib import Path
    >>> import labkit as lk
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     _ = Path(folder, "servers.csv").write_text("server,capacity\nnorth,120\neast,80\nsouth,100\n")
    ...     _ = Path(folder, "choices.csv").write_text("option_1,option_2\nnorth,east\neast,south\n")
    ...     fleet = lk.read_fleet(folder)
    >>> len(fleet), fleet.total_capacity
    (3, 300.0)
    """
    if not isinstance(folder, str | Path):
        raise InputError(f"folder is {folder!r}; give the path of a folder.")
    path = Path(folder)
    if not path.is_dir():
        state = "is a file" if path.exists() else "does not exist"
        raise InputError(
            f"folder {str(path)!r} {state}; give a folder that holds servers.csv and choices.csv."
        )
    server_file, choice_file = _find(path, "servers"), _find(path, "choices")
    servers, server_source = _read(server_file, "capacity")
    choices, choice_source = _read(choice_file, "demand")
    whole = _take_whole_names(servers, server_file)
    for label, column in choices.items():
        if choice_file.suffix == ".csv" and label.startswith("option_"):
            choices[label] = whole_options(column) if whole else column.to_pandas()
    return Fleet._from_tables(_table(servers), _table(choices), server_source, choice_source)


def _find(folder: Path, stem: str) -> Path:
    names = [f"{stem}.csv", f"{stem}.parquet"]
    try:
        present = sorted(path.name for path in folder.iterdir())
    except OSError as error:
        raise InputError(f"folder {str(folder)!r} cannot be read: {error.strerror}.") from None
    found = [name for name in names if name in present]
    if len(found) == 2:
        raise InputError(f"{folder} holds both {names[0]} and {names[1]}; keep one of them.")
    if not found:
        near = [name for name in present if name.lower() in names or Path(name).stem == stem]
        held = f" (there is {near[0]!r})" if near else ""
        raise InputError(f"{folder} holds neither {names[0]} nor {names[1]}{held}; add one.")
    path = folder / found[0]
    if not path.is_file():
        raise InputError(f"{path} is not a file; give a table there.")
    check_inside(path, folder, str(path))
    return path


def _read(path: Path, amount: str) -> tuple[Columns, Source]:
    try:
        if path.suffix == ".csv":
            return read_csv(path, (amount,))
        return _read_parquet(path), Source(str(path), lambda row: f"{path} row {row + 1}")
    except OSError as error:
        raise InputError(f"{path} cannot be read: {error.strerror or error}.") from None


def _read_parquet(path: Path) -> Columns:
    table = read_parquet(path)
    # Whole numbers with blanks would become floats, which lose digits beyond 2^53.
    blanks = any(pa.types.is_integer(column.type) and column.null_count for column in table.columns)
    frame = frame_of(path, table, types_mapper=_nullable if blanks else None)
    if frame.index.names != [None]:
        frame = frame.reset_index()
    return {str(label): column for label, column in frame.items()}


def _nullable(kind: pa.DataType) -> pd.Int64Dtype | None:
    return pd.Int64Dtype() if pa.types.is_signed_integer(kind) else None


def _take_whole_names(servers: Columns, file: Path) -> bool:
    """Tell whether servers are named by whole numbers, turning the text of a CSV into them."""
    names = servers.get("server")
    if names is None:
        return False
    if file.suffix != ".csv":
        return bool(pd.api.types.is_integer_dtype(names.dtype))
    numbers = whole_names(names) if len(names) else None
    servers["server"] = (names if numbers is None else numbers).to_pandas()
    return numbers is not None


def _table(columns: Columns) -> pd.DataFrame:
    return pd.DataFrame(
        {
            label: column.to_pandas() if isinstance(column, pa.ChunkedArray) else column
            for label, column in columns.items()
        }
    )
