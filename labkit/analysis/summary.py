"""The table that one cites: for each group of replicates, means with standard errors, and the headroom.

All sums are correctly rounded ones, so that the bits of a table depend on its rows alone and not on the
processor or a library's way of adding up.
"""

import math
from collections.abc import Sequence

import numpy as np
import pandas as pd

from labkit.analysis.headroom import headroom
from labkit.analysis.tables import FIRST_LABELS, KEYS, PROVENANCE, describe
from labkit.checks import nearest
from labkit.errors import InputError

# At how many tasks the rows are taken.
MOMENT = "last checkpoint"

# Measures of a table when nobody names others.
MEASURES = ("gap", "excess")

LIMITS = ("headroom", "headroom_lower", "headroom_upper")

# Gap and excess, in utilisation, that differ by no more are the same number.
_ROUNDING = 1e-12

# A parameter that another column says in full.
_SAID_BY = {"report_every": "information"}


def summarise(
    runs: pd.DataFrame,
    *,
    labels: Sequence[str],
    measures: Sequence[str],
    risk: float | None = None,
    confidence: float = 0.95,
) -> pd.DataFrame:
    """Return one row a group of replicates at its last checkpoint.

    Parameters
    ----------
    runs : pandas.DataFrame
        Measured rows of runs: `run_id`, `replicate`, `tasks`, labels and measures.
    labels : sequence of str
        The columns that tell the groups apart, as `labels_of` finds them.
    measures : sequence of str
        Columns of numbers.
    risk, confidence : float, optional
        As in `labkit.headroom`; with a risk and the gap among the measures the table holds the headroom.

    Returns
    -------
    pandas.DataFrame
        In the order in which the groups first appear: the labels, `tasks`, `replicates`, for each measure its
        mean over replicates and, as ``<measure>_error``, the standard error of this mean, and `headroom`,
        `headroom_lower`, `headroom_upper` (units of the gap).

    Raises
    ------
    InputError
        When a column is missing, a value is not finite, a group holds a replicate twice or only one of them.
    TooFewReplicates
        When they do not suffice for the risk.
    """
    labels, measures = list(labels), list(measures)
    last = _last_rows(runs)
    _check_measures(last, labels, measures)
    rows = []
    for group in _groups(last, labels):
        _check_replicates(group, labels)
        first = group.iloc[0]
        row = {name: first[name] for name in (*labels, "tasks")}
        row["replicates"] = len(group)
        for name in measures:
            row[name], row[f"{name}_error"] = mean_and_error(group[name].tolist())
        if risk is not None and "gap" in measures:
            plain = group[["replicate", "tasks", "gap"]]
            found = headroom(plain, risk=risk, confidence=confidence).iloc[0]
            row |= dict(zip(LIMITS, found[["headroom", "lower", "upper"]], strict=True))
        rows.append(row)
    table = pd.DataFrame(rows)
    return table.astype({name: runs[name].dtype for name in labels})


def mean_and_error(values: Sequence[float]) -> tuple[float, float]:
    """Return the mean of two or more numbers and its standard error, the same bits on every machine."""
    if min(values) == max(values):
        return float(values[0]), 0.0
    count = len(values)
    mean = math.fsum(values) / count
    squares = math.fsum((value - mean) * (value - mean) for value in values)
    return mean, math.sqrt(squares / (count - 1) / count)


def labels_of(runs: pd.DataFrame, parameters: Sequence[str]) -> list[str]:
    """Return the columns that tell the groups of a table apart.

    These are the policy and, of the other labels, those in which rows at the last checkpoint differ: texts,
    truth values, whole numbers that all replicates share, and parameters in which the runs differ.

    Parameters
    ----------
    runs : pandas.DataFrame
        As in `summarise`.
    parameters : sequence of str
        Columns that are parameters.

    Raises
    ------
    InputError
        When the rows are not those of replicates.
    """
    last = _last_rows(runs)
    own = _own_labels(runs, parameters)
    found = [*own, *(name for name in parameters if not _is_said(last, name, own))]
    first = [name for name in FIRST_LABELS if name in found]
    ordered = first + [name for name in found if name not in first]
    return [name for name in ordered if name == "policy" or last[name].nunique(dropna=False) > 1]


def measures_of(runs: pd.DataFrame, labels: Sequence[str], parameters: Sequence[str]) -> list[str]:
    """Return the measures of a table when nobody names others.

    These are the gap and, where it is another number, the excess; without them all columns of numbers.
    """
    last = _last_rows(runs)
    present = [name for name in MEASURES if name in last.columns and last[name].notna().any()]
    if present == list(MEASURES) and np.allclose(last["gap"], last["excess"], rtol=0, atol=_ROUNDING):
        present = ["gap"]
    taken = {*KEYS, *labels, *parameters, *_own_labels(runs, parameters)}
    return present or [name for name in last.columns if name not in taken and _is_number(last[name])]


def runs_behind(runs: pd.DataFrame, labels: Sequence[str]) -> list[list[str]]:
    """Return for each row of the table the ids of the runs that it was computed from."""
    return [list(dict.fromkeys(group["run_id"])) for group in _groups(_last_rows(runs), list(labels))]


def _groups(last: pd.DataFrame, labels: list[str]) -> list[pd.DataFrame]:
    keys = [*labels, "tasks"]
    return [group for _, group in last.groupby(keys, sort=False, dropna=False, observed=True)]


def _last_rows(runs: pd.DataFrame) -> pd.DataFrame:
    for name in ("run_id", *KEYS):
        if name not in runs.columns:
            raise InputError(
                f"measures has no column {name!r}, so there are no replicates to take means over; "
                "name a study whose runs measure replicates."
            )
    own = ["run_id", *_own_labels(runs, [])]
    last = runs.groupby(own, sort=False, dropna=False)["tasks"].transform("max")
    return runs[runs["tasks"] == last]


def _own_labels(runs: pd.DataFrame, parameters: Sequence[str]) -> list[str]:
    """Return the label columns that the records have themselves: not measured, no parameter of the run."""
    others = [name for name in runs.columns if name not in {*PROVENANCE, *KEYS, *parameters}]
    found = [name for name in others if not _is_number(runs[name])]
    whole = [name for name in others if pd.api.types.is_integer_dtype(runs[name]) and name not in found]
    within = runs.groupby(["run_id", *found], sort=False, dropna=False)["replicate"].transform("nunique")
    for name in whole:
        keys = ["run_id", *found, name]
        each = runs.groupby(keys, sort=False, dropna=False)["replicate"].transform("nunique")
        if (each == within).all() and (within > 1).all():
            found.append(name)
    return [name for name in others if name in found]


def _is_number(column: pd.Series) -> bool:
    return pd.api.types.is_numeric_dtype(column) and not pd.api.types.is_bool_dtype(column)


def _is_said(last: pd.DataFrame, name: str, own: Sequence[str]) -> bool:
    """Tell whether one of the records' `own` labels says all that a parameter says."""
    if _SAID_BY.get(name) in last.columns:
        return True
    base = name.removesuffix("_parameter")
    return base != name and base in {*own, *KEYS} and bool((last[base] == last[name]).all())


def _check_measures(last: pd.DataFrame, labels: list[str], measures: list[str]) -> None:
    allowed = [
        name for name in last.columns if name not in {"run_id", *KEYS, *labels} and _is_number(last[name])
    ]
    for name in measures:
        if name not in allowed:
            raise InputError(f"measures names {name!r}; {nearest(name, allowed)}.")
        wrong = np.flatnonzero(~np.isfinite(last[name].to_numpy(dtype=np.float64, na_value=np.nan)))
        if wrong.size:
            row = last.iloc[int(wrong[0])]
            where = describe(row, [*labels, "tasks", "replicate"])
            raise InputError(
                f"{name} is {row[name]} for {where} of run {row['run_id']}; a mean needs finite numbers: "
                "name other measures."
            )
    made = [*labels, "tasks", "replicates", *LIMITS, *measures, *(f"{name}_error" for name in measures)]
    twice = next((name for name in made if made.count(name) > 1), None)
    if twice is not None:
        raise InputError(f"measures would give two columns {twice!r}; name each measure once, and others.")
    if not measures:
        raise InputError("measures names none; name at least one column of numbers.")


def _check_replicates(group: pd.DataFrame, labels: list[str]) -> None:
    where = describe(group.iloc[0], [*labels, "tasks"])
    if group["replicate"].duplicated().any():
        again = group[group["replicate"].duplicated()].iloc[0]
        raise InputError(
            f"run {again['run_id']} measured replicate {again['replicate']} of {where} once more; let each "
            "policy stand in one run of a grid point only."
        )
    if len(group) < 2:
        raise InputError(
            f"there is one replicate of {where}; a standard error needs at least 2: raise replicates."
        )
