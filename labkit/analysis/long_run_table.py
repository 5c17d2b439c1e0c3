"""Means of the long run, and whether starts from below and from above came to agree."""

import json
from typing import Any

import numpy as np
import pandas as pd
from scipy.stats import norm
from scipy.stats import t as student

from labkit.analysis.growth_sizes import check_numbers
from labkit.checks import nearest
from labkit.errors import InputError
from labkit.stationary.long_run import STATIONARY

# Both kinds of start agree when their means differ by no more than chance explains (as rarely as a normal
# deviate beyond 4, a false alarm in 16,000), and when this is known to a quarter of the mean.
APART = 4.0
KNOWN_TO = 0.25
FEWEST = 5
_LABELS = ["family", "policy", "moment", "servers"]


def long_run_table(measures: pd.DataFrame, y: str = "excess") -> pd.DataFrame:
    """Return one row a family, policy and size.

    Parameters
    ----------
    measures : pandas.DataFrame
        Rows of `labkit.long_run` with the columns family and servers added.
    y : str
        The measure.

    Returns
    -------
    pandas.DataFrame
        family, policy, moment, servers, rounds (tasks a server), replicates, mean, error (standard error),
        from_empty, from_above (means by kind of start), apart (their difference in standard errors; NaN
        where all start empty) and settled: whether the difference is no larger than chance explains (Welch's
        t, at the level of 4 standard errors of a normal law) and, with its standard error added, at most a
        quarter of the mean. Fewer than 5 replicates of a kind show nothing, nor do means at a horizon.

    Raises
    ------
    InputError
        When a column is missing, or `y` holds other than finite numbers.
    """
    if not isinstance(measures, pd.DataFrame) or not len(measures):
        raise InputError("measures has no rows; give a table with the rows of labkit.long_run.")
    needed = [*_LABELS, "replicate", "tasks", y]
    for name in needed:
        if name not in measures.columns:
            numbers = measures.select_dtypes("float").columns if name == y else measures.columns
            raise InputError(f"measures has no column {name!r}; {nearest(name, map(str, numbers))}.")
    check_numbers(measures, y)
    rows = [
        {**dict(zip(_LABELS, labels, strict=True)), **_row(group, y)}
        for labels, group in measures.groupby(_LABELS, sort=False)
    ]
    return pd.DataFrame(rows)


def with_network(records: pd.DataFrame) -> pd.DataFrame:
    """Return records with the columns family and servers, from their parameters where they lack them.

    Parameters
    ----------
    records : pandas.DataFrame
        Rows of `labkit.read_study_records` or of a frozen table, from runs of the long_run notebook; a
        parameter that is the same in all runs is no column of theirs.

    Raises
    ------
    InputError
        When a run has no such parameter.
    """
    missing = [name for name in ("family", "servers") if name not in records.columns]
    if not missing:
        return records
    given = {text: json.loads(text) for text in records["parameters"].unique()}
    for name in missing:
        if not all(name in values for values in given.values()):
            raise InputError(
                f"records hold runs without a parameter {name!r}; give a study of the notebook long_run."
            )
    added = {name: [given[text][name] for text in records["parameters"]] for name in missing}
    return records.assign(**added)


def _row(group: pd.DataFrame, y: str) -> dict[str, Any]:
    values = group[y].to_numpy()
    row = {
        "rounds": int(group["tasks"].max() // group["servers"].iloc[0]),
        "replicates": len(values),
        "mean": values.mean(),
        "error": values.std(ddof=1) / np.sqrt(len(values)) if len(values) > 1 else np.nan,
    }
    if not group["moment"].eq(STATIONARY).all():
        return {**row, "from_empty": row["mean"], "from_above": np.nan, "apart": np.nan, "settled": False}
    odd = group["replicate"].to_numpy() % 2 == 1
    below, above = values[~odd], values[odd]
    if min(len(below), len(above)) < FEWEST:
        return {**row, "from_empty": np.nan, "from_above": np.nan, "apart": np.nan, "settled": False}
    error = np.sqrt(below.var(ddof=1) / len(below) + above.var(ddof=1) / len(above))
    difference = above.mean() - below.mean()
    apart = difference / error if error else (0.0 if difference == 0 else np.inf)
    freedom = min(len(below), len(above)) - 1
    agree = abs(apart) <= student.isf(norm.sf(APART), freedom)
    known = abs(difference) + error <= KNOWN_TO * abs(row["mean"])
    return {
        **row, "from_empty": below.mean(), "from_above": above.mean(), "apart": apart,
        "settled": bool(agree and known),
    }  # fmt: skip


def settled_in_words(table: pd.DataFrame) -> str:
    """Return in a sentence or two whether the means are stationary.

    Parameters
    ----------
    table : pandas.DataFrame
        From `long_run_table`.
    """
    judged = table[table["moment"] == STATIONARY]
    others = len(table) - len(judged)
    ending = f" The other {others} means are taken at a horizon, where loads are not stationary."
    ending = ending if others else ""
    if not len(judged):
        return f"None of the {others} means is of a stationary state; all are taken at a horizon."
    bad = judged[~judged["settled"]]
    most = judged["apart"].abs().max()
    chance = _expected(len(judged))
    far = 100 * ((judged["from_above"] - judged["from_empty"]) / judged["mean"]).abs().max()
    sentence = (
        f"{len(judged) - len(bad)} of {len(judged)} means are shown stationary; the two kinds of start are "
        f"at most {most:.1f} standard errors apart, where chance alone makes {chance:.1f} likely, and at "
        f"most {far:.0f} % of the mean."
    )
    named = "; ".join(f"{row.policy} on {row.family} of {row.servers:,}" for row in bad.itertuples())
    return f"{sentence}{f' Not shown: {named}.' if named else ''}{ending}"


def stopped_in_words(measures: pd.DataFrame) -> str:
    """Return in a sentence whether all replicates that a precision asks for were placed.

    Parameters
    ----------
    measures : pandas.DataFrame
        With a column stopping (see `labkit.replicate_until`) where runs stopped by a precision.
    """
    if "stopping" not in measures.columns:
        return ""
    ends = measures.drop_duplicates(["family", "policy", "moment", "servers"])["stopping"].dropna()
    short = int(ends.str.contains("not reached").sum())
    if short:
        return (
            f"{short} of {len(ends)} means stopped at the most replicates, short of the precision asked for."
        )
    return f"All {len(ends)} means reached the precision asked for."


def _expected(count: int) -> float:
    """Return the median of the largest of `count` absolute normal deviates."""
    return float(norm.isf((1 - 0.5 ** (1 / count)) / 2))
