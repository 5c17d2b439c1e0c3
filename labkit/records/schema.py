"""The columns of a record, in one place."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from labkit.errors import InputError, StoreError

if TYPE_CHECKING:
    import pandas as pd

# The number of this schema, in the metadata of every record. 1 had the same columns and no number; 0 had no
# `rules`. Another meaning or set of columns needs a new number, and a line in `migrated`.
SCHEMA = 2
_NUMBER = b"labkit.schema"

# Columns that every row of every record has.
ORIGIN = pa.schema(
    [
        ("study", pa.string()),
        ("run_id", pa.string()),
        ("git_hash", pa.string()),
        ("dirty", pa.bool_()),
        ("diff_digest", pa.string()),
        ("versions", pa.string()),  # JSON
        ("bit_generator", pa.string()),
        ("draws", pa.string()),
        ("entropy", pa.string()),  # decimal, of any length
        ("spawn_key", pa.string()),  # JSON list of 32-bit words
        ("notebook", pa.string()),
        ("notebook_digest", pa.string()),
        ("parameters", pa.string()),  # JSON
        ("inputs", pa.string()),  # JSON: path parameter -> SHA-256 of its content
        ("rules", pa.string()),  # JSON: policy -> source text, for rules that a user wrote
        ("started", pa.string()),  # ISO 8601, UTC
        ("elapsed", pa.float64()),  # seconds from begin_run to record
    ]
)

# Labels and measures with a fixed type; a record has those that its run measured.
MEASURED = pa.schema(
    [
        ("policy", pa.string()),
        ("information", pa.string()),
        ("replicate", pa.int64()),
        ("tasks", pa.int64()),
        ("mean_load", pa.float64()),
        ("max_load", pa.float64()),
        ("min_load", pa.float64()),
        ("max_utilisation", pa.float64()),
        ("gap", pa.float64()),
        ("excess", pa.float64()),
        ("load_variance", pa.float64()),
        ("edge_difference", pa.float64()),
        # Where work leaves.
        ("load_factor", pa.float64()),
        ("warmup", pa.float64()),
        ("horizon", pa.float64()),
        *((name, pa.int64()) for name in ("arrivals", "completed")),
        *((f"sojourn_{which}", pa.float64()) for which in ("mean", "p50", "p90", "p99", "max")),
        *((f"waiting_{which}", pa.float64()) for which in ("mean", "p50", "p90", "p99", "share")),
        ("queue_mean", pa.float64()),
        ("utilisation", pa.float64()),
        ("blocked_share", pa.float64()),
        *((name, pa.int64()) for name in ("lost", "requeued", "waited")),
        ("late_share", pa.float64()),
        ("little_error", pa.float64()),
    ]
)

# Numbers that tell runs apart, although they are no whole numbers.
SETTINGS = ("load_factor",)


def measured_table(measures: Any) -> pa.Table:
    """Return measures as a table of the schema: known columns first and typed, others after them.

    Raises
    ------
    InputError
        When `measures` is no table with rows, has a column of the origin, a column twice, or values that are
        neither numbers nor texts.
    """
    import pandas as pd  # half a second that readers of the store need not spend

    if not isinstance(measures, pd.DataFrame) or measures.empty:
        raise InputError(
            f"measures is a {type(measures).__name__} without rows; give the table of Outcome.measures."
        )
    named = [name for name in measures.index.names if name is not None]
    frame = measures.reset_index(level=named) if named else measures
    columns = [str(name) for name in frame.columns]
    for name in columns:
        if name in ORIGIN.names or columns.count(name) > 1:
            raise InputError(f"measures has the column {name!r} twice or from the record itself; rename it.")
    order = [name for name in MEASURED.names if name in columns]
    order += [name for name in columns if name not in MEASURED.names]
    arrays = [_typed(name, frame[name]) for name in order]
    labels = [
        name for name in order if name in SETTINGS or not pd.api.types.is_float_dtype(frame[name].dtype)
    ]
    if labels and frame.duplicated(labels).any():
        row = frame.loc[frame.duplicated(labels), labels].iloc[0].to_dict()
        raise InputError(f"measures has two rows for {row}; give each policy, replicate and checkpoint once.")
    return pa.table(dict(zip(order, arrays, strict=True)))


def _typed(name: str, values: "pd.Series") -> pa.Array:
    from pandas.api import types

    if name in MEASURED.names:
        kind = MEASURED.field(name).type
    elif types.is_bool_dtype(values.dtype):
        kind = pa.bool_()
    elif types.is_integer_dtype(values.dtype):
        kind = pa.int64()
    elif types.is_float_dtype(values.dtype):
        kind = pa.float64()
    else:
        kind = pa.string()
    try:
        # A missing float is NaN, not null, so that equality to the bit has one meaning.
        if kind == pa.float64():
            return pa.array(values.to_numpy(dtype=np.float64), from_pandas=False)
        return pa.array(values.tolist(), from_pandas=False).cast(kind, safe=True)
    except (TypeError, ValueError, pa.ArrowException):
        raise InputError(
            f"measures: column {name!r} holds other values than {kind}; convert it first."
        ) from None


def with_origin(measured: pa.Table, origin: Mapping[str, Any]) -> pa.Table:
    """Return a table with the origin's columns, the same in each row, before the measured ones."""
    rows = measured.num_rows
    columns = {field.name: pa.array([origin[field.name]] * rows, type=field.type) for field in ORIGIN}
    return pa.table({**columns, **{name: measured[name] for name in measured.column_names}})


def numbered(table: pa.Table) -> pa.Table:
    """Return a table with the number of this schema in its metadata, and nothing else there."""
    return table.replace_schema_metadata({_NUMBER: str(SCHEMA).encode()})


def schema_number(schema: pa.Schema) -> int:
    """Return the number of the schema that a file was written in; -1 when it is ill-formed."""
    text = (schema.metadata or {}).get(_NUMBER)
    if text is None:
        return 1 if "rules" in schema.names else 0
    return int(text) if text.isdigit() and len(text) < 10 else -1


def migrated(table: pa.Table, path: Path, run_id: str) -> tuple[pa.Table, int]:
    """Return a record as today's schema has it, and the number of the schema that it was written in.

    Parameters
    ----------
    table : pyarrow.Table
        As it is in its file; that file is not changed.
    path, run_id : Path, str
        The file, named in refusals, and the run that its name says it is of.

    Raises
    ------
    StoreError
        When the schema is newer than this one, or the table is not the record of this run.
    """
    number = check_schema(table.schema, path)
    table = table.replace_schema_metadata(None)
    if number == 0:
        rules = pa.array(["{}"] * table.num_rows, type=pa.string())
        table = table.add_column(ORIGIN.names.index("rules"), "rules", rules)
    check_run(table, path, run_id)
    return table, number


def check_run(table: pa.Table, path: Path, run_id: str) -> None:
    """Refuse a record that is not that of the run in its name."""
    if not pa.types.is_string(table["run_id"].type) or table["run_id"].unique().to_pylist() != [run_id]:
        raise StoreError(f"record {path} is not the record of run {run_id}; move it out of the store.")


def check_schema(schema: pa.Schema, path: Path) -> int:
    """Return the number of a record's schema; refuse a newer one, and columns that are no record's."""
    number = schema_number(schema)
    if not 0 <= number <= SCHEMA:
        named = "an ill-formed schema" if number < 0 else f"schema {number}"
        raise StoreError(
            f"record {path} is of {named} and this labkit reads up to {SCHEMA}; read it with the labkit that "
            "wrote it, or a later one."
        )
    if len(set(schema.names)) < len(schema.names):
        raise StoreError(f"record {path} has a column twice; move it out of the store.")
    missing = [name for name in ORIGIN.names if name not in schema.names and (number or name != "rules")]
    if missing and "run_id" in schema.names:
        raise StoreError(
            f"record {path} is of another version of labkit (it has no {missing[0]}); move it out of the "
            "store and run its study again."
        )
    if missing:
        raise StoreError(f"file {path} is not a record of this store; move it elsewhere.")
    return number


def has_one_origin(table: pa.Table) -> bool:
    """Tell whether a record begins with the columns of the origin, each with one value in all rows."""
    return list(table.schema)[: len(ORIGIN)] == list(ORIGIN) and all(
        len(table[name].unique()) == 1 for name in ORIGIN.names
    )


def measured_part(table: pa.Table) -> pa.Table:
    """Return the labels and measures of a record."""
    return table.select([name for name in table.column_names if name not in ORIGIN.names])


def first_difference(left: pa.Table, right: pa.Table) -> str:
    """Return where two measured tables first differ in any bit (NaN equals NaN), or an empty text."""
    if left.column_names != right.column_names:
        return f"columns {left.column_names} against {right.column_names}"
    if left.num_rows != right.num_rows:
        return f"{left.num_rows} rows against {right.num_rows}"
    for name in left.column_names:
        if not pa.types.is_floating(left[name].type) and left[name].equals(right[name]):
            continue
        ours, theirs = _bits(left[name]), _bits(right[name])
        if ours.dtype != theirs.dtype:
            return f"column {name!r} holds {left[name].type} against {right[name].type}"
        rows = np.flatnonzero(ours != theirs)
        if rows.size:
            row = int(rows[0])
            return (
                f"column {name!r} in {rows.size} of {left.num_rows} rows, first in row {row}: "
                f"{left[name][row].as_py()!r} against {right[name][row].as_py()!r}"
            )
    return ""


def exact_difference(left: pa.Table, right: pa.Table) -> str:
    """Return where two tables first differ in type, in what is missing, or in any bit, or an empty text."""
    if not left.schema.equals(right.schema):
        return f"columns {left.schema.to_string()} against {right.schema.to_string()}"
    for name in left.column_names:
        if left.num_rows == right.num_rows and not left[name].is_null().equals(right[name].is_null()):
            return f"missing values in column {name!r}"
    return first_difference(left, right)


def _bits(column: pa.ChunkedArray) -> np.ndarray:
    if pa.types.is_floating(column.type):
        values = column.to_numpy().astype(np.float64)
        return np.where(np.isnan(values), np.nan, values).view(np.int64)
    return np.array(column.to_pylist(), dtype=object)


def row_of_origin(table: pa.Table) -> dict[str, Any]:
    """Return the origin of a record, with its JSON columns decoded."""
    return decoded_origin(table.select(ORIGIN.names).slice(0, 1).to_pylist()[0])


def decoded_origin(row: Mapping[str, Any]) -> dict[str, Any]:
    """Return an origin as a record has it with its JSON columns decoded."""
    row = dict(row)
    for name in ("versions", "parameters", "inputs", "rules", "spawn_key"):
        row[name] = json.loads(row[name])
    row["entropy"] = int(row["entropy"])
    return row
