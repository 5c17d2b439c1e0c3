"""The door of the analysis room: a table of measures in, its label columns known, its rows trusted."""

import numpy as np
import pandas as pd

from labkit.checks import nearest
from labkit.errors import InputError

FIRST_LABELS = ("policy", "information", "server")
KEYS = ("replicate", "tasks")
# Where work leaves there are no checkpoints in tasks: runs differ by these, and need not have both.
SERVED = ("load_factor", "horizon")

# Text columns of a record that tell where a row came from, or why there are so many; none separates groups.
PROVENANCE = frozenset(
    {
        *("run_id", "git_hash", "diff_digest", "versions", "bit_generator", "draws", "entropy", "spawn_key"),
        *("notebook", "notebook_digest", "parameters", "inputs", "rules", "started", "stopping"),
    }
)


def prepare(measures: pd.DataFrame, of: str) -> tuple[pd.DataFrame, list[str]]:
    """Check a table of measures and find its label columns.

    Parameters
    ----------
    measures : pandas.DataFrame
        One row a replicate and checkpoint: `replicate`, `tasks` (where work leaves `load_factor` or `horizon`
        instead), the column `of`, and any labels. Labels are `policy`, `information`, `server`, every other
        column of text, and every named index level (``pd.concat(..., names=["policy"])``); an index level
        replaces a column of the same name.
    of : str
        The column that is going to be analysed.

    Returns
    -------
    pandas.DataFrame
        A copy with a plain index, sorted by labels, tasks (or what is there instead) and replicate.
    list of str
        The label columns, policy, information and server first.

    Raises
    ------
    InputError
        When a column is missing, a value is not finite, a label is missing, or a replicate is there twice.
    """
    if not isinstance(measures, pd.DataFrame):
        raise InputError(
            f"measures is {type(measures).__name__}; give the DataFrame of outcome.measures or of records."
        )
    if not isinstance(of, str):
        raise InputError(f"of is {of!r}; give the name of one column of measures, such as 'gap'.")
    lifted = [str(name) for name in measures.index.names if name is not None and name != of]
    table = measures.drop(columns=[name for name in lifted if name in measures.columns])
    table = table.reset_index(lifted) if lifted else table
    table = table.reset_index(drop=True)
    if not len(table):
        raise InputError("measures has no rows; place at least one replicate first.")
    moments = moments_of(table)
    for column in ("replicate", *moments, of):
        if column not in table.columns:
            raise InputError(
                f"measures has no column {column!r}; {nearest(column, map(str, table.columns))}."
            )
    labels = _labels(table, lifted, of)
    _check_values(table, of)
    for column in (*labels, "replicate", *moments):
        missing = table[column].isna().to_numpy()
        if missing.any():
            row = int(np.flatnonzero(missing)[0])
            raise InputError(f"measures row {row} has no {column}; fill it in or drop the column.")
    keys = [*labels, *moments, "replicate"]
    repeated = table.duplicated(keys).to_numpy()
    if repeated.any():
        twice = table.iloc[int(np.flatnonzero(repeated)[0])]
        raise InputError(
            f"measures holds replicate {twice['replicate']} of {describe(twice, keys[:-1])} "
            "more than once; each counts once, so drop the copy or tell the two apart by a column of text."
        )
    return table.sort_values(keys, kind="stable", ignore_index=True), labels


def moments_of(table: pd.DataFrame) -> list[str]:
    """Return the columns that tell rows of one replicate apart: `tasks`, or load factor and horizon."""
    if "tasks" in table.columns:
        return ["tasks"]
    return [name for name in SERVED if name in table.columns] or ["tasks"]


def describe(row: pd.Series, columns: list[str]) -> str:
    """Return the words that name a group in a refusal, such as ``policy 'one-choice', tasks 100``."""
    return ", ".join(
        f"{name} {row[name]!r}" if isinstance(row[name], str) else f"{name} {row[name]}" for name in columns
    )


def _labels(table: pd.DataFrame, lifted: list[str], of: str) -> list[str]:
    taken = ("replicate", *moments_of(table))

    def is_label(name: str) -> bool:
        if name in taken or name == of:
            return False
        if name in FIRST_LABELS or name in lifted:
            return True
        column = table[name]
        text = pd.api.types.is_string_dtype(column) or isinstance(column.dtype, pd.CategoricalDtype)
        return text and name not in PROVENANCE

    found = [name for name in table.columns if is_label(name)]
    first = [name for name in FIRST_LABELS if name in found]
    return first + [name for name in found if name not in first]


def _check_values(table: pd.DataFrame, of: str) -> None:
    column = table[of]
    if (
        of in ("replicate", *moments_of(table))
        or not pd.api.types.is_numeric_dtype(column)
        or pd.api.types.is_bool_dtype(column)
    ):
        raise InputError(f"of is {of!r}; name a column of measured numbers, such as 'gap' or 'excess'.")
    wrong = ~np.isfinite(column.to_numpy(dtype=np.float64, na_value=np.nan))
    if wrong.any():
        row = int(np.flatnonzero(wrong)[0])
        raise InputError(
            f"measures row {row} has {of} {column.iloc[row]}; every {of} must be a finite number, "
            "so choose another column or drop the row."
        )
